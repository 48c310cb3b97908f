"""From a summary to modes, singular values and the map from X to coefficients; order, signs, the next probe.

Everything here is small against a block: matrices of m x k. Nothing is read again, and nothing is said about how
accurate a mode is; the rounding floor is the one limit applied, because values under it are noise.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from .addressed import STREAM_PRIMED, signs
from .background import Removal, reduce
from .blocks import Preparation
from .checks import require_between, require_block, require_shape
from .comoments import Summary

Floats = NDArray[np.float64]

EPS = float(np.finfo(np.float64).eps)
DIRECTION_ULPS = 64  # directions of W this close to rounding (measured: up to 5 eps) point nowhere
ROW_SPACE_FLOOR = 1e-13  # least eigenvalue of the scaled C that still counts as a direction, relative to the largest
FLOOR_ULPS = 16  # spurious eigenvalues were measured up to 8.6 eps of the energy (3 to 5 channels, rank 1 to 3)
PEAK_SHARE = 0.9  # the first channel this close to the largest decides the sign


@dataclass(frozen=True, eq=False)
class Factors:
    """The finished factorization ``A ~ U diag(S) V^T`` with ``S V^T = row_map X``.

    Attributes
    ----------
    modes : float64 (m, k')
        U, unit columns, in the units of the prepared matrix.
    values : float64 (k',)
        S, non-increasing, none below ``floor``.
    row_map : float64 (k', k)
        Coefficients are ``row_map`` times X; with the identity probe it is ``U^T``.
    energy : float64 (m,)
        Sum of squares of each channel after the background was removed.
    energy_total : float
        Sum of ``energy``.
    floor : float
        Rounding floor of singular values.
    n : int
        Samples.
    removal : Removal
        What was taken off before: the mean, or nothing, and functions of time.
    """

    modes: Floats
    values: Floats
    row_map: Floats
    energy: Floats
    energy_total: float
    floor: float
    n: int
    removal: Removal


def finish(summary: Summary, *, keep_mean: bool = False, rows: Sequence[int] = ()) -> Factors:
    """Return all modes above the rounding floor.

    The row space of X is the row space of the result: with ``P`` an orthonormal basis of it, ``A P P^T`` is found from
    ``W = A X^T`` and ``C = X X^T`` alone (single-pass PCA of row streams, Yu, Gu, Li, Liu, Li, IJCAI 2017).

    Parameters
    ----------
    summary : Summary
    keep_mean : bool
        Decompose about zero instead of about the mean.
    rows : sequence of int
        Functions of time to remove before, see ``background.reduce``.

    Returns
    -------
    factors : Factors
        Possibly without modes, if there is no energy.

    Raises
    ------
    ValueError
        The summary holds no samples, or a function is not one of its.
    """
    require_between("summary.n", summary.n, 1)
    return finish_reduced(summary, *reduce(summary, keep_mean=keep_mean, rows=rows))


def finish_reduced(summary: Summary, reduced: Summary, removal: Removal) -> Factors:
    """Return what ``finish`` does, from a summary that ``background.reduce`` was applied to.

    Parameters
    ----------
    summary : Summary
        As added up: it tells how much rounding there is.
    reduced, removal
        Of the same samples.
    """
    floor = rounding_floor(summary.energy, summary.mean, summary.n, removal.keep_mean)
    if reduced.shape.identity:
        modes, values, row_map = _finish_identity(reduced)
    else:
        modes, values, row_map = _finish_probe(summary, reduced)
    order = np.argsort(-values, kind="stable")
    order = order[values[order] > floor]
    modes, row_map = orient(modes[:, order], row_map[order])
    return Factors(
        modes=modes,
        values=values[order],
        row_map=row_map,
        energy=reduced.energy.copy(),
        energy_total=float(reduced.energy.sum()),
        floor=floor,
        n=summary.n,
        removal=removal,
    )


def orient(modes: Floats, row_map: Floats) -> tuple[Floats, Floats]:
    """Return modes and row map with signs such that the first channel near the peak is positive.

    The first channel whose modulus is at least 0.9 of the largest decides, because the largest alone flips in half of
    all noisy copies of an antisymmetric mode.

    Parameters
    ----------
    modes : float64 (m, r)
    row_map : float64 (r, k)
        Flipped row by row together with the modes.
    """
    size = np.abs(modes)
    first = (size >= PEAK_SHARE * size.max(axis=0, initial=0.0)).argmax(axis=0)
    sign = np.where(modes[first, np.arange(modes.shape[1])] < 0, -1.0, 1.0)
    return modes * sign, row_map * sign[:, np.newaxis]


def coefficients(
    factors: Factors, rank: int, x: NDArray[Any], centre: Floats, background: Floats | None = None
) -> Floats:
    """Return the coefficients of one stored block.

    Parameters
    ----------
    factors : Factors
    rank : int
        Leading modes wanted, at most as many as there are.
    x : float32 or float64 (k, n)
        Stored X of the block.
    centre : float64 (k,)
        Upsilon times the mean of the block.
    background : float64 (p', n), optional
        The functions that were removed, at the block's samples; needed if any were.

    Returns
    -------
    c : float64 (rank, n)
        ``row_map (X + centre - right_mean) - row_map right_weights (G - mean of G)``.
    """
    require_between("rank", rank, 0, factors.values.size)
    k = factors.row_map.shape[1]
    require_block("x", x, k)
    require_shape("centre", centre, (k,))
    rows, removal = factors.row_map[:rank], factors.removal
    product: Floats = rows @ x.astype(np.float64, copy=False)
    product += (rows @ (centre - removal.right_mean[:k]))[:, np.newaxis]
    _take_background(product, rows @ removal.right_weights[:k], factors, background)
    return product


def direct_coefficients(
    factors: Factors, rank: int, raw: NDArray[Any], preparation: Preparation, background: Floats | None = None
) -> Floats:
    """Return the coefficients of a raw block that is read again, as with the identity probe.

    Parameters
    ----------
    factors : Factors
    rank : int
        Leading modes wanted, at most as many as there are.
    raw : real (m, n)
    preparation : Preparation
    background : float64 (p', n), optional
        The functions that were removed, at the block's samples; needed if any were.

    Returns
    -------
    c : float64 (rank, n)
        ``U^T A``, of what is left of A.
    """
    require_between("rank", rank, 0, factors.values.size)
    block = preparation.prepare(raw)
    block -= factors.removal.mean[:, np.newaxis]
    rows = factors.modes[:, :rank].T
    product: Floats = rows @ block
    _take_background(product, rows @ factors.removal.weights, factors, background)
    return product


def _take_background(product: Floats, weights: Floats, factors: Factors, background: Floats | None) -> None:
    if not factors.removal.rows:
        return
    if background is None:
        raise ValueError("background: must be given where functions were removed; got none")
    require_shape("background", background, (len(factors.removal.rows), product.shape[1]))
    product -= weights @ (background - factors.removal.about[:, np.newaxis])


def captured_by_channel(factors: Factors, rank: int) -> Floats:
    """Return the energy of each channel in the leading modes, float64 (m,): ``sum_i (U_ji S_i)^2``."""
    require_between("rank", rank, 0, factors.values.size)
    scaled = factors.modes[:, :rank] * factors.values[:rank]
    captured: Floats = np.einsum("ij,ij->i", scaled, scaled)
    return captured


def probe_width(width: int, rank: int) -> int:
    """Return the most rows ``next_probe`` can have after a read with ``width`` rows: those, the mean, random ones."""
    return width + 1 + fresh_rows(width, rank)


def next_probe(summary: Summary, rank: int, seed: int, pass_number: int, keys: NDArray[np.integer]) -> Floats:
    """Return the frozen probe of the next read: the leading directions found so far, the mean, and new random rows.

    The random rows keep the probe from being blind to what comes later; the directions alone missed a new pattern with
    a seventh of the energy altogether. The direction of the mean gives the result that keeps the mean the accuracy of
    the one that removes it. Entries are rounded to float32, so that they are exact in either precision.

    Parameters
    ----------
    summary : Summary
        Of the read before, before any background is removed.
    rank : int
        Modes wanted.
    seed, pass_number : int
        Address of the random rows; the first further read has pass number 2.
    keys : 64-bit integers (m,)
        Channel keys, ``addressed.name_keys``.

    Returns
    -------
    rows : float64 (k2, m)
        Unit rows: at most k directions, strongest first, the mean if there is one, and
        ``max(14, rank, ceil(k / 3))`` rows of random signs.

    Raises
    ------
    ValueError
        The probe of the summary is the identity, which no read can improve.
    """
    shape = summary.shape
    if shape.identity:
        raise ValueError(f"summary: must not come from the identity probe, which is exact; got {shape}")
    require_shape("keys", np.asarray(keys), (shape.m,))
    random = signs(seed, STREAM_PRIMED + pass_number, keys, fresh_rows(shape.k, rank)) / np.sqrt(shape.m)
    length = float(np.linalg.norm(summary.mean))
    mean = summary.mean[np.newaxis] / length if length > 0 else np.empty((0, shape.m))
    rows = np.concatenate([_leading_directions(summary), mean, random])
    return rows.astype(np.float32).astype(np.float64)


def fresh_rows(k: int, rank: int) -> int:
    """Return how many random rows ``next_probe`` puts beside the directions that a probe of k rows has found."""
    return max(14, rank, -(-k // 3))


def rounding_floor(energy: Floats, mean: Floats, n: int, keep_mean: bool) -> float:
    """Return the singular value under which rounding rules.

    Parameters
    ----------
    energy, mean : float64 (m,)
        Centred sum of squares and mean of each channel, before any function was removed.
    n : int
        Samples.
    keep_mean : bool
        The energy of the mean is decomposed too.
    """
    mean_square = float(mean @ mean)
    total = float(energy.sum()) + (n * mean_square if keep_mean else 0.0)
    # The mean of equal values is off by up to 2.9 eps of them (measured, 1 to 40 channels): energy that is none.
    return float(np.sqrt(FLOOR_ULPS * EPS * total + (FLOOR_ULPS * EPS) ** 2 * n * mean_square))


def _finish_identity(summary: Summary) -> tuple[Floats, Floats, Floats]:
    w = summary.outer[:, summary.shape.x]
    squares, modes = scipy.linalg.eigh((w + w.T) / 2)
    return modes, np.sqrt(np.maximum(squares, 0)), modes.T.copy()


def _finish_probe(summary: Summary, reduced: Summary) -> tuple[Floats, Floats, Floats]:
    x = summary.shape.x
    to_basis = _row_space(np.diagonal(summary.inner)[x], reduced.inner[x, x], _rounding_of_rows(summary, reduced))
    modes, values, v1t = scipy.linalg.svd(reduced.outer[:, x] @ to_basis, full_matrices=False)
    return modes, values, (values[:, np.newaxis] * v1t) @ to_basis.T


def _rounding_of_rows(summary: Summary, reduced: Summary) -> float:
    """Return the least eigenvalue of the scaled C that counts: what is removed leaves its rounding behind."""
    before, after = float(summary.energy.sum()), float(reduced.energy.sum())
    return max(ROW_SPACE_FLOOR, DIRECTION_ULPS * EPS * before / after) if after > 0 else 1.0


def _row_space(before: Floats, c: Floats, least: float) -> Floats:
    """Return ``d Q L^{-1/2}`` (k, l): right factor that makes the rows of X orthonormal, dead rows left out."""
    live = np.diagonal(c) > DIRECTION_ULPS * EPS * before
    d = np.where(live, _inverse_root_diagonal(c), 0.0)
    eigenvalues, q = scipy.linalg.eigh(d[:, np.newaxis] * c * d)
    strong = eigenvalues > least * max(float(eigenvalues[-1]), 0.0)
    basis: Floats = d[:, np.newaxis] * q[:, strong] / np.sqrt(eigenvalues[strong])
    return basis


def _inverse_root_diagonal(c: Floats) -> Floats:
    diagonal = np.diagonal(c)
    inverse: Floats = np.zeros_like(diagonal)
    live = diagonal > 0
    inverse[live] = 1 / np.sqrt(diagonal[live])
    return inverse


def _leading_directions(summary: Summary) -> Floats:
    """Return orthonormal rows that span the scaled W, strongest first, by pivoted QR.

    Rows along directions of rounding would spoil coefficients: X along them is small, is scaled up by the finish, and
    holds rounding alone (rank 2, second read: coefficients off by 1e-8 with them, by 1e-15 without).
    """
    x = summary.shape.x
    scaled = summary.outer[:, x] * _inverse_root_diagonal(summary.inner[x, x])
    q, r, _ = scipy.linalg.qr(scaled, mode="economic", pivoting=True)
    size = np.abs(np.diagonal(r))
    directions: Floats = np.asarray(q[:, size > DIRECTION_ULPS * EPS * size.max(initial=0.0)].T, dtype=np.float64)
    return directions
