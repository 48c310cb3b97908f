"""Flops and peak bytes of each kernel as formulas of shapes, and the block length that follows from them.

Plans are refused by these numbers before anything is read, and tests hold the kernels to them. Bytes are what a kernel
allocates on top of its arguments, its results included. No measurement is taken here.
"""

from __future__ import annotations

from .factors import probe_width
from .whole import Shape, chunk_channels

BLOCK_BYTES = 16 << 20
LEAST_BLOCK_SAMPLES, MOST_BLOCK_SAMPLES = 64, 4096
SMALL_BYTES = 192 << 10  # Python objects, views, and the two buffers of 64 KiB that NumPy's loops may take

_FLOAT = 8


def block_samples(m: int) -> int:
    """Return the block length of a design: the power of two nearest below 16 MiB of float64, within 64 to 4096.

    It depends on the number of channels only, so that the cut of a dossier never changes.
    """
    samples = max(BLOCK_BYTES // (_FLOAT * m), 1)
    power = 1 << (samples.bit_length() - 1)
    return min(max(power, LEAST_BLOCK_SAMPLES), MOST_BLOCK_SAMPLES)


def summary_bytes(shape: Shape) -> int:
    """Return the bytes of a summary, in memory and (without headers) in storage."""
    return _FLOAT * (shape.m * shape.s + shape.s * shape.s + shape.s + 5 * shape.m + 1)


def fold_bytes(shape: Shape, samples: int, itemsize: int) -> int:
    """Return the peak bytes ``whole.fold_block`` allocates.

    Parameters
    ----------
    shape : Shape
    samples : int
        Samples of the block.
    itemsize : int
        Bytes of one raw value. X is counted in float64, as it is for wide integers.
    """
    channels = min(shape.m, chunk_channels(samples))
    group = channels * (samples + 1) * _FLOAT
    narrow = channels * samples * 4 if itemsize <= 4 and not shape.identity else 0
    x = 0 if shape.identity else 2 * shape.k * samples * _FLOAT
    checks = (shape.q_theta + shape.q_xi) * samples * _FLOAT
    stack = shape.s * (samples + 1) * _FLOAT
    products = (channels * (shape.s + shape.k) + 2 * shape.s * shape.s) * _FLOAT
    return group + narrow + x + checks + stack + products + 16 * shape.m * _FLOAT + SMALL_BYTES


def merge_bytes(shape: Shape) -> int:
    """Return the peak bytes of ``merge``: the result and one outer product."""
    return summary_bytes(shape) + _FLOAT * (max(shape.m, shape.s) * shape.s + 8 * shape.m) + SMALL_BYTES


def finish_bytes(shape: Shape) -> int:
    """Return the peak bytes of ``factors.finish`` with the mean kept: one more summary and a few m x k matrices."""
    decomposition = _FLOAT * (5 * shape.m * shape.k + 8 * shape.k * shape.k)
    return merge_bytes(shape) + decomposition + SMALL_BYTES


def coefficients_bytes(rank: int, k: int, samples: int) -> int:
    """Return the peak bytes of ``factors.coefficients``: X in float64 and the result."""
    return _FLOAT * samples * (k + 2 * rank) + SMALL_BYTES


def direct_coefficients_bytes(rank: int, m: int, samples: int) -> int:
    """Return the peak bytes of ``factors.direct_coefficients``: the prepared block and the result."""
    return _FLOAT * samples * (m + rank) + SMALL_BYTES


def next_probe_bytes(shape: Shape, rank: int) -> int:
    """Return the peak bytes of ``factors.next_probe``: the pivoted QR, then the rows and their rounded copies."""
    decomposition = 4 * shape.m * shape.k + 2 * shape.k * shape.k
    rows = (3 * probe_width(shape.k, rank) + 1) * shape.m
    return _FLOAT * max(decomposition, rows) + SMALL_BYTES


def fold_flops(shape: Shape, samples: int) -> float:
    """Return the floating point operations of ``whole.fold_block``: 2 per multiply-add."""
    maps = shape.q_theta + (0 if shape.identity else shape.k)
    touched = 8  # convert twice, centre twice, range, mean, energy, cast
    return float(samples) * (shape.m * (2 * maps + 2 * shape.s + touched) + 2 * shape.s * shape.s)


def merge_flops(shape: Shape) -> float:
    """Return the floating point operations of ``merge``."""
    return 3.0 * (shape.m + shape.s) * shape.s


def finish_flops(shape: Shape) -> float:
    """Return about the floating point operations of ``factors.finish``: a tall SVD and a small eigenproblem."""
    return 14.0 * shape.m * shape.k**2 + 40.0 * shape.k**3


def coefficients_flops(rank: int, k: int, samples: float) -> float:
    """Return the floating point operations of the coefficients of some samples."""
    return 2.0 * rank * k * samples
