"""Predictions of accuracy: the tail that fits, the formula against a slow reading of it and against obtained angles."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from shardfold.kernels import remedy

J = np.arange(1.0, 201.0)


def exact_spectrum(
    eigenvalues: np.ndarray, width: int = 20, reads: int = 1, head: int | None = None
) -> remedy.Spectrum:
    """Return a spectrum whose eigenvalues are known; with a huge width, no mixing is taken off its gaps."""
    tail = remedy.Tail(2.0, 0.0, eigenvalues.size if head is None else head, 0)
    return remedy.Spectrum(eigenvalues, tail, width, reads, 0.0)


def slow_sine(s: np.ndarray, gaps: np.ndarray, i: int, k: int, t: int) -> float:
    """Return the prediction by the sums as they are written; i from 0, ``gaps`` squared."""
    best = 1.0
    for rho in range(i + 1, min(k - 1, s.size) + 1):
        rows = k - rho + 1 / 3
        behind = sum((s[j] / s[i]) ** (2 * t) * s[i] ** 2 / gaps[j] for j in range(rho, s.size)) / rows
        powers = [s[j] ** (2 * t - 1) for j in range(rho, s.size)]
        overlap = sum(p**2 for p in powers) / rows**2 + sum(powers) ** 2 / rows**3
        turned = 0.0
        for j in range(rho):
            if j != i:
                turned += min(1.0, s[i] * s[j] / gaps[j] * overlap / (s[i] * s[j]) ** (2 * t - 1))
        best = min(best, behind + turned)
    return float(np.sqrt(best))


@given(
    exponent=st.floats(0.0, 12.0),
    head=st.integers(1, 60),
    count=st.integers(2, 500),
    scale=st.floats(1e-6, 1e6),
)
@settings(max_examples=60, deadline=None)
def test_a_power_law_is_found_again(exponent: float, head: int, count: int, scale: float) -> None:
    law = scale * (np.arange(head + 1.0, head + count + 1) / head) ** -exponent
    tail = remedy.fit_tail(float(law.sum()), float(law @ law), head, count)
    np.testing.assert_allclose(tail.eigenvalues().sum(), law.sum(), rtol=1e-9)
    assert tail.eigenvalues() @ tail.eigenvalues() == pytest.approx(law @ law, rel=1e-4)
    assert (np.diff(tail.eigenvalues()) <= 0).all()


@pytest.mark.parametrize(
    ("total", "squares", "count", "exponent"),
    [(1.0, 1e-9, 10, 0.0), (1.0, 0.1, 10, 0.0), (1.0, 1.0, 10, 60.0), (1.0, 5.0, 10, 60.0), (1.0, 0.0, 10, 0.0)],
    ids=["flatter than flat", "flat", "one alone", "steeper than one alone", "no squares"],
)
def test_impossible_sums_end_at_the_limits(total: float, squares: float, count: int, exponent: float) -> None:
    tail = remedy.fit_tail(total, squares, 5, count)
    assert tail.exponent == pytest.approx(exponent, abs=1e-6)
    assert tail.eigenvalues().sum() == pytest.approx(total)


@pytest.mark.parametrize(("total", "count"), [(0.0, 10), (-1e-3, 10), (1.0, 0)])
def test_nothing_behind_the_head_is_no_tail(total: float, count: int) -> None:
    assert remedy.fit_tail(total, 1.0, 5, count).eigenvalues().tolist() == [0.0] * count


@pytest.mark.parametrize(("width", "reads"), [(12, 1), (20, 1), (40, 1), (20, 2), (40, 3)])
@pytest.mark.parametrize("values", [1 / J, J**-0.5, J**-2.0, np.where(J < 6, 1 - 0.1 * J, 0.1)])
def test_the_sums_are_those_that_are_written(values: np.ndarray, width: int, reads: int) -> None:
    s = (values / values[0])[:80] ** 2
    # Seen with a huge width, so that no mixing is taken off the gaps.
    told = remedy.predicted_sine(exact_spectrum(s, width=10**6, head=10), 5, width, reads)
    slow = [slow_sine(s, (s[i] - s) ** 2, i, width, reads) for i in range(5)]
    np.testing.assert_allclose(told, np.maximum(slow, remedy.LEAST_SINE), rtol=1e-4)


@given(
    steps=st.lists(st.floats(0.5, 0.97), min_size=30, max_size=30),
    width=st.integers(12, 40),
    reads=st.integers(1, 3),
    scale=st.floats(1e-8, 1e8),
)
@settings(max_examples=40, deadline=None)
def test_more_width_is_never_worse_and_units_do_not_matter(
    steps: list[float], width: int, reads: int, scale: float
) -> None:
    spectrum = exact_spectrum(np.cumprod(steps), head=20)
    told = remedy.predicted_sine(spectrum, 8, width, reads)
    assert told.shape == (8,)
    assert ((told >= remedy.LEAST_SINE) & (told <= 1)).all()
    assert (remedy.predicted_sine(spectrum, 8, width + 1, reads) <= told * (1 + 1e-12)).all()
    other = exact_spectrum(scale * np.cumprod(steps), head=20)
    np.testing.assert_allclose(remedy.predicted_sine(other, 8, width, reads), told, rtol=1e-6)


def test_another_read_is_not_worse_where_modes_stand_apart() -> None:
    for values in (1 / J, J**-2.0, np.exp(-J / 10), J**-0.5):
        spectrum = exact_spectrum(values**2, width=30, head=20)
        told = [remedy.predicted_sine(spectrum, 10, 30, reads) for reads in (1, 2, 3)]
        assert (told[1] <= told[0]).all()
        assert (told[2] <= told[1]).all()


def test_a_million_eigenvalues_cost_no_more_than_a_few_thousand(monkeypatch: pytest.MonkeyPatch) -> None:
    long = np.arange(1.0, 20_001.0)
    for values in (long**-0.5, long**-1.0, np.where(long < 9, 1 / long, 0.01)):
        spectrum = exact_spectrum(values**2, width=30, head=20)
        lumped = [remedy.predicted_sine(spectrum, 10, width, reads) for width in (30, 60) for reads in (1, 2)]
        with monkeypatch.context() as patch:
            patch.setattr(remedy, "_lumps", lambda eigenvalues, alone: (eigenvalues, np.ones(eigenvalues.size)))
            whole = [remedy.predicted_sine(spectrum, 10, width, reads) for width in (30, 60) for reads in (1, 2)]
        np.testing.assert_allclose(lumped, whole, rtol=1e-4)
    values, counts = remedy._lumps(np.arange(1e6, 0.0, -1.0), 100)
    assert values.size < 2000
    assert counts.sum() == 1e6
    assert values @ counts == pytest.approx(1e6 * (1e6 + 1) / 2)


def test_a_rank_below_the_width_is_found_by_any_read() -> None:
    spectrum = exact_spectrum(np.concatenate([1 / J[:8], np.zeros(50)]), head=12)
    for reads in (1, 2):
        assert (remedy.predicted_sine(spectrum, 8, 12, reads) == remedy.LEAST_SINE).all()


def test_no_energy_and_no_modes_give_no_predictions_worth_the_name() -> None:
    nothing = remedy.fit_spectrum(np.empty(0), np.empty(0), 0.0, 0.0, head=3, count=20, width=10, reads=1)
    told = remedy.predict(nothing, 5, 14)
    assert told.read.size == told.wider.size == told.read_at_least.size == 0
    assert remedy.predicted_sine(exact_spectrum(np.zeros(20), head=5), 3, 10, 1).tolist() == [0.0] * 3


def test_equal_modes_are_hopeless_alone_and_fine_as_a_group() -> None:
    values = np.array([1.0, 0.6, 0.6, 0.3, *(0.05 / J[:60])])
    spectrum = exact_spectrum(values**2, width=20, head=10)
    group = np.array([0, 1, 1, 2, *range(3, 9)])
    alone = remedy.predicted_sine(spectrum, 4, 20, 2)
    together = remedy.predicted_sine(spectrum, 4, 20, 2, group)
    assert (alone[1:3] == 1).all()
    assert (together < 0.01).all()
    assert together[1] == together[2]
    np.testing.assert_allclose(together[[0, 3]], alone[[0, 3]], rtol=1e-12)
    cut = remedy.predicted_sine(spectrum, 2, 20, 2, group)  # a member beyond the rank counts all the same
    np.testing.assert_allclose(cut, together[:2], rtol=1e-12)


def obtained(values: np.ndarray, width: int, reads: int, count: int, seed: int) -> np.ndarray:
    """Return sines of a plain row-space projection after some reads, in the basis of the true modes."""
    rng = np.random.Generator(np.random.PCG64(seed))
    rows = rng.standard_normal((width, values.size)) * values
    for _ in range(reads - 1):
        rows = np.linalg.qr((rows * values).T)[0].T * values
    basis = np.linalg.qr(rows.T)[0]
    modes = np.linalg.svd(values[:, np.newaxis] * basis, full_matrices=False)[0][:, :count]
    return np.sqrt(np.maximum(0, 1 - np.diagonal(modes) ** 2))


@pytest.mark.parametrize("reads", [1, 2])
@pytest.mark.parametrize(
    "values",
    [1 / J, J**-0.5, J**-2.0, np.where(J <= 8, 1 - 0.05 * J, 0.1), 1 / J + 0.05, np.exp(-J / 15)],
    ids=["1/j", "1/sqrt(j)", "1/j^2", "step", "plateau", "exponential"],
)
def test_obtained_angles_are_those_predicted_from_the_true_spectrum(values: np.ndarray, reads: int) -> None:
    spectrum = exact_spectrum(values**2, width=10**6, head=10)
    told = remedy.predicted_sine(spectrum, 8, 30, reads)
    got = np.array([obtained(values, 30, reads, 8, seed) for seed in range(20)])
    seen = (got > 1e-7).all(axis=0)
    ratio = told[seen] / np.median(got[:, seen], axis=0)
    assert (ratio > 0.6).all()
    assert np.median(ratio) < 12
    assert (told[seen] >= 0.5 * got[:, seen]).mean() > 0.96


def test_the_fit_sees_a_known_spectrum_through_one_read() -> None:
    values = 1 / J
    squares = float((values[30:] ** 4).sum())
    spectrum = remedy.fit_spectrum(
        values[:60], np.zeros(60), float(values @ values), squares, head=30, count=200, width=60, reads=1
    )
    np.testing.assert_allclose(spectrum.eigenvalues, values**2, rtol=0.02)
    assert spectrum.tail.exponent == pytest.approx(2.0, abs=0.02)
    assert spectrum.eigenvalues.sum() == pytest.approx(values @ values, rel=1e-12)


def test_only_fast_decays_are_told_as_at_least() -> None:
    for values, fast in ((1 / J, False), (J**-2.0, False), (10 ** (-J / 4), True)):
        squares = float((values[12:] ** 4).sum())
        spectrum = remedy.fit_spectrum(
            values[:24], np.zeros(24), float(values @ values), squares, head=12, count=200, width=24, reads=1
        )
        told = remedy.predict(spectrum, 5, 14)
        assert told.wider_at_least.all() == fast
        assert told.wider_at_least.any() == fast
        assert (told.read <= told.wider).all()
        assert max(told.read.max(), told.wider.max()) <= 1
        plain = remedy.predicted_sine(spectrum, 5, 48, 1)
        np.testing.assert_allclose(told.wider, np.minimum(1, remedy.ABOUT * plain), rtol=1e-12)


def test_a_decay_is_fast_by_its_tail_or_by_its_last_modes() -> None:
    cut = np.where(J <= 9, 1 / J, 1e-4 / J)
    flat_tail = remedy.Tail(0.0, 1e-9, 12, 0)
    assert remedy.Spectrum(cut[:12] ** 2, flat_tail, 24, 1, 0.0).exponent > 6
    assert remedy.Spectrum(1 / J[:12] ** 2, flat_tail, 24, 1, 0.0).exponent == pytest.approx(2)
    assert remedy.Spectrum(1 / J[:12] ** 2, remedy.Tail(7.0, 1e-9, 12, 0), 24, 1, 0.0).exponent == 7
    assert remedy.Spectrum(np.zeros(12), remedy.Tail(60.0, 0.0, 12, 0), 24, 1, 0.0).exponent == remedy.STEEPEST


def test_close_gaps_are_taken_for_less_than_they_look() -> None:
    values = J**-0.5
    sharp, blurred = (exact_spectrum(values**2, width=width, head=10) for width in (10**6, 16))
    alone = remedy.predicted_sine(sharp, 8, 60, 1)
    assert (remedy.predicted_sine(blurred, 8, 60, 1) >= alone).all()
    assert (remedy.predicted_sine(blurred, 8, 60, 1)[4:6] > 1.1 * alone[4:6]).all()


def test_squares_outside_are_estimated_from_the_checks() -> None:
    rng = np.random.Generator(np.random.PCG64(3))
    left = np.linalg.qr(rng.standard_normal((100, 100)))[0]
    values = 1 / J[:100]
    check = (left * values**2) @ rng.standard_normal((100, 400))
    assert remedy.squares_outside(left[:, :10], check) == pytest.approx((values[10:] ** 4).sum(), rel=0.1)
    assert remedy.squares_outside(left, check) < 1e-25


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"right_estimate": np.zeros(3)}, "right_estimate: must have shape"),
        ({"values": np.array([1.0, np.nan])}, "values: every entry must be finite"),
        ({"width": 0}, "width: must be at least 1"),
        ({"reads": 0}, "reads: must be at least 1"),
        ({"energy_total": np.inf}, "total, squares: must be finite"),
    ],
)
def test_the_door_names_what_is_wrong(change: dict[str, object], message: str) -> None:
    good: dict[str, object] = {
        "values": np.array([2.0, 1.0]), "right_estimate": np.zeros(2), "energy_total": 6.0, "squares": 0.5,
        "head": 2, "count": 9, "width": 4, "reads": 1,
    }  # fmt: skip
    with pytest.raises(ValueError, match=message):
        remedy.fit_spectrum(**(good | change))  # type: ignore[arg-type]
