"""How accurate the modes would be with one more read, or with twice the width: predictions from what a read has seen.

A spectrum is put together from the estimates of the leading modes and a power law behind them, and the expected angle
of the randomized range finder is worked out for it. A prediction says what is worth trying and never certifies
anything; bounds, verdicts and words live elsewhere.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq

from .checks import require_between, require_finite, require_shape

Floats = NDArray[np.float64]

ABOUT = 1.5  # quoted over predicted sine; predictions fell to 0.2 of the truth between values 1 % apart, else to 0.36
STEEPEST = 60.0  # exponents above are not told apart
FAST_EXPONENT = 6.0  # eigenvalues this steep are cut off or decay geometrically, which no power law follows
LEAST_SINE = 1e-7  # further probes are rounded to float32; less is neither predicted nor of use
SMOOTHING = 4  # neighbours on each side that share their estimate of g^2: from 10 checks it is off by half, alone
LEVEL_REPULSION = 4.0  # (gap seen)^2 = (gap)^2 + 4 coupling^2 for two modes that are mixed
NARROWEST = 1 / 4  # of a squared gap that is left when the repulsion is taken off
NEW_ROWS_COUNT = 1 / 4  # of the random rows of the first primed probe, measured in rows that are primed
PRIMED_SHARE = 0.85  # of the rows of a primed probe that count as such at the read after it


@dataclass(frozen=True)
class Tail:
    """Eigenvalues ``scale (j / head)^-exponent`` for ``j = head + 1 .. head + count``."""

    exponent: float
    scale: float
    head: int
    count: int

    def eigenvalues(self) -> Floats:
        """Return them, float64 (count,)."""
        return self.scale * _power_law(self.exponent, self.head, self.count)


@dataclass(frozen=True, eq=False)
class Spectrum:
    """The eigenvalues of ``A A^T`` as a read makes them look, all of them.

    Attributes
    ----------
    eigenvalues : float64 (N,)
        Estimates of the leading ones, then the tail.
    tail : Tail
    width : int
        Rows of the probe they were seen with.
    reads : int
        Reads up to then, 1 for a probe of random signs alone.
    floor : float
        Rounding floor of singular values.
    """

    eigenvalues: Floats
    tail: Tail
    width: int
    reads: int
    floor: float

    @property
    def exponent(self) -> float:
        """Return how steep it is behind its leading modes: the larger exponent of the tail and of their last third."""
        last, before = self.tail.head, 2 * self.tail.head // 3
        if before == 0 or not self.eigenvalues[last - 1] > 0:
            return STEEPEST if self.tail.scale == 0 else self.tail.exponent
        own = np.log(self.eigenvalues[before - 1] / self.eigenvalues[last - 1]) / np.log(last / before)
        return max(self.tail.exponent, float(own))


@dataclass(frozen=True, eq=False)
class Predictions:
    """Expected sines of the angle between computed and true mode, for two ways on.

    Attributes
    ----------
    read, wider : float64 (r,)
        After one more read, and with twice the width at the same number of reads; ``ABOUT`` times the prediction, at
        most 1.
    read_at_least, wider_at_least : bool (r,)
        The decay is so fast, or the sine so small, that the figure only says: at least this good.
    """

    read: Floats
    wider: Floats
    read_at_least: NDArray[np.bool_]
    wider_at_least: NDArray[np.bool_]


def head_size(rank: int, width: int) -> int:
    """Return how many leading modes are taken as they look: ``max(r + 2, k / 2)``."""
    return max(rank + 2, width // 2)


def squares_outside(modes: Floats, check: Floats) -> float:
    """Return ``|(I - U U^T) H|^2 / q``, an estimate of the sum of squared eigenvalues behind some modes.

    Parameters
    ----------
    modes : float64 (m, h)
        U, orthonormal columns.
    check : float64 (m, q)
        H, ``A A^T`` times q standard normal columns.
    """
    outside = check - modes @ (modes.T @ check)
    return float(np.linalg.norm(outside) ** 2 / max(check.shape[1], 1))


def fit_tail(total: float, squares: float, head: int, count: int) -> Tail:
    """Return the power law with a given sum and sum of squares.

    Parameters
    ----------
    total, squares : float
        T1 and T2, sums over the eigenvalues behind the head and over their squares; below zero counts as zero.
    head, count : int
        Eigenvalues before the tail and in it.

    Returns
    -------
    tail : Tail
        The exponent is the one whose ``T1^2 / T2`` fits, from 0 (all alike) to 60; the sum is always met.
    """
    require_between("head", head, 0)
    require_between("count", count, 0)
    if not (np.isfinite(total) and np.isfinite(squares)):
        raise ValueError(f"total, squares: must be finite; got {total}, {squares}")
    if count == 0 or total <= 0:
        return Tail(STEEPEST, 0.0, head, count)
    exponent = _exponent(total**2 / squares if squares > 0 else np.inf, head, count)
    return Tail(exponent, total / float(_power_law(exponent, head, count).sum()), head, count)


def fit_spectrum(
    values: Floats,
    right_estimate: Floats,
    energy_total: float,
    squares: float,
    *,
    head: int,
    count: int,
    width: int,
    reads: int,
    floor: float = 0.0,
) -> Spectrum:
    """Return the spectrum that fits what a read has seen.

    Parameters
    ----------
    values, right_estimate : float64 (k',)
        S and ``g^``, the estimate of ``|A^T u - S v|``, of all computed modes.
    energy_total : float
    squares : float
        ``squares_outside`` of the leading ``head`` modes.
    head : int
        ``head_size``; fewer if there are fewer modes.
    count : int
        Eigenvalues there can be: the lesser of channels and independent samples.
    width, reads : int
        Rows of the probe and reads up to now.
    floor : float
        Rounding floor of singular values.
    """
    require_shape("right_estimate", right_estimate, values.shape)
    require_finite("values", values)
    require_finite("right_estimate", right_estimate)
    require_between("width", width, 1)
    require_between("reads", reads, 1)
    require_between("head", head, 0)
    head = min(head, values.size, count)
    leading = np.sort(values**2 + _smooth(right_estimate**2))[::-1][:head]
    tail = fit_tail(energy_total - float(leading.sum()), squares, head, count - head)
    return Spectrum(np.concatenate([leading, tail.eigenvalues()]), tail, width, reads, floor)


def predicted_sine(
    spectrum: Spectrum, rank: int, width: int, reads: int, group: NDArray[np.integer] | None = None
) -> Floats:
    """Return the expected sine of the angle of each leading mode, or of its group.

    With t reads a probe of k rows leaves in mode i a share of mode j beyond rho of
    ``(lambda_j / lambda_i)^t lambda_i / (lambda_i - lambda_j)`` over the root of about ``k - rho``; and modes i, j
    before rho are turned into each other, because the errors of their right vectors are not orthogonal. Both are sums
    over expected squares; the least over rho counts. The second part is what rules close modes: without it, twice the
    width was predicted to be 40 times better than it was.

    Parameters
    ----------
    spectrum : Spectrum
    rank : int
        Modes wanted; fewer are returned if there are fewer in the head of the spectrum.
    width, reads : int
        Rows that carry the accuracy of all the reads, and the reads.
    group : int (k',), optional
        Number of the group of each mode. Turns within a group do not count then, and each member has the root of the
        sum of squares of all, as a bound of a group has. Without it every mode is told alone.

    Returns
    -------
    sine : float64 (r,)
        Between the least that is predicted and 1.
    """
    require_between("rank", rank, 0)
    require_between("width", width, 3)
    require_between("reads", reads, 1)
    rank = min(rank, spectrum.tail.head)
    if rank == 0 or not spectrum.eigenvalues[0] > 0:
        return np.zeros(rank)
    scaled, counts = _lumps(spectrum.eigenvalues / spectrum.eigenvalues[0], 2 * max(width, spectrum.width))
    numbers = np.arange(spectrum.tail.head) if group is None else np.asarray(group)[: spectrum.tail.head]
    rank_whole = rank if rank >= numbers.size else max(rank, int((numbers <= numbers[rank - 1]).sum()))
    gaps = _squared_gaps(scaled, counts, rank_whole, spectrum)
    fellows = np.zeros(gaps.shape, dtype=bool)
    fellows[:, : numbers.size] = numbers[:rank_whole, np.newaxis] == numbers
    gaps[fellows] = np.inf
    squares = np.array([_squared_sine(scaled, counts, gaps[i], i, width, reads) for i in range(rank_whole)])
    sine = np.sqrt(fellows[:rank, :rank_whole] @ squares)
    rounding = spectrum.floor / np.sqrt(np.maximum(spectrum.eigenvalues[:rank], np.finfo(np.float64).tiny))
    return np.asarray(np.clip(np.maximum(sine, rounding), LEAST_SINE, 1.0), dtype=np.float64)


def predict(spectrum: Spectrum, rank: int, fresh: int, group: NDArray[np.integer] | None = None) -> Predictions:
    """Return what one more read, or twice the width, is expected to bring.

    Parameters
    ----------
    spectrum : Spectrum
    rank : int
        Modes wanted.
    fresh : int
        Random rows that the probe of the next read has beside the directions found so far.
    group : int (k',), optional
        As for ``predicted_sine``: figures are those of groups then.
    """
    first = spectrum.reads == 1
    primed = spectrum.width if first else spectrum.width - max(14, rank, -(-spectrum.width // 4))
    ahead = spectrum.width + int(NEW_ROWS_COUNT * fresh) if first else int(PRIMED_SHARE * spectrum.width)
    read = predicted_sine(spectrum, rank, max(3, ahead), spectrum.reads + 1, group)
    wider = predicted_sine(spectrum, rank, max(3, 2 * primed), spectrum.reads, group)
    fast = spectrum.exponent >= FAST_EXPONENT
    return Predictions(
        read=np.minimum(ABOUT * read, 1),
        wider=np.minimum(ABOUT * wider, 1),
        read_at_least=(read <= LEAST_SINE) | fast,
        wider_at_least=(wider <= LEAST_SINE) | fast,
    )


def _power_law(exponent: float, head: int, count: int) -> Floats:
    place = np.arange(head + 1.0, head + count + 1.0)
    return np.asarray((place / max(head, 1)) ** -exponent, dtype=np.float64)


def _exponent(alike: float, head: int, count: int) -> float:
    """Return the exponent with a given number of effective eigenvalues ``T1^2 / T2``."""

    def excess(exponent: float) -> float:
        law = _power_law(exponent, head, count)
        law /= law[0]
        return float(law.sum() ** 2 / (law @ law)) - alike

    if excess(0.0) <= 0:
        return 0.0
    if excess(STEEPEST) >= 0:
        return STEEPEST
    return float(brentq(excess, 0.0, STEEPEST))


def _smooth(squares: Floats) -> Floats:
    """Return means over neighbours, fewer at the ends."""
    place = np.arange(squares.size)
    first = np.maximum(place - SMOOTHING, 0)
    stop = np.minimum(place + SMOOTHING + 1, squares.size)
    sums = np.concatenate([[0.0], np.cumsum(squares)])
    return np.asarray((sums[stop] - sums[first]) / (stop - first), dtype=np.float64)


def _from_the_end(terms: Floats) -> Floats:
    """Return ``sum_{j > rho} terms_j`` for rho = 0 .. N, modes counted from 1."""
    return np.concatenate([np.cumsum(terms[::-1])[::-1], [0.0]])


def _lumps(eigenvalues: Floats, alone: int) -> tuple[Floats, Floats]:
    """Return the first eigenvalues one by one and means of the rest, with counts: a million cost as little as some.

    Lumps reach a fiftieth further than they begin, so powers of a smooth tail lose nothing that matters.
    """
    head = min(max(alone, 1000), eigenvalues.size)
    places = np.arange(np.ceil(np.log(max(eigenvalues.size / head, 1.0)) / np.log(1.02)))
    edges = np.unique((head * 1.02**places).astype(np.int64))
    if head == eigenvalues.size:
        return eigenvalues, np.ones(head)
    counts = np.diff(np.append(edges, eigenvalues.size)).astype(np.float64)
    means = np.add.reduceat(eigenvalues, edges) / counts
    return np.concatenate([eigenvalues[:head], means]), np.concatenate([np.ones(head), counts])


def _splits(count: int, width: int) -> tuple[NDArray[np.integer], Floats]:
    """Return every rho, and ``k - rho + 1/3``: one over the median of the squared length of a row of a pseudo-inverse.

    The mean, ``1 / (k - rho - 1)``, is infinite near the end, where fast decays have their best rho.
    """
    rho = np.arange(1, min(width - 1, count) + 1)
    return rho, width + 1 / 3 - rho.astype(np.float64)


def _overlaps(scaled: Floats, counts: Floats, width: int, reads: int) -> Floats:
    """Return the expected squared product of the errors of two right vectors, for every rho, before their own scale.

    With ``Omega_1 (rho)``, ``Omega_2`` the probe along modes before and behind rho, and D the tail to the power
    2t - 1, it is an entry of ``(Omega_1^+)^T Omega_2^T D Omega_2 Omega_1^+``: the fluctuation of the middle, and its
    mean times an entry beside the diagonal of an inverse Wishart matrix.
    """
    power = 2 * reads - 1
    rho, rows = _splits(scaled.size, width)
    mean, fluctuation = _from_the_end(counts * scaled**power)[rho], _from_the_end(counts * scaled ** (2 * power))[rho]
    return np.asarray(fluctuation / rows**2 + mean**2 / rows**3, dtype=np.float64)


def _squared_gaps(scaled: Floats, counts: Floats, rank: int, spectrum: Spectrum) -> Floats:
    """Return squared gaps (rank, N) less the share that comes from mixing: modes that are mixed look further apart."""
    gaps = (scaled[:rank, np.newaxis] - scaled) ** 2
    head = min(spectrum.tail.head, max(spectrum.width - 1, 0))
    least = np.minimum.accumulate(_overlaps(scaled, counts, spectrum.width, spectrum.reads)[::-1])[::-1]
    later = np.maximum(np.arange(rank)[:, np.newaxis], np.arange(head))
    own = scaled[:rank, np.newaxis] * scaled[:head]
    with np.errstate(divide="ignore", over="ignore", invalid="ignore"):
        coupling = least[np.minimum(later, least.size - 1)] * own ** (2.0 - 2.0 * spectrum.reads)
    mixed = np.where(np.isfinite(coupling), LEVEL_REPULSION * coupling, np.inf)
    gaps[:, :head] = np.maximum(gaps[:, :head] - mixed, NARROWEST * gaps[:, :head])
    return gaps


def _squared_sine(scaled: Floats, counts: Floats, gaps: Floats, i: int, width: int, reads: int) -> float:
    rho, rows = _splits(scaled.size, width)
    place, power = np.arange(scaled.size), 2 * reads - 1
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        behind = np.where(place > i, counts * (scaled / scaled[i]) ** (2 * reads) * scaled[i] ** 2 / gaps, 0.0)
        turn = np.where(place != i, (scaled[i] * scaled) ** (1 - power) / gaps, 0.0)[: rho.size]
        # To first order; a turn is a right angle at most.
        turned = np.minimum(np.outer(_overlaps(scaled, counts, width, reads), turn), 1.0)
    turned[~np.isfinite(turned)] = 1.0
    turned *= place[: rho.size] < rho[:, np.newaxis]
    behind[~np.isfinite(behind)] = np.finfo(np.float64).max / scaled.size
    total = _from_the_end(behind)[rho] / rows + turned.sum(axis=1)
    return min(1.0, float(total[rho > i].min(initial=1.0)))
