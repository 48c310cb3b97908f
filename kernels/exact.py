"""The exact summary, for few channels: the algebra of co-moments in square-root form, from blocks to modes.

Instead of products a triangular factor is kept: ``T^T T`` holds the centred products of the stack ``[G; A]``, the
background functions before the channels. Nothing is squared, so singular values are right to rounding of the largest
one, not to its root. Merging two summaries, adding a block and keeping the mean are one rule here too: rows are put
under the triangle, the difference of means as one more row ``sqrt(w) d``, and rotated into it. As the functions come
first, the rows below theirs hold what none of them explains, whichever of them are removed. Blocks are read as they
are: nothing here repairs a bad value, and nothing is said about how accurate a mode is.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import scipy.linalg
from numpy.typing import NDArray
from scipy.linalg.lapack import dtpqrt

from .background import RANK_TOLERANCE, Removal
from .blocks import Preparation
from .checks import require_between, require_block, require_finite, require_shape
from .comoments import Shape, Summary, content, filled, merge_weight
from .factors import EPS, Factors, orient

Floats = NDArray[np.float64]

PANEL = 24  # columns rotated at once; measured best of 4 to 32 for 64 to 256 channels
VARIATION = RANK_TOLERANCE**0.5  # a combination of functions that varies less, each of unit size, tells nothing
FLOOR_ULPS = 16  # spurious singular values were measured up to 11 eps of the root of the energy
FLOOR_BLOCK = 256  # and to grow, folded one block after the other, like 0.4 eps times the root of the number of blocks
SMALL_BYTES = 192 << 10  # Python objects, views, and the two buffers of 64 KiB that NumPy's loops may take


@dataclass(eq=False)
class Triangle:
    """What is kept of n samples of few channels; its size does not depend on n.

    Attributes
    ----------
    shape : Shape
        Of the identity probe without checks; see ``shape_of``.
    n : int
        Samples.
    mean, energy : float64 (m,)
        Mean and centred sum of squares of each prepared channel.
    right_mean : float64 (p,)
        Mean of the background functions G.
    triangle : float64 (p + m, p + m)
        Upper triangular T with ``T^T T = [G; A] [G; A]^T``, both centred.
    low, high, gaps : float64 (m,), float64 (m,), int64 (m,)
        As in ``comoments.Summary``: range in channel units, missing values.
    """

    shape: Shape
    n: int
    mean: Floats
    energy: Floats
    right_mean: Floats
    triangle: Floats
    low: Floats
    high: Floats
    gaps: NDArray[np.int64]


def shape_of(m: int, p: int) -> Shape:
    """Return the sizes of the exact summary of m channels and p background functions."""
    return Shape(m=m, k=m, q_theta=0, q_xi=0, p=p, identity=True)


def zero(shape: Shape) -> Triangle:
    """Return the summary of no samples, the neutral element of ``merge``.

    Raises
    ------
    ValueError
        The shape has a probe other than the identity, or checks.
    """
    if not shape.identity or shape.q_theta or shape.q_xi:
        raise ValueError(f"shape: must be that of the identity probe without checks; got {shape}")
    m, p = shape.m, shape.p
    return Triangle(
        shape=shape,
        n=0,
        mean=np.zeros(m),
        energy=np.zeros(m),
        right_mean=np.zeros(p),
        triangle=np.zeros((p + m, p + m)),
        low=np.full(m, np.inf),
        high=np.full(m, -np.inf),
        gaps=np.zeros(m, dtype=np.int64),
    )


def fold_block(triangle: Triangle, raw: NDArray[Any], preparation: Preparation, background: Floats) -> None:
    """Add one block of samples to ``triangle`` in place.

    Parameters
    ----------
    triangle : Triangle
        Changed in place, and only if no error is raised.
    raw : real (m, n), n >= 1
        In any memory order.
    preparation : Preparation
        Gain, shift and factor of each channel.
    background : float64 (p, n)
        G.

    Raises
    ------
    ValueError
        A shape or type does not fit.
    FloatingPointError
        A value is not finite, or too large to be squared. Call ``blocks.find_first_bad`` for the place.
    """
    shape = triangle.shape
    require_block("raw", raw, shape.m)
    require_shape("preparation.gain", preparation.gain, (shape.m,))
    require_shape("background", background, (shape.p, raw.shape[1]))
    require_finite("background", background)
    with np.errstate(over="ignore", invalid="ignore"):
        stack, mean, low_raw, high_raw = _measure(raw, preparation, background)
        stack[:, -1] = np.sqrt(merge_weight(triangle.n, raw.shape[1])) * (mean - _means(triangle))
        squares = np.vecdot(stack, stack)
        energy = triangle.energy + squares[shape.p :]
    if not (np.isfinite(low_raw).all() and np.isfinite(high_raw).all()):
        raise FloatingPointError("raw: every value must be finite; got NaN or infinity")
    if not (np.isfinite(squares).all() and np.isfinite(energy).all()):
        raise FloatingPointError("raw: prepared values must be small enough to be squared; got an overflow")
    triangle.triangle[...] = _rotate(triangle.triangle, stack.T)
    triangle.energy[...] = energy
    ends = preparation.to_channel_units(low_raw), preparation.to_channel_units(high_raw)
    _advance(triangle, raw.shape[1], mean, np.minimum(*ends), np.maximum(*ends))


def merge(a: Triangle, b: Triangle) -> Triangle:
    """Return the summary of the samples of both; neither is changed. See ``merge_into``."""
    total = filled(zero(a.shape), content(a))
    merge_into(total, b)
    return total


def merge_into(a: Triangle, b: Triangle) -> None:
    """Add the samples of ``b`` to ``a`` in place.

    One triangle and the difference of means are rotated into the other triangle (tall QR by parts: Demmel, Grigori,
    Hoemmen, Langou, SISC 34 (2012) A206; from memory).

    Raises
    ------
    ValueError
        The shapes differ.
    """
    if a.shape != b.shape:
        raise ValueError(f"b: must have the shape of a, {a.shape}; got {b.shape}")
    a.gaps += b.gaps
    if b.n == 0:
        return
    if a.n == 0:
        a.triangle[...], a.energy[...] = b.triangle, b.energy
    else:
        step = np.sqrt(merge_weight(a.n, b.n)) * (_means(b) - _means(a))
        a.triangle[...] = _rotate(a.triangle, np.vstack([step, b.triangle]), triangular=True)
        a.energy += b.energy + step[a.shape.p :] ** 2
    _advance(a, b.n, _means(b), b.low, b.high)


def keep_mean(triangle: Triangle) -> Triangle:
    """Return the summary about zero instead of the mean: one more row ``sqrt(n) mean``. Do not merge it further."""
    row = np.sqrt(triangle.n) * _means(triangle)
    return replace(
        triangle,
        triangle=_rotate(triangle.triangle, row[np.newaxis].copy()),
        energy=triangle.energy + row[triangle.shape.p :] ** 2,
    )


def to_arrays(triangle: Triangle) -> dict[str, NDArray[Any]]:
    """Return the content by name, for storage; nothing is copied but ``n``."""
    return content(triangle)


def from_arrays(shape: Shape, arrays: Mapping[str, NDArray[Any]]) -> Triangle:
    """Return the summary stored as arrays, on its own writable memory.

    Raises
    ------
    ValueError
        An array is missing, or has another shape or type than ``shape`` asks for.
    """
    return filled(zero(shape), arrays)


def moments(triangle: Triangle) -> Summary:
    """Return the same as products, for what needs no more than half the digits: the stack is ``[X = A; G]``."""
    p, m = triangle.shape.p, triangle.shape.m
    stack = np.roll(triangle.triangle, -p, axis=1)
    inner = stack.T @ stack
    same = {name: getattr(triangle, name).copy() for name in ("mean", "energy", "low", "high", "gaps")}
    right_mean = np.concatenate([triangle.mean, triangle.right_mean])
    return Summary(triangle.shape, triangle.n, outer=inner[:m].copy(), inner=inner, right_mean=right_mean, **same)


def root_of(part: Triangle, removal: Removal) -> Floats:
    """Return a factor of the products of a part's channels about the background of all, float64 (p + m + 1, m).

    The products of the parts add up to those of the reduced whole; see ``background.apply``.
    """
    p = part.shape.p
    step = np.sqrt(part.n) * (np.concatenate([part.mean, part.right_mean]) - removal.right_mean)
    rows = np.vstack([np.roll(part.triangle, -p, axis=1), step])
    root: Floats = rows[:, part.shape.x] - rows[:, removal.places] @ removal.right_weights[part.shape.x].T
    return root


def reduce(triangle: Triangle, *, keep_mean: bool = False, rows: Sequence[int] = ()) -> tuple[Triangle, Removal]:
    """Return the summary of what is left when the mean and some functions are removed, and what was removed.

    Parameters
    ----------
    triangle, keep_mean, rows
        As in ``background.reduce``.

    Returns
    -------
    reduced : Triangle
        ``T^T T`` holds the products of the residual, without the removed functions; its means stay those of the
        samples. ``triangle`` itself if the mean is all that is removed.
    removal : Removal
        Its stack is that of ``moments``, ``[X = A; G]``.

    Raises
    ------
    ValueError
        A row is not one of G.
    """
    m, p = triangle.shape.m, triangle.shape.p
    for row in rows:
        require_between("rows", row, 0, p - 1)
    if keep_mean:
        triangle = _with_mean_kept(triangle)
    mean, about = (np.zeros(m), np.zeros(p)) if keep_mean else (triangle.mean.copy(), triangle.right_mean)
    chosen, head = list(rows), triangle.triangle[:p]
    sizes = np.hypot(np.linalg.norm(head[:, chosen], axis=0), np.sqrt(triangle.n) * np.abs(about[chosen]))
    basis, inverse, rank = _split(head[:, chosen], sizes)
    right_weights = np.roll(head, -p, axis=1).T @ (basis[:, :rank] @ inverse)
    removal = Removal(
        mean=mean,
        right_mean=np.concatenate([mean, about]),
        rows=tuple(chosen),
        places=[m + row for row in chosen],
        weights=right_weights[:m],
        right_weights=right_weights,
        rank=rank,
        about=about[chosen],
        keep_mean=keep_mean,
    )
    if not chosen:
        return triangle, removal
    rest = np.vstack([basis[:, rank:].T @ head, triangle.triangle[p:]])
    rest[:, chosen] = 0
    energy = np.einsum("ij,ij->j", rest[:, p:], rest[:, p:])
    return replace(triangle, triangle=_rotate(np.zeros_like(triangle.triangle), rest), energy=energy), removal


def finish(triangle: Triangle, *, keep_mean: bool = False, rows: Sequence[int] = ()) -> Factors:
    """Return all modes above the rounding floor, what ``reduce`` removes removed; coefficients are read again.

    Raises
    ------
    ValueError
        The summary holds no samples, or a row is not one of G.
    """
    require_between("triangle.n", triangle.n, 1)
    return finish_reduced(triangle, *reduce(triangle, keep_mean=keep_mean, rows=rows))


def finish_reduced(triangle: Triangle, reduced: Triangle, removal: Removal) -> Factors:
    """Return what ``finish`` does, from what ``reduce`` returned; ``triangle`` tells how much rounding there is."""
    floor = _floor(triangle, removal.keep_mean)
    _, values, modes_t = scipy.linalg.svd(reduced.triangle[:, triangle.shape.p :], full_matrices=False)
    count = int(np.count_nonzero(values > floor))
    modes, row_map = orient(modes_t[:count].T, modes_t[:count])
    return Factors(
        modes=modes,
        values=values[:count],
        row_map=row_map,
        energy=reduced.energy.copy(),
        energy_total=float(reduced.energy.sum()),
        floor=floor,
        n=triangle.n,
        removal=removal,
    )


def summary_bytes(shape: Shape) -> int:
    """Return the bytes of a summary, in memory and (without headers) in storage."""
    return 8 * ((shape.p + shape.m) ** 2 + shape.p + 5 * shape.m + 1)


def fold_bytes(shape: Shape, samples: int) -> int:
    """Return the peak bytes ``fold_block`` allocates: the rows to rotate in, a triangle or two, and facts."""
    width = shape.p + shape.m
    return 8 * (width * (samples + 1) + (2 * width + 2 * PANEL + 16) * width) + SMALL_BYTES


def merge_bytes(shape: Shape) -> int:
    """Return the peak bytes of ``merge``: the result, the rows to rotate in, and a rotated triangle."""
    return summary_bytes(shape) + 8 * (3 * (shape.p + shape.m) + 2 * PANEL + 16) * (shape.p + shape.m) + SMALL_BYTES


def finish_bytes(shape: Shape) -> int:
    """Return the peak bytes of ``finish`` with the mean kept and functions removed."""
    width = shape.p + shape.m
    return 8 * (2 * width * width + 6 * width * shape.m + 16 * width) + SMALL_BYTES


def fold_flops(shape: Shape, samples: int) -> float:
    """Return the floating point operations of ``fold_block``: 2 per multiply-add."""
    width, touched = shape.p + shape.m, 8
    return float(samples) * (2 * width * width + touched * width)


def _measure(raw: NDArray[Any], preparation: Preparation, background: Floats) -> tuple[Floats, ...]:
    """Return the centred block, G first (p + m, n + 1) with its last sample free, its means, and its raw range."""
    p, n = background.shape
    rows = np.empty((p + len(raw), n + 1))
    rows[:p, :n], rows[p:, :n] = background, raw
    block = rows[:, :n]
    low_raw, high_raw = block[p:].min(axis=1), block[p:].max(axis=1)
    mean = block.mean(axis=1)
    block -= mean[:, np.newaxis]
    # The mean of n values is off by some rounding of itself; a second look leaves equal values exactly nothing.
    rest = block.mean(axis=1)
    block -= rest[:, np.newaxis]
    mean += rest
    if not preparation.plain:
        block[p:] *= preparation.slope[:, np.newaxis]
        mean[p:] = preparation.factor * preparation.to_channel_units(mean[p:])
    return rows, mean, low_raw, high_raw


def _rotate(triangle: Floats, rows: Floats, *, triangular: bool = False) -> Floats:
    """Return the triangle of both: QR of ``rows`` (r, s) under ``triangle`` (s, s), which keeps its zeros.

    With ``triangular`` the last s of the rows are upper triangular themselves. ``rows`` is overwritten if it is in
    Fortran order. Reflections are collected in panels (Elmroth, Gustavson, IBM J. Res. Dev. 44 (2000) 605; LAPACK).
    """
    width = len(triangle)
    under, panel = width if triangular else 0, min(PANEL, width)
    return np.asarray(np.triu(dtpqrt(under, panel, triangle, rows, overwrite_b=1)[0]), dtype=np.float64)


def _means(triangle: Triangle) -> Floats:
    return np.concatenate([triangle.right_mean, triangle.mean])


_with_mean_kept = keep_mean  # for where an argument has the name


def _advance(a: Triangle, n: int, mean: Floats, low: Floats, high: Floats) -> None:
    p = a.shape.p
    a.n += n
    a.right_mean += (n / a.n) * (mean[:p] - a.right_mean)
    a.mean += (n / a.n) * (mean[p:] - a.mean)
    np.minimum(a.low, low, out=a.low)
    np.maximum(a.high, high, out=a.high)


def _split(columns: Floats, sizes: Floats) -> tuple[Floats, Floats, int]:
    """Return an orthonormal basis that begins with that of some columns, the way back to them, and their rank.

    Columns (p, p') are scaled by the norms (p',) of their functions about zero, for rounding is relative to those: one
    that hardly varies must neither count, which would take a random direction off the channels, nor tilt the others.

    Returns
    -------
    basis, inverse : float64 (p, p), (rank, p')
        Its first ``rank`` columns span ``columns``; from coordinates in those to weights of the functions.
    rank : int
    """
    scale = np.zeros_like(sizes)
    scale[sizes > 0] = 1 / sizes[sizes > 0]
    basis, values, mix = np.linalg.svd(columns * scale)  # SciPy before 1.14 refuses an empty one
    rank = int(np.count_nonzero(values > VARIATION))
    return basis, mix[:rank] * scale / values[:rank, np.newaxis], rank


def _floor(triangle: Triangle, keep_mean: bool) -> float:
    """Return the singular value under which rounding rules, for blocks of 64 samples and more, before any removal."""
    n, mean_square = triangle.n, float(triangle.mean @ triangle.mean)
    energy = float(triangle.energy.sum()) + (n * mean_square if keep_mean else 0.0)
    ulps = FLOOR_ULPS + np.sqrt(n / FLOOR_BLOCK)
    # The mean is rounded too, and so was every value far from zero when it was written.
    return float(ulps * EPS * (np.sqrt(energy) + np.sqrt(n * mean_square)))
