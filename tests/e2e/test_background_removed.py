"""Trend and cycles removed after the fact, from one dossier, unread: against least squares on the raw numbers."""

from __future__ import annotations

import itertools
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from campaigns import START_NS, Found, even_times, job_text, run_job, with_spectrum, write_vector

from shardfold.events import StageStarted
from shardfold.executor import SerialExecutor
from shardfold.job import parse_job
from shardfold.run import run
from shardfold.store import open_store

SAMPLES, STEP_NS = 3600, 10**9
PERIODS = {"10 min": 600, "47 s": 47}
BACKGROUND = {"trend": True, "cycles": list(PERIODS)}
SUBSETS = [
    terms
    for count in range(5)
    for terms in itertools.combinations(("mean", "trend", *PERIODS), count)
    if count in (0, 1, 4) or len(terms) != 2
]


def functions() -> dict[str, np.ndarray]:
    """Return each term's functions at the samples, from time in seconds and textbook formulas."""
    seconds = (even_times(SAMPLES, STEP_NS) - START_NS) / 1e9
    start = START_NS / 1e9
    waves = {
        name: np.array([f(2 * np.pi * ((seconds + start % period) / period)) for f in (np.cos, np.sin)])
        for name, period in PERIODS.items()
    }
    return {"mean": np.ones((1, SAMPLES)), "trend": (seconds / seconds[-1])[np.newaxis], **waves}


def field(channels: int) -> np.ndarray:
    rng = np.random.Generator(np.random.PCG64(3))
    matrix = with_spectrum(channels, SAMPLES, 3.0 ** -np.arange(14)) * np.sqrt(SAMPLES)
    for name, rows in functions().items():
        matrix += {"mean": 5.0, "trend": 2.0}.get(name, 1.0) * rng.standard_normal((channels, len(rows))) @ rows
    return matrix


def without(matrix: np.ndarray, terms: tuple[str, ...]) -> np.ndarray:
    if not terms:
        return matrix
    design = np.concatenate([functions()[term] for term in terms]).T
    q = np.linalg.qr(design)[0]
    return matrix - (matrix @ q) @ q.T


class Place:
    """A campaign written once, and results of it with one term or other removed."""

    def __init__(self, folder: Path, channels: int, summary: str) -> None:
        self.folder, self.summary = folder, summary
        self.matrix = field(channels)
        store = open_store(str(folder / "campaign"), None)
        write_vector(store, self.matrix, even_times(SAMPLES, STEP_NS), shards=4, row_group=100)

    def text(self, terms: tuple[str, ...], **modes: Any) -> str:
        return job_text(
            str(self.folder / "campaign"),
            str(self.folder / "dossier"),
            "vector",
            design={"background": BACKGROUND, "summary": self.summary, "width": 40, "leaf": "5 min"},
            modes={"rank": 6, "remove": list(terms), **modes},
        )

    def run(self, terms: tuple[str, ...], **modes: Any) -> Found:
        return run_job(self.text(terms, **modes))


ROUTES = {"probe": (200, "whole"), "identity": (60, "whole"), "exact": (60, "exact")}


@pytest.fixture(scope="module", params=ROUTES.values(), ids=ROUTES.keys())
def place(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Place:
    channels, summary = request.param
    return Place(tmp_path_factory.mktemp("campaign"), channels, summary)


@pytest.mark.parametrize("terms", SUBSETS, ids="+".join)
def test_any_subset_is_what_least_squares_leave(place: Place, terms: tuple[str, ...]) -> None:
    found, left = place.run(terms), without(place.matrix, terms)
    truth = np.linalg.svd(left, compute_uv=False)
    np.testing.assert_allclose(found.values, truth[:6], rtol=1e-6)
    quality = found.result.manifest["quality"]
    total = (place.matrix**2).sum()
    assert quality["energy"] == pytest.approx((left**2).sum(), abs=1e-12 * total)
    rebuilt = found.result.rebuild()
    values = np.array([rebuilt.column(name).to_numpy() for name in rebuilt.column_names if name != "time"])
    best = np.sqrt((truth[6:] ** 2).sum())
    assert np.linalg.norm(values - place.matrix) <= best * (1 + 1e-6)  # background and modes rebuild the whole


def test_energies_of_the_terms_add_up_to_what_is_gone(place: Place) -> None:
    found = place.run(("mean", "trend", "10 min", "47 s"))
    table = found.result.background
    gone = sum(table.column(name).to_numpy() for name in table.column_names if name.endswith("_energy"))
    left = without(place.matrix, ("mean", "trend", "10 min", "47 s"))
    np.testing.assert_allclose(gone, (place.matrix**2).sum(axis=1) - (left**2).sum(axis=1), rtol=1e-9)
    days = (even_times(SAMPLES, STEP_NS) - START_NS) / 86400e9
    slope, _ = np.polyfit(days, without(place.matrix, tuple(PERIODS))[7], 1)
    alone = place.run(("mean", "trend", "10 min", "47 s")).result.background.column("trend_per_day")[7].as_py()
    assert alone == pytest.approx(slope, rel=0.02)  # cycles and trend share a little


def test_another_background_reads_nothing_of_the_campaign(tmp_path: Path) -> None:
    place = Place(tmp_path, 200, "whole")
    place.run(("mean",))
    stages: list[StageStarted] = []
    job = parse_job(place.text(("mean", "trend", "cycles")), "job.yaml")
    report = run(job, SerialExecutor, lambda event: stages.append(event) if isinstance(event, StageStarted) else None)
    assert report.new
    assert report.bytes_read == 0
    assert [stage.stage for stage in stages if stage.bytes_to_read] == []


def test_a_campaign_too_short_for_a_cycle_says_so(tmp_path: Path) -> None:
    matrix = field(60)[:, :300]
    store = open_store(str(tmp_path / "campaign"), None)
    write_vector(store, matrix, even_times(300, STEP_NS), shards=2)
    design = {"background": {"trend": True, "cycles": ["3650 d"]}}
    text = job_text(
        str(tmp_path / "campaign"), str(tmp_path / "dossier"), "vector",
        design=design, modes={"rank": 3, "remove": ["mean", "trend", "cycles"]},
    )  # fmt: skip
    quality = run_job(text).result.manifest["quality"]
    assert quality["background"]["functions"] == 3
    assert quality["background"]["independent"] == 1
