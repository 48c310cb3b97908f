"""Processor time of the exact summary against products, on blocks of few channels, one BLAS thread.

Run ``python tests/bench/exact_against_whole.py``. It prints, for each number of channels, the product ``A A^T`` of one
float64 block, LAPACK's plain QR of it, the rotation into a triangle that the exact route uses, and the whole folds of
one raw block: exact, and by products with the identity probe. Then what one merge and one finish of each take.
"""

from __future__ import annotations

import argparse
import time
from collections.abc import Callable

import numpy as np
from scipy.linalg.lapack import dgeqrf, dtpqrt
from threadpoolctl import threadpool_limits

from shardfold.kernels import cost, exact, factors, whole
from shardfold.kernels.blocks import Preparation


def best(work: Callable[[], object], repeats: int) -> float:
    """Return the least processor milliseconds of some repetitions, after one that is thrown away."""
    work()
    seconds = []
    for _ in range(repeats):
        start = time.thread_time()
        work()
        seconds.append(time.thread_time() - start)
    return 1e3 * min(seconds)


def decompositions(block: np.ndarray, repeats: int) -> list[float]:
    """Return the times of ``A A^T``, of a plain QR and of a rotation into a triangle, the operand's copy taken off."""
    m = len(block)
    upright = np.asfortranarray(block.T)
    copy = best(lambda: upright.copy(order="F"), repeats)
    triangle = np.zeros((m, m), order="F")
    panel = min(exact.PANEL, m)
    return [
        best(lambda: block @ block.T, repeats),
        best(lambda: dgeqrf(upright.copy(order="F"), overwrite_a=1), repeats) - copy,
        best(lambda: dtpqrt(0, panel, triangle, upright.copy(order="F"), overwrite_b=1), repeats) - copy,
    ]


def folds(raw: np.ndarray, functions: np.ndarray, checks: int, repeats: int) -> tuple[list[float], list[float]]:
    """Return the times of fold, merge and finish of the exact route and of the products with the identity probe."""
    (m, n), p = raw.shape, len(functions)
    rng = np.random.Generator(np.random.PCG64(1))
    unit, theta, xi = Preparation.unit(m), rng.standard_normal((checks, m)), rng.standard_normal((checks, n))
    triangle, summary = exact.zero(exact.shape_of(m, p)), whole.zero(whole.Shape(m, m, checks, checks, p, True))
    rows = range(p)
    return (
        [
            best(lambda: exact.fold_block(triangle, raw, unit, functions), repeats),
            best(lambda: exact.merge(triangle, triangle), repeats),
            best(lambda: exact.finish(triangle, rows=rows), repeats),
        ],
        [
            best(lambda: whole.fold_block(summary, raw, unit, whole.Probe(None, theta), xi, functions), repeats),
            best(lambda: whole.merge(summary, summary), repeats),
            best(lambda: factors.finish(summary, remove=rows), repeats),
        ],
    )


def main() -> None:
    """Print one line per number of channels."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--channels", type=int, nargs="+", default=[4, 16, 64, 128, 256, 512, 1024])
    parser.add_argument("--functions", type=int, default=5)
    parser.add_argument("--checks", type=int, default=10)
    parser.add_argument("--dtype", default="float32")
    parser.add_argument("--order", default="C", choices=["C", "F"])
    parser.add_argument("--repeats", type=int, default=7)
    options = parser.parse_args()
    print("milliseconds; channels x samples: A A^T, QR, rotation (over A A^T); fold, merge, finish exact | by products")
    for m in options.channels:
        n = cost.block_samples(m)
        rng = np.random.Generator(np.random.PCG64(0))
        block = rng.standard_normal((m, n))
        raw = np.asarray(block, dtype=options.dtype, order=options.order)
        with threadpool_limits(1):
            product, plain, rotation = decompositions(block, options.repeats)
            ours, theirs = folds(raw, rng.standard_normal((options.functions, n)), options.checks, options.repeats)
        speed = exact.fold_flops(exact.shape_of(m, options.functions), n) / ours[0] / 1e6
        print(
            f"{m} x {n}: {product:.2f}, {plain:.2f} ({plain / product:.1f}), {rotation:.2f} ({rotation / product:.1f})",
            f"; {' '.join(f'{t:.2f}' for t in ours)} | {' '.join(f'{t:.2f}' for t in theirs)};",
            f"fold ratio {ours[0] / theirs[0]:.2f}, {speed:.1f} Gflop/s",
            flush=True,
        )


if __name__ == "__main__":
    main()
