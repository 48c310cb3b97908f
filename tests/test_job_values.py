"""Single values and arguments that break a rule, and the answer to each, word for word."""

from __future__ import annotations

import pytest
from job_texts import ARRAY, DURATION, RANK, SIZE, WIDE, faults_of, with_line

NO_PATTERN = "must hold at least one pattern"
TIME = "must be the name of the time column, {from_name: REGEX, step: DURATION}, {start: TIME, step: DURATION} or none"
ENDPOINT = "must be the address of an S3 service: http:// or https://, a host, perhaps a port"
GROUPS = (
    "must have one group, around the time, or a group named time, seconds, milliseconds, microseconds or nanoseconds "
    r"(got x); such as 'blade-(\d{8}T\d{6})\.npy' or '_(?P<seconds>\d+)\.npy'; write (?:...) for other groups"
)
LEFT = "write modes.remove: [] to leave it in"
DESIGN_KEYS = "scale, gaps, background, summary, width, leaf, blas, seed, mixed_units"
CORE = "must be any or an OpenBLAS core type such as Haswell, SkylakeX or Zen"
KEPT = "must be true: the mean is kept in any case, so that it can be removed or not after the fact"


@pytest.mark.parametrize(
    ("line", "told"),
    [
        ("  settle:", f"{DURATION} (got nothing); write a value, or leave the line out for the default"),
        ("  settle: 10:00", f"{DURATION} (got 10:00)"),
        ("  match: !!binary aGk=", "must not carry a YAML tag (a word that starts with !); put the value in quotes"),
        ("  match: !new x", "must not carry a YAML tag (a word that starts with !); put the value in quotes"),
        (
            "  match: /x",
            "must be a pattern of what lies below the location, without the location itself (got /x); write what comes "
            'after the location, such as "**/*.parquet"',
        ),
        ("  match: [ab]", "must be text (got a list of 1); put it in quotes if the brackets belong to it"),
        (
            "  match: '[z-a]'",
            'must be a pattern that can be matched (bad character range z-a at position 1) (got "[z-a]")',
        ),
        (
            "  match: 'x.{parquet,pq}'",
            'must be a pattern of *, **, ? and [abc]; {a,b} is not one of them (got "x.{parquet,pq}"); use * or [abc]',
        ),
        (
            "  match: x\u00a0",
            'must be one line of printable characters; U+00A0 is none (got "x\u00a0"); remove that character',
        ),
        ("  values: 3", 'must be text (got 3); write values: "3"'),
        ("  values: ''", 'must not be empty (got "")'),
        ("  shared: 'true'", 'must be true or false (got "true"); write shared: true'),
        ("  channels: G*", "must hold keys of its own: include, exclude, table (got G*)"),
        ("  channels: {include: G*}", 'must be a list (got G*); write include: ["G*"]'),
        (
            "  channels: {include: []}",
            "must hold at least one pattern (got an empty list); leave it out to take all channels",
        ),
        ("  channels: {include: [G1, 2]}", 'must be text (got 2); write "2"'),
        ("  channels: {table: g.xls}", "must be a table in .csv or .parquet (got g.xls)"),
        ("  channels: {include:[a], table:g.csv}", "is not a known key; a blank must follow the colon: table: g.csv"),
        ("  storage: {region: no}", 'must be text (got no); YAML reads no as false: write region: "no"'),
        ("  storage: {endpoint: 127.0.0.1:9000}", f'{ENDPOINT} (got 127.0.0.1:9000); write "http://127.0.0.1:9000"'),
        (
            "  storage: {endpoint: http://h:1/bucket}",
            f"{ENDPOINT} (got http://h:1/bucket); leave out what follows the host; bucket and folder belong into "
            "location",
        ),
        (
            "  storage: {endpoint: http://h:99999}",
            f"{ENDPOINT} (got http://h:99999); the port must be a number up to 65535",
        ),
        ("  <<: {match: x}", "is YAML's merge key, which is not read here; write the keys out"),
        (
            "  {a: b}: c",
            "has a key that is not plain text; write key: value, and put a value that starts with { or [ in quotes",
        ),
    ],
)
def test_values_that_break_a_rule(line, told):
    """Wrong types, and values that YAML reads otherwise than they look."""
    faults = [fault.split(": ", 2) for fault in faults_of(with_line(line))]
    assert told in [rest for place, _, rest in faults if place == "bridge.yaml:3"]


@pytest.mark.parametrize(
    ("value", "told"),
    [
        ("data/**/*.npy", 'must be a folder, not a pattern (got "data/**/*.npy"); patterns belong into source.match'),
        (
            "${HOME}/x",
            'must be written out: nothing is expanded in a job (got "${HOME}/x"); use --set KEY=VALUE for what changes',
        ),
        ("s3:/bkt/x", 'must have two slashes after the colon of a URL (got "s3:/bkt/x"); write "s3://bkt/x"'),
        ("s3a://bkt/x", 'must be one of the known kinds of location (got "s3a://bkt/x"); write "s3://bkt/x"'),
        (
            "s3://",
            'must name a bucket of 3 to 63 characters after s3:// (got "s3://"); write s3://bucket/folder/',
        ),
        ("file://x", 'must be an absolute path after file:// (got "file://x"); write the path alone'),
        (" ", 'must name a location (got " "); write s3://bucket/folder/ or a local path'),
        ("a\\0b", 'must name a location (got "a\0b"); write s3://bucket/folder/ or a local path'),
    ],
)
def test_locations_that_break_a_rule(value, told):
    """Misspelt URLs, patterns, variables."""
    text = WIDE.replace("s3://skelbeck/raw/", f'"{value}"')
    assert faults_of(text) == [f"bridge.yaml:3: source.location: {told}"]


@pytest.mark.parametrize(
    ("value", "told"),
    [
        (
            "{from_name: '(x)', step: 125}",
            [f'.step: {DURATION} (got 125); the unit is missing: write "125 s" or "125 min"'],
        ),
        (
            "{from_name: '(x)'}",
            [".step: is needed and missing; write the time from one sample to the next, such as step: 125 ms"],
        ),
        (
            "{from_name: 'x)', step: 0 s}",
            [
                '.from_name: must be a regular expression (unbalanced parenthesis at position 1) (got "x)")',
                ".step: must be longer than nothing (got 0 s)",
            ],
        ),
        (
            "{from_name: x, step: 8 Hz}",
            [
                f".from_name: {GROUPS}",
                f'.step: {DURATION} (got 8 Hz); give the time from one to the next instead of the rate: "125 ms"',
            ],
        ),
        (
            "{start: 2031-02-29, step: 1 s}",
            [
                ".start: must be a date and time, such as 2031-04-12T06:00:00Z (got 2031-02-29); there is no such date "
                "or time: day is out of range for month"
            ],
        ),
        ("{step: 1 s}", [f": {TIME} (got a mapping with step)"]),
        ("{from_name: '(x)', start: 2031-04-12}", [f": {TIME} (got a mapping with from_name, start)"]),
        ("no", [f": {TIME} (got no); write time: none if the shards hold no times"]),
        ("", [f": {TIME} (got nothing); write time: none if the shards hold no times"]),
        ("7", [f": {TIME} (got 7)"]),
    ],
)
def test_times_that_break_a_rule(value, told):
    """A step without its unit, a pattern without its group, two ways of starting at once."""
    text = ARRAY.replace("{from_name: '(\\d+)', step: 125 ms}", value)
    assert faults_of(text) == [f"bridge.yaml:5: source.time{part}" for part in told]


@pytest.mark.parametrize(
    ("override", "told"),
    [
        ("source.layout=long", "source.layout: must be wide, vector or array (got long)"),
        ("design.summary=split", "design.summary: must be auto, whole or exact (got split)"),
        ("design.gaps=fill", "design.gaps: must be refuse (got fill)"),
        ("design.background.wave=1 s", "design.background.wave: is not a known key; known here: mean, trend, cycles"),
        ("design.start_from=x", f"design.start_from: is not a known key; known here: {DESIGN_KEYS}"),
        ("modes.span={last: 30 d}", "modes.span: is not a known key; known here: rank, reads, remove, tolerance"),
        ("modes.align=x", "modes.align: is not a known key; known here: rank, reads, remove, tolerance"),
        (
            "screen={level: 0.9}",
            "screen: is not a known key; known here: campaign, source, dossier, design, modes, engine",
        ),
    ],
)
def test_what_this_version_does_not_do_is_not_known(override, told):
    """No value is taken and then ignored."""
    assert faults_of(WIDE, override) == [f"--set: {told}"]


@pytest.mark.parametrize(
    ("override", "told"),
    [
        ("modes.rank=0", f"modes.rank: {RANK} (got 0)"),
        ("modes.rank=true", f"modes.rank: {RANK} (got true)"),
        ("modes.rank=8.0", f"modes.rank: {RANK} (got 8.0); write 8"),
        ("modes.rank='8'", f'modes.rank: {RANK} (got "8"); write 8'),
        ("modes.rank=1:30", f"modes.rank: {RANK} (got 1:30)"),
        ("modes.rank=010", f"modes.rank: {RANK} (got 010); write 10"),
        ("modes.reads=6", "modes.reads: must be auto or a whole number, from 1 to 5 (got 6)"),
        ("modes.remove=mean", 'modes.remove: must be a list (got mean); write modes.remove=["mean"]'),
        ("modes.remove=[mean, mean]", "modes.remove: must name each term once (got a list of 2); mean stands twice"),
        ("modes.remove=[mean", 'modes.remove: must be a list (got [mean); write modes.remove=["[mean"]'),
        ("design.seed=-1", "design.seed: must be a whole number, 0 or more (got -1)"),
        (
            "design.background.mean=no",
            f"design.background.mean: {KEPT} (got no); {LEFT}",
        ),
        ("design.width=0", "design.width: must be auto or a whole number, from 1 to 65536 (got 0)"),
        (
            "design.leaf=60",
            f"design.leaf: {DURATION.replace('must be', 'must be auto, or')} (got 60); the unit is missing: write "
            '"60 s" or "60 min"',
        ),
        ("design.blas=haswell", f"design.blas: {CORE} (got haswell); write Haswell"),
        ("design.blas=auto", f"design.blas: {CORE} (got auto); write any if it does not matter"),
        ("engine.workers=0", "engine.workers: must be auto, serial or a whole number, from 1 to 100000 (got 0)"),
        ("engine.memory=2", f'engine.memory: {SIZE} (got 2); the unit is missing: write "2 MiB" or "2 GiB"'),
        ("engine.memory=2Gi", f'engine.memory: {SIZE} (got 2Gi); write "2 GiB"'),
        (
            "engine.memory=2 MiB",
            "engine.memory: must be at least 256 MiB: interpreter and libraries alone take most of that (got 2 MiB)",
        ),
        (
            "engine.address=ray://h:1",
            "engine.address: must be HOST:PORT or auto; Ray Client (ray://) is not used (got ray://h:1); start the run "
            "on the cluster as a Ray job, with address: auto",
        ),
        ("dossier.match=x", "dossier.match: is not a known key; did you mean source.match?"),
        ("mode.rank=3", "mode: is not a known key; did you mean modes?"),
        ("layuot=wide", "layuot: is not a known key; did you mean source.layout?"),
        (
            "source.time.step=1 s",
            "source.time.step: cannot be set: source.time holds a value, not keys; set source.time as a whole",
        ),
        ("campaign=7", 'campaign: must be text (got 7); write campaign="7"'),
        ("campaign=", "campaign: must be text (got nothing); write campaign: NAME"),
        ("modes.rank", "must be KEY=VALUE with a dotted key, such as modes.rank=12 (got modes.rank)"),
    ],
)
def test_arguments_are_checked_like_the_file(override, told):
    """With --set as their place."""
    assert faults_of(WIDE, override) == [f"--set: {told}"]
