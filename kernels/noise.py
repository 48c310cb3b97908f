"""The noise edge: how many modes stand out of white noise that is equal in all channels, and whether it is.

Singular values of pure white noise end at an edge known from its variance and the sizes alone. Here live the variance
that reproduces itself, the edge, the optimal hard threshold, the state of each mode and the test of the hypothesis on
the residual energy of each channel. Nothing is decided here about sampling or about the accuracy of the computation.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import Enum

import numpy as np
from numpy.typing import NDArray
from scipy import integrate, optimize, special

from .checks import require_between, require_finite, require_shape

Floats = NDArray[np.float64]

TRACY_WIDOM_99 = 2.0234  # 99 % quantile of the law of first order (from memory)
SIGNIFICANCE = 0.01  # of the test that all channels hold the same noise
HARMLESS_SHIFT = 1.01  # unequal noise that moves the edge by less than this factor changes no state worth telling
LEAST_OWN_SHARE = 0.05  # a channel of which the modes take more says nothing reliable about noise


class State(Enum):
    """Where a mode stands against the noise."""

    AT_NOISE = "at noise"
    WEAK = "weak"
    ABOVE = "above"


@dataclass(frozen=True, eq=False)
class NoiseEdge:
    """What white noise equal in all channels would explain.

    Attributes
    ----------
    count : int
        Leading modes beyond ``limit``: the least number that reproduces itself.
    variance : float
        Variance s^2 of the noise in one value of the prepared matrix; 0 where the modes capture everything.
    edge : float
        Where the singular values of such noise alone end, ``(1 + sqrt(beta)) sqrt(max) s``.
    limit : float
        What the largest singular value of such noise exceeds once in a hundred times; a mode counts beyond it. (The
        edge itself was exceeded once in ten times.)
    hard : float
        Optimal hard threshold for singular values, ``lambda(beta) sqrt(max) s``; above the edge.
    states : tuple of State, length k'
        At noise from ``count`` on; before, weak up to ``hard`` and above beyond it.
    reached : bool
        Whether a computed mode lies at noise, or none is left. If not, the variance still holds modes that were never
        computed: edge and threshold are too high rather than too low.
    white : bool or None
        Whether "equal in all channels" holds: ``False`` if residuals differ beyond chance (``probability`` below 0.01)
        and enough to matter (``shift`` above 1.01); ``None`` where it cannot be tested. Noise that is coloured in time
        but equal in all channels is not seen.
    probability : float
        Chance of residuals at least as unequal if the noise is equal in all channels; NaN if not tested.
    shift : float
        Edge with each channel's own variance over the edge given; NaN if not tested.
    """

    count: int
    variance: float
    edge: float
    limit: float
    hard: float
    states: tuple[State, ...]
    reached: bool
    white: bool | None
    probability: float
    shift: float


def noise_edge(
    values: Floats,
    right_estimate: Floats,
    energy: Floats,
    m: int,
    n: int,
    p: int,
    *,
    modes: Floats | None = None,
    floor: float = 0.0,
) -> NoiseEdge | None:
    """Return the edge of the noise that is left when the modes above that same edge are taken out.

    Modes are counted up from none: while the next one stands out of what is left without the ones counted, it is
    counted too. A mode is measured by ``u^T A A^T u = S^2 + g^2``, with the estimate of g and not its upper value,
    because one read makes ``S`` of a weak mode too small.

    Parameters
    ----------
    values : float64 (k',)
        S of all computed modes, non-increasing.
    right_estimate : float64 (k',)
        Estimates of ``g_i = |A^T u_i - S_i v_i|``; zero with the identity probe.
    energy : float64 (m,)
        Sum of squares of each channel.
    m, n, p : int
        Channels, samples, and rows of the background removed, the ones included.
    modes : float64 (m, k'), optional
        U; needed to test the hypothesis.
    floor : float
        Rounding floor of singular values: a residual at it is no noise.

    Returns
    -------
    noise : NoiseEdge or None
        ``None`` where no residual degrees of freedom are left to estimate the noise from. A residual of nothing but
        rounding gives variance 0 and all modes above.

    Notes
    -----
    Edge: Geman, Ann. Probab. 8 (1980) 252. Limit: Johnstone, Ann. Statist. 29 (2001) 295. Threshold: Gavish, Donoho,
    IEEE T-IT 60 (2014) 5040. All from memory.
    """
    _check_doors(values, right_estimate, energy, m, n, p, modes)
    if m < 1 or n - p < 1:
        return None
    squares, rows = values**2 + right_estimate**2, n - p
    full, left = min(m, rows), float(energy.sum()) - float(squares.sum())
    if values.size < full and left <= floor**2:
        return _no_noise(values.size)
    count = _count(squares, float(energy.sum()), m, rows, floor)
    return None if count >= full else _edge(squares, energy, count, rows, modes)


def hard_threshold(beta: float) -> float:
    """Return ``lambda(beta)``: the optimal hard threshold over ``sqrt(max) s`` where s is known.

    Gavish, Donoho, IEEE T-IT 60 (2014) 5040. ``beta`` is the smaller size over the larger one.
    """
    _require_ratio(beta)
    return float(np.sqrt(2 * (beta + 1) + 8 * beta / (beta + 1 + np.sqrt(beta**2 + 14 * beta + 1))))


def hard_threshold_unknown(beta: float) -> float:
    """Return ``omega(beta)``: the optimal hard threshold over the median singular value, where s is unknown.

    Gavish, Donoho, IEEE T-IT 60 (2014) 5040: ``lambda(beta) / sqrt(mu_beta)``.
    """
    return hard_threshold(beta) / float(np.sqrt(marchenko_pastur_median(beta)))


def marchenko_pastur_median(beta: float) -> float:
    """Return the median ``mu_beta`` of the eigenvalues of white noise of unit variance, over the larger size.

    The distribution function is integrated over the angle t of ``x = 1 + beta + 2 sqrt(beta) cos t``, where the
    integrand is smooth.
    """
    _require_ratio(beta)
    root = np.sqrt(beta)

    def density(t: float) -> float:
        return float(2 * np.sin(t) ** 2 / (np.pi * (1 + beta + 2 * root * np.cos(t))))

    def share_above(t: float) -> float:
        return float(integrate.quad(density, 0.0, t, epsabs=1e-12, epsrel=1e-12)[0])

    t = optimize.brentq(lambda angle: share_above(angle) - 0.5, 1e-9, np.pi - 1e-9, xtol=1e-13)
    return float(1 + beta + 2 * root * np.cos(t))


def uneven_edge(variances: Floats, samples: int) -> float:
    """Return the largest singular value of noise that is white in time and has its own variance in each channel.

    The upper end of the support is the least value of ``z(g) = -1/g + sum_j v_j / (1 + v_j g) / n`` over
    ``-1/max v < g < 0`` (Silverstein, Choi, J. Multivar. Anal. 54 (1995) 295, from memory), times the samples.

    Parameters
    ----------
    variances : float64 (m,)
        At least one above zero.
    samples : int
    """
    largest = float(variances.max())
    v = variances / largest

    def z(h: float) -> float:
        return float(1 / h + np.sum(v / (1 - v * h)) / samples)

    found = optimize.minimize_scalar(z, bounds=(0.0, 1.0), method="bounded", options={"xatol": 1e-12})
    return float(np.sqrt(largest * samples * found.fun))


def _count(squares: Floats, energy: float, m: int, rows: int, floor: float) -> int:
    count, full = 0, min(m, rows)
    while count < min(squares.size, full):
        variance = _variance(squares, energy, count, m, rows)
        if variance * (m - count) * (rows - count) > floor**2 and (
            squares[count] <= variance * _limit_of_unit_noise(m, rows) ** 2
        ):
            break
        count += 1
    return count


def _variance(squares: Floats, energy: float, count: int, m: int, rows: int) -> float:
    left = max(0.0, energy - float(squares[:count].sum()))
    return left / ((m - count) * (rows - count))


def _limit_of_unit_noise(m: int, rows: int) -> float:
    """Return the 99 % value of the largest singular value, by the Tracy-Widom law of its square."""
    a, b = np.sqrt(max(rows - 1, 1)), np.sqrt(m)
    return float(np.sqrt((a + b) ** 2 + TRACY_WIDOM_99 * (a + b) * np.cbrt(1 / a + 1 / b)))


def _edge(squares: Floats, energy: Floats, count: int, rows: int, modes: Floats | None) -> NoiseEdge:
    m = energy.size
    variance = _variance(squares, float(energy.sum()), count, m, rows)
    s = float(np.sqrt(variance))
    hard = s * float(np.sqrt(max(m, rows))) * hard_threshold(min(m, rows) / max(m, rows))
    white, probability, shift = None, float("nan"), float("nan")
    if modes is not None:
        white, probability, shift = _test_equal(energy, modes[:, :count], squares[:count], rows - count)
    return NoiseEdge(
        count=count,
        variance=variance,
        edge=s * float(np.sqrt(m) + np.sqrt(rows)),
        limit=s * _limit_of_unit_noise(m, rows),
        hard=hard,
        states=tuple(_state(i < count, square > hard**2) for i, square in enumerate(squares)),
        reached=count < squares.size,
        white=white,
        probability=probability,
        shift=shift,
    )


def _state(counted: bool, strong: bool) -> State:
    if not counted:
        return State.AT_NOISE
    return State.ABOVE if strong else State.WEAK


def _no_noise(modes: int) -> NoiseEdge:
    return NoiseEdge(modes, 0.0, 0.0, 0.0, 0.0, (State.ABOVE,) * modes, True, None, float("nan"), float("nan"))


def _test_equal(energy: Floats, modes: Floats, squares: Floats, rows: int) -> tuple[bool | None, float, float]:
    """Compare the variance left in each channel with the mean one.

    What the modes leave of channel j is ``rows`` samples of variance ``s^2 (1 - h_j)``, h_j its share in the span of
    the modes; so its variance scatters by ``2 / rows`` if noise is Gaussian. A channel that the modes nearly own holds
    their errors rather than noise, and counts less or not at all.
    """
    own = 1 - np.einsum("ij,ij->i", modes, modes)
    used = own > LEAST_OWN_SHARE
    if used.sum() - 1 < 1 or rows < 1:
        return None, float("nan"), float("nan")
    left = np.maximum(energy - (modes**2) @ squares, 0.0)[used]
    own = own[used]
    mean = float(left.sum() / own.sum())
    if mean <= 0:
        return None, float("nan"), float("nan")
    ratio = left / (own * mean)
    statistic = rows / 2 * float(np.sum(own * (ratio - 1) ** 2))
    probability = float(special.chdtrc(ratio.size - 1, statistic))
    shift = uneven_edge(ratio, rows) / uneven_edge(np.ones_like(ratio), rows)
    return not (probability < SIGNIFICANCE and shift > HARMLESS_SHIFT), probability, shift


def _require_ratio(beta: float) -> None:
    if not 0 < beta <= 1:
        raise ValueError(f"beta: must be above 0 and at most 1; got {beta}")


def _check_doors(
    values: Floats, right_estimate: Floats, energy: Floats, m: int, n: int, p: int, modes: Floats | None
) -> None:
    require_between("n", n, 1)
    require_between("p", p, 0)
    require_shape("energy", energy, (m,))
    require_shape("right_estimate", right_estimate, values.shape)
    if modes is not None:
        require_shape("modes", modes, (m, values.size))
    for name, array in (("values", values), ("right_estimate", right_estimate), ("energy", energy)):
        require_finite(name, array)
