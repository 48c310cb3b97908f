"""What becomes modes: how many, from how many reads, how exact, and which background terms are declared and removed."""

from __future__ import annotations

import contextlib
import itertools
import json
import pickle

import pytest
from hypothesis import given
from hypothesis import strategies as st
from job_texts import ANGLE, BACKGROUND, DURATION, RANK, WIDE, faults_of

from shardfold.ids import canonical_json
from shardfold.job import AngleRank, EnergyRank, known_keys, parse_job
from shardfold.job_values import acute_angle, background_term, energy_share, rank_keys
from shardfold.quantities import RuleBroken, format_angle, format_duration

TIDE, TURN = 44_712 * 10**9, 3_600_000_000
SHARE = "must be a share of the energy, a number above 0 and at most 1"
ACUTE = "must be an angle above 0 deg and below 90 deg"
TERM = 'must be mean, trend, cycles or a single cycle by its period, such as "12.42 h"'
READS = "must be auto or a whole number, from 1 to 5"
UNDECLARED = "must be declared in design.background to be removed"
FIXED = "which is fixed when the dossier is created"
DEFAULT = "write a value, or leave the line out for the default"


@pytest.mark.parametrize(
    ("written", "rank", "record"),
    [
        ("6", 6, 6),
        ("noise_edge", "noise_edge", "noise_edge"),
        ("{energy: 0.99}", EnergyRank(energy=0.99), {"energy": 0.99}),
        ("{energy: 1}", EnergyRank(energy=1.0), {"energy": 1.0}),
        ("{angle: 5 deg}", AngleRank(angle="5 deg"), {"angle_deg": 5.0}),
        ("{angle: 0.5 deg}", AngleRank(angle="0.5 deg"), {"angle_deg": 0.5}),
    ],
)
def test_every_kind_of_rank(written, rank, record):
    """From an argument and from a file; its record is what JSON gives back."""
    for job in (parse_job(WIDE, "x", [f"modes.rank={written}"]), parse_job(f"{WIDE}modes:\n  rank: {written}\n", "x")):
        assert (job.modes.rank, type(job.modes.rank)) == (rank, type(rank))
        assert job.modes_record()["rank"] == record
        assert canonical_json(json.loads(canonical_json(job.modes_record()))) == canonical_json(job.modes_record())
        assert pickle.loads(pickle.dumps(job)) == job  # noqa: S301
        assert len({job.modes, parse_job(WIDE, "y", [f"modes.rank={written}"]).modes}) == 1


def test_equal_ranks_have_one_record():
    """However they are written: the same digits in canonical JSON, so the same result id."""
    for one, other in (("{energy: 1}", "{energy: 1.0}"), ("{angle: 5 deg}", "{angle: 5.00deg}"), ("8", "0x8")):
        records = [parse_job(WIDE, "x", [f"modes.rank={text}"]).modes_record() for text in (one, other)]
        assert canonical_json(records[0]) == canonical_json(records[1])
    by_key = parse_job(WIDE, "x", ["modes.rank.energy=0.5"])
    assert by_key.modes == parse_job(WIDE, "x", ["modes.rank={energy: 0.5}"]).modes
    assert {"modes.rank", "modes.rank.energy", "modes.rank.angle", "modes.tolerance"} <= set(known_keys())


def test_reads_tolerance_and_summary():
    """Numbers, auto, both units."""
    assert [parse_job(WIDE, "x", [f"modes.reads={n}"]).modes.reads for n in (1, 5, "auto")] == [1, 5, "auto"]
    tolerances = ("2.5 deg", "0.1 rad", "89.99 deg")
    found = [parse_job(WIDE, "x", [f"modes.tolerance={text}"]).modes.tolerance_deg for text in tolerances]
    assert found == [2.5, pytest.approx(5.729577951308232, rel=1e-15), 89.99]
    summaries = ("auto", "whole", "exact")
    assert [parse_job(WIDE, "x", [f"design.summary={s}"]).design.summary for s in summaries] == list(summaries)


@pytest.mark.parametrize(
    ("value", "told"),
    [
        ("", f" {RANK} (got nothing); {DEFAULT}"),
        ("-1", f" {RANK} (got -1)"),
        ("noise-edge", f" {RANK} (got noise-edge); did you mean noise_edge?"),
        ("0.99", f" {RANK} (got 0.99); write {{energy: 0.99}} for that share of the energy"),
        ("99 %", f" {RANK} (got 99 %); write {{energy: 0.99}} for that share of the energy"),
        ("'0.5'", f' {RANK} (got "0.5"); write {{energy: 0.5}} for that share of the energy'),
        ("5 deg", f" {RANK} (got 5 deg); write {{angle: 5 deg}} for the modes within that angle"),
        ("120 deg", f" {RANK} (got 120 deg)"),
        ("energy", f" {RANK} (got energy); write it with its value, such as {{energy: 0.99}}"),
        ("angles", f" {RANK} (got angles); write it with its value, such as {{angle: 5 deg}}"),
        ("[3]", f" {RANK} (got a list of 1)"),
        ("{}", f" {RANK} (got an empty mapping)"),
        ("{enrgy: 0.9}", f" {RANK} (got a mapping with enrgy); did you mean energy?"),
        ("{top: 3}", f" {RANK} (got a mapping with top)"),
        ("{energy:0.9}", f" {RANK} (got a mapping with energy:0.9); a blank must follow the colon: {{energy: 0.9}}"),
        ("{energy: 0.9, angle: 5 deg}", f" {RANK} (got a mapping with energy, angle); keep one of the two"),
        ("{energy: 0.9, of: all}", f" {RANK} (got a mapping with energy, of); keep that key alone"),
        ("{energy: 0}", f".energy: {SHARE} (got 0); write a number such as 0.99"),
        ("{energy: -0.5}", f".energy: {SHARE} (got -0.5); write a number such as 0.99"),
        ("{energy: 1.01}", f".energy: {SHARE} (got 1.01); 1 is all of it"),
        ("{energy: 99.5}", f".energy: {SHARE} (got 99.5); write 0.995"),
        ("{energy: 99 %}", f".energy: {SHARE} (got 99 %); write 0.99"),
        ("{energy: 1e-3}", f".energy: {SHARE} (got 1e-3); write 0.001"),
        ("{energy: '0.99'}", f'.energy: {SHARE} (got "0.99"); write 0.99'),
        ("{energy: .nan}", f".energy: {SHARE} (got .nan); write a number such as 0.99"),
        ("{energy: yes}", f".energy: {SHARE} (got yes); write a number such as 0.99"),
        ("{energy: }", f".energy: {SHARE} (got nothing); write a number such as 0.99"),
        ("{energy: {share: 1}}", f".energy: {SHARE} (got a mapping with share); write a number such as 0.99"),
        ("{angle: 5}", f'.angle: {ANGLE} (got 5); the unit is missing: write "5 deg"'),
        ("{angle: 0 deg}", f".angle: {ACUTE} (got 0 deg); 5 deg is usual"),
        ("{angle: 90 deg}", f".angle: {ACUTE} (got 90 deg); 5 deg is usual"),
    ],
)
def test_ranks_that_break_a_rule(value, told):
    """Shares in per cent, angles without unit, two criteria at once."""
    key = told.split(" ")[0]
    told = told[len(key) + 1 :]
    assert faults_of(WIDE, f"modes.rank={value}") == [f"--set: modes.rank{key or ':'} {told}"]


@pytest.mark.parametrize(
    ("override", "told"),
    [
        ("reads=0", f"reads: {READS} (got 0)"),
        ("reads=atuo", f"reads: {READS} (got atuo); did you mean auto?"),
        ("reads=2.0", f"reads: {READS} (got 2.0); write 2"),
        ("tolerance=5", f'tolerance: {ANGLE} (got 5); the unit is missing: write "5 deg"'),
        ("tolerance=5°", f'tolerance: {ANGLE} (got 5°); write "5 deg"'),
        ("tolerance=-5 deg", f"tolerance: {ANGLE} (got -5 deg); it cannot be negative"),
        ("tolerance=", f"tolerance: {ANGLE} (got nothing); {DEFAULT}"),
        ("tolerance={deg: 5}", f"tolerance: {ANGLE} (got a mapping with deg)"),
        ("tolerance=0 deg", f"tolerance: {ACUTE} (got 0 deg); 5 deg is usual"),
        ("tolerance=1.5707963267948966 rad", f"tolerance: {ACUTE} (got 1.5707963267948966 rad); 5 deg is usual"),
        ("remove=", "remove: must be a list (got nothing); write modes.remove=[...]"),
        ("remove=cycles", 'remove: must be a list (got cycles); write modes.remove=["cycles"]'),
        ("remove=[tredn]", f"remove: {TERM} (got tredn); did you mean trend?"),
        ("remove=[mean, 3.6]", f'remove: {TERM} (got 3.6); the unit is missing: write "3.6 s" or "3.6 min"'),
        ("remove=[mean, yes]", f"remove: {TERM} (got yes)"),
        ("remove=[[mean]]", f"remove: {TERM} (got a list of 1)"),
        ("remove=[1 ns]", "remove: must be a period of at least 2 ns (got 1 ns)"),
        ("remove=[2.5 ns]", 'remove: must be a whole number of nanoseconds (got 2.5 ns); the nearest is "2 ns"'),
        ("remove=[3.6 s, 3600 ms]", "remove: must name each term once (got a list of 2); 3600 ms is 3.6 s again"),
        (
            "remove=[3.6 s, cycles]",
            "remove: must name each term once (got a list of 2); cycles stands for all of them: leave 3.6 s out",
        ),
    ],
)
def test_modes_that_break_a_rule(override, told):
    """With the background declared, so that no relation is in the way."""
    assert faults_of(WIDE, BACKGROUND, f"modes.{override}") == [f"--set: modes.{told}"]


@pytest.mark.parametrize(
    ("override", "told"),
    [
        ("trend=1", ["trend: must be true or false (got 1); write design.background.trend=true"]),
        ("cycles=12.42 h", ['cycles: must be a list (got 12.42 h); write design.background.cycles=["12.42 h"]']),
        (
            "cycles=[12.42, 30 Hz]",
            [
                f'cycles: {DURATION} (got 12.42); the unit is missing: write "12.42 s" or "12.42 min"',
                f"cycles: {DURATION} (got 30 Hz); give the time from one to the next instead of the rate",
            ],
        ),
        ("cycles=[1 ns, 2 ns]", ["cycles: must be a period of at least 2 ns (got 1 ns)"]),
        ("cycles=[12 h, 12 h]", ["cycles: must name each cycle once (got a list of 2); 12 h stands twice"]),
        ("cycles=[12 h, 720 min]", ["cycles: must name each cycle once (got a list of 2); 720 min is 12 h again"]),
        (
            f"cycles=[{', '.join(f'{n} s' for n in range(1, 14))}]",
            ["cycles: must hold at most 12 cycles (got a list of 13)"],
        ),
        ("cylces=[1 d]", ["cylces: is not a known key; did you mean design.background.cycles?"]),
    ],
)
def test_backgrounds_that_break_a_rule(override, told):
    """Rates for periods, one period in two units, too many."""
    assert faults_of(WIDE, f"design.background.{override}") == [f"--set: design.background.{line}" for line in told]


def test_a_background_keeps_its_cycles_in_order():
    """Integer nanoseconds, as declared; twelve are not too many."""
    background = parse_job(WIDE, "x", [BACKGROUND]).design.background
    assert (background.mean, background.trend, background.cycles) == (True, True, (TIDE, TURN))
    record = parse_job(WIDE, "x", [BACKGROUND]).design_record()["design"]["background"]
    assert record == {"mean": True, "trend": True, "cycles": [TIDE, TURN]}
    twelve = parse_job(WIDE, "x", [f"design.background.cycles=[{', '.join(f'{n} ns' for n in range(2, 14))}]"])
    assert twelve.design.background.cycles == tuple(range(2, 14))


def test_removed_terms_have_one_form():
    """Any order and spelling of the same terms: one tuple, one record, one result."""
    one = ("mean", "trend", TIDE, TURN)
    spellings = [*itertools.permutations(["mean", "trend", "cycles"]), ("3600 ms", "745.2 min", "trend", "mean")]
    for terms in spellings:
        job = parse_job(WIDE, "x", [f"modes.remove=[{', '.join(terms)}]", BACKGROUND])
        assert job.modes.remove == one
        assert job.modes_record()["remove"] == list(one)
    single = parse_job(WIDE, "x", [BACKGROUND, "modes.remove=[3.6 s, mean]"])
    assert single.modes.remove == ("mean", TURN)
    assert parse_job(WIDE, "x", [BACKGROUND, "modes.remove=[]"]).modes.remove == ()
    assert parse_job(WIDE, "x", [BACKGROUND]).modes.remove == ("mean",)


@pytest.mark.parametrize(
    ("overrides", "told"),
    [
        (
            ["modes.remove=[mean, trend]"],
            [f"{UNDECLARED} (got trend); add design.background.trend: true, {FIXED}, or leave it out"],
        ),
        (
            ["design.background.trend=false", "modes.remove=[trend]"],
            [f"{UNDECLARED} (got trend); add design.background.trend: true, {FIXED}, or leave it out"],
        ),
        (
            ["modes.remove=[cycles]"],
            [f'{UNDECLARED} (got cycles); add design.background.cycles: ["12.42 h"], {FIXED}, or leave it out'],
        ),
        (
            ["design.background.cycles=[]", "modes.remove=[7 s]"],
            [f'{UNDECLARED} (got 7 s); add design.background.cycles: ["7 s"], {FIXED}, or leave it out'],
        ),
        (
            [BACKGROUND, "modes.remove=[trend, 12.4 h, 3.6 s]"],
            [
                'must be a declared cycle, "12.42 h" or "3.6 s" (got 12.4 h); write one of them, or add it to '
                f"design.background.cycles, {FIXED}"
            ],
        ),
    ],
)
def test_only_what_is_declared_can_be_removed(overrides, told):
    """Term by term."""
    assert faults_of(WIDE, *overrides) == [f"--set: modes.remove: {line}" for line in told]


def test_without_times_only_the_mean_can_be_declared_and_removed():
    """All of it at once, each term on its line."""
    text = WIDE.replace("time: t", "time: none") + (
        "design:\n  background:\n    trend: true\n    cycles: [1 d]\nmodes:\n  remove:\n    - mean\n    - trend\n"
    )
    assert faults_of(text) == [
        "bridge.yaml:10: design.background.trend: must be false with time: none: without times there is no trend "
        "(got true); leave it out",
        "bridge.yaml:11: design.background.cycles: must be [] with time: none: without times there are no cycles "
        "(got a list of 1); leave it out",
        "bridge.yaml:15: modes.remove: must be mean with time: none: without times there is nothing else to remove "
        "(got trend); leave it out",
    ]
    empty = parse_job(WIDE, "x", ["source.time=none", "design.background={trend: false, cycles: []}"])
    assert empty.modes.remove == ("mean",)


def test_a_faulty_background_hides_only_what_depends_on_it():
    """A term is not called undeclared where the declaration itself is broken."""
    remove = "modes.remove=[trend, cycles]"
    keys = [fault.split(": ")[1] for fault in faults_of(WIDE, "design.background={cycles: [day]}", remove)]
    assert keys == ["design.background.cycles", "modes.remove"]
    assert len(faults_of(WIDE, "design.background={trend: maybe, cycles: [1 d]}", remove)) == 1
    assert len(faults_of(WIDE, "design.background=trend", remove)) == 1
    assert len(faults_of(WIDE, "source.time=[t]", BACKGROUND, remove)) == 1


SCALARS = st.text(max_size=20) | st.from_regex(r"-?[0-9]*[.]?[0-9]*(e-?[0-9])?( ?(%|deg|s))?", fullmatch=True)
SCALARS |= st.integers() | st.floats() | st.booleans() | st.none()


@given(SCALARS | st.dictionaries(st.sampled_from(["energy", "angle", "enrgy", "energy:1"]), SCALARS, max_size=3))
def test_any_value_is_a_setting_or_breaks_a_rule(value):
    """No other error leaves, and what is taken lies within the limits."""
    with contextlib.suppress(RuleBroken):
        rank = rank_keys(value)
        assert rank == "noise_edge" or (rank >= 1 if isinstance(rank, int) else len(rank) == 1)
    with contextlib.suppress(RuleBroken):
        assert 0 < energy_share(value) <= 1
    with contextlib.suppress(RuleBroken):
        assert 0 < acute_angle(value) < 90
    with contextlib.suppress(RuleBroken):
        term = background_term(value)
        assert term in ("mean", "trend", "cycles") or term >= 2


@given(st.lists(st.integers(2, 2**63 - 1), unique=True, max_size=12), st.booleans(), st.randoms(use_true_random=False))
def test_any_subset_of_any_background_keeps_its_declared_order(periods, trend, random):
    """Against a plain filter of what is declared."""
    declared = ["mean", *(["trend"] if trend else []), *periods]
    chosen = [term for term in declared if random.random() < 0.5]
    written = [term if isinstance(term, str) else format_duration(term) for term in chosen]
    random.shuffle(written)
    cycles = json.dumps([format_duration(period) for period in periods])
    background = f"design.background={{trend: {json.dumps(trend)}, cycles: {cycles}}}"
    job = parse_job(WIDE, "x", [background, f"modes.remove={json.dumps(written)}"])
    assert job.design.background.cycles == tuple(periods)
    assert job.modes.remove == tuple(chosen)


@given(st.floats(1e-9, 90, exclude_max=True))
def test_a_tolerance_that_is_shown_reads_back(angle_deg):
    """To the bit."""
    assert parse_job(WIDE, "x", [f"modes.tolerance={format_angle(angle_deg)}"]).modes.tolerance_deg == angle_deg
