"""What the mode table says is true, on a real S3 server with real Ray workers, and the same bits whoever does the work.

The truth is LAPACK's decomposition of the numbers as stored, each channel's mean removed; a close pair is judged as the
space that it is. Each of the three routes has one campaign, run by two workers, by one, and serially.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any
from uuid import uuid4

import numpy as np
import pytest
import scipy.linalg
from campaigns import Found, even_times, job_text, run_job, write_vector

from shardfold.blas import one_thread
from shardfold.executor import SerialExecutor
from shardfold.executor_ray import RayExecutor
from shardfold.store import open_store
from shardfold.store_s3 import S3Adapter

pytestmark = pytest.mark.usefixtures("ray_workers")

SAMPLES, SHARDS, MODES = 2400, 4, 6
VALUES = np.array([6.0, 4.0, 2.5, 2.5, 1.2, 0.7, *(0.4 / np.arange(1.0, 31.0))])
ROUTES: dict[str, tuple[int, dict[str, Any]]] = {
    "probe": (160, {"width": 24}),
    "identity": (36, {"summary": "whole"}),
    "exact": (36, {"summary": "exact"}),
}


class Shore:
    """A campaign in object storage, and results of it in dossiers of their own."""

    def __init__(self, place: str, endpoint: str, route: str) -> None:
        self.place, self.endpoint, self.route = place, endpoint, route
        channels, self.design = ROUTES[route]
        rng = np.random.Generator(np.random.PCG64(12))
        patterns = np.linalg.qr(rng.standard_normal((channels, len(VALUES))))[0]
        series = rng.standard_normal((SAMPLES, len(VALUES)))
        series = np.linalg.qr(series - series.mean(axis=0))[0].T * np.sqrt(SAMPLES)
        self.matrix = (patterns * VALUES) @ series  # the sample's own values are exactly these
        self.matrix += 50 * rng.standard_normal((channels, 1))
        store = open_store(f"{place}/campaign", endpoint)
        write_vector(store, self.matrix, even_times(SAMPLES), shards=SHARDS, row_group=150)

    def run(self, dossier: str, make_executor: Any) -> Found:
        text = job_text(
            f"{self.place}/campaign", f"{self.place}/{dossier}", "vector", self.endpoint,
            design={"leaf": "20 s", **self.design}, modes={"rank": MODES},
        )  # fmt: skip
        return run_job(text, make_executor)


@pytest.fixture(scope="module", params=ROUTES)
def shore(request: pytest.FixtureRequest, s3: Any, shared_bucket: str) -> Iterator[Shore]:
    # One thread for the references too: several that compete with the workers take ten times as long.
    with one_thread():
        yield Shore(f"s3://{shared_bucket}/{uuid4().hex[:12]}", s3.endpoint, request.param)


@pytest.fixture(scope="module")
def found(shore: Shore) -> Found:
    """What two workers make of the campaign."""
    return shore.run("two", lambda: RayExecutor(2, None))


@pytest.fixture(scope="module")
def truth(shore: Shore) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Left vectors, singular values and right vectors (as rows) of the campaign about its mean."""
    return np.linalg.svd(_centred(shore), full_matrices=False)


def _centred(shore: Shore) -> np.ndarray:
    return np.asarray(shore.matrix - shore.matrix.mean(axis=1, keepdims=True))


def _spans(found: Found) -> list[slice]:
    names = found.result.mode_table.column("group").to_pylist()
    stops = list({name or str(number): number for number, name in enumerate(names, 1)}.values())
    return [slice(start, stop) for start, stop in zip([0, *stops], stops, strict=False)]


def _largest_angle(found: np.ndarray, exact: np.ndarray) -> float:
    return float(np.degrees(scipy.linalg.subspace_angles(found, exact).max()))


def test_every_bound_covers_the_true_angle(found: Found, truth: Any) -> None:
    left, _, right = truth
    bounds, of_coefficients = found.column("angle_bound_deg"), found.column("coefficient_angle_bound_deg")
    told = 0
    for at in _spans(found):
        if np.isnan(bounds[at]).any():
            continue
        told += at.stop - at.start
        # What NumPy itself is exact to is no error of the table.
        assert _largest_angle(found.modes[:, at], left[:, at]) <= bounds[at].max() + 1e-10
        if not np.isnan(of_coefficients[at]).any():
            assert _largest_angle(found.coefficients[at].T, right[at].T) <= of_coefficients[at].max() + 1e-10
    assert told >= 5


def test_the_pair_is_one_group_and_the_others_are_told_apart(found: Found) -> None:
    assert found.result.mode_table.column("group").to_pylist()[:5] == [None, None, "3-4", "3-4", None]


def test_the_least_modal_assurance_is_at_most_the_true_one(found: Found, truth: Any) -> None:
    least, left = found.column("mac_at_least"), truth[0][:, :MODES]
    assurance = (found.modes * left).sum(axis=0) ** 2 / (found.modes**2).sum(axis=0)
    told = ~np.isnan(least)
    assert told[[0, 1, 4]].all()
    assert not told[[2, 3]].any()
    assert (least[told] <= assurance[told] + 1e-12).all()
    sine = np.sin(np.radians(found.column("angle_bound_deg")))
    np.testing.assert_allclose(least[told], 1 - sine[told] ** 2, rtol=1e-12)


def test_energies_are_exact_whatever_the_accuracy_of_the_modes(found: Found, shore: Shore, truth: Any) -> None:
    centred = _centred(shore)
    total, series = float(np.sum(centred**2)), found.coefficients
    share = found.column("energy_fraction")
    # What a mode holds is what its own coefficients hold, and all modes together what is gone from the rest.
    np.testing.assert_allclose(share, (series**2).sum(axis=1) / total, rtol=1e-9)
    rest = centred - found.modes @ series
    quality = found.result.manifest["quality"]
    assert quality["energy"] == pytest.approx(total, rel=1e-12)
    assert quality["captured_fraction"] == pytest.approx(1 - np.sum(rest**2) / total, rel=1e-9)
    assert found.column("energy_cumulative")[-1] == pytest.approx(quality["captured_fraction"], rel=1e-12)
    channel = found.result.channel_summary
    np.testing.assert_allclose(channel.column("energy").to_numpy(), (centred**2).sum(axis=1), rtol=1e-9)
    held = 1 - (rest**2).sum(axis=1) / (centred**2).sum(axis=1)
    np.testing.assert_allclose(channel.column("captured_fraction").to_numpy(), held, rtol=1e-9)
    if shore.route != "probe":
        np.testing.assert_allclose(share, truth[1][:MODES] ** 2 / total, rtol=1e-10)
    else:
        assert (share <= truth[1][:MODES] ** 2 / total * (1 + 1e-12)).all()  # one read may lose, never add


def test_sampling_angles_are_there_and_of_the_size_of_norths_rule(found: Found) -> None:
    sampling, north = found.column("sampling_angle_deg"), found.column("north_angle_deg")
    assert np.isfinite(sampling[:5]).all()
    assert np.isfinite(north[:5]).all()
    # Independent samples: nine times in ten below, against the root mean square of the same angle.
    assert ((sampling[:5] > 0.7 * north[:5]) & (sampling[:5] < 3 * north[:5])).all()
    assert 0.5 * SAMPLES < found.result.manifest["quality"]["effective_samples"] <= SAMPLES


def _parquet(found: Found) -> dict[str, str]:
    files: dict[str, str] = found.result.manifest["files"]
    assert "mode_table.parquet" in files
    return files


def _assert_same_bits(again: Found, found: Found) -> None:
    assert _parquet(again) == _parquet(found)
    first, second = (f.result.store.read(f.result.folder + "mode_table.parquet") for f in (again, found))
    assert bytes(first) == bytes(second)
    assert again.result.manifest["quality"] == found.result.manifest["quality"]


def test_one_worker_makes_the_bits_of_two(shore: Shore, found: Found) -> None:
    _assert_same_bits(shore.run("one", lambda: RayExecutor(1, None)), found)


def test_neither_no_worker_at_all_nor_the_order_of_the_listing_changes_a_bit(
    shore: Shore, found: Found, monkeypatch: pytest.MonkeyPatch
) -> None:
    page, turned = S3Adapter.page, []

    def reversed_page(self: S3Adapter, prefix: str, bookmark: str | None) -> Any:
        infos, more = page(self, prefix, bookmark)
        turned.append(len(infos))
        return infos[::-1], more

    monkeypatch.setattr(S3Adapter, "page", reversed_page)
    again = shore.run("serial", SerialExecutor)
    assert max(turned) >= SHARDS
    _assert_same_bits(again, found)
