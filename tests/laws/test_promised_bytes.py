"""Kernels allocate no more than the formulas of ``cost`` promise, and the promises are not twice too large."""

from __future__ import annotations

import tracemalloc
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from shardfold.kernels import background, bounds, cost, factors
from shardfold.kernels.blocks import Preparation
from shardfold.kernels.whole import Probe, Shape, fold_block, merge, stored_dtype, to_arrays, zero


def peak_bytes(work: Callable[[], Any]) -> int:
    """Return the most that was allocated at once during a call, its result included."""
    work()
    tracemalloc.start()
    try:
        kept = work()
        del kept
        return tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()


def ready(m: int, n: int, k: int | None, dtype: str, order: Any) -> tuple[Any, ...]:
    rng = np.random.default_rng(0)
    shape = Shape(m, m if k is None else k, 10, 10, 1, k is None)
    rows = None if k is None else rng.choice([-1.0, 1.0], (k, m))
    probe = Probe(rows, rng.standard_normal((10, m))).in_precision(stored_dtype(dtype))
    raw = np.asarray(rng.standard_normal((m, n)) * 50, dtype=dtype, order=order)
    preparation = Preparation.build(np.full(m, 2.0), np.ones(m), np.ones(m), np.ones(m))
    return zero(shape), raw, preparation, probe, rng.standard_normal((10, n)), np.ones((1, n))


@pytest.mark.parametrize("order", ["C", "F"])
@pytest.mark.parametrize(
    ("m", "n", "k", "dtype"),
    [
        (3000, 512, 64, "float32"),
        (3000, 512, 64, "float64"),
        (3000, 512, 64, "int16"),
        (3000, 512, 64, "int32"),
        (500, 4096, 64, "float32"),
        (20000, 64, 64, "float32"),
        (300, 1000, 200, "float64"),
        (120, 4096, None, "float32"),
    ],
)
def test_fold_block(m: int, n: int, k: int | None, dtype: str, order: Any) -> None:
    arguments = ready(m, n, k, dtype, order)
    promised = cost.fold_bytes(arguments[0].shape, n, np.dtype(dtype).itemsize)
    measured = peak_bytes(lambda: fold_block(*arguments))
    assert measured <= promised <= 2 * measured


@pytest.mark.parametrize(("m", "n"), [(1, 1), (3, 2), (40, 5), (9, 4096)])
def test_fold_of_small_blocks_stays_below_the_promise(m: int, n: int) -> None:
    arguments = ready(m, n, 2, "float32", "C")
    assert peak_bytes(lambda: fold_block(*arguments)) <= cost.fold_bytes(arguments[0].shape, n, 4)


@pytest.mark.parametrize(("m", "k"), [(4000, 64), (1000, 200), (130, None)])
def test_summary_merge_and_finish(m: int, k: int | None) -> None:
    arguments = ready(m, 300, k, "float64", "C")
    summary = arguments[0]
    fold_block(*arguments)
    stored = sum(array.nbytes for array in to_arrays(summary).values())
    assert stored == cost.summary_bytes(summary.shape)
    measured = peak_bytes(lambda: merge(summary, summary))
    assert measured <= cost.merge_bytes(summary.shape) <= 2 * measured
    for rows in ((), (0,)):
        measured = peak_bytes(lambda rows=rows: factors.finish(summary, keep_mean=True, rows=rows))
        assert measured <= cost.finish_bytes(summary.shape) <= 2 * measured


@pytest.mark.parametrize(("m", "k"), [(4000, 64), (1000, 200)])
def test_judging_stays_below_the_finish(m: int, k: int) -> None:
    arguments = ready(m, 300, k, "float64", "C")
    summary, theta = arguments[0], arguments[3].check
    fold_block(*arguments)
    made = factors.finish(summary)
    reduced, _ = background.reduce(summary)

    def judge() -> bounds.Residuals:
        checks = bounds.Checks(reduced.outer[:, reduced.shape.theta], theta)
        return bounds.residuals(reduced, made, checks, arguments[3].rows.astype(np.float32))

    assert peak_bytes(judge) <= cost.finish_bytes(summary.shape) - made.modes.nbytes


def test_coefficients() -> None:
    arguments = ready(1000, 4096, 64, "float32", "C")
    block = fold_block(*arguments)
    made = factors.finish(arguments[0])
    measured = peak_bytes(lambda: factors.coefficients(made, 10, block.x, block.centre))
    assert measured <= cost.coefficients_bytes(10, 64, 4096) <= 2 * measured


def test_next_probe() -> None:
    arguments = ready(3000, 300, 64, "float32", "C")
    summary = arguments[0]
    fold_block(*arguments)
    measured = peak_bytes(lambda: factors.next_probe(summary, 10, 1, 2, np.arange(3000)))
    assert measured <= cost.next_probe_bytes(summary.shape, 10) <= 2 * measured


@pytest.mark.parametrize("order", ["C", "F"])
def test_direct_coefficients(order: Any) -> None:
    arguments = ready(120, 4096, None, "float32", order)
    summary, raw, preparation = arguments[:3]
    fold_block(*arguments)
    made = factors.finish(summary)
    measured = peak_bytes(lambda: factors.direct_coefficients(made, 10, raw, preparation))
    assert measured <= cost.direct_coefficients_bytes(10, 120, 4096) <= 2 * measured


@pytest.mark.parametrize(
    ("channels", "samples"),
    [(1, 4096), (100, 4096), (512, 4096), (513, 2048), (8000, 256), (32768, 64), (1_000_000, 64)],
)
def test_block_length_depends_on_channels_only(channels: int, samples: int) -> None:
    assert cost.block_samples(channels) == samples


def test_flops_count_the_products() -> None:
    shape = Shape(8000, 64, 10, 10, 0, False)
    products = 2 * 8000 * 2048 * (64 + 10 + 84)
    assert products <= cost.fold_flops(shape, 2048) <= 1.1 * products
    identity = Shape(100, 100, 10, 10, 0, True)
    assert cost.fold_flops(identity, 1000) < cost.fold_flops(Shape(100, 100, 10, 10, 0, False), 1000)
    assert cost.merge_flops(shape) > 0
    assert cost.finish_flops(shape) > 0
    assert cost.coefficients_flops(10, 64, 1e6) == 2 * 10 * 64 * 1e6
