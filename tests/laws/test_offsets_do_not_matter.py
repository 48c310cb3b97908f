"""Offsets, drifts and bad neighbours far larger than the fluctuation leave the modes of the fluctuation right."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from shardfold.kernels import factors

VALUES = 1.0 / np.arange(1, 31)


def worst_angle(lab: Any, made: factors.Factors, truth: np.ndarray, count: int = 5) -> float:
    return max(lab.angle(made.modes[:, i], truth[:, i]) for i in range(count))


@pytest.mark.parametrize("width", [None, 40])
@pytest.mark.parametrize(("offset", "bound"), [(0, 1e-9), (1, 1e-9), (1e2, 1e-9), (1e4, 1e-8), (1e6, 1e-6)])
def test_first_five_modes_in_double_precision(lab: Any, offset: float, bound: float, width: int | None) -> None:
    channels, samples = (60 if width is None else 120), 500
    matrix = lab.with_spectrum(channels, samples, VALUES)
    truth = np.linalg.svd(matrix, full_matrices=False)[0]
    fluctuation = np.linalg.norm(matrix) / np.sqrt(matrix.size)
    away = offset * fluctuation * np.random.default_rng(1).choice([-1.0, 1.0], (channels, 1))
    folded = lab.fold(matrix + away, width, cuts=range(50, samples, 50))
    made = factors.finish(folded.summary)
    assert worst_angle(lab, made, truth) < bound
    np.testing.assert_allclose(made.values[:5], VALUES[:5], rtol=bound)
    if width is not None:
        rebuilt = made.modes[:, :5] @ folded.coefficients(made, 5)
        best = np.linalg.norm(VALUES[5:])
        assert np.linalg.norm(matrix - rebuilt) == pytest.approx(best, rel=max(1e-6, 10 * bound))


def test_single_precision_is_limited_by_its_own_rounding_only(lab: Any) -> None:
    matrix = lab.with_spectrum(120, 500, VALUES)
    far = (matrix + 1e3 * np.abs(matrix).max()).astype(np.float32)
    given = far.astype(np.float64)
    truth = np.linalg.svd(given - given.mean(axis=1, keepdims=True), full_matrices=False)[0]
    wide = factors.finish(lab.fold(given, 40, cuts=[128, 256, 384]).summary)
    narrow = factors.finish(lab.fold(far, 40, cuts=[128, 256, 384]).summary)
    # The same data in either type: the sketch errs, its precision does not.
    assert abs(worst_angle(lab, narrow, truth) - worst_angle(lab, wide, truth)) < 1e-5
    np.testing.assert_allclose(narrow.values[:5], wide.values[:5], rtol=1e-6)


def test_a_trend_a_thousand_times_the_fluctuation_is_a_mode_and_spoils_no_other(lab: Any) -> None:
    matrix = lab.with_spectrum(120, 500, VALUES)
    trend = np.linspace(-1, 1, 500) * np.random.default_rng(2).standard_normal((120, 1))
    both = matrix + 1e3 * trend * np.linalg.norm(matrix) / np.linalg.norm(trend)
    truth = np.linalg.svd(both, full_matrices=False)[0]
    made = factors.finish(lab.fold(both, 40, cuts=range(50, 500, 50)).summary)
    assert worst_angle(lab, made, truth) < 1e-7


def test_one_bad_block_does_not_poison_the_rest(lab: Any) -> None:
    matrix = lab.with_spectrum(120, 500, VALUES)
    spoilt = matrix.copy()
    spoilt[7, 120:130] += 1e5
    cuts = [100, 200, 300]
    good = lab.fold(matrix, 40, cuts=cuts)
    bad = lab.fold(spoilt, 40, cuts=cuts)
    for number, (a, b) in enumerate(zip(good.blocks, bad.blocks, strict=True)):
        assert np.array_equal(a.x, b.x) == (number != 1)
