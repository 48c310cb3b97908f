"""Processor time of ``fold_block`` on one 8000 x 2048 float32 block against one ``np.copy`` of it, one BLAS thread.

Run ``python tests/bench/kernel_against_copy.py``. It prints, for both memory orders, the best and the median time of
each, their ratio, and the share of the matrix products alone, which no arrangement of the sweeps can go below.
"""

from __future__ import annotations

import argparse
import statistics
import time
from collections.abc import Callable
from functools import partial

import numpy as np
from threadpoolctl import threadpool_limits

from shardfold.kernels import addressed, cost
from shardfold.kernels.blocks import Preparation
from shardfold.kernels.whole import Probe, Shape, fold_block, stored_dtype, zero


def timed(work: Callable[[], object], repeats: int) -> list[float]:
    """Return the processor seconds of each repetition, after one that is thrown away.

    Processor time, because neighbours on a shared machine disturb it less than the clock on the wall.
    """
    work()
    seconds = []
    for _ in range(repeats):
        start = time.thread_time()
        work()
        seconds.append(time.thread_time() - start)
    return seconds


def products_alone(shape: Shape, block: np.ndarray) -> Callable[[], object]:
    """Return the matrix products of a fold on ready operands: X in the block's type, the others in float64."""
    n = block.shape[1]
    rng = np.random.default_rng(0)
    group = rng.standard_normal((128, n))
    narrow = group.astype(stored_dtype(block.dtype))
    rows = rng.standard_normal((shape.k, 128)).astype(narrow.dtype)
    check = rng.standard_normal((shape.q_theta, 128))
    stack = rng.standard_normal((shape.s, n))

    def work() -> None:
        for _ in range(0, shape.m, 128):
            rows @ narrow
            check @ group
            group @ stack.T

    return work


def main() -> None:
    """Print one line per memory order."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--channels", type=int, default=8000)
    parser.add_argument("--samples", type=int, default=2048)
    parser.add_argument("--width", type=int, default=64)
    parser.add_argument("--checks", type=int, default=10)
    parser.add_argument("--dtype", default="float32")
    parser.add_argument("--repeats", type=int, default=7)
    options = parser.parse_args()
    m, n, q = options.channels, options.samples, options.checks
    shape = Shape(m=m, k=options.width, q_theta=q, q_xi=q, p=0, identity=False)
    keys = addressed.name_keys([f"channel {i}" for i in range(m)])
    rows = addressed.signs(1, addressed.STREAM_PROBE, keys, shape.k)
    check = addressed.normals(1, addressed.STREAM_CHECK, keys, q)
    xi = addressed.normals(1, addressed.STREAM_SAMPLE, np.arange(n), q)
    values = np.random.default_rng(0).standard_normal((m, n)).astype(options.dtype)
    probe = Probe(rows, check).in_precision(stored_dtype(values.dtype))
    for name, block in (("channel-major", values), ("sample-major", np.asfortranarray(values))):
        fold_arguments = (zero(shape), block, Preparation.unit(m), probe, xi, np.empty((0, n)))
        with threadpool_limits(1):
            copy = timed(partial(np.copy, block, order="K"), options.repeats)
            fold = timed(partial(fold_block, *fold_arguments), options.repeats)
            floor = timed(products_alone(shape, block), options.repeats)
        print(
            f"{name}: fold {min(fold) * 1e3:.1f} ms (median {statistics.median(fold) * 1e3:.1f}), "
            f"copy {min(copy) * 1e3:.1f} ms (median {statistics.median(copy) * 1e3:.1f}), "
            f"ratio {min(fold) / min(copy):.1f}, products alone {min(floor) * 1e3:.1f} ms, "
            f"{cost.fold_flops(shape, n) / min(fold) / 1e9:.1f} Gflop/s"
        )


if __name__ == "__main__":
    main()
