"""What may be said of each mode against a tolerance, what would help, and whether to read again.

Bounds, sampling angles, groups, noise and predictions come in as plain arrays; enums and figures go out, and a figure
that is not known is ``None``, so that nothing is printed for it. No angle is computed here, and no sentence is made.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import Enum

import numpy as np
from numpy.typing import NDArray

from .checks import require_between, require_shape
from .remedy import Predictions

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]
Numbers = NDArray[np.integer]

WORTH_READING = 0.9  # of the present bound that a prediction must beat
HOPELESS_DEGREES = 60.0  # a predicted angle above promises no bound where there is none


class Verdict(Enum):
    """What may be said of a mode, in the order in which it is asked; the first that applies counts."""

    AT_NOISE = "at noise"
    WEAK = "weak"
    CLOSE_GROUP = "close group"
    UNRESOLVED = "unresolved"
    SHORT_DATA = "short data"
    RESOLVED = "resolved"


class RemedyKind(Enum):
    """What could be done about a mode."""

    NONE = "none"
    READ = "one more read"
    WIDER = "wider probe"
    DATA = "more data"
    GROUP = "treat as a group"


@dataclass(frozen=True)
class Remedy:
    """What to do about a mode, in figures.

    Attributes
    ----------
    degrees : float or None
        Predicted angle after a read or with twice the width; of a group, the bound on its angle that holds now.
    at_least : bool
        The prediction only says: at least this good.
    factor : float or None
        How many times the present measurement is needed, about.
    within : bool or None
        Of a group only: whether its own bounds are there and within the tolerance.
    """

    kind: RemedyKind
    degrees: float | None = None
    at_least: bool = False
    factor: float | None = None
    within: bool | None = None


@dataclass(frozen=True)
class Judgement:
    """The verdict on a mode and what to do about it."""

    verdict: Verdict
    remedy: Remedy


NOTHING = Remedy(RemedyKind.NONE)


def judge(
    tolerance_degrees: float,
    *,
    sine: Floats,
    coefficient_sine: Floats,
    sampling_sine: Floats,
    group: Numbers,
    at_noise: Flags,
    weak: Flags,
    predictions: Predictions | None = None,
) -> tuple[Judgement, ...]:
    """Return the judgement of each of the leading modes.

    A mode is resolved only if all three angles are known and within the tolerance: however small the other two are,
    a missing one is never taken for a good one.

    Parameters
    ----------
    tolerance_degrees : float
        Above 0 and below 90.
    sine, coefficient_sine, sampling_sine : float64 (r,)
        Bounds on the sine of the angle of the mode (of its group for members) and of its coefficients, and the
        sampling angle; NaN stands for none.
    group : int (k',), k' >= r
        Number of the group of every computed mode, never falling: a group that goes on beyond r is a group.
    at_noise, weak : bool (r,)
    predictions : Predictions or None
        Of at least r modes, of the same groups; ``None`` if nothing can be gained, as with the identity probe.

    """
    limit = sine_of(tolerance_degrees)
    _require_alike(sine, coefficient_sine=coefficient_sine, sampling_sine=sampling_sine, at_noise=at_noise, weak=weak)
    members = members_of(group, sine.size)
    computed = np.maximum(sine, coefficient_sine)  # NaN if either is
    judgements = []
    for i in range(sine.size):
        if at_noise[i]:
            made = Judgement(Verdict.AT_NOISE, NOTHING)
        elif weak[i]:
            made = Judgement(Verdict.WEAK, Remedy(RemedyKind.DATA))
        elif members[i] > 1:
            within = bool(computed[i] <= limit)
            made = Judgement(Verdict.CLOSE_GROUP, Remedy(RemedyKind.GROUP, _degrees(float(sine[i])), within=within))
        elif not computed[i] <= limit:
            made = Judgement(Verdict.UNRESOLVED, _computation_remedy(float(computed[i]), i, limit, predictions))
        elif not sampling_sine[i] <= limit:
            made = Judgement(Verdict.SHORT_DATA, _data_remedy(float(sampling_sine[i]), tolerance_degrees))
        else:
            made = Judgement(Verdict.RESOLVED, NOTHING)
        judgements.append(made)
    return tuple(judgements)


class ReadReason(Enum):
    """Why a campaign is read again, or not."""

    HELPS = "another read helps"
    MET = "every mode is within the tolerance"
    EXACT = "reading again changes nothing"
    MOST_READS = "the most reads are reached"
    NO_GAIN = "another read is not expected to help"
    CLOSE_GROUP = "close modes cannot be parted by reading"
    AT_NOISE = "what is left is noise"


@dataclass(frozen=True)
class ReadDecision:
    """Whether to read again, and the modes it is about, from 0: those that are helped, or that stand in the way."""

    again: bool
    reason: ReadReason
    modes: tuple[int, ...] = ()


def read_again(
    tolerance_degrees: float,
    *,
    sine: Floats,
    coefficient_sine: Floats,
    group: Numbers,
    at_noise: Flags,
    predicted: Floats,
    predicted_alone: Floats,
    held_by_sampling: Flags,
    reads: int,
    most_reads: int,
    exact: bool = False,
) -> ReadDecision:
    """Return whether one more read is worth its price for the leading modes.

    A mode is helped if it is not within the tolerance and the prediction beats nine tenths of its bound (or, if it has
    none, 60 degrees), or if it is in a group that the read is expected to part. Where a bound is missed and there is no
    prediction the read is made: only a reason stops it.

    Parameters
    ----------
    tolerance_degrees, sine, coefficient_sine, group, at_noise
        As for ``judge``.
    predicted, predicted_alone : float64 (r,)
        Sines expected after one more read: of the mode's group, and of the mode by itself; NaN for none.
    held_by_sampling : bool (r,)
        Of members of a group: the samples are too few to part it, whatever is computed.
    reads, most_reads : int
        Reads made, and the most there may be.
    exact : bool
        The factorization has no error but rounding.
    """
    limit = sine_of(tolerance_degrees)
    require_between("reads", reads, 1)
    require_between("most_reads", most_reads, 1)
    _require_alike(sine, coefficient_sine=coefficient_sine, at_noise=at_noise, held_by_sampling=held_by_sampling)
    _require_alike(sine, predicted=predicted, predicted_alone=predicted_alone)
    computed = np.maximum(sine, coefficient_sine)
    within, grouped = computed <= limit, members_of(group, sine.size) > 1
    helped = ~within & ~at_noise & _gains(computed, predicted)
    parted = np.where(within, predicted_alone <= limit, _gains(computed, predicted_alone))
    helped |= grouped & ~at_noise & ~held_by_sampling & parted
    if bool((within & ~grouped).all()):
        return ReadDecision(False, ReadReason.MET)
    if exact:
        return ReadDecision(False, ReadReason.EXACT, _places(~within | grouped))
    if helped.any():
        again = reads < most_reads
        return ReadDecision(again, ReadReason.HELPS if again else ReadReason.MOST_READS, _places(helped))
    return _why_not(within, grouped, held_by_sampling, at_noise)


def _why_not(within: Flags, grouped: Flags, held_by_sampling: Flags, at_noise: Flags) -> ReadDecision:
    """Return the weightiest reason not to read for modes that no read helps."""
    reasons = (
        (ReadReason.NO_GAIN, ~within & ~(grouped & held_by_sampling) & ~at_noise),
        (ReadReason.CLOSE_GROUP, grouped & ~at_noise),
        (ReadReason.AT_NOISE, at_noise),
    )
    reason, concerned = next(pair for pair in reasons if pair[1].any())
    return ReadDecision(False, reason, _places(concerned))


def _gains(present: Floats, predicted: Floats) -> Flags:
    """Return where a predicted sine is worth a read; where it is NaN, nothing speaks against one."""
    enough = np.where(np.isnan(present), sine_of(HOPELESS_DEGREES), WORTH_READING * np.minimum(present, 1.0))
    return np.asarray(~(predicted > enough), dtype=np.bool_)


def _computation_remedy(present: float, i: int, limit: float, predictions: Predictions | None) -> Remedy:
    """Return the cheaper way that is expected to do, else the better one, else none."""
    if predictions is None or i >= min(predictions.read.size, predictions.wider.size):
        return NOTHING
    ways = (
        (RemedyKind.READ, float(predictions.read[i]), bool(predictions.read_at_least[i])),
        (RemedyKind.WIDER, float(predictions.wider[i]), bool(predictions.wider_at_least[i])),
    )
    worth = [way for way in ways if bool(_gains(np.array(present), np.array(way[1]))) and not np.isnan(way[1])]
    if not worth:
        return NOTHING
    kind, predicted, at_least = min(worth, key=lambda way: (way[1] > limit, way[1] if way[1] > limit else 0.0))
    return Remedy(kind, degrees=_degrees(predicted), at_least=at_least)


def _data_remedy(sampling: float, tolerance_degrees: float) -> Remedy:
    """Return by how much longer to measure: sampling angles fall with the root of the samples."""
    angle = _degrees(sampling)
    return Remedy(RemedyKind.DATA, factor=None if angle is None else (angle / tolerance_degrees) ** 2)


def _require_alike(sine: Floats, **arrays: Floats | Flags) -> None:
    for name, array in arrays.items():
        require_shape(name, array, sine.shape)


def _degrees(sine: float) -> float | None:
    return None if np.isnan(sine) else float(np.degrees(np.arcsin(min(sine, 1.0))))


def sine_of(degrees: float) -> float:
    """Return the sine of an angle above 0 and below 90 degrees."""
    if not 0 < degrees < 90:
        raise ValueError(f"degrees: must be above 0 and below 90; got {degrees}")
    return float(np.sin(np.radians(degrees)))


def _places(flags: Flags) -> tuple[int, ...]:
    return tuple(int(i) for i in np.flatnonzero(flags))


def members_of(group: Numbers, count: int) -> Numbers:
    """Return how many members the group of each of the leading ``count`` modes has, int (count,).

    Raises
    ------
    ValueError
        The numbers of groups fall somewhere, or are too few.
    """
    if group.ndim != 1 or group.size < count or bool((np.diff(group) < 0).any()):
        raise ValueError(f"group: must hold at least {count} numbers that never fall; got {group}")
    _, place, sizes = np.unique(group, return_inverse=True, return_counts=True)
    return np.asarray(sizes[place][:count])
