"""How close one read and a second read come to the best approximation, and what a second read must not miss."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from shardfold.kernels import factors

J = np.arange(1.0, 601.0)
RANK, WIDTH = 10, 42


def excess(matrix: np.ndarray, best: float, folded: Any, *, keep_mean: bool = False) -> float:
    """Return |A - A_hat_r| / |A - A_r| - 1."""
    made = factors.finish(folded.summary, keep_mean=keep_mean)
    rebuilt = made.modes[:, :RANK] @ folded.coefficients(made, RANK)
    return float(np.linalg.norm(matrix - rebuilt) / best - 1)


@pytest.mark.parametrize(
    ("values", "one_read", "two_reads"),
    [
        # Medians measured for this method with NumPy, 600 x 800, r = 10, k = 42; confirmed here within a third.
        (1 / J, 0.062, 3e-5),
        (1 / J**2, 0.0081, 9e-9),
        (10 ** (-J / 10), 1e-6, 1e-9),
    ],
    ids=["1/j", "1/j^2", "10^(-j/10)"],
)
def test_published_medians(lab: Any, values: np.ndarray, one_read: float, two_reads: float) -> None:
    matrix = lab.with_spectrum(600, 800, values)
    best = float(np.linalg.norm(values[RANK:]))
    first, second = [], []
    for seed in range(5):
        folded = lab.fold(matrix, WIDTH, cuts=[256, 512], seed=seed)
        first.append(excess(matrix, best, folded))
        rows = factors.next_probe(folded.summary, RANK, seed, 2, folded.keys)
        second.append(excess(matrix, best, lab.fold(matrix, WIDTH, cuts=[256, 512], rows=rows, seed=seed)))
    assert np.median(first) == pytest.approx(one_read, rel=1 / 3)
    assert np.median(second) < 2 * two_reads  # seeds differ by a factor of three


def test_rank_ten_plus_white_noise(lab: Any) -> None:
    # Last row of the same table: largest noise value 0.024 of the tenth value; 0.14 after one read, 1e-8 after two.
    noise = np.random.default_rng(0).standard_normal((600, 800)) * 0.024 / (np.sqrt(600) + np.sqrt(800))
    matrix = lab.with_spectrum(600, 800, np.ones(10)) + noise
    matrix -= matrix.mean(axis=1, keepdims=True)
    best = float(np.linalg.norm(np.linalg.svd(matrix, compute_uv=False)[RANK:]))
    first = lab.fold(matrix, WIDTH)
    assert excess(matrix, best, first) == pytest.approx(0.14, rel=1 / 3)
    rows = factors.next_probe(first.summary, RANK, 1, 2, first.keys)
    assert excess(matrix, best, lab.fold(matrix, WIDTH, rows=rows)) < 2e-8


def test_the_next_probe_has_unit_rows_exact_in_single_precision(lab: Any) -> None:
    folded = lab.fold(lab.with_spectrum(300, 200, 1 / J[:100]) + 2, 30)
    rows = factors.next_probe(folded.summary, RANK, 1, 2, folded.keys)
    assert rows.shape == (factors.probe_width(30, RANK), 300)
    assert np.array_equal(rows, rows.astype(np.float32))
    np.testing.assert_allclose(np.linalg.norm(rows, axis=1), 1, rtol=1e-6)
    np.testing.assert_allclose(rows[:30] @ rows[:30].T, np.eye(30), atol=1e-6)
    later = factors.next_probe(folded.summary, RANK, 1, 3, folded.keys)
    assert not np.array_equal(later[-14:], rows[-14:])
    assert np.array_equal(later[:31], rows[:31])


def test_a_second_read_finds_a_pattern_that_was_not_there_before(lab: Any) -> None:
    matrix = lab.with_spectrum(200, 400, 1 / J[:60])
    rng = np.random.default_rng(3)
    pattern = np.linalg.qr(rng.standard_normal((200, 1)))[0]
    fresh = pattern * rng.standard_normal(150) * np.linalg.norm(matrix) / np.sqrt(400 * 6)
    later = np.concatenate([matrix, fresh], axis=1)
    first = lab.fold(matrix, 40)
    rows = factors.next_probe(first.summary, RANK, 1, 2, first.keys)
    primed_only = rows[:40] - (rows[:40] @ pattern) * pattern.T  # a probe that is blind to the new pattern
    found, missed = (factors.finish(lab.fold(later, 40, rows=r).summary) for r in (rows, primed_only))
    share = float((fresh - fresh.mean()).var() * fresh.size / found.energy_total)
    assert 0.05 < share < 0.4
    assert np.abs(pattern.T @ found.modes[:, :RANK]).max() > 0.9
    assert np.linalg.norm(pattern.T @ missed.modes[:, :RANK]) < 0.5


def test_a_second_read_serves_the_result_that_keeps_the_mean_too(lab: Any) -> None:
    matrix = lab.with_spectrum(300, 400, 1 / J[:200])
    mean = np.random.default_rng(4).standard_normal((300, 1))
    mean *= np.linalg.norm(matrix) / np.linalg.norm(mean) / 20
    away = matrix + mean
    values = np.linalg.svd(away, compute_uv=False)
    best = float(np.linalg.norm(values[RANK:]))
    first = lab.fold(away, WIDTH, cuts=[100])
    rows = factors.next_probe(first.summary, RANK, 1, 2, first.keys)
    second = lab.fold(away, WIDTH, rows=rows, cuts=[100])
    assert excess(away, best, second, keep_mean=True) < 1e-4
    without = np.delete(rows, WIDTH, axis=0)  # what the row of the mean is for
    assert excess(away, best, lab.fold(away, WIDTH, rows=without), keep_mean=True) > 3e-4


def test_a_further_read_may_skip_the_checks(lab: Any) -> None:
    matrix = lab.with_spectrum(100, 150, 1 / J[:50])
    with_checks, without = (factors.finish(lab.fold(matrix, 30, checks=q).summary) for q in (6, 0))
    np.testing.assert_allclose(with_checks.values[:20], without.values[:20], rtol=1e-12)


def test_the_identity_probe_needs_no_further_read(lab: Any) -> None:
    folded = lab.fold(lab.with_spectrum(30, 90, 1 / J[:20]), None)
    made = factors.finish(folded.summary)
    np.testing.assert_allclose(made.values, 1 / J[:20], rtol=1e-12)
    assert folded.blocks == [None]
    with pytest.raises(ValueError, match="summary: must not come from the identity probe"):
        factors.next_probe(folded.summary, 5, 1, 2, folded.keys)
