"""Any partition of the samples, in any order, gives the same summary; merging is an algebra."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from shardfold.kernels import comoments, whole
from shardfold.kernels.addressed import STREAM_SAMPLE, normals
from shardfold.kernels.blocks import Preparation
from shardfold.kernels.whole import Shape, Summary, from_arrays, keep_mean, merge, to_arrays, zero

CLOSE = 3e-13  # of sums over at most a few hundred samples, in units of the energies behind them


def honest(matrix: np.ndarray, folded: Any, background: np.ndarray, xi: np.ndarray) -> Summary:
    """Return the summary by its definition, from the whole centred matrix at once."""
    shape = folded.summary.shape
    upsilon = np.eye(shape.m) if folded.probe.rows is None else folded.probe.rows.astype(float)
    stack = np.concatenate([upsilon @ matrix, folded.probe.check @ matrix, xi, background])
    mean, right = matrix.mean(axis=1), stack.mean(axis=1)
    a, r = matrix - mean[:, np.newaxis], stack - right[:, np.newaxis]
    return Summary(
        shape=shape,
        n=matrix.shape[1],
        mean=mean,
        energy=(a * a).sum(axis=1),
        outer=a @ r.T,
        inner=r @ r.T,
        right_mean=right,
        low=matrix.min(axis=1),
        high=matrix.max(axis=1),
        gaps=np.zeros(shape.m, dtype=np.int64),
    )


@st.composite
def partitions(draw: st.DrawFn) -> tuple[int, int, list[int], list[int]]:
    m, n = draw(st.integers(1, 40)), draw(st.integers(1, 60))
    cuts = sorted(draw(st.sets(st.integers(1, n - 1), max_size=6))) if n > 1 else []
    return m, n, cuts, draw(st.permutations(range(len(cuts) + 1)))


@given(
    case=partitions(),
    seed=st.integers(0, 1000),
    offset=st.sampled_from([0.0, 1.0, 1e3]),
    fortran=st.booleans(),
    width=st.sampled_from([None, 3, 8]),
    terms=st.integers(0, 2),
)
@settings(max_examples=80, deadline=None)
def test_any_partition_is_the_definition(
    lab: Any, case: Any, seed: int, offset: float, fortran: bool, width: int | None, terms: int
) -> None:
    m, n, cuts, order = case
    rng = np.random.default_rng(seed)
    matrix = rng.standard_normal((m, n)) + offset * rng.standard_normal((m, 1))
    matrix = np.asfortranarray(matrix) if fortran else matrix
    background = rng.standard_normal((terms, n))
    folded = lab.fold(matrix, width, cuts=cuts, order=order, background=background, seed=seed)
    truth = honest(matrix, folded, background, normals(seed, STREAM_SAMPLE, np.arange(n), 6))
    assert folded.summary.n == n
    assert np.array_equal(folded.summary.low, truth.low)
    assert np.array_equal(folded.summary.high, truth.high)
    assert lab.distance(truth, folded.summary, least=1.0) < CLOSE * max(1.0, offset)


@pytest.mark.parametrize("dtype", ["float16", "float32", "float64", "int8", "uint16", "int32", ">f4", "bool"])
@pytest.mark.parametrize("layout", ["C", "F", "strided"])
def test_types_and_memory_orders(lab: Any, dtype: str, layout: str) -> None:
    rng = np.random.default_rng(3)
    matrix = (rng.standard_normal((30, 90)) * 20 > 0) if dtype == "bool" else (rng.uniform(0, 100, (30, 90)))
    matrix = matrix.astype(dtype)
    plain = lab.fold(np.ascontiguousarray(matrix), 6)
    if layout == "strided":
        matrix = np.repeat(np.repeat(matrix, 2, axis=0), 3, axis=1)[::2, ::3]
    folded = lab.fold(np.asarray(matrix, order=None if layout == "strided" else layout), 6, cuts=[31])
    x_type = np.float64 if dtype in ("float64", "int32") else np.float32
    assert all(block.x.dtype == x_type for block in folded.blocks)
    # With X in single precision a sum keeps only single precision, as the partition changes what is rounded.
    assert lab.distance(plain.summary, folded.summary) < (CLOSE if x_type == np.float64 else 3e-7)
    reference = lab.fold(np.ascontiguousarray(matrix).astype(np.float64), 6)
    assert np.array_equal(folded.summary.low, reference.summary.low)
    assert np.array_equal(folded.summary.high, reference.summary.high)
    np.testing.assert_allclose(folded.summary.energy, reference.summary.energy, rtol=1e-12)
    np.testing.assert_allclose(folded.summary.mean, reference.summary.mean, rtol=1e-13)


def test_products_are_those_of_the_stored_x(lab: Any) -> None:
    # Recomputed here from the stored float32 blocks of a drifting matrix: the products must not know a better X.
    rng = np.random.default_rng(4)
    matrix = (rng.standard_normal((70, 300)) + rng.standard_normal((70, 1)) * np.linspace(5, 9, 300)).astype(np.float32)
    folded = lab.fold(matrix, 9, cuts=range(20, 300, 20))
    shape, summary = folded.summary.shape, folded.summary
    stored = np.concatenate(
        [b.x.astype(float) + (b.centre - summary.right_mean[shape.x])[:, np.newaxis] for b in folded.blocks], axis=1
    )
    centred = matrix.astype(float) - summary.mean[:, np.newaxis]
    w, c = centred @ stored.T, stored @ stored.T
    np.testing.assert_allclose(summary.outer[:, shape.x], w, atol=1e-13 * np.abs(w).max(), rtol=0)
    np.testing.assert_allclose(summary.inner[shape.x, shape.x], c, atol=1e-13 * np.abs(c).max(), rtol=0)
    assert np.abs(stored.sum(axis=1)).max() < 1e-12 * np.abs(stored).sum()


@given(seed=st.integers(0, 1000), cuts=st.tuples(st.integers(1, 30), st.integers(31, 69)))
@settings(max_examples=40, deadline=None)
def test_merge_is_associative_and_commutative(lab: Any, seed: int, cuts: tuple[int, int]) -> None:
    rng = np.random.default_rng(seed)
    matrix = rng.standard_normal((12, 70)) + 10 * rng.standard_normal((12, 1))
    background = rng.standard_normal((1, 70))
    pieces = [slice(0, cuts[0]), slice(*cuts), slice(cuts[1], 70)]
    a, b, c = (lab.fold(matrix[:, p], 4, background=background[:, p], seed=seed).summary for p in pieces)
    left, right = merge(merge(a, b), c), merge(a, merge(b, c))
    assert lab.distance(left, right) < CLOSE
    assert lab.distance(left, merge(c, merge(b, a))) < CLOSE
    assert (left.n, left.low.tolist()) == (right.n, right.low.tolist())


def test_zero_is_neutral_bit_by_bit(lab: Any) -> None:
    a = lab.fold(np.random.default_rng(0).standard_normal((7, 20)) + 3, 3).summary
    for both in (merge(a, zero(a.shape)), merge(zero(a.shape), a)):
        for name, array in to_arrays(a).items():
            assert np.array_equal(to_arrays(both)[name], array), name


def test_merge_changes_neither_part_and_counts_gaps(lab: Any) -> None:
    a = lab.fold(np.random.default_rng(0).standard_normal((7, 20)), 3).summary
    b = lab.fold(np.random.default_rng(1).standard_normal((7, 9)), 3).summary
    a.gaps[2], b.gaps[2] = 4, 5
    before = {name: array.copy() for name, array in to_arrays(a).items()}
    assert merge(a, b).gaps[2] == 9
    for name, array in before.items():
        assert np.array_equal(to_arrays(a)[name], array), name
    with pytest.raises(ValueError, match="b: must have the shape of a"):
        merge(a, zero(Shape(7, 4, 6, 6, 0, False)))


def test_the_same_block_gives_the_same_bits(lab: Any) -> None:
    matrix = np.random.default_rng(2).standard_normal((300, 500)).astype(np.float32)
    first, second = lab.fold(matrix, 20, cuts=[200]), lab.fold(matrix.copy(), 20, cuts=[200])
    for name, array in to_arrays(first.summary).items():
        assert np.array_equal(to_arrays(second.summary)[name], array), name
    alone = lab.fold(matrix[:, 200:], 20)
    assert np.array_equal(first.blocks[1].x, alone.blocks[0].x)
    assert np.array_equal(first.blocks[1].centre, alone.blocks[0].centre)


def test_groups_of_channels_leave_no_trace_but_rounding(lab: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    matrix = np.random.default_rng(2).standard_normal((100, 50)) + 7
    one = lab.fold(matrix, 8).summary
    monkeypatch.setattr(whole, "CHUNK_BYTES", 8 * 50 * 9)
    assert lab.distance(one, lab.fold(matrix, 8).summary) < CLOSE
    assert lab.distance(one, lab.fold(np.asfortranarray(matrix), 8).summary) < CLOSE


def test_preparation_is_the_channel_table_and_nothing_else(lab: Any) -> None:
    rng = np.random.default_rng(5)
    raw = rng.standard_normal((9, 80))
    gain, shift = rng.standard_normal(9), 100 * rng.standard_normal(9)
    scale, weight = rng.uniform(0.5, 2, 9), rng.uniform(0.1, 10, 9)
    preparation = Preparation.build(gain, shift, scale, weight)
    by_hand = (raw * gain[:, None] + shift[:, None]) * (np.sqrt(weight) / scale)[:, None]
    got = lab.fold(raw, 3, cuts=[11], preparation=preparation).summary
    assert lab.distance(lab.fold(by_hand, 3).summary, got) < 1e-11
    np.testing.assert_allclose(got.low, (raw * gain[:, None] + shift[:, None]).min(axis=1), rtol=1e-14)
    np.testing.assert_allclose(got.high, (raw * gain[:, None] + shift[:, None]).max(axis=1), rtol=1e-14)
    np.testing.assert_allclose(preparation.prepare(raw), by_hand, rtol=1e-12)
    assert not preparation.plain
    assert Preparation.unit(9).plain


def test_keeping_the_mean_is_the_summary_about_zero(lab: Any) -> None:
    rng = np.random.default_rng(6)
    matrix = rng.standard_normal((11, 60)) + 4
    background = rng.standard_normal((2, 60))
    folded = lab.fold(matrix, 5, cuts=[20], background=background)
    kept, shape = keep_mean(folded.summary), folded.summary.shape
    x = folded.probe.rows.astype(float) @ matrix
    np.testing.assert_allclose(kept.outer[:, shape.x], matrix @ x.T, rtol=1e-12)
    np.testing.assert_allclose(kept.outer[:, shape.g], matrix @ background.T, rtol=1e-11)
    np.testing.assert_allclose(kept.inner[shape.x, shape.x], x @ x.T, rtol=1e-12)
    np.testing.assert_allclose(kept.energy, (matrix**2).sum(axis=1), rtol=1e-13)


def test_storage_as_arrays_and_back(lab: Any) -> None:
    summary = lab.fold(np.random.default_rng(7).standard_normal((7, 20)), 3).summary
    arrays = to_arrays(summary)
    back = from_arrays(summary.shape, arrays)
    assert back.n == summary.n
    for name, array in arrays.items():
        assert np.array_equal(to_arrays(back)[name], array), name
    comoments.merge_into(back, summary)  # own memory: the source does not change
    assert summary.n == 20
    with pytest.raises(ValueError, match="got no energy"):
        from_arrays(summary.shape, {name: a for name, a in arrays.items() if name != "energy"})
    with pytest.raises(ValueError, match=r"mean: must have shape \(7,\); got \(6,\)"):
        from_arrays(summary.shape, arrays | {"mean": np.zeros(6)})
    with pytest.raises(ValueError, match="gaps: must have dtype int64; got float64"):
        from_arrays(summary.shape, arrays | {"gaps": np.zeros(7)})
