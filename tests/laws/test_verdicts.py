"""Verdicts, rank and the decision to read again: tables of cases, and what must hold whatever the figures are."""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from shardfold.kernels.ranks import AboveNoise, Angle, Count, Energy, RankReason, choose_rank
from shardfold.kernels.remedy import Predictions
from shardfold.kernels.verdicts import (
    Judgement,
    ReadDecision,
    ReadReason,
    Remedy,
    RemedyKind,
    Verdict,
    judge,
    read_again,
)

NAN = float("nan")


def sines(*degrees: float) -> np.ndarray:
    return np.sin(np.radians(np.array(degrees, dtype=float)))


def predictions(read: float, wider: float, at_least: bool = False) -> Predictions:
    flag = np.array([at_least])
    return Predictions(sines(read), sines(wider), flag, flag)


def one(
    mode: float,
    coefficient: float,
    sampling: float,
    *,
    tolerance: float = 2.0,
    group: tuple[int, ...] = (0, 1),
    at_noise: bool = False,
    weak: bool = False,
    told: Predictions | None = None,
) -> Judgement:
    """Return the judgement of a single mode, angles in degrees."""
    (found,) = judge(
        tolerance,
        sine=sines(mode),
        coefficient_sine=sines(coefficient),
        sampling_sine=sines(sampling),
        group=np.array(group),
        at_noise=np.array([at_noise]),
        weak=np.array([weak]),
        predictions=told,
    )
    return found


@pytest.mark.parametrize(
    ("angles", "settings_of_case", "verdict"),
    [
        ((1, 1, 1), {}, Verdict.RESOLVED),
        ((2, 2, 2), {}, Verdict.RESOLVED),
        ((2.001, 1, 1), {}, Verdict.UNRESOLVED),
        ((1, 2.001, 1), {}, Verdict.UNRESOLVED),
        ((NAN, 1, 1), {}, Verdict.UNRESOLVED),
        ((1, NAN, 1), {}, Verdict.UNRESOLVED),
        ((NAN, NAN, NAN), {}, Verdict.UNRESOLVED),
        ((5, 1, 9), {}, Verdict.UNRESOLVED),
        ((1, 1, 2.001), {}, Verdict.SHORT_DATA),
        ((1e-9, 1e-9, NAN), {}, Verdict.SHORT_DATA),
        ((0, 0, NAN), {}, Verdict.SHORT_DATA),
        ((1, 1, 1), {"group": (0, 0)}, Verdict.CLOSE_GROUP),
        ((9, 9, 9), {"group": (0, 0)}, Verdict.CLOSE_GROUP),
        ((1, 1, 1), {"weak": True}, Verdict.WEAK),
        ((NAN, 1, 1), {"weak": True, "group": (0, 0)}, Verdict.WEAK),
        ((1, 1, 1), {"at_noise": True}, Verdict.AT_NOISE),
        ((NAN, NAN, NAN), {"at_noise": True, "weak": True, "group": (0, 0)}, Verdict.AT_NOISE),
    ],
)
def test_the_first_verdict_that_applies_counts(
    angles: tuple[float, float, float], settings_of_case: dict[str, Any], verdict: Verdict
) -> None:
    assert one(*angles, **settings_of_case).verdict is verdict


def test_verdicts_have_their_words() -> None:
    words = {"resolved", "close group", "unresolved", "short data", "weak", "at noise"}
    assert {verdict.value for verdict in Verdict} == words


@pytest.mark.parametrize(
    ("angles", "told", "remedy"),
    [
        ((5, 1, 1), predictions(1, 3), (RemedyKind.READ, 1.0)),
        ((5, 1, 1), predictions(3, 1), (RemedyKind.WIDER, 1.0)),
        ((5, 1, 1), predictions(1.5, 1), (RemedyKind.READ, 1.5)),  # both do; a read needs no new dossier
        ((5, 1, 1), predictions(4, 3), (RemedyKind.WIDER, 3.0)),  # neither does; the better
        ((5, 1, 1), predictions(4.6, 4.7), (RemedyKind.NONE, None)),  # no gain worth a read
        ((NAN, 1, 1), predictions(40, 50), (RemedyKind.READ, 40.0)),
        ((NAN, 1, 1), predictions(61, 80), (RemedyKind.NONE, None)),
        ((NAN, 1, 1), predictions(NAN, NAN), (RemedyKind.NONE, None)),
        ((NAN, 1, 1), predictions(NAN, 10), (RemedyKind.WIDER, 10.0)),
        ((5, 1, 1), None, (RemedyKind.NONE, None)),
    ],
)
def test_the_remedy_of_a_coarse_computation(
    angles: tuple[float, float, float], told: Predictions | None, remedy: tuple[RemedyKind, float | None]
) -> None:
    found = one(*angles, told=told).remedy
    assert found.kind is remedy[0]
    assert found.degrees == (None if remedy[1] is None else pytest.approx(remedy[1]))
    assert found.factor is None


def test_a_prediction_that_says_at_least_says_so() -> None:
    assert one(5, 1, 1, told=predictions(1, 3, at_least=True)).remedy.at_least
    assert not one(5, 1, 1, told=predictions(1, 3)).remedy.at_least


def test_short_data_tells_how_much_longer_to_measure() -> None:
    assert one(1, 1, 6).remedy.factor == pytest.approx(9.0)
    assert one(1, 1, 6).remedy.kind is RemedyKind.DATA
    assert one(1, 1, NAN).remedy == Remedy(RemedyKind.DATA)


def test_a_group_says_whether_its_own_bound_will_do() -> None:
    good, coarse, none = (one(angle, angle, 1, group=(0, 0)).remedy for angle in (1, 20, NAN))
    assert (good.kind, good.within, good.degrees) == (RemedyKind.GROUP, True, pytest.approx(1))
    assert (coarse.kind, coarse.within, coarse.degrees) == (RemedyKind.GROUP, False, pytest.approx(20))
    assert (none.kind, none.within, none.degrees) == (RemedyKind.GROUP, False, None)


ANGLES = st.one_of(st.just(NAN), st.floats(0, 89))


@given(
    angles=st.tuples(ANGLES, ANGLES, ANGLES),
    tolerances=st.tuples(st.floats(0.01, 89), st.floats(0.01, 89)),
    group=st.sampled_from([(0, 1), (0, 0)]),
    at_noise=st.booleans(),
    weak=st.booleans(),
    told=st.one_of(st.none(), st.builds(predictions, ANGLES, ANGLES, st.booleans())),
)
@settings(max_examples=300, deadline=None)
def test_a_wider_tolerance_never_gives_a_worse_verdict_and_nothing_unknown_is_told(
    angles: tuple[float, float, float],
    tolerances: tuple[float, float],
    group: tuple[int, int],
    at_noise: bool,
    weak: bool,
    told: Predictions | None,
) -> None:
    order = list(Verdict)
    found = [
        one(*angles, tolerance=tolerance, group=group, at_noise=at_noise, weak=weak, told=told)
        for tolerance in sorted(tolerances)
    ]
    assert order.index(found[0].verdict) <= order.index(found[1].verdict)
    for judgement in found:
        if judgement.verdict is Verdict.RESOLVED:
            assert not np.isnan(angles).any()
            assert judgement.remedy == Remedy(RemedyKind.NONE)
        figures = [judgement.remedy.degrees, judgement.remedy.factor]
        assert all(figure is None or np.isfinite(figure) for figure in figures)
        assert "nan" not in repr(dataclasses.asdict(judgement))


def test_modes_are_judged_one_by_one_and_groups_reach_beyond_them() -> None:
    found = judge(
        2.0,
        sine=sines(1, 5, 1, 1),
        coefficient_sine=sines(1, 1, 1, 1),
        sampling_sine=sines(1, 1, NAN, 1),
        group=np.array([0, 1, 2, 3, 3, 4]),
        at_noise=np.zeros(4, dtype=bool),
        weak=np.zeros(4, dtype=bool),
    )
    expected = [Verdict.RESOLVED, Verdict.UNRESOLVED, Verdict.SHORT_DATA, Verdict.CLOSE_GROUP]
    assert [judgement.verdict for judgement in found] == expected


@pytest.mark.parametrize("tolerance", [0.0, -1.0, 90.0, NAN])
def test_a_tolerance_is_an_acute_angle(tolerance: float) -> None:
    with pytest.raises(ValueError, match="degrees: must be above 0 and below 90"):
        one(1, 1, 1, tolerance=tolerance)


@pytest.mark.parametrize("group", [(), (1, 0), (0, 1, 0)])
def test_groups_are_numbers_that_never_fall(group: tuple[int, ...]) -> None:
    with pytest.raises(ValueError, match="group: must hold at least 1 numbers that never fall"):
        one(1, 1, 1, group=group)


# Six modes: energies 8, 4, 2, 1, 1/2, 1/2 of 20; modes 2 and 3 (from 0) close, and modes 4 and 5, the last ones.
SIX = {
    "eigenvalues": np.array([8, 4, 2, 1, 0.5, 0.5]),
    "energy_total": 20.0,
    "sine": sines(1, 2, 5, 5, NAN, NAN),
    "group": np.array([0, 1, 2, 2, 3, 3]),
}


@pytest.mark.parametrize(
    ("rule", "rank", "met", "reason"),
    [
        (Count(1), 1, True, RankReason.ASKED),
        (Count(2), 2, True, RankReason.ASKED),
        (Count(3), 4, True, RankReason.GROUP_WHOLE),
        (Count(4), 4, True, RankReason.ASKED),
        (Count(5), 5, True, RankReason.GROUP_OPEN),
        (Count(6), 6, True, RankReason.ASKED),
        (Count(7), 6, False, RankReason.FEWER_MODES),
        (Energy(0.1), 1, True, RankReason.SHARE_REACHED),
        (Energy(0.4), 1, True, RankReason.SHARE_REACHED),
        (Energy(0.4 + 1e-13), 1, True, RankReason.SHARE_REACHED),
        (Energy(0.4 + 1e-11), 2, True, RankReason.SHARE_REACHED),
        (Energy(0.75), 4, True, RankReason.SHARE_REACHED),
        (Energy(0.8), 6, True, RankReason.SHARE_REACHED),
        (Energy(0.81), 6, False, RankReason.SHARE_NOT_REACHED),
        (Energy(1.0), 6, False, RankReason.SHARE_NOT_REACHED),
        (Angle(0.5), 1, False, RankReason.NOT_WITHIN_ANGLE),
        (Angle(1.0), 1, True, RankReason.WITHIN_ANGLE),
        (Angle(3.0), 2, True, RankReason.WITHIN_ANGLE),
        (Angle(5.0), 4, True, RankReason.WITHIN_ANGLE),
        (Angle(89.0), 4, True, RankReason.WITHIN_ANGLE),
        (AboveNoise(2), 2, True, RankReason.ABOVE_NOISE),
        (AboveNoise(3), 4, True, RankReason.GROUP_WHOLE),
        (AboveNoise(0), 1, False, RankReason.NONE_ABOVE_NOISE),
    ],
)
def test_rank_by_rule(rule: Any, rank: int, met: bool, reason: RankReason) -> None:
    found = choose_rank(rule, **SIX)
    assert (found.rank, found.met, found.reason) == (rank, met, reason)
    assert found.asked == next(iter(dataclasses.asdict(rule).values()))


def test_rank_of_awkward_groups() -> None:
    first = dict(SIX, group=np.array([0, 0, 1, 2, 3, 4]), sine=sines(9, 9, 1, 1, 1, 1))
    assert choose_rank(Angle(2.0), **first).rank == 2
    assert not choose_rank(Angle(2.0), **first).met
    uneven = dict(SIX, sine=sines(1, 1, 1, 9, 1, 1))  # a member that is not within spoils its group
    assert choose_rank(Angle(2.0), **uneven).rank == 2
    everything = dict(SIX, group=np.zeros(6, dtype=int), sine=np.full(6, NAN))
    assert choose_rank(Angle(2.0), **everything).rank == 1
    assert choose_rank(Count(3), **everything).reason is RankReason.GROUP_OPEN


@pytest.mark.parametrize("rule", [Count(3), Energy(0.5), Angle(2.0), AboveNoise(0), AboveNoise(2)])
def test_without_modes_there_is_no_rank(rule: Any) -> None:
    found = choose_rank(rule, eigenvalues=np.empty(0), energy_total=0.0, sine=np.empty(0), group=np.empty(0, dtype=int))
    assert (found.rank, found.met) == (0, False)


@pytest.mark.parametrize("rule", [Count(0), Energy(0.0), Energy(1.1), Energy(NAN), Angle(0.0), AboveNoise(-1)])
def test_rules_out_of_range_are_refused(rule: Any) -> None:
    with pytest.raises(ValueError, match="must be"):
        choose_rank(rule, **SIX)


@given(
    sizes=st.lists(st.integers(1, 4), min_size=1, max_size=8),
    data=st.data(),
    degrees=st.tuples(st.floats(0.1, 89), st.floats(0.1, 89)),
    shares=st.tuples(st.floats(0.01, 1), st.floats(0.01, 1)),
)
@settings(max_examples=150, deadline=None)
def test_wider_angles_and_larger_shares_never_keep_fewer_modes(
    sizes: list[int], data: st.DataObject, degrees: tuple[float, float], shares: tuple[float, float]
) -> None:
    group = np.repeat(np.arange(len(sizes)), sizes)
    bounds = np.repeat(data.draw(st.lists(ANGLES, min_size=len(sizes), max_size=len(sizes))), sizes)
    eigenvalues = np.sort(data.draw(st.lists(st.floats(0.1, 9), min_size=group.size, max_size=group.size)))[::-1]
    case = {"eigenvalues": eigenvalues, "energy_total": 1.1 * eigenvalues.sum(), "sine": sines(*bounds), "group": group}
    by_angle = [choose_rank(Angle(angle), **case) for angle in sorted(degrees)]
    if by_angle[0].met:
        assert by_angle[0].rank <= by_angle[1].rank
        assert by_angle[1].met
    for found in by_angle:
        if found.met:
            assert found.rank in np.cumsum(sizes)
            assert (bounds[: found.rank] <= found.asked + 1e-9).all()
    by_share = [choose_rank(Energy(share), **case) for share in sorted(shares)]
    assert by_share[0].rank <= by_share[1].rank
    for found in by_share:
        reached = eigenvalues[: found.rank].sum() / case["energy_total"]
        assert found.met == (reached >= found.asked - 2e-12)
        if found.rank > 1 and found.met:
            assert eigenvalues[: found.rank - 1].sum() / case["energy_total"] < found.asked


def decide(
    bounds: tuple[float, ...],
    predicted: tuple[float, ...],
    *,
    coefficient: tuple[float, ...] | None = None,
    alone: tuple[float, ...] | None = None,
    group: tuple[int, ...] | None = None,
    at_noise: tuple[int, ...] = (),
    held: tuple[int, ...] = (),
    tolerance: float = 2.0,
    reads: int = 1,
    most_reads: int = 4,
    exact: bool = False,
) -> ReadDecision:
    """Return the decision for a few modes, angles in degrees, modes at noise or held by sampling by their number."""
    place = np.arange(len(bounds))
    return read_again(
        tolerance,
        sine=sines(*bounds),
        coefficient_sine=sines(*(coefficient or bounds)),
        group=place if group is None else np.array(group),
        at_noise=np.isin(place, at_noise),
        predicted=sines(*predicted),
        predicted_alone=sines(*(alone or predicted)),
        held_by_sampling=np.isin(place, held),
        reads=reads,
        most_reads=most_reads,
        exact=exact,
    )


@pytest.mark.parametrize(
    ("bounds", "predicted", "more", "again", "reason", "modes"),
    [
        ((1, 2), (0.1, 0.1), {}, False, ReadReason.MET, ()),
        ((1, 2), (0.1, 0.1), {"exact": True}, False, ReadReason.MET, ()),
        ((1, 2), (0.1, 0.1), {"reads": 4}, False, ReadReason.MET, ()),
        ((1, 5), (0.1, 0.1), {}, True, ReadReason.HELPS, (1,)),
        ((1, 1), (0.1, 0.1), {"coefficient": (1, 5)}, True, ReadReason.HELPS, (1,)),
        ((1, 5), (0.1, 4.4), {}, True, ReadReason.HELPS, (1,)),  # better, though not yet within
        ((1, 5), (0.1, 4.6), {}, False, ReadReason.NO_GAIN, (1,)),
        ((1, NAN), (0.1, 59), {}, True, ReadReason.HELPS, (1,)),
        ((1, NAN), (0.1, 61), {}, False, ReadReason.NO_GAIN, (1,)),
        ((9, NAN), (0.1, 61), {}, True, ReadReason.HELPS, (0,)),
        ((1, NAN), (0.1, NAN), {}, True, ReadReason.HELPS, (1,)),  # nothing speaks against it
        ((1, 5), (0.1, 0.1), {"reads": 4}, False, ReadReason.MOST_READS, (1,)),
        ((1, 5), (0.1, 0.1), {"exact": True}, False, ReadReason.EXACT, (1,)),
        ((1, NAN), (0.1, 0.1), {"at_noise": (1,)}, False, ReadReason.AT_NOISE, (1,)),
        ((1, 1), (0.1, 0.1), {"at_noise": (1,)}, False, ReadReason.MET, ()),
        ((9, NAN), (0.1, 0.1), {"at_noise": (1,)}, True, ReadReason.HELPS, (0,)),
        ((5, NAN), (4.9, 0.1), {"at_noise": (1,)}, False, ReadReason.NO_GAIN, (0,)),
        ((1, 1), (0.1, 0.1), {"group": (0, 0), "alone": (80, 80)}, False, ReadReason.CLOSE_GROUP, (0, 1)),
        ((1, 1), (0.1, 0.1), {"group": (0, 0), "alone": (1, 1)}, True, ReadReason.HELPS, (0, 1)),
        ((1, 1), (0.1, 0.1), {"group": (0, 0), "held": (0, 1)}, False, ReadReason.CLOSE_GROUP, (0, 1)),
        ((9, 9), (0.1, 0.1), {"group": (0, 0), "held": (0, 1)}, True, ReadReason.HELPS, (0, 1)),
        ((NAN, NAN), (70, 70), {"group": (0, 0)}, False, ReadReason.NO_GAIN, (0, 1)),
        ((1, 1), (0.1, 0.1), {"group": (0, 1, 1), "alone": (1, 80)}, False, ReadReason.CLOSE_GROUP, (1,)),
        ((1, 1), (NAN, NAN), {"group": (0, 0)}, False, ReadReason.CLOSE_GROUP, (0, 1)),
        ((), (), {}, False, ReadReason.MET, ()),
    ],
)
def test_read_again_or_not(
    bounds: tuple[float, ...],
    predicted: tuple[float, ...],
    more: dict[str, Any],
    again: bool,
    reason: ReadReason,
    modes: tuple[int, ...],
) -> None:
    assert decide(bounds, predicted, **more) == ReadDecision(again, reason, modes)


@given(
    modes=st.lists(st.tuples(ANGLES, ANGLES, ANGLES), min_size=1, max_size=5),
    group_starts=st.lists(st.booleans(), min_size=5, max_size=5),
    noise=st.lists(st.integers(0, 4), max_size=3),
    held=st.lists(st.integers(0, 4), max_size=3),
    tolerance=st.floats(0.1, 60),
    reads=st.integers(1, 5),
    exact=st.booleans(),
)
@settings(max_examples=300, deadline=None)
def test_a_read_is_made_only_for_a_mode_in_need_and_never_beyond_the_most(
    modes: list[tuple[float, float, float]],
    group_starts: list[bool],
    noise: list[int],
    held: list[int],
    tolerance: float,
    reads: int,
    exact: bool,
) -> None:
    bounds, predicted, alone = zip(*modes, strict=True)
    group = tuple(int(number) for number in np.cumsum(group_starts))[: len(modes)]
    found = decide(
        bounds, predicted, alone=alone, group=group, at_noise=tuple(noise), held=tuple(held),
        tolerance=tolerance, reads=reads, exact=exact,
    )  # fmt: skip
    assert found.again == (found.reason is ReadReason.HELPS)
    assert bool(found.modes) == (found.reason is not ReadReason.MET)
    single = [group.count(number) == 1 for number in group]
    limit = np.sin(np.radians(tolerance))
    met = [bool(sine <= limit) for sine in sines(*bounds)]
    assert (found.reason is ReadReason.MET) == all(m and s for m, s in zip(met, single, strict=True))
    if found.again:
        assert reads < 4
        assert not exact
        assert all(i not in noise and not (met[i] and single[i]) for i in found.modes)
