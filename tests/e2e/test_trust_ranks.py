"""How many modes are published: a number, a share of the energy, an angle, the noise edge; and groups kept whole.

One dossier serves all rules of a campaign. The truth is LAPACK's, or what a result with more modes says of each.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from campaigns import Found, even_times, job_text, run_job, write_vector
from terminal import shardfold

from shardfold.store import open_store

SAMPLES, WIDTH = 1200, 20
PLACES = np.arange(1.0, 101.0)


def field(values: np.ndarray, channels: int, noise: float = 0.0) -> np.ndarray:
    """Return (channels, samples) with exactly uncorrelated patterns of these root mean squares, in white noise."""
    rng = np.random.Generator(np.random.PCG64(4))
    patterns = np.linalg.qr(rng.standard_normal((channels, len(values))))[0]
    series = rng.standard_normal((SAMPLES, len(values)))
    series = np.linalg.qr(series - series.mean(axis=0))[0].T * np.sqrt(SAMPLES)
    return np.asarray((patterns * values) @ series + noise * rng.standard_normal((channels, SAMPLES)))


class Place:
    """A campaign in a folder and results of it by any rule."""

    def __init__(self, folder: Path, matrix: np.ndarray, **design: Any) -> None:
        self.folder, self.matrix, self.design = folder, matrix, {"width": WIDTH, "leaf": "15 s", **design}
        write_vector(open_store(f"{folder}/campaign"), matrix, even_times(SAMPLES), shards=3, row_group=120)

    def run(self, **modes: Any) -> Found:
        places = (f"{self.folder}/campaign", f"{self.folder}/dossier")
        return run_job(job_text(*places, "vector", design=self.design, modes=modes))

    def shown(self, found: Found) -> list[list[str]]:
        """Return the rows of modes that ``shardfold show`` prints, split at blanks."""
        answer = shardfold("show", found.result.location)
        assert answer.status == 0, answer.err
        rows = [line.split() for line in answer.out.splitlines() if line[:4].strip().isdigit()]
        return [row for row in rows if len(row) > 6]


def quality(found: Found) -> dict[str, Any]:
    return dict(found.result.manifest["quality"])


def column(found: Found, name: str) -> list[Any]:
    return list(found.result.mode_table.column(name).to_pylist())


ROUTES: dict[str, tuple[int, dict[str, Any]]] = {
    "probe": (120, {}),
    "identity": (36, {"summary": "whole"}),
    "exact": (36, {"summary": "exact", "width": "auto"}),
}


@pytest.fixture(scope="module", params=ROUTES.values(), ids=ROUTES.keys())
def steady(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Place:
    """Singular values 1/j on each of the three routes; only the probe loses something."""
    channels, design = request.param
    return Place(tmp_path_factory.mktemp("steady"), field(1 / PLACES[:channels], channels), **design)


@pytest.mark.parametrize("share", [0.5, 0.9])
def test_a_share_of_the_energy_is_reached_by_the_fewest_modes(steady: Place, share: float) -> None:
    found = steady.run(rank={"energy": share}, reads=2)
    squares = np.linalg.svd(steady.matrix, compute_uv=False) ** 2
    fewest = 1 + int(np.argmax(np.cumsum(squares) >= share * squares.sum()))
    assert len(found.values) == fewest
    held = column(found, "energy_cumulative")
    assert held[-1] >= share > ([0.0, *held])[-2]
    assert quality(found)["captured_fraction"] == pytest.approx(held[-1], rel=1e-12)
    assert (quality(found)["modes_as_asked"], quality(found)["asked_modes"]) == (True, None)


def test_a_share_that_one_read_does_not_hold_is_said_not_to_be_reached(tmp_path: Path) -> None:
    place = Place(tmp_path, field(1 / PLACES, 120))
    found = place.run(rank={"energy": 0.9999})
    assert len(found.values) == WIDTH - 1  # all that a probe of 20 rows may give
    assert not quality(found)["modes_as_asked"]
    assert quality(found)["captured_fraction"] < 0.9999
    assert "modes: " in quality(found)["next"]


@pytest.mark.parametrize("angle", [0.5, 10.0])
def test_an_angle_gives_the_leading_modes_that_are_known_so_well(steady: Place, angle: float) -> None:
    found = steady.run(rank={"angle": f"{angle} deg"}, reads=2)
    kept = np.maximum(found.column("angle_bound_deg"), found.column("coefficient_angle_bound_deg"))
    assert (kept <= angle).all()  # none is without a bound, as modes at noise are
    following = np.maximum(*(bounds[len(kept) :] for bounds in _bounds_of_more(steady)))
    assert not following.size or not following[0] <= angle
    assert quality(found)["modes_reason"] == "the leading modes within the angle"
    assert quality(found)["modes_as_asked"]


def _bounds_of_more(place: Place) -> tuple[np.ndarray, np.ndarray]:
    found = place.run(rank=18, reads=2)
    return found.column("angle_bound_deg"), found.column("coefficient_angle_bound_deg")


def test_an_angle_that_no_mode_keeps_gives_one_and_says_so(tmp_path: Path) -> None:
    place = Place(tmp_path, field(1 / PLACES, 120))
    found = place.run(rank={"angle": "0.001 deg"})
    assert len(found.values) == 1
    assert not quality(found)["modes_as_asked"]
    assert quality(found)["modes_reason"] == "not even the first mode is within the angle"
    assert "not even the first mode is within the angle" in quality(found)["next"]


@pytest.mark.parametrize("route", ["probe", "exact"])
def test_the_noise_edge_counts_what_was_planted(route: str, tmp_path: Path) -> None:
    channels, design = ROUTES[route]
    place = Place(tmp_path, field(np.array([4.0, 3.0, 2.0]), channels, noise=0.02), **design)
    found = place.run(rank="noise_edge")
    assert len(found.values) == quality(found)["noise"]["modes_above"] == 3
    assert quality(found)["modes_reason"] == "the modes above the noise"
    assert quality(found)["noise"]["standard_deviation"] == pytest.approx(0.02, rel=0.05)
    # One number more is asked for: it is written, and called noise.
    assert column(place.run(rank=4), "verdict")[3] == "at noise"


def test_nothing_but_noise_gives_one_mode_and_says_that_none_is_above(tmp_path: Path) -> None:
    found = Place(tmp_path, field(np.zeros(1), 120, noise=1.0)).run(rank="noise_edge")
    assert column(found, "verdict") == ["at noise"]
    assert quality(found)["modes_reason"] == "no mode is above the noise"
    assert not quality(found)["modes_as_asked"]
    assert quality(found)["noise"]["modes_above"] == 0
    assert quality(found)["noise"]["equal_in_all_channels"] is not False


PAIR = np.array([4.0, 3.0, 2.0, 2.0, 1.0])


@pytest.fixture(scope="module", params=[ROUTES["probe"], ROUTES["exact"]], ids=["probe", "exact"])
def pair(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Place:
    """Modes 3 and 4 of the same size."""
    channels, design = request.param
    return Place(tmp_path_factory.mktemp("pair"), field(PAIR, channels, noise=0.01), **design)


@pytest.mark.parametrize(
    ("asked", "modes", "reason"),
    [(2, 2, "as asked"), (3, 4, "a close group is kept whole"), (4, 4, "as asked")],
)
def test_a_close_pair_across_the_rank_is_kept_whole(pair: Place, asked: int, modes: int, reason: str) -> None:
    found = pair.run(rank=asked)
    assert len(found.values) == quality(found)["modes"] == modes
    assert (quality(found)["asked_modes"], quality(found)["modes_reason"]) == (asked, reason)
    assert len([name for name in found.result.modes.column_names if name.startswith("mode_")]) == modes
    assert len([name for name in found.result.coefficients().column_names if name.startswith("c_")]) == modes
    assert ("a close group is kept whole" in quality(found)["next"]) == (asked == 3)


@pytest.mark.parametrize("rank", [{"energy": 0.9}, {"angle": "2 deg"}, "noise_edge", 4])
def test_the_pair_is_named_everywhere_and_no_member_is_certified_alone(pair: Place, rank: Any) -> None:
    found = pair.run(rank=rank)
    names = [None, None, "3-4", "3-4"] + [None] * (len(found.values) - 4)
    assert column(found, "group") == names
    accuracy = quality(found)["accuracy"]
    assert [entry["group"] for entry in accuracy] == names
    shown = pair.shown(found)
    assert len(shown) == len(names)
    macs = column(found, "mac_at_least")
    for entry, row, mac, name in zip(accuracy[:5], shown[:5], macs[:5], names[:5], strict=True):
        assert (mac is None) == (entry["mac_at_least"] is None) == (row[4] == "-") == (name is not None)
        assert row[6] == (name or "-")
        assert (entry["verdict"] == "close group") == (name is not None)
    both = found.result.mode_table.slice(2, 2)
    for angle in ("angle_bound_deg", "coefficient_angle_bound_deg", "sampling_angle_deg"):
        first, second = both.column(angle).to_pylist()
        assert first == second is not None  # of the space of both


def test_a_group_without_a_known_end_is_cut_and_no_member_has_a_bound(tmp_path: Path) -> None:
    place = Place(tmp_path, field(PLACES**-0.2, 120))
    found = place.run(rank=5)
    assert len(found.values) == 5
    assert "a close group is cut" in quality(found)["modes_reason"]
    assert "a close group is cut" in quality(found)["next"]
    (name,) = set(column(found, "group"))
    assert int(name.split("-")[1]) > 5  # it goes on beyond what is published
    for bound in ("angle_bound_deg", "mac_at_least", "coefficient_angle_bound_deg"):
        assert column(found, bound) == [None] * 5
    assert {row[3] + " " + row[4] for row in place.shown(found)} == {"no bound"}
