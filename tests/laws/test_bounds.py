"""What bounds on modes must do: cover the truth, be near it, never tell members of a close group apart, and scale.

The truth is LAPACK's decomposition of the whole matrix. A wider study is ``tests/bench/bounds_coverage.py``.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from shardfold.kernels import background, exact, factors
from shardfold.kernels.blocks import Preparation
from shardfold.kernels.bounds import Bounds, Checks, Residuals, _left_out, bounds, residuals
from shardfold.kernels.comoments import Summary

J = np.arange(1.0, 201.0)
RANK = 8


@dataclass
class Judged:
    """A finished read: what was found and what is said about it."""

    reduced: Summary
    made: factors.Factors
    checks: Checks
    probe: np.ndarray
    right: np.ndarray  # right singular vectors (n, k')

    def residuals(self) -> Residuals:
        return residuals(self.reduced, self.made, self.checks, self.probe)

    def bounds(self, n_effective: float = np.inf) -> Bounds:
        return bounds(self.made, self.residuals(), n_effective)


def judge(folded: Any) -> Judged:
    reduced, _ = background.reduce(folded.summary)
    made = factors.finish(folded.summary)
    x = np.concatenate([block.x + 0.0 for block in folded.blocks], axis=1)
    checks = Checks(reduced.outer[:, reduced.shape.theta], folded.probe.check)
    return Judged(reduced, made, checks, folded.probe.rows, (made.row_map @ x).T / made.values)


def read(lab: Any, matrix: np.ndarray, width: int, seed: int, reads: int = 1) -> Judged:
    """Read a matrix whose rows have mean zero; further reads are primed by the ones before."""
    folded = lab.fold(matrix, width, checks=10, seed=seed)
    for number in range(2, reads + 1):
        rows = factors.next_probe(folded.summary, RANK, seed, number, folded.keys)
        folded = lab.fold(matrix, width, checks=10, seed=seed, rows=rows)
    return judge(folded)


def groups(result: Bounds, below: int | None = None) -> Iterator[slice]:
    """Yield the groups that begin before mode ``below``."""
    for number in np.unique(result.group[:below]):
        places = np.flatnonzero(result.group == number)
        yield slice(int(places[0]), int(places[-1]) + 1)


def turned(found: np.ndarray, true: np.ndarray, members: slice) -> float:
    """Return the sine of the largest principal angle."""
    part, basis = found[:, members], true[:, members]
    return float(np.linalg.norm(part - basis @ (basis.T @ part), 2))


def with_pairs(ratio: float) -> np.ndarray:
    values = 1 / J
    values[[3, 7]] = values[[2, 6]] / ratio
    return np.sort(values)[::-1]


@pytest.mark.parametrize("reads", [1, 2])
@pytest.mark.parametrize(
    ("values", "share", "medians"),
    # Limits: share of the first 8 modes with a bound, medians of bound over truth; by reads.
    [(1 / J, (0.5, 0.95), (5, 3)), (J**-2, (0.9, 1), (5, 4)), (with_pairs(1.01), (0.4, 0.9), (6, 3))],
    ids=["1/j", "1/j^2", "pairs 1.01"],
)
def test_a_small_study(
    lab: Any, values: np.ndarray, share: tuple[float, float], medians: tuple[float, float], reads: int
) -> None:
    left, right, clean, bounded = [], [], 0, 0
    for number in range(2):
        matrix = lab.with_spectrum(240, 300, values, seed=number)
        u, _, vt = np.linalg.svd(matrix, full_matrices=False)
        for seed in range(10):
            judged = read(lab, matrix, 40, seed, reads)
            result = judged.bounds()
            before = len(left)
            for members in groups(result, RANK):
                if not np.isnan(result.sine[members.start]):
                    bounded += min(members.stop, RANK) - members.start
                    left.append(result.sine[members.start] / turned(judged.made.modes, u, members))
                if not np.isnan(result.coefficient_sine[members.start]):
                    right.append(result.coefficient_sine[members.start] / turned(judged.right, vt.T, members))
            clean += min(left[before:], default=1) >= 1
    assert np.mean(np.array(left) >= 1) >= 0.95
    assert np.mean(np.array(right) >= 1) >= 0.95
    assert clean >= 18  # of 20; the wider study holds 95 %
    assert bounded / (20 * RANK) >= share[reads - 1]
    assert np.median(left) <= medians[reads - 1]
    assert np.median(right) <= medians[reads - 1]


@pytest.mark.parametrize("reads", [1, 2, 3])
def test_members_of_an_exact_pair_are_never_judged_alone(lab: Any, reads: int) -> None:
    bounded = 0
    for seed in range(12):
        result = read(lab, lab.with_spectrum(240, 300, with_pairs(1.0), seed=seed), 36, seed, reads).bounds()
        for first in (2, 6):
            pair = slice(first, first + 2)
            assert np.isnan(result.sine[pair]).all() or np.ptp(result.group[pair]) == 0
            assert np.isnan(result.coefficient_sine[pair]).all() or np.ptp(result.group[pair]) == 0
            bounded += not np.isnan(result.sine[first])
    assert bounded >= (12 if reads == 1 else 24)


def test_members_of_a_group_share_one_bound(lab: Any) -> None:
    result = read(lab, lab.with_spectrum(240, 300, with_pairs(1.001)), 40, 3).bounds()
    assert result.group[2] == result.group[3]
    assert result.sine[2] == result.sine[3] < 1
    assert result.coefficient_sine[2] == result.coefficient_sine[3] < 1


def test_a_mode_that_came_after_the_probe_was_frozen_is_bounded_rightly(lab: Any) -> None:
    whole = lab.with_spectrum(240, 300, np.concatenate([[2.0], 1 / J[:-1]]))
    u, s, vt = np.linalg.svd(whole, full_matrices=False)
    before = whole - np.outer(u[:, 0] * s[0], vt[0])
    for seed in range(10):
        first = lab.fold(before, 40, checks=10, seed=seed)
        rows = factors.next_probe(first.summary, RANK, seed, 2, first.keys)
        judged = judge(lab.fold(whole, 40, checks=10, seed=seed, rows=rows))
        result = judged.bounds()
        assert turned(judged.made.modes, u, slice(0, 1)) <= result.sine[0] < 0.5


@given(exponent=st.integers(-60, 60))
@settings(max_examples=10, deadline=None)
def test_bounds_have_no_scale(lab: Any, exponent: int) -> None:
    matrix = lab.with_spectrum(80, 100, 1 / J[:60])
    one, other = read(lab, matrix, 30, 1).bounds(), read(lab, matrix * 2.0**exponent, 30, 1).bounds()
    np.testing.assert_array_equal(one.group, other.group)
    np.testing.assert_allclose(other.sine, one.sine, rtol=1e-6)
    np.testing.assert_allclose(other.coefficient_sine, one.coefficient_sine, rtol=1e-6)
    np.testing.assert_allclose(other.upper, one.upper * 4.0**exponent, rtol=1e-6)


def test_the_order_of_channels_does_not_matter(lab: Any) -> None:
    judged = read(lab, lab.with_spectrum(80, 100, 1 / J[:60]), 30, 1)
    order = np.random.Generator(np.random.PCG64(5)).permutation(80)
    shuffled = replace(
        judged,
        reduced=replace(judged.reduced, outer=judged.reduced.outer[order], energy=judged.reduced.energy[order]),
        made=replace(judged.made, modes=judged.made.modes[order]),
        checks=Checks(judged.checks.h[order], judged.checks.theta[:, order]),
        probe=judged.probe[:, order],
    )
    one, other = judged.bounds(), shuffled.bounds()
    np.testing.assert_array_equal(one.group, other.group)
    np.testing.assert_allclose(other.sine, one.sine, rtol=1e-6)
    np.testing.assert_allclose(other.coefficient_sine, one.coefficient_sine, rtol=1e-6)


def test_exact_recovery_leaves_rounding_alone(lab: Any) -> None:
    matrix = lab.with_spectrum(80, 100, 1 / J[:5])
    u, _, vt = np.linalg.svd(matrix, full_matrices=False)
    judged = read(lab, matrix, 20, 1)
    result = judged.bounds()
    assert result.group.tolist() == [0, 1, 2, 3, 4]  # the last computed mode too
    for members in groups(result):
        assert turned(judged.made.modes, u, members) <= result.sine[members.start] < 1e-11
        assert turned(judged.right, vt.T, members) <= result.coefficient_sine[members.start] < 1e-6


def test_the_identity_probe_leaves_rounding_alone(lab: Any) -> None:
    folded = lab.fold(lab.with_spectrum(30, 90, [1, 0.7, 0.7, 0.3]), None)
    made = factors.finish(folded.summary)
    found = residuals(background.reduce(folded.summary)[0], made, None)
    assert (found.left == 0).all()
    assert found.unseen == found.floor == made.floor**2
    result = bounds(made, found, np.inf)
    assert result.group[:4].tolist() == [0, 1, 1, 2]
    assert 0 < result.sine[:4].max() < 1e-12
    assert 0 < result.coefficient_sine[:4].max() < 1e-12


def test_the_exact_summary_leaves_its_own_rounding(lab: Any) -> None:
    values = np.array([1, 0.9, 1e-3, 1e-6, 1e-9])
    rng = np.random.Generator(np.random.PCG64(8))
    u, v = (np.linalg.qr(rng.standard_normal((size, 5)))[0] for size in (30, 90))
    matrix = (u * values) @ v.T
    triangle = exact.zero(exact.shape_of(30, 0))
    exact.fold_block(triangle, matrix, Preparation.unit(30), np.empty((0, 90)))
    made = exact.finish(triangle, keep_mean=True)
    nothing, floor = np.zeros(made.values.size), made.floor**2
    result = bounds(made, Residuals(nothing, nothing, nothing, floor, floor), np.inf)
    for i, limit in enumerate([1e-13, 1e-13, 1e-10, 1e-7, 1e-4]):
        assert turned(made.modes, u, slice(i, i + 1)) <= result.sine[i] < limit


def test_where_nothing_can_be_said_there_is_no_bound(lab: Any) -> None:
    noise = np.random.Generator(np.random.PCG64(6)).standard_normal((200, 300))
    result = read(lab, noise - noise.mean(axis=1, keepdims=True), 30, 1).bounds()
    assert np.isnan(result.sine).all()
    assert np.isnan(result.coefficient_sine).all()


def test_the_group_of_the_last_computed_mode_has_no_bound(lab: Any) -> None:
    for reads in (1, 2):
        result = read(lab, lab.with_spectrum(200, 300, 10 ** (-J[:60] / 10)), 20, 1, reads).bounds()
        assert np.isnan(result.sine[result.group == result.group[-1]]).all()


def test_shorter_data_join_more_modes(lab: Any) -> None:
    judged = read(lab, lab.with_spectrum(200, 300, 1 / J), 60, 1, 2)
    counts = [len(np.unique(judged.bounds(n).group[:RANK])) for n in (np.inf, 1000, 50, 5, 1)]
    assert counts == sorted(counts, reverse=True)
    assert counts[0] == RANK
    assert counts[-1] == 1


def test_upper_eigenvalues_cover_the_true_ones_and_fall(lab: Any) -> None:
    for seed in range(10):
        matrix = lab.with_spectrum(240, 300, 1 / J, seed=seed)
        judged = read(lab, matrix, 40, seed)
        upper = judged.bounds().upper
        true = np.linalg.svd(matrix, compute_uv=False) ** 2
        assert (np.diff(upper) <= 0).all()
        assert (upper[:-1] >= judged.made.values**2).all()
        assert (upper[:20] >= true[:20]).all()


def test_residuals_respect_each_other(lab: Any) -> None:
    matrix = lab.with_spectrum(240, 300, J**-1.5)
    judged = read(lab, matrix, 40, 2)
    found = judged.residuals()
    u, values = judged.made.modes, judged.made.values
    left = np.linalg.norm(matrix @ (matrix.T @ u) - u * values**2, axis=0)
    right = np.linalg.norm(matrix.T @ u - judged.right * values, axis=0)
    assert (found.left >= left)[:10].all()
    assert (found.right >= right)[:10].all()
    assert np.median(found.left[:10] / left[:10]) < 2.5
    assert np.median(found.right[:10] / right[:10]) < 2.5
    assert (found.right**2 <= found.left * (1 + 1e-12)).all()
    assert (found.left <= found.right * np.sqrt(found.unseen) * (1 + 1e-12)).all()


def test_a_row_left_out_is_a_read_without_it(lab: Any) -> None:
    matrix = lab.with_spectrum(200, 300, J**-0.5)
    judged = read(lab, matrix, 60, 1)
    found = _left_out(judged.reduced, judged.made, judged.probe)
    assert found.shape == (60, judged.made.values.size)
    for j in (0, 17, 59):
        x = np.delete(judged.probe, j, axis=0) @ matrix
        basis = np.linalg.qr(x.T)[0]
        row = judged.probe[j] @ matrix
        expected = judged.made.modes.T @ (matrix @ (row - basis @ (basis.T @ row)))
        np.testing.assert_allclose(found[j], expected, atol=1e-9 * np.abs(expected).max())


def test_rows_that_are_not_random_signs_are_no_checks(lab: Any) -> None:
    judged = read(lab, lab.with_spectrum(200, 300, J**-0.5), 60, 1)
    with_rows, without = judged.residuals(), replace(judged, probe=None).residuals()
    assert (with_rows.left != without.left).any()
    mixed = replace(judged, probe=judged.probe * np.linspace(1, 2, 200)).residuals()
    np.testing.assert_array_equal(mixed.left, without.left)
    primed = read(lab, lab.with_spectrum(200, 300, J**-0.5), 60, 1, 2)
    assert len(_left_out(primed.reduced, primed.made, primed.probe)) == 20


@pytest.mark.parametrize("rank", [0, 1, 2])
def test_few_modes(lab: Any, rank: int) -> None:
    matrix = lab.with_spectrum(30, 40, np.ones(rank)) if rank else np.zeros((30, 40))
    folded = lab.fold(matrix, 12, checks=10)
    reduced, _ = background.reduce(folded.summary)
    made = factors.finish(folded.summary)
    checks = Checks(reduced.outer[:, reduced.shape.theta], folded.probe.check)
    result = bounds(made, residuals(reduced, made, checks, folded.probe.rows), np.inf)
    assert result.group.tolist() == [0] * rank  # an exact pair is one group
    assert (result.sine < 1e-13).all()
    assert result.upper.size == rank + 1


def test_doors(lab: Any) -> None:
    judged = read(lab, lab.with_spectrum(40, 50, 1 / J[:30]), 12, 1)
    h, theta = judged.checks.h, judged.checks.theta
    for checks, message in (
        (Checks(h[:, :2], theta[:2]), r"checks.h.shape\[1\]: must be at least 3"),
        (Checks(h[:-1], theta), r"checks.h: must have shape \(40, 10\)"),
        (Checks(h, theta[:-1]), r"checks.theta: must have shape \(10, 40\)"),
        (Checks(h * np.nan, theta), "checks.h: every entry must be finite"),
    ):
        with pytest.raises(ValueError, match=message):
            residuals(judged.reduced, judged.made, checks)
    with pytest.raises(ValueError, match="probe: must have shape"):
        residuals(judged.reduced, judged.made, judged.checks, judged.probe[:-1])
    with pytest.raises(ValueError, match="n_effective: must be above zero; got 0"):
        judged.bounds(0)
