"""The convention of signs and order: applied twice it changes nothing, and small noise does not flip it."""

from __future__ import annotations

from typing import Any

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from shardfold.kernels import factors

MODES = hnp.arrays(np.float64, st.tuples(st.integers(1, 8), st.integers(0, 5)), elements=st.floats(-1, 1))


@given(modes=MODES)
@settings(max_examples=100, deadline=None)
def test_the_first_channel_near_the_peak_is_positive_and_twice_is_once(modes: np.ndarray) -> None:
    row_map = np.arange(modes.shape[1] * 3.0).reshape(-1, 3) + 1
    once, once_map = factors.orient(modes, row_map)
    twice, twice_map = factors.orient(once, once_map)
    assert np.array_equal(once, twice)
    assert np.array_equal(once_map, twice_map)
    assert np.array_equal(np.abs(once), np.abs(modes))
    for before, after, row in zip(modes.T, once.T, once_map, strict=True):
        near = np.flatnonzero(np.abs(after) >= 0.9 * np.abs(after).max())
        assert after[near[0]] >= 0
        assert (row[0] < 0) == (not np.array_equal(before, after))


@given(modes=MODES)
@settings(max_examples=50, deadline=None)
def test_opposite_modes_are_oriented_alike(modes: np.ndarray) -> None:
    row_map = np.zeros((modes.shape[1], 1))
    assert np.array_equal(factors.orient(modes, row_map)[0], factors.orient(-modes, row_map)[0])


def test_noisy_copies_of_an_antisymmetric_mode_agree() -> None:
    # The largest entry alone would flip in about half of these.
    rng = np.random.default_rng(0)
    shape = np.sin(2 * np.pi * (np.arange(40) + 0.5) / 40)
    copies = shape[:, np.newaxis] * rng.choice([-1.0, 1.0], 200) + 0.01 * rng.standard_normal((40, 200))
    largest = copies[np.abs(copies).argmax(axis=0), np.arange(200)] * np.sign(copies[5])
    oriented, _ = factors.orient(copies, np.zeros((200, 1)))
    assert 40 < (largest > 0).sum() < 160
    assert (oriented[5] > 0).all()


def test_values_never_increase_and_modes_are_oriented(lab: Any) -> None:
    for width in (None, 12):
        matrix = np.random.default_rng(1).standard_normal((20 if width is None else 60, 90))
        made = factors.finish(lab.fold(matrix, width).summary)
        assert (np.diff(made.values) <= 0).all()
        again, same_map = factors.orient(made.modes, made.row_map)
        assert np.array_equal(again, made.modes)
        assert np.array_equal(same_map, made.row_map)


def test_another_cut_gives_the_same_modes_with_the_same_signs(lab: Any) -> None:
    matrix = lab.with_spectrum(90, 300, 1.0 / np.arange(1, 21))
    one = factors.finish(lab.fold(matrix, 30).summary)
    other = factors.finish(lab.fold(matrix, 30, cuts=[10, 11, 170], order=[2, 0, 3, 1]).summary)
    np.testing.assert_allclose(other.values[:10], one.values[:10], rtol=1e-12)
    np.testing.assert_allclose(other.modes[:, :10], one.modes[:, :10], atol=1e-11)
