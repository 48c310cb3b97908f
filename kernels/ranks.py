"""How many modes to keep: a number, a share of the energy, an accuracy, or what stands out of the noise.

Groups are kept whole where their end is known. No angle is computed here and no sentence is made.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from enum import Enum

import numpy as np
from numpy.typing import NDArray

from .checks import require_between, require_shape
from .verdicts import members_of, sine_of

Floats = NDArray[np.float64]
Numbers = NDArray[np.integer]

SHARE_TOLERANCE = 1e-12  # an energy share this close below what was asked counts as reached


class RankReason(Enum):
    """Why a rank is what it is."""

    ASKED = "as asked"
    GROUP_WHOLE = "a close group is kept whole"
    GROUP_OPEN = "a close group is cut, because it reaches the last computed mode"
    GROUP_LONG = "a close group is cut, because it goes on beyond the modes a result has room for"
    FEWER_MODES = "fewer modes were computed"
    NO_ROOM = "a result has room for no more"
    SHARE_REACHED = "the share is reached"
    SHARE_NOT_REACHED = "all computed modes hold less than the share"
    WITHIN_ANGLE = "the leading modes within the angle"
    NOT_WITHIN_ANGLE = "not even the first mode is within the angle"
    ABOVE_NOISE = "the modes above the noise"
    NONE_ABOVE_NOISE = "no mode is above the noise"
    NO_MODES = "there are no modes"


@dataclass(frozen=True)
class Count:
    """Keep so many modes."""

    modes: int


@dataclass(frozen=True)
class Energy:
    """Keep the fewest modes with this share of the energy, above 0 and at most 1."""

    share: float


@dataclass(frozen=True)
class Angle:
    """Keep the leading modes whose bound is within this angle."""

    degrees: float


@dataclass(frozen=True)
class AboveNoise:
    """Keep the modes above the noise, as counted before."""

    modes: int


RankRule = Count | Energy | Angle | AboveNoise


@dataclass(frozen=True)
class RankChoice:
    """How many modes are kept: at least 1 if there are any; what the rule asked; whether it could be kept; why."""

    rank: int
    asked: float
    met: bool
    reason: RankReason


def choose_rank(
    rule: RankRule, *, eigenvalues: Floats, energy_total: float, sine: Floats, group: Numbers
) -> RankChoice:
    """Return how many modes to keep.

    Parameters
    ----------
    rule : Count, Energy, Angle or AboveNoise
    eigenvalues, energy_total : float64 (k',), float
        Energy captured by each computed mode, and that of the matrix.
    sine : float64 (k',)
        Bound on the sine of the angle of each mode, of its group for members; NaN stands for none.
    group : int (k',)
        Number of the group of each mode, never falling.
    """
    require_shape("sine", sine, eigenvalues.shape)
    require_shape("group", group, eigenvalues.shape)
    members_of(group, group.size)
    match rule:
        case Count(modes):
            require_between("modes", modes, 1)
            return _whole_groups(modes, modes, group)
        case Energy(share):
            return _energy_rank(share, eigenvalues, energy_total)
        case Angle(degrees):
            return _angle_rank(degrees, sine, group)
        case AboveNoise(0):
            return _failed(0, group, RankReason.NONE_ABOVE_NOISE)
        case AboveNoise(modes):
            require_between("modes", modes, 0)
            found = _whole_groups(modes, modes, group)
            return replace(found, reason=RankReason.ABOVE_NOISE) if found.reason is RankReason.ASKED else found


def _whole_groups(modes: int, asked: float, group: Numbers) -> RankChoice:
    """Return at least so many modes with no group cut, unless the group has no known end."""
    if modes > group.size:
        return RankChoice(group.size, asked, False, RankReason.FEWER_MODES if group.size else RankReason.NO_MODES)
    whole = int((group <= group[modes - 1]).sum())
    if whole == modes:
        return RankChoice(modes, asked, True, RankReason.ASKED)
    if whole == group.size:
        return RankChoice(modes, asked, True, RankReason.GROUP_OPEN)
    return RankChoice(whole, asked, True, RankReason.GROUP_WHOLE)


def _failed(asked: float, group: Numbers, reason: RankReason) -> RankChoice:
    """Return the first mode, or its group, for a rule that no mode keeps."""
    rank = _whole_groups(1, asked, group).rank
    return RankChoice(rank, asked, False, reason if rank else RankReason.NO_MODES)


def _energy_rank(share: float, eigenvalues: Floats, energy_total: float) -> RankChoice:
    if not 0 < share <= 1:
        raise ValueError(f"share: must be above 0 and at most 1; got {share}")
    reached = np.cumsum(eigenvalues) >= (share - SHARE_TOLERANCE) * energy_total
    if not reached.any():
        reason = RankReason.SHARE_NOT_REACHED if eigenvalues.size else RankReason.NO_MODES
        return RankChoice(eigenvalues.size, share, False, reason)
    return RankChoice(1 + int(reached.argmax()), share, True, RankReason.SHARE_REACHED)


def _angle_rank(degrees: float, sine: Floats, group: Numbers) -> RankChoice:
    # A group counts if all of it is within; the run ends before the first that is not.
    failed = group[~(sine <= sine_of(degrees))]
    run = int((group < failed.min()).sum()) if failed.size else sine.size
    if run == 0:
        return _failed(degrees, group, RankReason.NOT_WITHIN_ANGLE)
    return RankChoice(run, degrees, True, RankReason.WITHIN_ANGLE)
