"""What may not enter the kernels is refused by name, rule and value, and leaves the summary as it was."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from shardfold.kernels.blocks import Preparation, find_first_bad
from shardfold.kernels.whole import Probe, Shape, fold_block, keep_mean, stored_dtype, to_arrays, zero


def call(summary: Any, raw: np.ndarray, **changes: Any) -> Any:
    m, n = 6, raw.shape[-1]
    given = {
        "preparation": Preparation.unit(m),
        "probe": Probe(np.ones((2, m)), np.zeros((1, m))),
        "sample_checks": np.zeros((1, n)),
        "background": np.empty((0, n)),
    }
    return fold_block(summary, raw, **(given | changes))


SHAPE = Shape(m=6, k=2, q_theta=1, q_xi=1, p=0, identity=False)


@pytest.mark.parametrize(
    ("raw", "message"),
    [
        (np.zeros((5, 4)), r"raw: must have shape \(6, samples\) with samples >= 1; got \(5, 4\)"),
        (np.zeros((6, 0)), r"raw: must have shape .*; got \(6, 0\)"),
        (np.zeros(6), r"raw: must have shape .*; got \(6,\)"),
        (np.zeros((6, 4), dtype=complex), "raw: must hold real numbers; got dtype complex128"),
    ],
)
def test_blocks_that_do_not_fit(raw: np.ndarray, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        call(zero(SHAPE), raw)


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"preparation": Preparation.unit(7)}, r"preparation\.gain: must have shape \(6,\); got \(7,\)"),
        ({"probe": Probe(None, np.zeros((1, 6)))}, "probe: must be the identity exactly where"),
        ({"probe": Probe(np.ones((3, 6)), np.zeros((1, 6)))}, r"probe\.rows: must have shape \(2, 6\)"),
        ({"probe": Probe(np.ones((2, 6)), np.zeros((2, 6)))}, r"probe\.check: must have shape \(1, 6\)"),
        ({"sample_checks": np.zeros((1, 5))}, r"sample_checks: must have shape \(1, 4\); got \(1, 5\)"),
        ({"background": np.zeros((1, 4))}, r"background: must have shape \(0, 4\); got \(1, 4\)"),
        ({"sample_checks": np.full((1, 4), np.nan)}, "sample_checks: every entry must be finite; got nan"),
    ],
)
def test_companions_that_do_not_fit(changes: dict[str, Any], message: str) -> None:
    with pytest.raises(ValueError, match=message):
        call(zero(SHAPE), np.zeros((6, 4)), **changes)


@pytest.mark.parametrize("order", ["C", "F"])
@pytest.mark.parametrize("dtype", [np.float16, np.float32, np.float64])
@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
def test_a_value_that_is_not_finite(bad: float, dtype: Any, order: Any) -> None:
    summary = zero(SHAPE)
    call(summary, np.random.default_rng(0).standard_normal((6, 10)).astype(dtype))
    before = {name: array.copy() for name, array in to_arrays(summary).items()}
    raw = np.asarray(np.ones((6, 10)), dtype=dtype, order=order)
    raw[4, 3] = raw[1, 7] = bad
    with pytest.raises(FloatingPointError, match="raw: every value must be finite"):
        call(summary, raw)
    for name, array in to_arrays(summary).items():
        assert np.array_equal(array, before[name]), name
    channel, sample, value = find_first_bad(raw)
    assert (channel, sample) == (4, 3)
    assert np.array_equal(value, bad, equal_nan=True)


def test_the_first_bad_value_is_the_earliest_sample_then_the_first_channel() -> None:
    raw = np.ones((6, 10))
    assert find_first_bad(raw) is None
    assert find_first_bad(np.ones((2, 3), dtype=np.int32)) is None
    raw[5, 2] = raw[3, 2] = raw[0, 4] = np.nan
    assert find_first_bad(raw)[:2] == (3, 2)


@pytest.mark.parametrize(
    "blocks",
    [
        [np.array([[1e200, -1e200]])],  # its square overflows
        [np.zeros((1, 2)), np.full((1, 2), 1e200)],  # the step between block means does
        [np.full((1, 2), [-3e38, 3e38], dtype=np.float32)],  # the float32 X does
    ],
)
def test_values_too_large_to_be_squared_or_stored(blocks: list[np.ndarray]) -> None:
    summary = zero(SHAPE)
    for block in blocks[:-1]:
        call(summary, np.repeat(block, 6, axis=0))
    with pytest.raises(FloatingPointError, match="raw: prepared values must be small enough"):
        call(summary, np.repeat(blocks[-1], 6, axis=0))
    assert all(np.isfinite(array).all() for name, array in to_arrays(summary).items() if name not in ("low", "high"))


@pytest.mark.parametrize(
    ("column", "value", "message"),
    [
        ("weight", 0.0, r"weight: every entry must be above zero; got 0\.0 at \(1,\)"),
        ("weight", -1.0, "weight: every entry must be above zero"),
        ("scale", 0.0, "scale: every entry must be above zero"),
        ("scale", np.inf, "scale: every entry must be finite; got inf"),
        ("gain", np.nan, r"gain: every entry must be finite; got nan at \(1,\)"),
        ("shift", np.inf, "shift: every entry must be finite"),
    ],
)
def test_a_channel_table_that_cannot_be_used(column: str, value: float, message: str) -> None:
    table = {"gain": np.ones(3), "shift": np.zeros(3), "scale": np.ones(3), "weight": np.ones(3)}
    table[column] = table[column].copy()
    table[column][1] = value
    with pytest.raises(ValueError, match=message):
        Preparation.build(**table)


def test_columns_of_a_channel_table_have_one_length() -> None:
    with pytest.raises(ValueError, match=r"scale: must have shape \(3,\); got \(2,\)"):
        Preparation.build(np.ones(3), np.ones(3), np.ones(2), np.ones(3))


@pytest.mark.parametrize("sizes", [(0, 1, 0, 0, 0, False), (5, 3, 0, 0, 0, True), (5, 3, -1, 0, 0, False)])
def test_shapes_that_cannot_be(sizes: tuple[Any, ...]) -> None:
    with pytest.raises(ValueError, match="shape: "):
        Shape(*sizes)


def test_the_stack_is_cut_without_gaps() -> None:
    shape = Shape(m=50, k=7, q_theta=3, q_xi=4, p=2, identity=False)
    rows = np.arange(shape.s)
    assert np.concatenate([rows[shape.x], rows[shape.theta], rows[shape.xi], rows[shape.g]]).tolist() == rows.tolist()
    assert [len(rows[part]) for part in (shape.x, shape.theta, shape.xi, shape.g)] == [7, 3, 4, 2]


def test_stored_type() -> None:
    narrow = ["float32", "float16", "int8", "uint8", "int16", "uint16", "bool"]
    assert {stored_dtype(name) for name in narrow} == {np.dtype(np.float32)}
    assert {stored_dtype(name) for name in ["float64", "int32", "uint32", "int64"]} == {np.dtype(np.float64)}


def test_a_probe_is_cast_once_and_signs_are_exact() -> None:
    probe = Probe(np.array([[1, -1], [-1, 1]], dtype=np.int8), np.zeros((0, 2)))
    narrow = probe.in_precision(np.float32)
    assert narrow.rows.dtype == np.float32
    assert narrow.in_precision(np.float32) is narrow
    assert np.array_equal(narrow.rows, probe.rows)
    identity = Probe(None, np.zeros((0, 2)))
    assert identity.in_precision(np.float32) is identity


def test_keeping_the_mean_of_nothing_is_nothing() -> None:
    assert not keep_mean(zero(SHAPE)).outer.any()
