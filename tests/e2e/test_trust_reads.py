"""``reads: auto`` makes the fewest reads that meet the tolerance, says why it stops, and repeats nothing.

The truth is LAPACK's decomposition of the whole matrix. Other numbers of reads are run in the same dossier, where the
cells of the reads that were made already serve.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
import scipy.linalg
from campaigns import Found, even_times, job_text, write_vector

from shardfold.events import Noted, StageStarted
from shardfold.executor import Executor, SerialExecutor
from shardfold.forecast import forecast
from shardfold.job import parse_job
from shardfold.results import open_result
from shardfold.run import Report, run
from shardfold.store import open_store

CHANNELS, SAMPLES, WIDTH, LIMIT = 120, 1200, 20, 2.0
PLACES = np.arange(1.0, CHANNELS + 1)
SPECTRA = {name: PLACES**power for name, power in {"quick": -2.0, "steady": -1.0, "slow": -0.5, "flat": -0.3}.items()}


def field(spectrum: np.ndarray, seed: int = 1, channels: int = CHANNELS, samples: int = SAMPLES) -> np.ndarray:
    """Return (channels, samples) of independent normal coefficients on orthonormal patterns."""
    rng = np.random.Generator(np.random.PCG64(seed))
    patterns = np.linalg.qr(rng.standard_normal((channels, len(spectrum))))[0]
    return np.asarray((patterns * spectrum) @ rng.standard_normal((len(spectrum), samples)))


def with_noise(values: list[float], noise: float, channels: int = CHANNELS) -> np.ndarray:
    """Return patterns with exactly these root mean squares, exactly uncorrelated, in white noise."""
    rng = np.random.Generator(np.random.PCG64(4))
    patterns = np.linalg.qr(rng.standard_normal((channels, len(values))))[0]
    series = rng.standard_normal((SAMPLES, len(values)))
    series = np.linalg.qr(series - series.mean(axis=0))[0].T * np.sqrt(SAMPLES)
    return np.asarray((patterns * values) @ series + noise * rng.standard_normal((channels, SAMPLES)))


class Place:
    """A campaign in a folder, and runs of it that keep what was told."""

    def __init__(self, folder: Path, matrix: np.ndarray) -> None:
        self.folder, self.matrix = folder, matrix
        self.notes: list[str] = []
        self.reading: dict[str, int] = {}  # bytes to read of the campaign, by stage
        write_vector(open_store(f"{folder}/campaign"), matrix, even_times(matrix.shape[1]), shards=3, row_group=120)

    def job(self, design: dict[str, Any] | None = None, engine: dict[str, Any] | None = None, **modes: Any) -> Any:
        text = job_text(
            f"{self.folder}/campaign", f"{self.folder}/dossier", "vector",
            design={"width": WIDTH, "leaf": "15 s", **(design or {})},
            modes={"tolerance": f"{LIMIT:g} deg", **modes},
            engine=engine or {"workers": "serial"},
        )  # fmt: skip
        return parse_job(text, "job.yaml")

    def run(self, job: Any, make_executor: Any = SerialExecutor) -> tuple[Report, Found]:
        self.notes, self.reading = [], {}
        report = run(job, make_executor, self._listen)
        return report, Found(open_result(report.location))

    def _listen(self, event: Any) -> None:
        if isinstance(event, Noted):
            self.notes.append(event.text)
        if isinstance(event, StageStarted) and event.bytes_to_read:
            self.reading[event.stage] = event.bytes_to_read


def bounds_of(found: Found) -> np.ndarray:
    """Return the larger bound of each mode in degrees, NaN where either is missing."""
    return np.maximum(found.column("angle_bound_deg"), found.column("coefficient_angle_bound_deg"))


def spans(found: Found) -> list[slice]:
    """Return the modes of each group, single ones included, as the mode table names them."""
    names = found.result.mode_table.column("group").to_pylist()
    groups = {name or str(number): number for number, name in enumerate(names, 1)}
    ends = list(groups.values())
    return [slice(start, stop) for start, stop in zip([0, *ends], ends, strict=False)]


def angles(found: Found, matrix: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the largest principal angle in degrees between each mode's group and LAPACK's, left and right."""
    left, _, right = np.linalg.svd(matrix - matrix.mean(axis=1, keepdims=True), full_matrices=False)
    result = np.zeros((2, len(found.values)))
    for at in spans(found):
        result[0, at] = scipy.linalg.subspace_angles(found.modes[:, at], left[:, at]).max()
        result[1, at] = scipy.linalg.subspace_angles(found.coefficients[at].T, right[at].T).max()
    return tuple(np.degrees(result))


def parquet_of(found: Found) -> dict[str, str]:
    """Return the digest of every table of a result."""
    return dict(found.result.manifest["files"])


def no_executor() -> Executor:
    raise AssertionError("nothing was to be done")


CASES = {
    "angle, one read": ("quick", {"rank": {"angle": "2 deg"}}, 1),
    "angle, two reads": ("steady", {"rank": {"angle": "2 deg"}}, 2),
    "rank, three reads": ("slow", {"rank": 3}, 3),
}


@pytest.fixture(scope="module", params=CASES.values(), ids=CASES.keys())
def case(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Any:
    """A campaign, its ``modes:``, the reads it needs, and what ``auto`` made of it."""
    spectrum, modes, needed = request.param
    place = Place(tmp_path_factory.mktemp("campaign"), field(SPECTRA[spectrum]))
    report, found = place.run(place.job(**modes, reads="auto"))
    return place, modes, needed, report, found, list(place.notes)


def test_modes_and_coefficients_are_within_the_tolerance_and_the_bounds(case: Any) -> None:
    place, _, _, _, found, _ = case
    left, right = angles(found, place.matrix)
    bounds = bounds_of(found)
    assert (bounds <= LIMIT).all()
    assert (left <= found.column("angle_bound_deg")).all()
    assert (right <= found.column("coefficient_angle_bound_deg")).all()


def test_the_reads_are_the_fewest_that_meet_the_bound(case: Any) -> None:
    place, modes, needed, report, found, _ = case
    assert report.reads == found.result.manifest["reads"] == needed
    for reads in range(1, needed):
        fewer = place.run(place.job(**modes, reads=reads))[1]
        asked = slice(None) if isinstance(modes["rank"], int) else slice(0, 1)
        assert not (bounds_of(fewer)[asked] <= LIMIT).all()
        assert fewer.result.manifest["quality"]["another_read"]["helps"]
        assert not place.reading  # the dossier has the cells of all these reads


def test_auto_is_what_the_same_number_of_reads_is(case: Any) -> None:
    place, modes, needed, _, found, _ = case
    fixed = place.run(place.job(**modes, reads=needed))[1]
    assert fixed.result.location != found.result.location
    assert parquet_of(fixed) == parquet_of(found)


def test_every_further_read_and_the_end_are_told(case: Any) -> None:
    _, _, needed, _, found, notes = case
    *again, last = notes
    assert len(again) == needed - 1
    assert all(note.startswith("reading again: the tolerance is not met") for note in again)
    assert last == "no further read: every mode is within the tolerance"
    another = found.result.manifest["quality"]["another_read"]
    assert another == {"helps": False, "why": "every mode is within the tolerance"}


def test_a_repeated_run_starts_nothing_and_finds_the_standing_result(case: Any) -> None:
    place, modes, needed, report, _, _ = case
    again, _ = place.run(place.job(**modes, reads="auto"), no_executor)
    assert (again.location, again.new, again.reads) == (report.location, False, needed)
    assert (again.bytes_read, again.cells_read, place.reading, place.notes) == (0, 0, {}, [])


def test_a_new_shard_is_read_as_often_as_the_others_were_and_they_are_not(tmp_path: Path) -> None:
    matrix = field(SPECTRA["slow"], samples=1600)
    place = Place(tmp_path, matrix[:, :1200])
    job = place.job(rank=3, reads="auto")
    assert place.run(job)[0].reads == 3
    store = open_store(f"{tmp_path}/campaign")
    times = even_times(1600)[1200:]
    write_vector(store, matrix[:, 1200:], times, shards=1, row_group=120, prefix="later-")
    size = next(info.size for info in store.list("later-"))
    report, found = place.run(job)
    assert report.new
    assert list(place.reading) == ["read", "read 2", "read 3"]
    assert max(place.reading.values()) <= size
    place.matrix = matrix
    left, _ = angles(found, matrix)
    assert (left <= found.column("angle_bound_deg")).all()
    assert (bounds_of(found) <= LIMIT).all()


PAIR = [4.0, 3.0, 2.0, 2.0, 1.0]
EXACT = {"summary": "exact", "width": "auto"}
STOPS: dict[str, tuple[Any, dict[str, Any], int, str]] = {
    "exact pair": (
        lambda: with_noise(PAIR, 0.01), {"rank": 4}, 1, "close modes cannot be parted by reading (modes 3-4)",
    ),
    "noise": (lambda: with_noise([0.0], 1.0), {"rank": 3}, 1, "what is left is noise (modes 1-3)"),
    "modes and noise": (lambda: with_noise([5.0, 4.0], 0.02), {"rank": 4}, 1, "what is left is noise (modes 3-4)"),
    "identity": (
        lambda: with_noise(PAIR[:2], 0.1, channels=30),
        {"rank": 2, "design": {"summary": "whole"}}, 1, "every mode is within the tolerance",
    ),
    "identity, exact pair": (
        lambda: with_noise(PAIR, 0.1, channels=30),
        {"rank": 4, "design": {"summary": "whole"}}, 1, "reading again changes nothing (modes 3-4)",
    ),
    "exact summary, exact pair": (
        lambda: with_noise(PAIR, 0.1, channels=30),
        {"rank": 4, "design": EXACT}, 1, "reading again changes nothing (modes 3-4)",
    ),
    "most reads": (
        lambda: field(SPECTRA["flat"]),
        {"rank": 5, "tolerance": "0.05 deg"}, 5, "the most reads are reached",
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", STOPS)
def test_where_another_read_cannot_help_it_stops_at_once_and_says_why(name: str, tmp_path: Path) -> None:
    make, modes, reads, why = STOPS[name]
    place = Place(tmp_path, make())
    report, found = place.run(place.job(**modes, reads="auto"))
    assert report.reads == reads
    assert place.notes[-1].startswith(f"no further read: {why}")
    another = found.result.manifest["quality"]["another_read"]
    assert another["helps"] is False
    assert place.notes[-1] == f"no further read: {another['why']}"
    again = [f"read {number}" for number in range(2, reads + 1)]
    assert list(place.reading) == ["read", *again] + ["coefficients"] * ("design" in modes)


def test_a_mode_that_only_rounding_blurs_is_not_read_for_again(tmp_path: Path) -> None:
    # Every second decade down to 1e-8: products tell the fourth pattern to a part in ten, and no read tells it better.
    place = Place(tmp_path, field(10.0 ** -np.arange(0.0, 10.0, 2.0)))
    report, found = place.run(place.job(rank=4, reads="auto"))
    assert report.reads == 1, place.notes
    assert not found.result.manifest["quality"]["another_read"]["helps"]


def test_modes_that_reading_parts_are_not_called_close(tmp_path: Path) -> None:
    # Eigenvalues a quarter apart, far more than sampling blurs: one read cannot tell them, three can.
    place = Place(tmp_path, field(PLACES**-0.2))
    _, first = place.run(place.job(rank=5, reads=1))
    assert first.result.mode_table.column("group").to_pylist()[0] is not None
    _, third = place.run(place.job(rank=5, reads=3))
    assert third.result.mode_table.column("group").to_pylist()[:3] == [None] * 3
    assert "close modes cannot be parted" not in first.result.manifest["quality"]["another_read"]["why"]


def test_a_further_read_that_does_not_fit_into_memory_is_not_made_and_said(tmp_path: Path) -> None:
    place = Place(tmp_path, field(SPECTRA["steady"]))
    first = forecast(place.job(rank=6, reads=1), 1, lambda event: None).figures["memory"]["worker_bytes"]
    second = forecast(place.job(rank=6, reads=2), 1, lambda event: None).figures["memory"]["worker_bytes"]
    assert first < second
    engine = {"workers": "serial", "memory": f"{first} B"}
    report, found = place.run(place.job(rank=6, reads="auto", engine=engine))
    assert report.reads == 1
    assert place.notes[-1].startswith("another read would help, but engine.memory: ")
    assert list(place.reading) == ["read"]
    assert found.result.manifest["quality"]["another_read"]["helps"]  # with more memory, it would


def test_more_reads_than_a_summary_of_all_channels_needs_are_not_made_and_said(tmp_path: Path) -> None:
    place = Place(tmp_path, with_noise([3.0, 1.0], 0.1, channels=30))
    report, _ = place.run(place.job(rank=2, reads=3))
    assert report.reads == 1
    assert place.notes == ["all channels are kept and nothing is lost: one read is enough"]
    assert list(place.reading) == ["read", "coefficients"]
