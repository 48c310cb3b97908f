"""The next step never sounds better than the mode that needs most; figures and reasons are those of the kernels."""

from __future__ import annotations

from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

from shardfold.advice import next_step
from shardfold.kernels.ranks import RankChoice, RankReason
from shardfold.kernels.verdicts import Judgement, Remedy, RemedyKind, Verdict


def judged(*judgements: Judgement, reason: RankReason = RankReason.ASKED, met: bool = True) -> Any:
    count = len(judgements)
    return SimpleNamespace(
        judgements=judgements,
        held=count,
        rank=count,
        told=np.ones(count, dtype=bool),
        tolerance_deg=5.0,
        choice=RankChoice(count, count, met, reason),
        modes_after_a_read=0,
        noise=None,
        factors=SimpleNamespace(removal=SimpleNamespace(rows=(), rank=0)),
    )


def of(verdict: Verdict, kind: RemedyKind, **figures: Any) -> Judgement:
    return Judgement(verdict, Remedy(kind, **figures))


def short(factor: float | None) -> Judgement:
    return of(Verdict.SHORT_DATA, RemedyKind.DATA, factor=factor)


def group(degrees: float | None) -> Judgement:
    return of(Verdict.CLOSE_GROUP, RemedyKind.GROUP, degrees=degrees)


def unresolved(kind: RemedyKind, degrees: float | None = None) -> Judgement:
    return of(Verdict.UNRESOLVED, kind, degrees=degrees)


@pytest.mark.parametrize("turn", [1, -1])
@pytest.mark.parametrize(
    ("found", "said"),
    [
        ((short(1.9), short(12.0)), "about 12 times as much measurement"),
        ((short(1.9), short(None)), "to say how much"),
        ((group(0.4), group(3.01)), "known to 3.1 deg"),
        ((group(0.4), group(None)), "no bound"),
        ((unresolved(RemedyKind.READ, 0.2), unresolved(RemedyKind.READ, 7.0)), "about 7 deg"),
        ((unresolved(RemedyKind.READ, 0.2), unresolved(RemedyKind.NONE)), "nothing in sight"),
    ],
)
def test_the_most_demanding_mode_is_quoted(found: tuple[Judgement, ...], said: str, turn: int) -> None:
    assert said in next_step(judged(*found[::turn]))


def test_a_group_that_is_too_long_is_not_said_to_be_open() -> None:
    text = next_step(judged(short(1.9), reason=RankReason.GROUP_LONG))
    assert "beyond the modes a result has room for" in text
    assert "last computed mode" not in text
    assert "a result has room for no more" in next_step(judged(short(1.9), reason=RankReason.NO_ROOM, met=False))
