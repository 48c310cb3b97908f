"""Verdicts, remedies and the next step in words, and all of an assessment as plain values for the manifest.

Only wording lives here: every figure was worked out before, and a figure that is not there is not made up.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np

from shardfold.assess import Assessment, padded
from shardfold.kernels.ranks import RankReason
from shardfold.kernels.verdicts import ReadReason, Remedy, RemedyKind, Verdict
from shardfold.quantities import format_angle, rounded_up

TOLD_REASONS = (RankReason.GROUP_WHOLE, RankReason.GROUP_OPEN, RankReason.GROUP_LONG)
NOISE_REASONS = (RankReason.ABOVE_NOISE, RankReason.NONE_ABOVE_NOISE)
LEAST_QUOTED_DEG = 0.001
MOST_QUOTED = 100.0
"""A campaign longer than so many times the present one is not quoted: angles that large only say it is too short."""


def group_names(judged: Assessment) -> list[str | None]:
    """Return the name of each written mode's group, such as ``3-4``; ``None`` for modes that are alone or noise."""
    group = judged.bounds.group
    names: list[str | None] = []
    for i in range(judged.rank):
        members = np.flatnonzero(group == group[i]) if i < judged.held and judged.told[i] else np.empty(0, int)
        names.append(f"{members[0] + 1}-{members[-1] + 1}" if members.size > 1 else None)
    return names


def verdict_words(judged: Assessment) -> list[str | None]:
    """Return the verdict of each written mode; ``None`` under the floor."""
    words: list[str | None] = [judgement.verdict.value for judgement in judged.judgements]
    return words + [None] * (judged.rank - len(words))


def remedy_words(judged: Assessment) -> list[str | None]:
    """Return what would help each written mode, and by how much about; ``None`` where nothing is to be said."""
    words = [_remedy(judgement.remedy, judgement.verdict) for judgement in judged.judgements]
    return words + [None] * (judged.rank - len(words))


def next_step(judged: Assessment) -> str:
    """Return what to do next, in a line: the state of the whole, then what the most demanding modes need."""
    verdicts = [judgement.verdict for judgement in judged.judgements]
    good, count = verdicts.count(Verdict.RESOLVED), len(verdicts)
    tolerance = format_angle(judged.tolerance_deg)
    parts = [f"{_count(good, count)} resolved within {tolerance}"]
    for verdict in Verdict:
        concerned = [i + 1 for i, found in enumerate(verdicts) if found is verdict]
        if concerned and verdict is not Verdict.RESOLVED:
            parts.append(f"{verdict.value}: {_ranges(concerned)}{_remedy_of_all(judged, concerned)}")
    if judged.rank > judged.held:
        blank = _ranges(list(range(judged.held + 1, judged.rank + 1)))
        parts.append(f"under the rounding floor and left blank: {blank}")
    parts += _rank_remarks(judged) + _noise_remarks(judged)
    return "; ".join(parts) + "."


def reading_words(judged: Assessment) -> str:
    """Return why the campaign is read again, or why not, in a line."""
    decision = judged.decision
    modes = "mode" if len(decision.modes) == 1 else "modes"
    concerned = f" ({modes} {_ranges([i + 1 for i in decision.modes])})" if decision.modes else ""
    if decision.reason is ReadReason.HELPS:
        return f"the tolerance is not met and another read is expected to help{concerned}"
    return f"{decision.reason.value}{concerned}"


def record(judged: Assessment) -> dict[str, Any]:
    """Return how far the modes can be relied on, as plain values: figures that are not there are ``None``."""
    removal, sampled, noise = judged.factors.removal, judged.sampling, judged.noise
    return {
        "asked_modes": judged.asked,
        "modes_reason": judged.choice.reason.value,
        "modes_as_asked": judged.choice.met,
        "tolerance_deg": judged.tolerance_deg,
        "removed": removed_words(judged),
        "background": {"functions": len(removal.rows), "independent": removal.rank},
        "effective_samples": _known(sampled.n_effective),
        "leaves": {"all": judged.leaves, "independent": sampled.leaves},
        "noise": None if noise is None else {
            "modes_above": noise.count,
            "standard_deviation": math.sqrt(noise.variance),
            "edge": noise.edge,
            "hard_threshold": noise.hard,
            "equal_in_all_channels": noise.white,
            "probability_if_equal": _known(noise.probability),
        },
        "unseen_eigenvalue_at_most": _known(float(judged.bounds.upper[-1])),
        "accuracy": _accuracy(judged),
        "another_read": {"helps": judged.decision.again, "why": reading_words(judged)},
        "next": next_step(judged),
    }  # fmt: skip


def removed_words(judged: Assessment) -> str:
    """Return what was removed before the modes were found."""
    removal = judged.factors.removal
    functions = f"{removal.rank} of {len(removal.rows)} functions of time" if removal.rows else ""
    return " and ".join(part for part in ("" if removal.keep_mean else "mean", functions) if part) or "nothing"


def mac(judged: Assessment) -> Any:
    """Return the least modal assurance of each written mode that is alone (rank,), NaN for all others."""
    sines = np.where(judged.told & ~judged.grouped, judged.bounds.sine[: judged.held], np.nan)
    return padded(1 - np.minimum(sines, 1.0) ** 2, judged.rank)


def _accuracy(judged: Assessment) -> list[dict[str, Any]]:
    columns = {
        "angle_bound_deg": judged.degrees(judged.bounds.sine),
        "mac_at_least": mac(judged),
        "coefficient_angle_bound_deg": judged.degrees(judged.bounds.coefficient_sine),
        "sampling_angle_deg": judged.degrees(judged.sampling.sine),
    }
    words = {"group": group_names(judged), "verdict": verdict_words(judged), "remedy": remedy_words(judged)}
    return [
        {"mode": i + 1}
        | {name: _known(float(values[i])) for name, values in columns.items()}
        | {name: texts[i] for name, texts in words.items()}
        for i in range(judged.rank)
    ]


def _remedy(remedy: Remedy, verdict: Verdict) -> str | None:
    about = _expected(remedy)
    if remedy.kind is RemedyKind.READ:
        return _joined("one more read (modes.reads)", about)
    if remedy.kind is RemedyKind.WIDER:
        return _joined("a new dossier with twice the width (design.width)", about)
    if remedy.kind is RemedyKind.GROUP:
        state = "no bound" if remedy.degrees is None else f"known to {_angle(remedy.degrees, rounded_up)}"
        return f"use the space of the group as one: {state}"
    if remedy.kind is RemedyKind.DATA:
        return _data(remedy.factor, verdict)
    if verdict is Verdict.UNRESOLVED:
        return "nothing in sight: neither another read nor twice the width is expected to help"
    return None


def _expected(remedy: Remedy) -> str | None:
    if remedy.degrees is None:
        return None
    if remedy.degrees < LEAST_QUOTED_DEG:
        return _angle(remedy.degrees)
    return f"about {_angle(remedy.degrees)}{' or better' if remedy.at_least else ''}"


def _data(factor: float | None, verdict: Verdict) -> str:
    if factor is None:
        unknown = ": its leaves are too few, or too alike, to say how much" if verdict is Verdict.SHORT_DATA else ""
        return f"more measurement{unknown}"
    if factor > MOST_QUOTED:
        return "much more measurement"
    return f"about {factor:.2g} times as much measurement"


def _joined(what: str, figure: str | None) -> str:
    return what if figure is None else f"{what}: {figure}"


def _remedy_of_all(judged: Assessment, concerned: list[int]) -> str:
    """Return the remedy that the most demanding of some modes needs: one without a figure asks for most."""
    remedies = [judged.judgements[i - 1] for i in concerned if remedy_words(judged)[i - 1]]
    if not remedies:
        return ""
    worst = max(remedies, key=lambda found: _figure(found.remedy))
    return f" ({_remedy(worst.remedy, worst.verdict)})"


def _figure(remedy: Remedy) -> float:
    figure = remedy.degrees if remedy.factor is None else remedy.factor
    return math.inf if figure is None else figure


def _rank_remarks(judged: Assessment) -> list[str]:
    choice, more = judged.choice, judged.modes_after_a_read
    if (judged.held and not judged.told[-1]) or judged.rank > judged.held:
        return []  # said already
    if choice.reason is RankReason.WITHIN_ANGLE and more > choice.rank:
        return [f"one more read is expected to bring {more} modes within {format_angle(choice.asked)}"]
    if choice.reason in TOLD_REASONS or not choice.met:
        return [f"{choice.rank} mode{'' if choice.rank == 1 else 's'}: {choice.reason.value}"]
    return []


def _noise_remarks(judged: Assessment) -> list[str]:
    removal, remarks = judged.factors.removal, []
    doubtful = judged.noise is not None and judged.noise.white is False
    if doubtful and (not judged.told.all() or judged.choice.reason in NOISE_REASONS):
        remarks.append("what is left differs between channels, so the noise edge is a guess (channel_summary.parquet)")
    if removal.rank < len(removal.rows):
        remarks.append(
            f"the campaign is too short to tell the removed functions of time apart: {removal.rank} of "
            f"{len(removal.rows)} count"
        )
    return remarks


def _count(good: int, count: int) -> str:
    if count == 1:
        return "the mode is" if good else "the mode is not"
    return f"all {count} modes are" if good == count else f"{good} of {count} modes {'is' if good == 1 else 'are'}"


def _ranges(numbers: list[int]) -> str:
    """Return mode numbers as text, runs drawn together: ``1, 3-5``."""
    runs: list[list[int]] = []
    for number in numbers:
        if runs and number == runs[-1][-1] + 1:
            runs[-1].append(number)
        else:
            runs.append([number])
    return ", ".join(str(run[0]) if len(run) == 1 else f"{run[0]}-{run[-1]}" for run in runs)


def _angle(degrees: float, digits: Callable[[float], str] = "{:.2g}".format) -> str:
    if degrees < LEAST_QUOTED_DEG:
        return f"less than {LEAST_QUOTED_DEG:g} deg"
    return f"{digits(degrees)} deg"


def _known(value: float) -> float | None:
    return float(value) if math.isfinite(value) else None
