"""How accurate computed modes are: residuals from the checks, unseen eigenvalues, groups, bounds on angles.

Everything is estimated from products with random rows, so no other read is needed. Nothing is said here about sampling
(how much of a mode is the luck of a short measurement), and nothing is decided: no verdict, no rank, no wording.

With ``A A^T = U Lambda U^T + E``, all computed modes in U, the remainder E is positive semidefinite. For a true left
singular vector ``x_l`` with eigenvalue ``mu_l`` and a computed mode ``u_i``, exactly, ``(mu_l - lambda_i) x_l^T u_i =
x_l^T E u_i``. Over all l these products are ``r_i = |E u_i|``, one by one at most ``g_i g_l`` (Cauchy and Schwarz, to
first order, ``g_i^2 = u_i^T E u_i``) and usually much less, because remainders of different modes point in different
directions. The worst case under these limits, nearest eigenvalue first, bounds the angle; for a group of modes only the
others count. Coefficients alike, with ``S_i / sigma_l x_l^T E u_i`` one by one and ``S_i g_i`` in all.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import eigh
from scipy.special import chdtri, digamma, polygamma

from .checks import require_between, require_finite, require_shape
from .comoments import Summary
from .factors import EPS, FLOOR_ULPS, Factors

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

CLOSE = 0.5  # neighbours whose mixing may exceed this belong together
LARGEST_SINE = 1.0  # a bound at or above says nothing

RISK_UNSEEN = 0.05  # chance that nu is too small where one direction dominates E; far smaller in a bulk
RISK_ALONE = 0.002  # of a residual raised by its own samples alone
RISK_LEAST = 0.25  # whatever the other modes say, a residual is raised at least to this risk by its own samples
DEVIATIONS = 3.5  # standard deviations of its logarithm by which a residual is raised together with the others
FEWEST_TOGETHER = 3  # modes
LEAST_SCATTER = (0.02, 0.05)  # variance of log r^2/g^2, of log g^2 about their trends: never taken to be smaller
MOST_GROWTH = 0.02  # of the unseen energy by leaving out a row; above, rows left out judge other modes than these
LEAST_MIXING = 0.1  # root mean square cosine between remainders, never taken to be smaller
MIXING_RATIO = 1.5  # of the least cosine used to the typical one
FULL_RANK = 1e-12  # least eigenvalue of the scaled C for which rows can be left out

# 5 % quantile of sum_{a != b} z_a^2 z_b^2 / (n (n - 1)) for n standard normal z; 1.6 million draws each, PCG64(7).
_QUARTIC_ROWS = (3.0, 4.0, 5.0, 6.0, 8.0, 10.0, 14.0, 20.0, 30.0, 60.0, 100.0, 200.0)
_QUARTIC = (0.005, 0.017, 0.033, 0.052, 0.09, 0.127, 0.191, 0.267, 0.356, 0.501, 0.595, 0.701)


@dataclass(frozen=True, eq=False)
class Checks:
    """What judges the computation: a product that needs no mode, so it is known before any.

    Attributes
    ----------
    h : float64 (m, q)
        ``A (Theta A)^T``, the background removed from A. It is found at the first read and stays true later.
    theta : float64 (q, m)
        The check probe, standard normal.
    """

    h: Floats
    theta: Floats


@dataclass(frozen=True, eq=False)
class Residuals:
    """Upper values of what is left of each computed mode and of the matrix.

    Attributes
    ----------
    left : float64 (k',)
        r_i, for ``|A A^T u_i - lambda_i u_i|``.
    right : float64 (k',)
        g_i, for ``|A^T u_i - S_i v_i|``; ``u_i^T A A^T u_i = lambda_i + g_i^2``.
    right_estimate : float64 (k',)
        The same, neither raised nor limited.
    unseen : float
        nu, for the largest eigenvalue of A A^T in what the modes do not hold.
    floor : float
        Rounding floor of eigenvalues: the square of that of singular values.
    mixing : float64 (k', k') or None
        Cosines c_il, so that ``|u_i^T E u_l|`` is taken to be at most ``c_il g_i g_l``; ``None`` stands for ones.
    """

    left: Floats
    right: Floats
    right_estimate: Floats
    unseen: float
    floor: float
    mixing: Floats | None = None


@dataclass(frozen=True, eq=False)
class Bounds:
    """Groups of modes and bounds on the sine of their largest principal angle to the truth.

    Attributes
    ----------
    group : int64 (k',)
        Number of each mode's group, from 0.
    sine : float64 (k',)
        Bound for the span of the mode's group; NaN where there is none. Single members of a group are never judged.
    coefficient_sine : float64 (k',)
        The same for coefficients, so for right singular vectors.
    upper : float64 (k' + 1,)
        Upper values of the true eigenvalues; the last is that of all further ones.
    """

    group: NDArray[np.int64]
    sine: Floats
    coefficient_sine: Floats
    upper: Floats


def residuals(
    reduced: Summary, factors: Factors, checks: Checks | None, probe: NDArray[np.number] | None = None
) -> Residuals:
    """Return the upper values of what the modes leave.

    Parameters
    ----------
    reduced : Summary
        Moments about zero of the decomposed matrix, of the read the factors come from.
    factors : Factors
        All its modes.
    checks : Checks or None
        ``None`` if the modes are exact but for rounding, as with the identity probe.
    probe : real (k, m) or None
        Upsilon of this read. Its rows of random signs, each left out in turn, are further checks; without it, or after
        it was changed, there are the checks alone and bounds are wider.

    Returns
    -------
    residuals : Residuals

    Raises
    ------
    ValueError
        A shape does not fit the factors, a check is not finite, or there are fewer than 3.

    Notes
    -----
    Modes share their random rows, so errors of these estimates come together. Each is raised so far that all wanted
    modes of a dossier after a read are free of false bounds with probability 95 % (measured, 13 spectra, 1 to 3 reads,
    160 dossiers each, two seeds: 96 to 100 %). Part of that rests on experience: modes of one matrix have similar
    ratios ``r_i / g_i`` (measured: scatter 2 to 20 %), so they are estimated together; a mode unlike the others is
    still raised to 75 % by its own samples.
    """
    count, floor = factors.values.size, factors.floor**2
    if checks is None:
        nothing = np.zeros(count)
        return Residuals(nothing, nothing, nothing, floor, floor)
    _check_doors(reduced, factors, checks, probe)
    squares = factors.values**2
    remainder = checks.h - factors.modes @ (squares * (checks.theta @ factors.modes)).T
    if probe is not None:
        remainder = np.concatenate([remainder, factors.modes @ _left_out(reduced, factors, probe).T], axis=1)
    rest = max(0.0, factors.energy_total - float(squares.sum())) + floor
    nu = max(min(rest, _unseen(remainder, len(checks.theta))), floor)
    right = _right_samples(reduced, factors)
    r, g = _raised(remainder.T @ factors.modes, right, squares > nu, floor)
    # E is positive semidefinite: g^2 = u^T E u <= |E u| = r and r^2 = u^T E^2 u <= nu g^2.
    g = np.maximum(np.minimum(g, np.sqrt(r)), np.sqrt(floor))
    r = np.maximum(np.minimum(r, g * np.sqrt(nu)), floor)
    return Residuals(r, g, np.sqrt(_mean_square(right)), nu, floor, _mixing(right, (squares > nu) & (g**2 > 4 * floor)))


def bounds(factors: Factors, residuals: Residuals, n_effective: float) -> Bounds:
    """Return groups, and the bound of each.

    Parameters
    ----------
    factors : Factors
    residuals : Residuals
    n_effective : float
        Effective number of independent samples, above zero; infinite to group by the computation alone.

    Returns
    -------
    bounds : Bounds
        A group that reaches the last computed mode has no bound, unless nothing is unseen.
    """
    if not n_effective > 0:
        raise ValueError(f"n_effective: must be above zero; got {n_effective}")
    squares, g = factors.values**2, residuals.right
    least = _rounding(factors, residuals)
    left, right = np.maximum(residuals.left, least), np.maximum(factors.values * g, least)
    coupling = np.maximum(
        np.outer(g, g) * (1.0 if residuals.mixing is None else residuals.mixing), least[:, np.newaxis]
    )
    raised = squares + np.minimum(g**2, residuals.unseen)
    # Computed eigenvalues are lower bounds, so gaps between them can be false.
    upper = np.maximum.accumulate(np.append(raised, residuals.unseen)[::-1])[::-1].copy()
    group = _groups(squares, upper, np.minimum(left[:-1], np.diagonal(coupling, 1)), n_effective)
    sines = np.full((2, squares.size), np.nan)
    # Nothing unseen may mix with the last mode where it is small against it and the remainder smaller still.
    last = float(squares[-1]) - residuals.unseen if squares.size else 0.0
    apart = last > residuals.floor and bool(residuals.left[-1] <= CLOSE * last)
    for members in _spans(group):
        if members.stop < squares.size or residuals.unseen <= residuals.floor or apart:
            sines[:, members] = _group_sines(squares, raised, upper, (left, right), coupling, members).reshape(2, 1)
    sines[sines >= LARGEST_SINE] = np.nan
    return Bounds(group, sines[0], sines[1], upper)


def _rounding(factors: Factors, residuals: Residuals) -> Floats:
    """Return how far rounding may move a mode's eigenvalue: a floor of singular values moves it by ``2 S_i`` times."""
    # The mean is known to some rounding of itself: so much of it stays in every sample.
    left_of_mean = FLOOR_ULPS * EPS * np.sqrt(factors.n) * float(np.linalg.norm(factors.removal.mean))
    most = FLOOR_ULPS * EPS * factors.energy_total + 2 * factors.values * left_of_mean
    return np.asarray(np.maximum(residuals.floor, np.minimum(2 * factors.values * factors.floor, most)))


def _check_doors(reduced: Summary, factors: Factors, checks: Checks, probe: NDArray[np.number] | None) -> None:
    m, q = checks.h.shape
    require_between("checks.h.shape[1]", q, 3)
    require_between("reduced.shape.q_xi", reduced.shape.q_xi, 3)
    require_shape("checks.h", checks.h, (factors.modes.shape[0], q))
    require_shape("checks.theta", checks.theta, (q, m))
    require_finite("checks.h", checks.h)
    if probe is not None:
        require_shape("probe", probe, (reduced.shape.k, m))


def _mean_square(samples: Floats) -> Floats:
    return np.asarray(np.mean(samples**2, axis=0))


def _chi_square(rows: int, risk: float) -> float:
    """Return the quantile of chi2_q / q that is not reached with probability ``risk``."""
    return float(chdtri(rows, 1 - risk)) / rows


def _unseen(remainder: Floats, q: int) -> float:
    """Return an upper value of the largest eigenvalue of E from samples (m, N), the first q of them ``E Theta^T``.

    With ``z = Theta w`` of the leading eigenvector w, the largest eigenvalue of ``Theta E^2 Theta^T >= nu^2 z z^T`` is
    at least ``nu^2 |z|^2``. Products of different samples tell the Schatten 4-norm, closer where E has a bulk.
    """
    gram, n = remainder.T @ remainder, remainder.shape[1]
    largest = np.sqrt(np.linalg.eigvalsh(gram[:q, :q])[-1] / (q * _chi_square(q, RISK_UNSEEN)))
    across = float(np.sum(gram**2) - np.sum(np.diagonal(gram) ** 2)) / (n * (n - 1))
    schatten = (across / float(np.interp(n, _QUARTIC_ROWS, _QUARTIC))) ** 0.25
    return float(min(largest, schatten))


def _right_samples(reduced: Summary, factors: Factors) -> Floats:
    """Return ``F^T u_i - S_i Xi v_i`` (q, k'): rows are normal with covariance ``U^T E U``."""
    shape = reduced.shape
    return reduced.outer[:, shape.xi].T @ factors.modes - (factors.row_map @ reduced.inner[shape.x, shape.xi]).T


def _left_out(reduced: Summary, factors: Factors, probe: NDArray[np.number]) -> Floats:
    """Return ``(E_j upsilon_j)^T u_i`` (f, k') for the random rows j; E_j is the remainder without row j in the probe.

    As ``U Lambda U^T = W C^{-1} W^T`` and E is a Schur complement, ``E_j upsilon_j = W C^{-1} e_j / (C^{-1})_jj``; with
    ``U^T W C^{-1}`` the row map nothing has to be computed again. Samples of E_j are as good as those of E only where
    one row matters little: elsewhere E is large just when the rows left out look small (measured: of 307 results with
    a growth of 0.02 to 0.04, 4 % held a residual below its 0.05 % quantile; 0.6 % of 776 with a growth below 0.01).
    """
    x = reduced.shape.x
    c, size = reduced.inner[x, x], np.abs(probe)
    random = np.flatnonzero(size.min(axis=1) == size.max(axis=1))
    rest = factors.energy_total - float(np.sum(factors.values**2))
    nothing = np.empty((0, factors.values.size))
    if not random.size or np.diagonal(c).min() <= 0 or rest <= factors.floor**2:
        return nothing
    d = 1 / np.sqrt(np.diagonal(c))
    eigenvalues, q = eigh(d[:, np.newaxis] * c * d)
    if eigenvalues[0] <= max(FULL_RANK, 16 * factors.floor**2 / factors.energy_total) * eigenvalues[-1]:
        return nothing
    left = 1 / (d**2 * np.einsum("ij,ij->i", q / eigenvalues, q))[random]  # energy of a row the others do not hold
    rows = factors.row_map[:, random]
    grown = float(np.mean(np.sum(rows**2, axis=0) * left))
    return (rows * (left / size[random, 0])).T if grown <= MOST_GROWTH * rest else nothing


def _raised(left: Floats, right: Floats, seen: Flags, floor: float) -> tuple[Floats, Floats]:
    """Return upper values r, g (k',) from samples (N, k'), (q, k'): alone, or together if modes are enough."""
    rows = len(left), len(right)
    squares = np.maximum(_mean_square(left), floor**2), np.maximum(_mean_square(right), floor)
    upper = [square / _chi_square(n, RISK_ALONE) for square, n in zip(squares, rows, strict=True)]
    together = seen & (squares[0] > 4 * floor**2) & (squares[1] > 4 * floor)
    if together.sum() >= FEWEST_TOGETHER:
        found = _together(left[:, together], right[:, together])
        for k in (0, 1):
            least = squares[k][together] / _chi_square(rows[k], RISK_LEAST)
            upper[k][together] = np.maximum(np.exp(found[k]), least)
    return np.sqrt(upper[0]), np.sqrt(upper[1])


def _together(left: Floats, right: Floats) -> tuple[Floats, Floats]:
    """Return upper values of ``log r^2`` and ``log g^2`` of modes that lend each other strength.

    Both follow a smooth trend of the order of modes up to a normal scatter, found from the samples (empirical Bayes for
    variances, after Smyth, Stat. Appl. Genet. Mol. Biol. 3 (2004) 3, from memory): priors ``log g^2 ~ N(a, s_a)``,
    ``log r^2/g^2 ~ N(b, s_b)``. Where all remainders point the same way, others tell nothing new: own variances count.
    """
    (y_r, v_r), (y_g, v_g) = _log_variance(left), _log_variance(right)
    b, share, scatter = _trend(y_r - y_g)
    s_b = max(scatter - v_r - v_g, LEAST_SCATTER[0]) + share * (scatter + v_r + v_g)
    v_both = 1 / (1 / v_g + 1 / (v_r + s_b))
    both = v_both * (y_g / v_g + (y_r - b) / (v_r + s_b))
    a, share, scatter = _trend(both)
    s_a = np.maximum(scatter - v_both, LEAST_SCATTER[1]) + share * (scatter + v_both)
    # Information matrix of (log g^2, log r^2/g^2), observed as the first and as the sum of both.
    i_gg, i_gb, i_bb = 1 / s_a + 1 / v_g + 1 / v_r, 1 / v_r, 1 / s_b + 1 / v_r
    t_g, t_b = a / s_a + y_g / v_g + y_r / v_r, b / s_b + y_r / v_r
    determinant = i_gg * i_bb - i_gb**2
    log_g = (i_bb * t_g - i_gb * t_b) / determinant
    log_b = (i_gg * t_b - i_gb * t_g) / determinant
    c_r, c_g = _alignment(left), _alignment(right)
    variance_r = (1 - c_r) * (i_bb + i_gg - 2 * i_gb) / determinant + c_r * v_r
    variance_g = (1 - c_g) * i_bb / determinant + c_g * v_g
    return log_g + log_b + DEVIATIONS * np.sqrt(variance_r), log_g + DEVIATIONS * np.sqrt(variance_g)


def _log_variance(samples: Floats) -> tuple[Floats, float]:
    """Return the unbiased logarithm of the variance of normal samples (N, k'), and its own variance."""
    half = len(samples) / 2
    y: Floats = np.log(_mean_square(samples)) - (digamma(half) - np.log(half))
    return y, float(polygamma(1, half))


def _trend(y: Floats) -> tuple[Floats, Floats, float]:
    """Return a least-squares polynomial in the order of modes, the leverage of each, and the variance about it."""
    degree = 0 if y.size < 6 else 1 if y.size < 12 else 2
    q, _ = np.linalg.qr(np.vander(np.linspace(-1, 1, y.size), degree + 1))
    fit = q @ (q.T @ y)
    return fit, np.einsum("ij,ij->i", q, q), float(np.sum((y - fit) ** 2)) / (y.size - degree - 1)


def _cosines(samples: Floats) -> Floats:
    length = np.linalg.norm(samples, axis=0)
    unit: Floats = samples / np.where(length > 0, length, 1)
    return unit.T @ unit


def _alignment(samples: Floats) -> float:
    """Return the mean squared cosine between vectors seen through N random rows, chance taken off; 0 to 1."""
    n, count = samples.shape
    across = (float(np.sum(_cosines(samples) ** 2)) - count) / (count * (count - 1))
    return float(np.clip((across - 1 / n) / (1 - 1 / n), 0, 1))


def _mixing(right: Floats, seen: Flags) -> Floats:
    """Return upper values of the cosines ``|u_i^T E u_l| / (g_i g_l)`` (k', k').

    Few samples tell a single cosine badly and the typical one well: a pair is taken to have what itself shows, and at
    least 1.5 times the typical one. What one pair exceeds by, the many others that reach less make up for (measured).
    """
    if seen.sum() <= FEWEST_TOGETHER:
        return np.ones((seen.size, seen.size))
    typical = np.sqrt(_alignment(right[:, seen]) + LEAST_MIXING**2)
    cosines: Floats = np.clip(np.abs(_cosines(right)), MIXING_RATIO * typical, 1)
    return cosines


def _groups(squares: Floats, upper: Floats, mixed: Floats, n_effective: float) -> NDArray[np.int64]:
    """Number the groups: neighbours belong together if the computation (``mixed``) or the sampling may mix them."""
    gap = squares[:-1] - upper[1:-1]
    apart = np.maximum(squares[:-1] - squares[1:], 0)
    sampled = np.sqrt(squares[:-1] * squares[1:] / n_effective)
    joined = (gap <= 0) | (mixed > CLOSE * gap) | (sampled > CLOSE * apart)
    return np.append(0, np.cumsum(~joined))[: squares.size].astype(np.int64)


def _spans(group: NDArray[np.int64]) -> list[slice]:
    starts = np.flatnonzero(np.diff(group, prepend=-1))
    return [slice(int(a), int(b)) for a, b in zip(starts, np.append(starts[1:], group.size), strict=False)]


def _group_sines(
    squares: Floats, raised: Floats, upper: Floats, totals: tuple[Floats, Floats], coupling: Floats, members: slice
) -> Floats:
    """Return the bounds of one group, left and right (2,): the root of the sum over its members.

    The value of a member may be too small; the raised one counts against the modes above.
    """
    others = np.r_[0 : members.start, members.stop : squares.size]
    values, sums = np.sqrt(squares), np.zeros(2)
    for i in range(members.start, members.stop):
        gaps = np.concatenate([squares[: members.start] - raised[i], squares[i] - upper[members.stop :]])
        if gaps.min() <= 0:
            return np.full(2, np.nan)
        ratios = (1.0, values[i] / values[others])
        sums += [_worst(gaps, coupling[i, others] * ratios[k], totals[k][i]) for k in (0, 1)]
    return np.sqrt(sums)


def _worst(gaps: Floats, most: Floats, total: float) -> float:
    """Return the largest ``sum (x / gap)^2`` with ``x <= most`` (the last: any) and ``sum x^2 <= total^2``."""
    order = np.argsort(gaps, kind="stable")
    limits = np.append(most, total)[order] ** 2
    before = np.cumsum(limits) - limits
    spent = np.minimum(limits, np.maximum(total**2 - before, 0))
    return float(np.sum(spent / gaps[order] ** 2))
