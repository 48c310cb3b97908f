"""The exact summary is LAPACK's decomposition of the whole matrix, whatever the cut, the offsets and the background.

The oracle works on the matrix in one piece: mean in extended precision, an orthonormal basis of the functions, one SVD.
Marks: [M] quoted from memory and confirmed by computing.
"""

from __future__ import annotations

import itertools
import tracemalloc
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np
import pytest
import scipy.linalg
from hypothesis import given, settings
from hypothesis import strategies as st

from shardfold.kernels import addressed, background, exact, factors, whole
from shardfold.kernels.blocks import Preparation

EPS = float(np.finfo(np.float64).eps)


def generator(seed: int) -> np.random.Generator:
    return np.random.Generator(np.random.PCG64(seed))


def fold(
    matrix: np.ndarray,
    functions: np.ndarray | None = None,
    cuts: Sequence[int] = (),
    order: Sequence[int] | None = None,
    preparation: Preparation | None = None,
) -> exact.Triangle:
    """Fold a matrix block by block into one summary."""
    m, n = matrix.shape
    functions = np.empty((0, n)) if functions is None else functions
    places = [slice(a, b) for a, b in itertools.pairwise([0, *cuts, n])]
    triangle = exact.zero(exact.shape_of(m, len(functions)))
    for i in order or range(len(places)):
        prepared = preparation or Preparation.unit(m)
        exact.fold_block(triangle, matrix[:, places[i]], prepared, functions[:, places[i]])
    return triangle


def fold_and_merge(matrix: np.ndarray, functions: np.ndarray | None = None) -> exact.Triangle:
    """Fold three parts of two blocks each and merge them, the last two first."""
    n = matrix.shape[1]
    functions = np.empty((0, n)) if functions is None else functions
    edges = [0, n // 3, 2 * n // 3, n]
    parts = [
        fold(matrix[:, a:b], functions[:, a:b], [(b - a) // 2] if b - a > 1 else [])
        for a, b in itertools.pairwise(edges)
    ]
    return exact.merge(parts[0], exact.merge(parts[1], parts[2]))


def centred(matrix: np.ndarray) -> np.ndarray:
    long = matrix.astype(np.longdouble)
    return (long - long.mean(axis=1, keepdims=True)).astype(np.float64)


def without(matrix: np.ndarray, functions: np.ndarray, *, keep_mean: bool) -> np.ndarray:
    """Take the functions, and the mean, off a matrix in one piece."""
    if not keep_mean:
        matrix, functions = centred(matrix), centred(functions)
    basis = scipy.linalg.orth(functions.T, rcond=1e-10)
    for _ in range(2):
        matrix = matrix - (matrix @ basis) @ basis.T
    return matrix


def with_values(channels: int, samples: int, values: np.ndarray, seed: int = 0) -> np.ndarray:
    rng = generator(seed)
    left = np.linalg.qr(rng.standard_normal((channels, len(values))))[0]
    return (left * values) @ rng.standard_normal((len(values), samples))


def distance(triangle: np.ndarray, stack: np.ndarray) -> float:
    """Return the largest difference of products of rows of a stack, in units of the norms of the two rows."""
    norms = np.maximum(np.linalg.norm(stack, axis=1), 1e-300)
    return float((np.abs(triangle.T @ triangle - stack @ stack.T) / np.outer(norms, norms)).max())


@st.composite
def partitions(draw: st.DrawFn) -> tuple[int, int, list[int], list[int]]:
    m, n = draw(st.integers(1, 30)), draw(st.integers(1, 60))
    cuts = sorted(draw(st.sets(st.integers(1, n - 1), max_size=6))) if n > 1 else []
    return m, n, cuts, draw(st.permutations(range(len(cuts) + 1)))


@given(
    case=partitions(),
    seed=st.integers(0, 1000),
    offset=st.sampled_from([0.0, 1e3, 1e6]),
    terms=st.integers(0, 3),
)
@settings(max_examples=80, deadline=None)
def test_any_partition_in_any_order_is_the_definition(case: Any, seed: int, offset: float, terms: int) -> None:
    m, n, cuts, order = case
    rng = generator(seed)
    matrix = rng.standard_normal((m, n)) + offset * rng.standard_normal((m, 1))
    functions = rng.standard_normal((terms, n))
    triangle = fold(matrix, functions, cuts, order)
    assert triangle.n == n
    assert np.array_equal(triangle.triangle, np.triu(triangle.triangle))
    assert np.array_equal(triangle.low, matrix.min(axis=1))
    assert np.array_equal(triangle.high, matrix.max(axis=1))
    np.testing.assert_allclose(triangle.mean, matrix.mean(axis=1), atol=1e-14, rtol=1e-14)
    if n > 2:
        stack = centred(np.vstack([functions, matrix]))
        assert distance(triangle.triangle, stack) < 2e-14 * max(1.0, 0.1 * offset)
        np.testing.assert_allclose(triangle.energy, (stack[terms:] ** 2).sum(axis=1), rtol=1e-13 * max(1, offset))


@pytest.mark.parametrize(
    ("m", "n", "step"), [(1, 50, 7), (5, 2000, 64), (64, 4000, 1000), (200, 900, 90), (200, 90, 9)]
)
def test_values_are_those_of_the_whole_matrix(m: int, n: int, step: int) -> None:
    matrix = with_values(m, n, np.logspace(0, -12, m))
    modes, values, _ = scipy.linalg.svd(centred(matrix), full_matrices=False)
    made = exact.finish(fold(matrix, cuts=range(step, n, step)))
    count = made.values.size
    assert count >= np.count_nonzero(values > 2 * made.floor)
    assert np.abs(made.values - values[:count]).max() < 1e-14 * values[0]
    strong = int(np.count_nonzero(values > 1e-3 * values[0]))
    np.testing.assert_allclose(made.values[:strong], values[:strong], rtol=1e-12)
    assert abs(abs(made.modes[:, 0] @ modes[:, 0]) - 1) < 1e-13
    np.testing.assert_allclose(made.modes.T @ made.modes, np.eye(count), atol=1e-13)
    assert made.energy_total == pytest.approx((values**2).sum(), rel=1e-13)
    assert np.array_equal(made.row_map, made.modes.T)


@pytest.mark.parametrize(("offset", "bound"), [(1e3, 1e-13), (1e6, 1e-10)])
def test_offsets_cost_no_more_than_their_own_rounding(offset: float, bound: float) -> None:
    # Values 1e6 times the fluctuation were rounded to 1e-10 of it when they were written; nothing is added to that.
    matrix = with_values(40, 3000, np.logspace(0, -2, 40))
    matrix += offset * np.linalg.norm(matrix) / np.sqrt(matrix.size) * generator(1).choice([-1.0, 1.0], (40, 1))
    modes, values, _ = scipy.linalg.svd(centred(matrix), full_matrices=False)
    made = exact.finish(fold_and_merge(matrix))
    assert np.abs(made.values - values).max() < bound * values[0]
    assert np.linalg.norm(made.modes[:, 0] - modes[:, 0] * (made.modes[:, 0] @ modes[:, 0])) < bound


def test_equal_values_have_no_energy_at_all() -> None:
    triangle = fold(np.full((3, 1000), 1e6 + 0.1), np.full((1, 1000), 0.3), range(7, 1000, 7))
    assert not triangle.energy.any()
    assert exact.finish(triangle, rows=[0]).values.size == 0
    assert triangle.mean.tolist() == [1e6 + 0.1] * 3


@pytest.mark.parametrize("step", [7, 64, 1000])
@pytest.mark.parametrize("rank", [1, 2])
@pytest.mark.parametrize("m", [2, 3, 5, 64])
def test_spurious_values_stay_under_the_floor(m: int, rank: int, step: int) -> None:
    rng = generator(m)
    matrix = (rng.integers(-99, 100, (m, rank)) @ rng.integers(-99, 100, (rank, 6000))).astype(np.float64)
    for offset in (0.0, 1e9):  # both exact, so whatever is left was made here
        triangle = fold(matrix + offset, cuts=range(step, 6000, step))
        for keep_mean in (False, True):
            made = exact.finish(triangle, keep_mean=keep_mean)
            assert made.values.size <= rank + (keep_mean and offset > 0)
            assert made.floor < 1e-14 * np.sqrt(triangle.energy.sum() + triangle.n * (triangle.mean @ triangle.mean))


TIME = np.linspace(-1, 1, 1200)
FUNCTIONS = np.vstack([TIME, *(wave(w * TIME) for w in (9.0, 40.0) for wave in (np.cos, np.sin))])
SUBSETS = [
    rows for terms in itertools.product([()], [(), (0,)], [(), (1, 2)], [(), (3, 4)]) if (rows := sum(terms, ()))
]


@pytest.mark.parametrize("keep_mean", [False, True])
@pytest.mark.parametrize("amplitude", [1.0, 1e4])
@pytest.mark.parametrize("rows", SUBSETS)
def test_any_background_removed_after_the_fact(rows: tuple[int, ...], amplitude: float, keep_mean: bool) -> None:
    rng = generator(3)
    matrix = with_values(12, 1200, 1 / np.arange(1, 13)) + 5 + amplitude * rng.standard_normal((12, 5)) @ FUNCTIONS
    triangle = fold_and_merge(matrix, FUNCTIONS)
    left = without(matrix, FUNCTIONS[list(rows)], keep_mean=keep_mean)
    reduced, removal = exact.reduce(triangle, keep_mean=keep_mean, rows=rows)
    made = exact.finish(triangle, keep_mean=keep_mean, rows=rows)
    before = (matrix**2).sum() if keep_mean else (centred(matrix) ** 2).sum()
    close = 1e-12 * max(1.0, before / (left**2).sum())
    values = scipy.linalg.svdvals(left)
    np.testing.assert_allclose(made.values, values, atol=1e-14 * np.sqrt(before), rtol=0)
    np.testing.assert_allclose(made.energy, (left**2).sum(axis=1), rtol=close)
    channels = reduced.triangle[:, 5:]
    np.testing.assert_allclose(channels.T @ channels, left @ left.T, atol=close * (left**2).sum(), rtol=0)
    assert removal.rank == len(rows)
    taken = removal.mean[:, np.newaxis] + removal.weights @ (FUNCTIONS[list(rows)] - removal.about[:, np.newaxis])
    np.testing.assert_allclose(matrix - taken, left, atol=1e-13 * np.abs(matrix).max())


def test_the_removal_speaks_of_the_stack_of_the_moments() -> None:
    matrix = with_values(6, 1200, np.ones(6)) + generator(4).standard_normal((6, 5)) @ FUNCTIONS
    halves = [fold(matrix[:, part], FUNCTIONS[:, part]) for part in (slice(0, 500), slice(500, 1200))]
    reduced, removal = exact.reduce(exact.merge(*halves), rows=(0, 3, 4))
    parts = [exact.moments(half) for half in halves]
    moved = [background.apply(part.n, part.right_mean, part.inner, removal) for part in parts]
    np.testing.assert_allclose(moved[0] + moved[1], exact.moments(reduced).inner, atol=1e-11)


def test_coefficients_read_again_are_those_of_the_modes() -> None:
    matrix = with_values(6, 1200, np.logspace(0, -3, 6)) + generator(4).standard_normal((6, 5)) @ FUNCTIONS
    made = exact.finish(fold_and_merge(matrix, FUNCTIONS), rows=(0, 1, 2, 3, 4))
    read = factors.direct_coefficients(made, 6, matrix, Preparation.unit(6), FUNCTIONS)
    close = 1e-14 * np.sqrt(np.square(matrix).sum())
    np.testing.assert_allclose(np.linalg.norm(read, axis=1), made.values, atol=close)
    unit = read / made.values[:, np.newaxis]
    np.testing.assert_allclose(unit @ unit.T, np.eye(6), atol=close / made.values[-1])


@pytest.mark.parametrize("keep_mean", [False, True])
def test_functions_that_tell_nothing_new_take_nothing_more(keep_mean: bool) -> None:
    slow = [np.cos(1e-9 * TIME + 0.4), np.sin(1e-9 * TIME + 0.4)]  # a cycle of which the campaign saw a flat billionth
    functions = np.vstack([TIME, TIME, 3 * TIME, np.full(1200, 0.1), TIME + 1e6, *slow])
    matrix = with_values(8, 1200, np.ones(8)) + generator(5).standard_normal((8, 1)) * TIME
    triangle = fold_and_merge(matrix, functions)
    one = without(matrix, functions[:1], keep_mean=keep_mean)
    both = without(matrix, functions[[0, 3]], keep_mean=keep_mean)
    for rows, left, rank in (
        ((0, 1), one, 1),
        ((0, 1, 2), one, 1),
        ((0, 4), both if keep_mean else one, 1 + keep_mean),
        ((0, 3), both, 1 + keep_mean),
        ((0, 5, 6), both if keep_mean else one, 1 + keep_mean),
        ((3,), without(matrix, functions[[3]], keep_mean=keep_mean), int(keep_mean)),
    ):
        made = exact.finish(triangle, keep_mean=keep_mean, rows=rows)
        assert made.removal.rank == rank, rows
        np.testing.assert_allclose(made.energy, (left**2).sum(axis=1), rtol=1e-8, err_msg=str(rows))
    assert exact.finish(triangle, rows=(3,)).energy_total == pytest.approx(triangle.energy.sum(), rel=1e-14)


def decompose(matrix: np.ndarray) -> np.ndarray:
    """Return the singular values of a matrix itself: the mean is kept."""
    return exact.finish(fold_and_merge(np.asarray(matrix, dtype=np.float64)), keep_mean=True).values


def test_golub_and_reinsch() -> None:
    # [M] Golub, Reinsch, Numer. Math. 14 (1970) 403: three matrices.
    rows = "22 10 2 3 7 14 7 10 0 8 -1 13 -1 -11 3 -3 -2 13 -2 4 9 8 1 -2 4 9 1 -7 5 -1 2 -6 6 5 1 4 5 0 -2 2"
    first = np.array(rows.split(), dtype=np.float64).reshape(8, 5)
    for matrix in (first, first.T):
        np.testing.assert_allclose(decompose(matrix), [np.sqrt(1248), 20, np.sqrt(384)], rtol=1e-14)
    second = np.diag(np.arange(20.0, -1, -1))[:20] - np.triu(np.ones((20, 21)), 1)
    k = np.arange(20.0, 0, -1)
    np.testing.assert_allclose(decompose(second), np.sqrt(k * (k + 1)), atol=1e-14 * 20.5, rtol=1e-12)
    third = decompose(np.eye(30) - np.triu(np.ones((30, 30)), 1))
    np.testing.assert_allclose(third[[0, 28, 29]], [18.202906, 1.500231, 2.7940e-9], rtol=2e-5)


def test_hilbert() -> None:
    # [M] Todd; Higham: sigma_1 of order 10, and the condition number, which float64 can only know in absolute terms.
    values = decompose(scipy.linalg.hilbert(10))
    assert values.size == 10
    assert values[0] == pytest.approx(1.75191967027, rel=1e-11)
    assert abs(values[9] - 1.75191967027 / 1.60262868702e13) < 1e-14 * values[0]
    small = decompose(scipy.linalg.hilbert(5))
    assert small[0] / small[4] == pytest.approx(4.76607250e5, rel=1e-8)


def test_kahan() -> None:
    # [M] Zha, Amer. Math. Monthly 104 (1997) 172: s^(n-2) sqrt(1 + c); the diagonal of a triangle is no rank test.
    c, s = np.cos(1.2), np.sin(1.2)
    matrix = s ** np.arange(30)[:, np.newaxis] * (np.eye(30) - c * np.triu(np.ones((30, 30)), 1))
    values = decompose(matrix)
    assert values[28] == pytest.approx(s**28 * np.sqrt(1 + c), rel=1e-13)
    assert values[29] == pytest.approx(3.085e-5, rel=1e-3)


@pytest.mark.parametrize("dtype", ["float16", "float32", "int16", "int32", "bool", ">f4"])
def test_types_and_memory_orders_leave_the_same_bits(dtype: str) -> None:
    matrix = (generator(6).uniform(-1, 90, (9, 70)) * (1 if dtype != "bool" else 0.02)).astype(np.int8).astype(dtype)
    plain = exact.to_arrays(fold(matrix.astype(np.float64), cuts=[31]))
    spread = np.repeat(np.repeat(matrix, 2, axis=0), 3, axis=1)[::2, ::3]
    for layout in (matrix, np.asfortranarray(matrix), spread):
        for name, array in exact.to_arrays(fold(layout, cuts=[31])).items():
            assert np.array_equal(plain[name], array), name


def test_preparation_is_the_channel_table() -> None:
    rng = generator(7)
    raw, gain, shift = rng.standard_normal((9, 80)), rng.standard_normal(9), 100 * rng.standard_normal(9)
    scale, weight = rng.uniform(0.5, 2, 9), rng.uniform(0.1, 10, 9)
    units = raw * gain[:, None] + shift[:, None]
    by_hand = units * (np.sqrt(weight) / scale)[:, None]
    got = fold(raw, cuts=[11], preparation=Preparation.build(gain, shift, scale, weight))
    assert distance(got.triangle, centred(by_hand)) < 1e-12
    np.testing.assert_allclose(got.mean, by_hand.mean(axis=1), rtol=1e-13)
    np.testing.assert_allclose(got.low, units.min(axis=1), rtol=1e-14)


def test_moments_are_those_of_the_whole_route() -> None:
    matrix, functions = with_values(7, 300, np.ones(7)) + 4, generator(8).standard_normal((2, 300))
    summary = whole.zero(exact.shape_of(7, 2))
    for part in (slice(0, 130), slice(130, 300)):
        probe, checks = whole.Probe(None, np.empty((0, 7))), np.empty((0, matrix[:, part].shape[1]))
        whole.fold_block(summary, matrix[:, part], Preparation.unit(7), probe, checks, functions[:, part])
    ours = whole.to_arrays(exact.moments(fold(matrix, functions, [130])))
    for name, array in whole.to_arrays(summary).items():
        np.testing.assert_allclose(ours[name], array, atol=1e-11, rtol=1e-12, err_msg=name)
    by_products = factors.finish(summary)
    np.testing.assert_allclose(exact.finish(fold(matrix)).values, by_products.values, rtol=1e-12)


def test_zero_is_neutral_bit_by_bit_and_merge_changes_neither_part() -> None:
    a, b = fold(generator(9).standard_normal((7, 20)) + 3), fold(generator(10).standard_normal((7, 9)))
    a.gaps[2], b.gaps[2] = 4, 5
    before = {name: array.copy() for name, array in exact.to_arrays(a).items()}
    assert exact.merge(a, b).gaps[2] == 9
    nothing = exact.zero(a.shape)
    for both in (a, exact.merge(a, nothing), exact.merge(nothing, a)):
        for name, array in before.items():
            assert np.array_equal(exact.to_arrays(both)[name], array), name
    with pytest.raises(ValueError, match="b: must have the shape of a"):
        exact.merge(a, exact.zero(exact.shape_of(7, 1)))
    with pytest.raises(ValueError, match="identity probe without checks"):
        exact.zero(whole.Shape(7, 7, 1, 0, 0, True))


def test_storage_as_arrays_and_back() -> None:
    triangle = fold(generator(11).standard_normal((7, 20)), np.ones((1, 20)))
    arrays = exact.to_arrays(triangle)
    back = exact.from_arrays(triangle.shape, arrays)
    for name, array in arrays.items():
        assert np.array_equal(exact.to_arrays(back)[name], array), name
    exact.merge_into(back, triangle)  # own memory: the source does not change
    assert (triangle.n, back.n) == (20, 40)
    with pytest.raises(ValueError, match="got no energy"):
        exact.from_arrays(triangle.shape, {name: a for name, a in arrays.items() if name != "energy"})
    with pytest.raises(ValueError, match=r"mean: must have shape \(7,\); got \(6,\)"):
        exact.from_arrays(triangle.shape, arrays | {"mean": np.zeros(6)})
    with pytest.raises(ValueError, match="gaps: must have dtype int64; got float64"):
        exact.from_arrays(triangle.shape, arrays | {"gaps": np.zeros(7)})


@pytest.mark.parametrize(
    ("raw", "functions", "error", "words"),
    [
        (np.full((3, 4), np.nan), np.ones((1, 4)), FloatingPointError, "must be finite"),
        (np.diag([1.0, np.inf, 1.0]), np.ones((1, 3)), FloatingPointError, "must be finite"),
        (np.full((3, 4), 1e200) * [1, -1, 1, 1], np.ones((1, 4)), FloatingPointError, "overflow"),
        (np.full((3, 4), 1e160), np.ones((1, 4)), FloatingPointError, "overflow"),
        (np.ones((3, 0)), np.ones((1, 0)), ValueError, "raw: must have shape"),
        (np.ones((2, 4)), np.ones((1, 4)), ValueError, "raw: must have shape"),
        (np.ones((3, 4), dtype=complex), np.ones((1, 4)), ValueError, "raw: must hold real numbers"),
        (np.ones((3, 4)), np.ones((2, 4)), ValueError, "background: must have shape"),
        (np.ones((3, 4)), np.full((1, 4), np.inf), ValueError, "background: every entry must be finite"),
    ],
)
def test_what_is_refused_changes_nothing(raw: Any, functions: np.ndarray, error: type, words: str) -> None:
    triangle = fold(generator(12).standard_normal((3, 20)), np.ones((1, 20)))
    before = {name: array.copy() for name, array in exact.to_arrays(triangle).items()}
    with pytest.raises(error, match=words):
        exact.fold_block(triangle, raw, Preparation.unit(3), functions)
    for name, array in before.items():
        assert np.array_equal(exact.to_arrays(triangle)[name], array), name
    with pytest.raises(ValueError, match="rows: must be between 0 and 0; got 1"):
        exact.finish(triangle, rows=[1])
    with pytest.raises(ValueError, match=r"triangle\.n: must be at least 1"):
        exact.finish(exact.zero(triangle.shape))


def peak_bytes(work: Callable[[], Any]) -> int:
    work()
    tracemalloc.start()
    try:
        kept = work()
        del kept
        return tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()


@pytest.mark.parametrize(("m", "p", "n"), [(120, 5, 4096), (256, 1, 2048), (400, 3, 64), (3, 0, 2)])
@pytest.mark.parametrize(("dtype", "order"), [("float32", "C"), ("float64", "F")])
def test_promised_bytes(m: int, p: int, n: int, dtype: str, order: Any) -> None:
    raw = np.asarray(addressed.normals(1, 1, np.arange(n), m), dtype=dtype, order=order)
    functions = addressed.normals(1, 2, np.arange(n), p)
    triangle, shape = exact.zero(exact.shape_of(m, p)), exact.shape_of(m, p)
    preparation = Preparation.build(np.full(m, 2.0), np.ones(m), np.ones(m), np.ones(m))
    pairs = [
        (peak_bytes(lambda: exact.fold_block(triangle, raw, preparation, functions)), exact.fold_bytes(shape, n)),
        (peak_bytes(lambda: exact.merge(triangle, triangle)), exact.merge_bytes(shape)),
        (peak_bytes(lambda: exact.finish(triangle, keep_mean=True, rows=range(p))), exact.finish_bytes(shape)),
    ]
    for measured, promised in pairs:
        assert measured <= promised
        assert m < 100 or promised <= 2 * measured
    assert sum(array.nbytes for array in exact.to_arrays(triangle).values()) == exact.summary_bytes(shape)
    assert exact.fold_flops(shape, n) >= 2 * n * (m + p) ** 2
