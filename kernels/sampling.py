"""Sampling angles: how far the modes of this campaign are from those of longer measurement, from leaf terms alone.

A campaign is one finite record. How its modes would scatter from record to record is read off how the products of
coefficient series scatter from leaf to leaf; no sample is seen again. Nothing here speaks of the accuracy of the
computation, and no random number is drawn: simulated quantiles use addressed numbers.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

from .addressed import STREAM_QUANTILE, normals
from .checks import require_shape
from .factors import Factors
from .leaves import LeafTerms
from .noise import NoiseEdge

Floats = NDArray[np.float64]

LEVEL = 0.9  # of the sampling angle
DRAWS = 2000
LEAST_LEAVES = 8
LEAST_TO_JOIN = 24
FAINT_CORRELATION = 0.05  # leaves less correlated than this count as independent
MOST_CORRELATION = 0.5
LEAST_ABOVE_EDGE = 2.0  # modes below this multiple of the noise edge get no sampling angle
LEAST_FREEDOM = 7  # leaves less one, times pairs of modes, below which no effective sample size is told
# Leaves that share their weather scatter too little, and few of them cannot tell: with fewer effective samples than
# these, 90 % angles were kept in 60 to 84 % of campaigns.
LEAST_EFFECTIVE = 50
LEAST_IN_A_LEAF = 3


@dataclass(frozen=True, eq=False)
class Sampling:
    """Sampling angles of the leading modes, those of the first r' that were looked at.

    Attributes
    ----------
    sine : float64 (r',)
        Sine of the angle to the modes of the process that is not exceeded in 90 % of such campaigns; NaN where it
        cannot be told.
    north : float64 (r',)
        Root mean square sine by North's rule with ``n_effective``; NaN where there is no gap.
    n_effective : float
        Effective number of independent samples, at most n; NaN if the leaves do not tell.
    leaves : int
        Leaves after joining.
    joined : int
        Leaves of the campaign in one joined leaf.
    """

    sine: Floats
    north: Floats
    n_effective: float
    leaves: int
    joined: int


def sampling(
    terms: Sequence[LeafTerms],
    factors: Factors,
    noise: NoiseEdge | None,
    group: NDArray[np.integer] | None = None,
) -> Sampling:
    """Return sampling angles from the terms of all leaves, in the order of time.

    Mode i is turned towards mode j by ``b_ij = T_ij / (lambda_i - lambda_j)``, T the sum of the terms over the leaves,
    and the variance w_ij of such a sum is estimated from its scatter between leaves. ``sum_j b_ij^2`` is distributed
    like ``sum_j w_ij z_j^2`` over an independent ``chi2_M / M``, z standard normal; M, the degrees of freedom of
    ``sum_j w_ij``, is ``(L - 1) (sum_j w_ij)^2 / sum_j w_ij^2`` (Satterthwaite, Biometrics Bull. 2 (1946) 110, from
    memory). The gap is that of the sample, which is wider than the true one by the very turn looked for: for two modes
    alone ``sin(2 angle) = 2 b`` is exact, and is used for each pair. The squared tangents of all pairs, and of the
    outside at its mean, add up.

    Parameters
    ----------
    terms : sequence of LeafTerms, length L
    factors : Factors
        Its singular values, samples and energy are used.
    noise : NoiseEdge or None
        Modes below twice its edge get no angle.
    group : int (k',), optional
        Number of the group of each mode; by default every mode is alone. All members of a group get the same figures:
        the largest principal angle between the group's subspace and that of the process (``sine``), and the root of
        the expected sum of squares of all its rotations (``north``). Rotations within the group count nowhere. A group
        gets figures only if all its members are among the r' modes and each could be told.

    Notes
    -----
    A 90 % value beyond 45 degrees is given as 90 degrees (sine 1): the mode is then not told from its neighbours.
    There is no value from fewer than 8 leaves, or where leaves are too short against the memory of the coefficients
    to be joined: fewer than 50 effective samples, or fewer than 3 in each of fewer than 24 leaves.
    """
    squares = factors.values**2
    group = np.arange(squares.size) if group is None else np.asarray(group)
    require_shape("group", group, squares.shape)
    if not terms:
        return Sampling(np.empty(0), np.empty(0), float("nan"), 0, 1)
    scatter = _scatter(terms, squares, squares.size if noise is None else noise.count)
    n_effective = _effective_samples(scatter, squares, factors.n)
    turns = _turns(scatter, factors, noise)
    members = [np.flatnonzero(group == number) for number in np.unique(group)]
    members = [at for at in members if at[-1] < turns.outside.size]
    enough = len(terms) >= LEAST_LEAVES and n_effective >= _least_effective(scatter.leaves)
    return Sampling(
        sine=_sines(turns, members if enough else [], scatter.leaves),
        north=_north(scatter, factors, noise, n_effective, members),
        n_effective=n_effective,
        leaves=scatter.leaves,
        joined=scatter.joined,
    )


@dataclass(frozen=True, eq=False)
class _Scatter:
    """Variances of the sums over the campaign, from leaves joined until they are independent.

    ``inside`` (r', k') of T_ij; ``own`` (r',) of T_ii; ``outside`` (r',) of |d_i|^2; ``strong`` modes stand
    out of the noise.
    """

    inside: Floats
    own: Floats
    outside: Floats
    strong: int
    leaves: int
    joined: int


@dataclass(frozen=True, eq=False)
class _Turns:
    """Variances of the turns.

    ``inside`` (r', k') is w_ij, ``outside`` (r',) is w_i,out; ``gap`` (r', k'); whether mode i can be ``told`` (r',).
    """

    inside: Floats
    outside: Floats
    gap: Floats
    told: NDArray[np.bool_]
    least_gap: float


def _scatter(terms: Sequence[LeafTerms], squares: Floats, strong: int) -> _Scatter:
    share = np.array([leaf.n for leaf in terms], dtype=np.float64)
    inside = np.stack([leaf.inside for leaf in terms])
    outside = np.stack([leaf.outside for leaf in terms])
    share /= share.sum()
    count = inside.shape[1]
    require_shape("terms[0].inside", inside[0], (count, squares.size))
    own = np.diagonal(inside, axis1=1, axis2=2) - share[:, np.newaxis] * squares[:count]
    inside[:, np.arange(count), np.arange(count)] = 0
    inside, outside, own, joined, correlation = _joined(inside, outside, own, _weight(squares, count, strong))
    leaves = len(inside)
    unbiased = leaves / (leaves - 1) if leaves > 1 else float("nan")
    raised = unbiased * (1 + 2 * min(max(correlation, 0.0), MOST_CORRELATION))
    variance = unbiased * np.einsum("bij,bij->ij", inside, inside)
    variance[:, :strong] *= raised / unbiased
    return _Scatter(
        inside=variance,
        own=raised * np.einsum("bi,bi->i", own, own),
        outside=unbiased * np.einsum("bci,bci->i", outside, outside) / max(1, outside.shape[1]),
        strong=strong,
        leaves=leaves,
        joined=joined,
    )


def _weight(squares: Floats, count: int, strong: int) -> Floats:
    """Return what makes pairs of modes above the noise comparable; the others are white and would dilute them."""
    weight: Floats = 1 / np.sqrt(np.outer(squares[:count], squares))
    if strong > 1:
        weight[:, strong:] = 0
    return weight


def _joined(inside: Floats, outside: Floats, own: Floats, weight: Floats) -> tuple[Floats, Floats, Floats, int, float]:
    """Return the terms of leaves joined until they are independent, how many made one, and what correlation is left."""
    joined, correlation = 1, _correlation(inside * weight)
    while correlation > FAINT_CORRELATION and len(inside) >= LEAST_TO_JOIN:
        inside, outside, own, joined = _in_pairs(inside), _in_pairs(outside), _in_pairs(own), 2 * joined
        correlation = _correlation(inside * weight)
    return inside, outside, own, joined, correlation


def _correlation(terms: Floats) -> float:
    """Return the correlation of neighbouring leaves, pooled; 1/L makes up for the mean being known to be zero."""
    total = float(np.sum(terms**2))
    return float(np.sum(terms[1:] * terms[:-1])) / total + 1 / len(terms) if total > 0 else 0.0


def _in_pairs(terms: Floats) -> Floats:
    """Return sums of neighbours; of an odd number, the last three make one."""
    even = len(terms) // 2 * 2
    pairs: Floats = terms[0:even:2] + terms[1:even:2]
    if even < len(terms):
        pairs[-1] += terms[-1]
    return pairs


def _effective_samples(scatter: _Scatter, squares: Floats, n: int) -> float:
    """Return N with ``var T_ij = lambda_i lambda_j / N`` on average over pairs, so that North's rule holds.

    Pairs of modes above the noise count; if there is but one such mode, the variance of its own energy does.
    """
    count = min(len(scatter.own), scatter.strong) or len(scatter.own)
    i, j = np.triu_indices(count, 1, scatter.strong) if scatter.strong > 1 else np.empty((2, 0), dtype=np.intp)
    pairs = scatter.inside[i, j] / (squares[i] * squares[j])
    inverse = pairs if pairs.size else scatter.own[:count] / (2 * squares[:count] ** 2)
    if (scatter.leaves - 1) * inverse.size < LEAST_FREEDOM:
        return float("nan")
    mean = float(inverse.mean())
    return min(float(n), 1 / mean) if mean > 0 else float(n)


def _least_effective(leaves: int) -> int:
    return max(LEAST_EFFECTIVE, LEAST_IN_A_LEAF * min(leaves, LEAST_TO_JOIN))


def _turns(scatter: _Scatter, factors: Factors, noise: NoiseEdge | None) -> _Turns:
    squares, count = factors.values**2, len(scatter.own)
    gap = squares[:count, np.newaxis] - squares
    beyond = squares[:count] - _noise_level(factors, noise)
    with np.errstate(divide="ignore", invalid="ignore"):
        inside = scatter.inside / gap**2
        outside = np.where(scatter.outside > 0, scatter.outside / beyond**2, 0.0)
    told = (scatter.outside == 0) | (beyond > 0)
    if noise is not None:
        told &= factors.values[:count] >= LEAST_ABOVE_EDGE * noise.edge
    return _Turns(inside, outside, gap, told, factors.floor**2)


def _noise_level(factors: Factors, noise: NoiseEdge | None) -> float:
    """Return the eigenvalue that stands for all those outside the modes; without noise, that of the last mode."""
    if noise is not None:
        return noise.variance * (factors.energy.size + factors.n)
    return float(factors.values[-1] ** 2) if factors.values.size else 0.0


def _sines(turns: _Turns, members: Sequence[NDArray[np.intp]], leaves: int) -> Floats:
    sine = np.full(turns.outside.size, np.nan)
    modes = turns.inside.shape[1]
    order = _orders(1 + max((at.size * (modes - at.size) for at in members), default=0))
    for at in members:
        others = np.setdiff1d(np.arange(modes), at)
        if turns.told[at].all() and (np.abs(turns.gap[np.ix_(at, others)]) > turns.least_gap).all():
            tangents = _tangents(turns.inside[np.ix_(at, others)], turns.outside[at], leaves - 1, order)
            angle = np.arctan(np.sqrt(np.quantile(tangents, LEVEL)))
            sine[at] = np.sin(angle) if angle <= np.pi / 4 else 1.0
    return sine


def _orders(rows: int) -> NDArray[np.intp]:
    """Return independent orders of the draws (rows, draws): the same quantiles, each time in another order."""
    return np.argsort(normals(0, STREAM_QUANTILE, np.arange(DRAWS), rows), axis=1, kind="stable")


def _tangents(inside: Floats, outside: Floats, freedom: int, order: NDArray[np.intp]) -> Floats:
    """Return draws of the largest squared tangent of g modes, from w_ij (g, k' - g) and w_i,out (g,)."""
    share = (np.arange(DRAWS) + 0.5) / DRAWS
    total = float(inside.sum())
    pooled = freedom * total**2 / float(np.sum(inside**2)) if total > 0 else float(freedom)
    scale = pooled / (2 * special.gammaincinv(pooled / 2, share[order[0]]))
    normal = special.ndtri(share)[order[1 : 1 + inside.size]]
    turn = inside.reshape(-1, 1) * normal**2 * scale
    squared = np.where(turn < 0.25, 4 * turn / (1 + np.sqrt(np.maximum(1 - 4 * turn, 0))) ** 2, 4 * turn)
    if outside.size == 1:
        single: Floats = squared.sum(axis=0) + outside[0]
        return single
    signed = (np.sign(normal) * np.sqrt(squared)).reshape(*inside.shape, -1)
    gram = np.einsum("ijd,ljd->dil", signed, signed, optimize=True) + np.diag(outside)
    largest: Floats = np.linalg.eigvalsh(gram)[:, -1]
    return largest


def _north(
    scatter: _Scatter,
    factors: Factors,
    noise: NoiseEdge | None,
    n_effective: float,
    members: Sequence[NDArray[np.intp]],
) -> Floats:
    """Return the root mean square sine by North's rule; against white noise every sample counts as independent."""
    squares, count = factors.values**2, len(scatter.own)
    samples = np.full(squares.size, n_effective)
    if noise is not None:
        samples[noise.count :] = factors.n
    tail = max(0.0, factors.energy_total - float(squares.sum()))
    north = np.full(count, np.nan)
    for at in members if n_effective > 1 else []:
        others = np.setdiff1d(np.arange(squares.size), at)
        gap = squares[at, np.newaxis] - squares[others]
        beyond = squares[at] - _noise_level(factors, noise)
        if (np.abs(gap) <= factors.floor**2).any() or (tail > factors.floor**2 and (beyond <= 0).any()):
            continue
        mean = np.sum(squares[at, np.newaxis] * squares[others] / ((samples[others] - 1) * gap**2))
        if tail > factors.floor**2:
            mean += np.sum(squares[at] * tail / (((n_effective if noise is None else factors.n) - 1) * beyond**2))
        north[at] = np.minimum(1.0, np.sqrt(mean))
    return north
