"""The triangular factor keeps the promises that co-moments keep, and tells what those must leave blank.

Same bits by whomever, one read and kills are tested beside those of co-moments, in the files of these promises. The
deep campaign has entries that are exact in float64: Walsh functions times powers of two, so its decomposition is known
without any rounding of an oracle.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
import scipy.linalg
from campaigns import Found, even_times, job_text, run_job, with_spectrum, write_vector

from shardfold.errors import InputError
from shardfold.events import StageStarted
from shardfold.executor import SerialExecutor
from shardfold.job import parse_job
from shardfold.run import run
from shardfold.store import open_store

CHANNELS, SAMPLES = 64, 2048
BITS = 8 * np.arange(6)  # singular values 2^0, 2^-8 ... 2^-40, which is 9e-13
DEEP = 2.0**-BITS


class Place:
    """A campaign in a folder, and runs of it."""

    def __init__(self, folder: Path, matrix: np.ndarray) -> None:
        self.folder, self.matrix = folder, matrix
        self.store = open_store(f"{folder}/campaign")
        write_vector(self.store, matrix, even_times(matrix.shape[1]), shards=4, row_group=64)

    def text(self, summary: str, design: dict[str, Any] | None = None, **modes: Any) -> str:
        return job_text(
            f"{self.folder}/campaign", f"{self.folder}/{summary}", "vector",
            design={"summary": summary, "leaf": "16 s", **(design or {})}, modes=modes,
        )  # fmt: skip

    def run(self, summary: str, **modes: Any) -> Found:
        return run_job(self.text(summary, **modes))

    def stages(self, text: str) -> list[str]:
        """Return the stages of a run that read the campaign."""
        found: list[str] = []

        def listen(event: Any) -> None:
            if isinstance(event, StageStarted) and event.bytes_to_read:
                found.append(event.stage)

        run(parse_job(text, "job.yaml"), SerialExecutor, listen)
        return found


def walsh(count: int, length: int, seed: int) -> np.ndarray:
    """Return rows of +1 and -1, orthogonal to each other and to the constant, in an order without any rhythm."""
    rows = scipy.linalg.hadamard(length)[1:].astype(np.float64)
    rng = np.random.Generator(np.random.PCG64(seed))
    return np.asarray(rows[rng.permutation(length - 1)[:count]][:, rng.permutation(length)])


@pytest.fixture(scope="module")
def deep(tmp_path_factory: pytest.TempPathFactory) -> Place:
    patterns = walsh(len(DEEP), CHANNELS, 1).T / np.sqrt(CHANNELS)
    matrix = (patterns * DEEP) @ walsh(len(DEEP), SAMPLES, 2)
    assert (matrix @ walsh(len(DEEP), SAMPLES, 2).T / SAMPLES == patterns * DEEP).all()  # exact, to the last bit
    return Place(tmp_path_factory.mktemp("deep"), matrix)


def test_singular_values_down_to_1e_12_of_the_first_are_right(deep: Place) -> None:
    found = deep.run("exact", rank=len(DEEP))
    exact = DEEP * np.sqrt(SAMPLES)
    assert found.result.manifest["quality"]["modes"] == len(DEEP)
    # Right to rounding of the largest: 1e-15 of it is a thousandth of the last.
    np.testing.assert_allclose(found.values, exact, rtol=1e-14, atol=2e-15 * exact[0])
    share = exact**2 / np.sum(exact**2)
    np.testing.assert_allclose(found.column("energy_fraction"), share, rtol=5e-3)


def test_deep_modes_and_coefficients_are_right_as_far_as_rounding_goes(deep: Place) -> None:
    found = deep.run("exact", rank=len(DEEP))
    patterns, series = walsh(len(DEEP), CHANNELS, 1).T / np.sqrt(CHANNELS), walsh(len(DEEP), SAMPLES, 2)
    sines = [_sine(found.modes[:, j], patterns[:, j]) for j in range(len(DEEP))]
    of_coefficients = [_sine(found.coefficients[j], series[j]) for j in range(len(DEEP))]
    assert (np.array(sines) <= 4e-15 / DEEP).all()
    assert (np.array(of_coefficients) <= 4e-15 / DEEP).all()


def test_bounds_of_deep_modes_are_given_and_true(deep: Place) -> None:
    found = deep.run("exact", rank=len(DEEP))
    patterns, series = walsh(len(DEEP), CHANNELS, 1).T / np.sqrt(CHANNELS), walsh(len(DEEP), SAMPLES, 2)
    assert found.result.mode_table.column("group").to_pylist() == [None] * len(DEEP)
    bound, of_coefficients = found.column("angle_bound_deg"), found.column("coefficient_angle_bound_deg")
    for j in range(len(DEEP)):
        assert np.degrees(np.arcsin(_sine(found.modes[:, j], patterns[:, j]))) <= bound[j] + 1e-10
        assert np.degrees(np.arcsin(_sine(found.coefficients[j], series[j]))) <= of_coefficients[j] + 1e-10
    assert (bound < 5.0).all()


def test_sampling_of_deep_modes_is_told_from_their_leaves_and_not_from_rounding(deep: Place) -> None:
    # Neighbours are 2^8 apart: by North's rule each is turned by 1 / (2^8 sqrt(n)), less than a hundredth of a degree.
    found = deep.run("exact", rank=len(DEEP))
    sampled = found.column("sampling_angle_deg")
    assert (np.isnan(sampled) | (sampled < 0.1)).all()
    effective = found.result.manifest["quality"]["effective_samples"]
    assert effective is None or SAMPLES / 4 <= effective <= SAMPLES


def test_where_co_moments_give_blanks_they_are_blank(deep: Place) -> None:
    whole, exact = (deep.run(summary, rank=len(DEEP)) for summary in ("whole", "exact"))
    held = whole.result.manifest["quality"]["modes"]
    assert 2 <= held < len(DEEP)
    assert np.isnan(whole.values[held:]).all()
    np.testing.assert_allclose(whole.values[:held], exact.values[:held], rtol=0.02)
    assert whole.result.manifest["quality"]["rounding_floor"] > 1e5 * exact.result.manifest["quality"]["rounding_floor"]


def test_what_lies_under_the_floor_of_the_factor_is_blank_too(tmp_path: Path) -> None:
    patterns = walsh(2, CHANNELS, 1).T / np.sqrt(CHANNELS)
    matrix = (patterns * [1.0, 2.0**-51]) @ walsh(2, SAMPLES, 2)
    found = Place(tmp_path, matrix).run("exact", rank=2)
    assert found.result.manifest["quality"]["singular_values"][1] is None
    assert found.result.mode_table.column("verdict").to_pylist()[1] is None


@pytest.mark.parametrize("offset", [1e2, 1e4, 1e6])
def test_offsets_do_not_turn_the_modes(offset: float, tmp_path: Path) -> None:
    matrix = with_spectrum(CHANNELS, SAMPLES, 1 / np.arange(1.0, 41.0))
    unit = np.sqrt(np.sum(matrix**2) / matrix.size)
    matrix += offset * unit * np.random.Generator(np.random.PCG64(1)).choice([-1.0, 1.0], (CHANNELS, 1))
    # Long doubles for the mean: the offset is a million times what is left.
    centred = (matrix - matrix.mean(axis=1, keepdims=True, dtype=np.longdouble)).astype(np.float64)
    left, values, right = np.linalg.svd(centred, full_matrices=False)
    found = Place(tmp_path, matrix).run("exact", rank=5)
    within = 1e-14 * max(offset, 1.0)
    np.testing.assert_allclose(found.values, values[:5], rtol=within)
    for j in range(5):
        assert _sine(found.modes[:, j], left[:, j]) < within
        assert _sine(found.coefficients[j], right[j]) < 10 * within
    mean = found.result.background.column("mean").to_numpy()
    np.testing.assert_allclose(mean, matrix.mean(axis=1, dtype=np.longdouble).astype(np.float64), rtol=1e-13)


def test_another_background_reads_for_the_coefficients_alone(tmp_path: Path) -> None:
    place = Place(tmp_path, field())
    design = {"background": {"trend": True, "cycles": ["60 s"]}}
    assert place.stages(place.text("exact", design, rank=3)) == ["read", "coefficients"]
    text = place.text("exact", design, rank=3, remove=["mean", "trend", "cycles"])
    assert place.stages(text) == ["coefficients"]
    assert place.stages(text) == []


@pytest.mark.parametrize(("summary", "goes_on"), [("exact", False), ("whole", True)])
def test_a_shard_that_is_gone_is_withdrawn_from_nothing(summary: str, goes_on: bool, tmp_path: Path) -> None:
    # 140 channels, so that co-moments use a probe; of those the coefficients are kept, of a factor they are read again.
    place = Place(tmp_path, field(140))
    design = {"width": 20} if summary == "whole" else {}
    first = run_job(place.text(summary, design, rank=3))
    place.store.delete("part-001.parquet")
    standing = run_job(place.text(summary, design, rank=3))
    assert standing.result.location == first.result.location
    if goes_on:
        assert run_job(place.text(summary, design, rank=4)).result.manifest["quality"]["samples"] == SAMPLES
    else:
        with pytest.raises(InputError, match=r"part-001\.parquet"):
            run_job(place.text(summary, design, rank=4))
    again = run_job(place.text(summary, design, rank=3))
    assert again.result.location == first.result.location
    assert [shard["listed"] for shard in again.result.manifest["shards"]].count(True) >= 3


def field(channels: int = CHANNELS) -> np.ndarray:
    rng = np.random.Generator(np.random.PCG64(6))
    patterns = rng.standard_normal((channels, 6)) * 2.0 ** -np.arange(6)
    return np.asarray(patterns @ rng.standard_normal((6, SAMPLES)) + 0.01 * rng.standard_normal((channels, SAMPLES)))


def _sine(found: np.ndarray, exact: np.ndarray) -> float:
    found, exact = found / np.linalg.norm(found), exact / np.linalg.norm(exact)
    return float(np.linalg.norm(found - exact * (exact @ found)))
