"""A matrix of less rank than the probe has rows is decomposed as by an exact SVD; captured energy is exact always."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from shardfold.kernels import factors
from shardfold.kernels.blocks import Preparation
from shardfold.kernels.whole import zero

EPS = np.finfo(np.float64).eps


def centred(matrix: np.ndarray) -> np.ndarray:
    wide = matrix.astype(np.float64)
    return wide - wide.mean(axis=1, keepdims=True)


@given(
    seed=st.integers(0, 1000),
    rank=st.integers(1, 9),
    identity=st.booleans(),
    offset=st.sampled_from([0.0, 30.0]),
    keep=st.booleans(),
)
@settings(max_examples=50, deadline=None)
def test_modes_values_and_coefficients(
    lab: Any, seed: int, rank: int, identity: bool, offset: float, keep: bool
) -> None:
    rng = np.random.default_rng(seed)
    values = np.sort(rng.uniform(1, 10, rank))[::-1]
    matrix = lab.with_spectrum(40, 60, values, seed) + offset * rng.standard_normal((40, 1))
    folded = lab.fold(matrix, None if identity else 16, cuts=[13, 40], seed=seed)
    made = factors.finish(folded.summary, keep_mean=keep)
    target = matrix if keep else centred(matrix)
    truth = np.linalg.svd(target, compute_uv=False)
    count = made.values.size
    assert count == rank + (1 if keep and offset else 0)
    np.testing.assert_allclose(made.values, truth[:count], rtol=1e-9)
    np.testing.assert_allclose(made.modes.T @ made.modes, np.eye(count), atol=1e-9)
    if identity:
        got = factors.direct_coefficients(made, count, matrix, Preparation.unit(40))
    else:
        got = folded.coefficients(made, count)
    # Rounding of products reaches singular values near sqrt(eps) of the first, never the large ones.
    assert np.linalg.norm(target - made.modes @ got) < 1e-8 * np.linalg.norm(target)
    np.testing.assert_allclose(got @ got.T, np.diag(made.values**2), atol=1e-8 * truth[0] ** 2)


@pytest.mark.parametrize("order", ["C", "F"])
def test_single_precision_input(lab: Any, order: Any) -> None:
    matrix = np.asarray(lab.with_spectrum(120, 400, [8, 4, 2, 1, 0.5]) + 3, dtype=np.float32, order=order)
    folded = lab.fold(matrix, 20, cuts=[100, 200])
    made = factors.finish(folded.summary)
    truth_left, truth, _ = np.linalg.svd(centred(matrix), full_matrices=False)
    np.testing.assert_allclose(made.values[:5], truth[:5], rtol=1e-10)
    for i in range(5):
        assert lab.angle(made.modes[:, i], truth_left[:, i]) < 1e-10
    rebuilt = made.modes[:, :5] @ folded.coefficients(made, 5)
    # What is left is the rounding of the input, and hardly more.
    assert np.linalg.norm(centred(matrix) - rebuilt) < 1.3 * np.linalg.norm(truth[5:])


def test_coefficients_of_drifting_single_precision_blocks_are_orthogonal(lab: Any) -> None:
    # The mean that rounding leaves in stored X must be counted: without it the products below reach 1e-3.
    rng = np.random.default_rng(5)
    series = rng.standard_normal((40, 4096))
    series[0] = np.linspace(-2, 2, 4096) + 0.3 * series[0]
    right, _ = np.linalg.qr(centred(series).T)
    left, _ = np.linalg.qr(rng.standard_normal((200, 40)))
    matrix = ((left * 10 ** (-np.arange(40) / 8)) @ right.T).astype(np.float32)
    folded = lab.fold(matrix, 64, cuts=range(128, 4096, 128))
    made = factors.finish(folded.summary)
    unit = folded.coefficients(made, 20) / made.values[:20, np.newaxis]
    assert np.abs(unit @ unit.T - np.eye(20)).max() < 1e-7


@given(seed=st.integers(0, 1000), width=st.integers(2, 12), rank=st.integers(0, 12))
@settings(max_examples=30, deadline=None)
def test_captured_energy_is_exact_whole_and_by_channel(lab: Any, seed: int, width: int, rank: int) -> None:
    matrix = centred(np.random.default_rng(seed).standard_normal((50, 80)))
    folded = lab.fold(matrix, width, cuts=[33], seed=seed)
    made = factors.finish(folded.summary)
    rank = min(rank, made.values.size)
    missed = matrix - made.modes[:, : made.values.size] @ folded.coefficients(made, made.values.size)
    captured = factors.captured_by_channel(made, made.values.size)
    np.testing.assert_allclose((missed**2).sum(axis=1), made.energy - captured, atol=1e-12 * made.energy_total)
    by_rank = factors.captured_by_channel(made, rank)
    np.testing.assert_allclose(by_rank.sum(), (made.values[:rank] ** 2).sum(), rtol=1e-12, atol=1e-300)
    assert (by_rank <= made.energy * (1 + 1e-10)).all()
    np.testing.assert_allclose(made.energy_total, (matrix**2).sum(), rtol=1e-13)


def test_nothing_below_the_floor_is_a_mode(lab: Any) -> None:
    values = [1, 1e-3, 1e-6, 1e-9, 1e-12]
    for width in (None, 20):
        matrix = lab.with_spectrum(45, 100, values)
        made = factors.finish(lab.fold(matrix, width).summary)
        assert made.floor == pytest.approx(np.sqrt(factors.FLOOR_ULPS * EPS), rel=1e-3)
        assert made.values.min() > made.floor
        np.testing.assert_allclose(made.values[:3], values[:3], rtol=1e-2)
        assert made.values.size <= 6  # three real ones and at most a little noise just above the floor


def test_offsets_raise_the_floor(lab: Any) -> None:
    matrix = lab.with_spectrum(45, 100, [1.0, 0.1])
    plain = factors.finish(lab.fold(matrix, 20).summary)
    far = factors.finish(lab.fold(matrix + 1e8, 20).summary)
    assert far.floor > 10 * plain.floor
    assert far.floor == pytest.approx(factors.FLOOR_ULPS * EPS * 1e8 * np.sqrt(45 * 100), rel=0.1)


@pytest.mark.parametrize("width", [None, 5])
def test_degenerate_matrices(lab: Any, width: int | None) -> None:
    still = np.full((12, 30), 7.0)
    made = factors.finish(lab.fold(still, width, cuts=[4]).summary)
    assert made.values.size == 0
    assert made.modes.shape == (12, 0)
    assert factors.captured_by_channel(made, 0).tolist() == [0.0] * 12
    kept = factors.finish(lab.fold(still, width).summary, keep_mean=True)
    assert kept.values == pytest.approx([7 * np.sqrt(12 * 30)])
    one_sample = factors.finish(lab.fold(still[:, :1] + np.arange(12.0)[:, None], width).summary)
    assert one_sample.values.size == 0
    dead = np.random.default_rng(0).standard_normal((12, 30))
    dead[3] = 5.0
    made = factors.finish(lab.fold(dead, width).summary)
    assert np.abs(made.modes[3]).max() < 1e-12


def test_an_empty_summary_and_too_high_a_rank_are_refused(lab: Any) -> None:
    folded = lab.fold(lab.with_spectrum(20, 30, [3.0, 2.0]), 6)
    made = factors.finish(folded.summary)
    block = folded.blocks[0]
    with pytest.raises(ValueError, match="rank: must be between 0 and 2; got 3"):
        factors.coefficients(made, 3, block.x, block.centre)
    with pytest.raises(ValueError, match=r"summary\.n: must be at least 1; got 0"):
        factors.finish(zero(folded.summary.shape))
