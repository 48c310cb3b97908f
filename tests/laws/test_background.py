"""Functions of time removed after the fact: the same as removing them before, for every subset and every route."""

from __future__ import annotations

import itertools
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from shardfold.kernels import factors
from shardfold.kernels.background import Terms, apply, functions, reduce, term_energies
from shardfold.kernels.blocks import Preparation
from shardfold.kernels.comoments import merge

SECOND, HOUR = 10**9, 3600 * 10**9
TERMS = Terms(origin_ns=1_900_000_000 * SECOND, unit_ns=HOUR, periods_ns=(HOUR // 2, 700 * SECOND))
TREND, CYCLES = (0,), ((1, 2), (3, 4))
SUBSETS = [
    (keep, tuple(row for group in groups for row in group))
    for keep in (False, True)
    for count in range(4)
    for groups in itertools.combinations((TREND, *CYCLES), count)
]


def times(n: int) -> np.ndarray:
    return 1_900_000_000 * SECOND + 5 * SECOND * np.arange(n, dtype=np.int64)


def residual(matrix: np.ndarray, g: np.ndarray, keep_mean: bool, rows: tuple[int, ...]) -> np.ndarray:
    """Return the matrix without its background, by least squares on the whole of it."""
    columns = [g[list(rows)].T, *([] if keep_mean else [np.ones((matrix.shape[1], 1))])]
    design = np.concatenate(columns, axis=1)
    q = np.linalg.qr(design)[0]
    return matrix - (matrix @ q) @ q.T


def campaign(lab: Any, strength: float, n: int = 720, m: int = 60) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(5)
    g = functions(TERMS, times(n))
    matrix = lab.with_spectrum(m, n, 4.0 ** -np.arange(12)) * np.sqrt(n)
    return matrix + strength * rng.standard_normal((m, len(g))) @ g + strength * rng.standard_normal((m, 1)), g


@pytest.mark.parametrize("width", [24, None])
@pytest.mark.parametrize("strength", [0.0, 1.0, 100.0])
@pytest.mark.parametrize(("keep_mean", "rows"), SUBSETS)
def test_removal_after_the_fact_is_removal_before(
    lab: Any, width: int | None, strength: float, keep_mean: bool, rows: tuple[int, ...]
) -> None:
    matrix, g = campaign(lab, strength)
    after, _ = reduce(lab.fold(matrix, width, cuts=[100, 333], background=g).summary, keep_mean=keep_mean, rows=rows)
    left = residual(matrix, g, keep_mean, rows)
    before, _ = reduce(lab.fold(left, width, cuts=[100, 333], background=g).summary, keep_mean=True)
    shape = after.shape
    energy = left.ravel() @ left.ravel()
    limit = 1e-12 * max(1.0, matrix.ravel() @ matrix.ravel() / energy)
    root = np.sqrt(energy)
    places = {"x": shape.x, "theta": shape.theta, "xi": shape.xi}
    size = {name: np.sqrt(np.trace(before.inner[place, place])) for name, place in places.items()}
    for name, place in places.items():
        assert np.linalg.norm(after.outer[:, place] - before.outer[:, place]) <= limit * root * size[name]
    for a, b in (("x", "x"), ("theta", "theta"), ("x", "theta"), ("x", "xi")):
        difference = after.inner[places[a], places[b]] - before.inner[places[a], places[b]]
        assert np.linalg.norm(difference) <= limit * size[a] * size[b]
    assert np.abs(after.energy - before.energy).max() <= limit * energy


@pytest.mark.parametrize("width", [24, None])
@pytest.mark.parametrize(("keep_mean", "rows"), SUBSETS[1::3])
def test_modes_and_coefficients_rebuild_the_residual(
    lab: Any, width: int | None, keep_mean: bool, rows: tuple[int, ...]
) -> None:
    matrix, g = campaign(lab, 3.0)
    folded = lab.fold(matrix, width, cuts=[100, 333], background=g)
    made = factors.finish(folded.summary, keep_mean=keep_mean, rows=rows)
    left, known = residual(matrix, g, keep_mean, rows), g[list(rows)]
    truth = np.linalg.svd(left, compute_uv=False)
    rank = 6
    np.testing.assert_allclose(made.values[:rank], truth[:rank], rtol=1e-7)
    if width is None:
        c = factors.direct_coefficients(made, rank, matrix, Preparation.unit(len(matrix)), known)
    else:
        c = folded.coefficients(made, rank, known)
    missed = np.linalg.norm(left - made.modes[:, :rank] @ c)
    assert missed <= (1 + 1e-4) * np.sqrt((truth[rank:] ** 2).sum())


@given(cuts=st.sets(st.integers(1, 299), max_size=5), keep_mean=st.booleans(), seed=st.integers(0, 50))
@settings(max_examples=20, deadline=None)
def test_parts_about_the_background_of_all_add_up(lab: Any, cuts: set[int], keep_mean: bool, seed: int) -> None:
    matrix, g = campaign(lab, 2.0, n=300, m=30)
    edges = [0, *sorted(cuts), 300]
    parts = [
        lab.fold(matrix[:, a:b], 10, background=g[:, a:b], seed=seed).summary for a, b in itertools.pairwise(edges)
    ]
    total = parts[0]
    for part in parts[1:]:
        total = merge(total, part)
    reduced, removal = reduce(total, keep_mean=keep_mean, rows=(0, 1, 2))
    applied = sum(apply(part.n, part.right_mean, part.inner, removal) for part in parts)
    size = np.sqrt(np.diagonal(total.inner) + total.n * total.right_mean**2)
    assert (np.abs(applied - reduced.inner) / np.outer(size, size)).max() < 1e-12


def test_energies_of_the_terms_add_up(lab: Any) -> None:
    matrix, g = campaign(lab, 2.0)
    summary = lab.fold(matrix, 24, background=g).summary
    reduced, _ = reduce(summary, rows=(0, 1, 2, 3, 4))
    energies = term_energies(summary, [TREND, *CYCLES])
    np.testing.assert_allclose(energies.sum(axis=0), summary.energy - reduced.energy, rtol=1e-10)
    slope = np.polyfit(g[0], matrix[7], 1)
    straight = ((np.polyval(slope, g[0]) - matrix[7].mean()) ** 2).sum()
    assert energies[0, 7] == pytest.approx(straight, rel=1e-9)  # NumPy's least squares fit of a line


def test_functions_that_cannot_be_told_apart_are_counted_once(lab: Any) -> None:
    matrix, g = campaign(lab, 1.0)
    twice = np.concatenate([g, g[:1]])
    summary = lab.fold(matrix, 24, background=twice).summary
    plain, _ = reduce(summary, rows=(0, 1, 2))
    doubled, removal = reduce(summary, rows=(0, 1, 2, 5))
    assert removal.rank == 3
    np.testing.assert_allclose(doubled.energy, plain.energy, rtol=1e-9)
    # A hundredth of a cycle is mean, trend and a bend; a ten-thousandth is nothing but mean and trend.
    for hours, rank in ((100, 2), (10_000, 1)):
        slow = functions(Terms(TERMS.origin_ns, HOUR, (hours * HOUR,)), times(720))
        short = lab.fold(matrix, 24, background=slow).summary
        assert reduce(short, rows=(0, 1, 2))[1].rank == rank


def test_a_still_function_takes_nothing(lab: Any) -> None:
    matrix, _ = campaign(lab, 1.0)
    for level in (0.0, 0.1):
        summary = lab.fold(matrix, 24, cuts=[100, 333], background=np.full((1, 720), level)).summary
        reduced, removal = reduce(summary, rows=(0,))
        assert removal.rank == 0
        np.testing.assert_array_equal(reduced.energy, summary.energy)


def test_phases_do_not_age() -> None:
    period = 44_714_164_000_000  # the tide of 12 h 25 min 14.164 s
    terms = Terms(periods_ns=(period,))
    late = np.arange(5, dtype=np.int64) * SECOND + 40_000 * period
    np.testing.assert_allclose(functions(terms, late), functions(terms, late - 40_000 * period), atol=1e-15)
    trend = functions(Terms(origin_ns=1_900_000_000 * SECOND, unit_ns=3), times(2) + np.array([0, 1]))
    assert trend[0, 1] - trend[0, 0] == pytest.approx((5 * SECOND + 1) / 3, rel=1e-15)


def test_which_functions_make_up_a_term() -> None:
    assert TERMS.count == 5
    assert TERMS.rows(True, (700 * SECOND,)) == (0, 3, 4)
    with pytest.raises(ValueError, match="trend: must be one of the functions"):
        Terms().rows(True, ())
    with pytest.raises(ValueError, match="tuple"):
        TERMS.rows(False, (5,))


def test_only_functions_of_the_summary_can_be_removed(lab: Any) -> None:
    matrix, g = campaign(lab, 1.0)
    with pytest.raises(ValueError, match="rows: must be between 0 and 4; got 5"):
        reduce(lab.fold(matrix, 24, background=g).summary, rows=(5,))


@pytest.mark.parametrize("strength", [1.0, 1e3])
def test_single_precision_costs_the_rounding_of_what_was_removed(lab: Any, strength: float) -> None:
    matrix, g = campaign(lab, strength)
    stored = matrix.astype(np.float32)
    folded = lab.fold(stored, 24, cuts=[100, 333], background=g)
    rows = (0, 1, 2, 3, 4)
    made = factors.finish(folded.summary, rows=rows)
    left = residual(stored.astype(np.float64), g, False, rows)
    rounding = np.finfo(np.float32).eps * np.linalg.norm(stored - stored.mean(axis=1, keepdims=True))
    truth = np.linalg.svd(left, compute_uv=False)
    np.testing.assert_allclose(made.values[:3], truth[:3], atol=rounding)
    missed = np.linalg.norm(left - made.modes[:, :3] @ folded.coefficients(made, 3, g))
    assert missed <= np.hypot(np.sqrt((truth[3:] ** 2).sum()), 3 * rounding)
    assert folded.blocks[0].x.dtype == np.float32
