"""Known functions of time, and their removal from a summary after the fact: the mean, a trend, declared cycles.

Products with the functions G stand in every summary, so any subset of them can be taken off without reading anything:
what is left is the summary of ``A (I - G^T T G)`` with ``T = pinv(G G^T)``. The same is done to the stack of a part (a
leaf), about the background of the whole. Which functions are wanted is not decided here.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from .checks import require_between
from .comoments import Shape, Summary
from .comoments import keep_mean as with_mean_kept

Floats = NDArray[np.float64]

RANK_TOLERANCE = 1e-10  # a combination of functions, each of unit size, that varies less (squared) tells nothing


@dataclass(frozen=True)
class Terms:
    """The functions of a dossier: none, a trend, cycles.

    Attributes
    ----------
    origin_ns, unit_ns : int
        The trend is ``(t - origin) / unit``; a unit of 0 stands for no trend.
    periods_ns : tuple of int
        Each cycle has two functions, cosine and sine, whose phase is zero at the Unix epoch.
    """

    origin_ns: int = 0
    unit_ns: int = 0
    periods_ns: tuple[int, ...] = ()

    @property
    def count(self) -> int:
        """Return the number of functions p."""
        return bool(self.unit_ns) + 2 * len(self.periods_ns)

    def rows(self, trend: bool, periods_ns: Sequence[int]) -> tuple[int, ...]:
        """Return which functions make up some of the terms.

        Raises
        ------
        ValueError
            A term is not one of these.
        """
        if trend and not self.unit_ns:
            raise ValueError("trend: must be one of the functions; got none")
        found = [0] if trend else []
        for period in periods_ns:
            first = bool(self.unit_ns) + 2 * self.periods_ns.index(period)
            found += [first, first + 1]
        return tuple(found)


def functions(terms: Terms, times_ns: NDArray[np.int64]) -> Floats:
    """Return the functions at some times.

    Whole periods and whole units are taken off in integers, so that nothing is lost decades from the epoch.

    Parameters
    ----------
    terms : Terms
    times_ns : int64 (n,)
        Nanoseconds since the Unix epoch.

    Returns
    -------
    g : float64 (p, n)
        Trend, then cosine and sine of each cycle.
    """
    g = np.empty((terms.count, len(times_ns)))
    row = 0
    if terms.unit_ns:
        whole, part = np.divmod(times_ns - np.int64(terms.origin_ns), np.int64(terms.unit_ns))
        g[0] = whole + part / terms.unit_ns
        row = 1
    for period in terms.periods_ns:
        phase = (2 * np.pi / period) * (times_ns % np.int64(period))
        np.cos(phase, out=g[row])
        np.sin(phase, out=g[row + 1])
        row += 2
    return g


@dataclass(frozen=True, eq=False)
class Removal:
    """What was taken off all samples: ``mean + weights (g(t) - mean of g)``, and the same in the stack.

    Attributes
    ----------
    mean, right_mean : float64 (m,), (s,)
        Zeros where the mean is kept.
    rows, places : tuple of int, list of int (p',)
        Which functions were fitted and taken off, and where they are in the stack.
    weights, right_weights : float64 (m, p'), (s, p')
        ``A G^T T`` and ``R G^T T`` for those functions.
    rank : int
        Independent functions among them; fewer than ``len(rows)`` if the samples cannot tell some apart.
    about : float64 (p',)
        Mean of each of those functions, zeros where the mean is kept.
    keep_mean : bool
        Whether the mean was left in.
    """

    mean: Floats
    right_mean: Floats
    rows: tuple[int, ...]
    places: list[int]
    weights: Floats
    right_weights: Floats
    rank: int
    about: Floats
    keep_mean: bool


def reduce(summary: Summary, *, keep_mean: bool = False, rows: Sequence[int] = ()) -> tuple[Summary, Removal]:
    """Return the summary of what is left when the mean and some functions are removed, and what was removed.

    Parameters
    ----------
    summary : Summary
        Moments about the mean, as added up. Not changed.
    keep_mean : bool
        Leave the mean in: all moments, those of the functions too, are about zero.
    rows : sequence of int
        Functions to remove, numbers within G.

    Returns
    -------
    reduced : Summary
        Moments of the residual; its ``mean`` stays the mean of the samples. ``summary`` itself if nothing is fitted.
        Equal to removal before the read within ``1e-12 max(1, energy before / energy after)``.
    removal : Removal

    Raises
    ------
    ValueError
        A row is not one of G.
    """
    shape = summary.shape
    for row in rows:
        require_between("rows", row, 0, shape.p - 1)
    if keep_mean:
        summary = with_mean_kept(summary)
    means = (np.zeros(shape.m), np.zeros(shape.s)) if keep_mean else (summary.mean.copy(), summary.right_mean.copy())
    if not rows:
        nothing = np.empty((shape.m, 0)), np.empty((shape.s, 0))
        return summary, Removal(*means, (), [], *nothing, 0, np.empty(0), keep_mean)
    places = _places(shape, rows)
    inverse, rank = _inverse_of(summary, places, keep_mean)
    weights, right = summary.outer[:, places] @ inverse, summary.inner[:, places] @ inverse
    left_products, right_products = summary.outer[:, places], summary.inner[places]
    inner, outer = summary.inner - right @ right_products, weights @ right_products
    np.subtract(summary.outer, outer, out=outer)
    energy = np.maximum(summary.energy - np.einsum("ij,ij->i", weights, left_products), 0)
    reduced = replace(summary, outer=outer, inner=(inner + inner.T) / 2, energy=energy)
    return reduced, Removal(*means, tuple(rows), places, weights, right, rank, means[1][places], keep_mean)


def apply(n: int, right_mean: Floats, inner: Floats, removal: Removal) -> Floats:
    """Return the products of the stack of a part of the samples, about the background of all of them.

    The parts of a campaign add up to ``inner`` of its reduced summary: plainly, no step between means is left. The
    products with the channels are not needed to judge modes by leaves, and are large.

    Parameters
    ----------
    n : int
        Samples of the part.
    right_mean, inner : float64 (s,), (s, s)
        Of the part's summary, about its own mean. Not changed.
    removal : Removal
        Of the whole.

    Returns
    -------
    inner : float64 (s, s)
    """
    d = right_mean - removal.right_mean
    moved: Floats = inner + np.outer(n * d, d)
    if not removal.rows:
        return moved
    weights = removal.right_weights
    right = moved[:, removal.places].copy()
    moved += (weights @ right[removal.places] - right) @ weights.T - weights @ right.T
    return moved


def term_energies(summary: Summary, groups: Sequence[Sequence[int]], *, keep_mean: bool = False) -> Floats:
    """Return the energy that each further group of functions takes from each channel, one group after the other.

    Parameters
    ----------
    summary : Summary
        Moments about the mean, as added up.
    groups : sequence of sequences of int, length g
        Functions of each term; what two terms share is counted to the earlier one.
    keep_mean : bool
        As in ``reduce``.

    Returns
    -------
    energies : float64 (g, m)
        Their sum is what ``reduce`` with all the functions takes off.
    """
    if keep_mean:
        summary = with_mean_kept(summary)
    taken = [np.zeros(summary.shape.m)]
    for count in range(1, len(groups) + 1):
        places = _places(summary.shape, [row for group in groups[:count] for row in group])
        products = summary.outer[:, places]
        inverse, _ = _inverse_of(summary, places, keep_mean)
        taken.append(np.einsum("ij,ij->i", products @ inverse, products))
    return np.maximum(np.diff(np.array(taken), axis=0), 0)


def _places(shape: Shape, rows: Sequence[int]) -> list[int]:
    return [shape.g.start + row for row in rows]


def _inverse_of(summary: Summary, places: list[int], keep_mean: bool) -> tuple[Floats, int]:
    gram = summary.inner[np.ix_(places, places)]
    level = np.zeros(len(places)) if keep_mean else summary.right_mean[places]
    return pseudo_inverse(gram, np.diagonal(gram) + summary.n * level**2)


def pseudo_inverse(gram: Floats, sizes: Floats) -> tuple[Floats, int]:
    """Return the pseudo-inverse of the products of some functions, and how many of them are independent.

    A combination counts if it varies by more than ``RANK_TOLERANCE`` of what its functions measure about zero: less is
    near rounding, and would take a random direction off the channels.

    Parameters
    ----------
    gram : float64 (p', p')
        Products about the mean.
    sizes : float64 (p',)
        Sums of squares about zero.
    """
    scale = np.zeros(len(gram))
    live = sizes > 0
    scale[live] = 1 / np.sqrt(sizes[live])
    values, q = scipy.linalg.eigh(scale[:, np.newaxis] * gram * scale)
    strong = values > RANK_TOLERANCE
    root = scale[:, np.newaxis] * q[:, strong] / np.sqrt(values[strong])
    return root @ root.T, int(strong.sum())
