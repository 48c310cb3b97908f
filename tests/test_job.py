"""From a job's text to its settings: defaults, times, paths, records, arguments, and a bad day's faults all at once."""

from __future__ import annotations

import pickle
from pathlib import Path

import pytest
from job_texts import ARRAY, DURATION, RANK, WIDE, faults_of, with_line

from shardfold.errors import JobInvalid
from shardfold.ids import canonical_json, digest_bytes
from shardfold.job import TimeColumn, TimeFromName, TimeStart, load_job, parse_job


def test_defaults_are_filled_in():
    """A job of six lines; the values are those of the interface."""
    job = parse_job(WIDE, "bridge.yaml")
    assert (job.campaign, job.source.layout, job.source.time) == ("skelbeck", "wide", TimeColumn(column="t"))
    assert (job.source.match, job.source.settle_ns, job.source.values) == ("**/*.parquet", 600 * 10**9, None)
    assert (job.source.channels.include, job.source.channels.exclude, job.source.channels.table) == (None, (), None)
    assert (job.source.storage.endpoint, job.source.storage.region, job.source.storage.anonymous) == (None, None, False)
    assert (job.source.shared, job.dossier.shared) == (False, False)
    design = job.design
    assert (design.scale, design.gaps, design.background.mean, design.summary) == ("none", "refuse", True, "auto")
    assert (design.width, design.leaf, design.blas, design.seed) == ("auto", "auto", "any", 20310301)
    assert (design.mixed_units, design.background.trend, design.background.cycles) == (False, False, ())
    assert (job.modes.rank, job.modes.reads, job.modes.remove, job.modes.tolerance_deg) == (10, 1, ("mean",), 5.0)
    assert (job.engine.workers, job.engine.address, job.engine.memory_bytes) == ("auto", None, 2 * 2**30)
    assert (job.overrides, job.path, job.text_digest) == ((), None, digest_bytes(WIDE.encode()))


def test_every_kind_of_time():
    """Column, name, start, none; an array's shards end in .npy unless match says otherwise."""
    job = parse_job(ARRAY, "x")
    assert job.source.time == TimeFromName(from_name=r"(\d+)", step="125 ms")
    assert (job.source.time.pattern, job.source.time.step_ns) == (r"(\d+)", 125_000_000)
    assert (job.source.match, job.source.orient) == ("**/*.npy", "samples_by_channels")
    assert parse_job(ARRAY, "x", ["source.match=a.npy"]).source.match == "a.npy"
    start = parse_job(ARRAY, "x", ["source.time={start: 1970-01-01T00:00:01.5Z, step: 2 us}"]).source.time
    assert (isinstance(start, TimeStart), start.start_ns, start.step_ns) == (True, 1_500_000_000, 2000)
    assert parse_job(ARRAY, "x", ["source.time=none"]).source.time is None
    named = parse_job(WIDE, "x", [r"source.time={from_name: '(a|b)(?P<seconds>\d+)', step: 1 s}"]).source.time
    assert isinstance(named, TimeFromName)


def test_local_paths_start_at_the_folder_of_the_job(tmp_path, monkeypatch):
    """Not at the current folder; URLs stay; home and file:// are understood."""
    folder = tmp_path / "jobs"
    folder.mkdir()
    text = "campaign: b\nsource: {location: ../raw, layout: wide, time: t, channels: {table: g.csv}}\n"
    (folder / "b.yaml").write_text(text + "dossier: {location: file:///srv/d}\n")
    monkeypatch.chdir(tmp_path)
    monkeypatch.setenv("HOME", "/home/ada")
    job = load_job(Path("jobs/b.yaml"))
    assert job.source.location == str(tmp_path / "raw")
    assert job.source.channels.table == str(folder / "g.csv")
    assert (job.dossier.location, job.path) == ("/srv/d", folder / "b.yaml")
    assert load_job(Path("jobs/b.yaml"), ["dossier.location=~/d"]).dossier.location == "/home/ada/d"
    assert load_job(Path("jobs/b.yaml"), ["source.location=https://host/a/"]).source.location == "https://host/a/"


def test_settings_are_frozen_values():
    """Equal, hashable, picklable, not to be changed."""
    job = parse_job(WIDE, "one")
    assert job == parse_job(WIDE, "two")
    assert len({job, parse_job(WIDE, "two")}) == 1
    assert job != parse_job(WIDE, "one", ["modes.rank=11"])
    assert pickle.loads(pickle.dumps(job)) == job  # noqa: S301
    with pytest.raises(ValueError, match="frozen"):
        job.modes.rank = 3


def test_records_are_canonical():
    """JSON types with defaults filled in: the same whether a default is written or not, whatever the place."""
    job = parse_job(WIDE, "x")
    spelled = parse_job(WIDE, "x", ["design.gaps=refuse", "modes.rank=10", "source.settle=1 s", "engine.workers=3"])
    assert canonical_json(job.design_record()) == canonical_json(spelled.design_record())
    modes = {"rank": 10, "reads": 1, "remove": ["mean"], "tolerance_deg": 5.0}
    assert job.modes_record() == spelled.modes_record() == modes
    assert job.design_record()["source"]["time"] == {"column": "t"}
    moved = parse_job(WIDE.replace("s3://skelbeck/raw/", "/mnt/raw"), "x")
    assert moved.design_record() == job.design_record()
    assert parse_job(WIDE, "x", ["source.time=u"]).design_record() != job.design_record()


def test_digest_tells_text_and_overrides():
    """Two jobs with one digest were asked for in the same words."""
    digests = {parse_job(WIDE, "x", overrides).text_digest for overrides in ([], ["modes.rank=10"], ["modes.rank=9"])}
    assert len(digests | {parse_job(WIDE + "# more\n", "x").text_digest}) == 4
    assert parse_job(WIDE, "x", ["modes.rank=9"]).overrides == ("modes.rank=9",)


def test_all_faults_come_at_once_and_in_the_order_of_the_lines():
    """Unknown, missing and wrong keys, values, relations and arguments."""
    text = """\
campain: skelbeck
source:
  location: data
  layout: vectr
  settle: 10
  channels: {include: G*, tabel: g.csv}
dossier:
  location: data/dossier
  location: out
design: {leaf: 010}
rank: 3
"""
    assert faults_of(text, "modes.rank=0", "engine.worker=2") == [
        "bridge.yaml:1: campaign: is needed and missing; write campaign: NAME",
        "bridge.yaml:1: campain: is not a known key; did you mean campaign?",
        "bridge.yaml:2: source.time: is needed and missing; write time: COLUMN, or time: none if there are none",
        "bridge.yaml:4: source.layout: must be wide, vector or array (got vectr); did you mean vector?",
        f'bridge.yaml:5: source.settle: {DURATION} (got 10); the unit is missing: write "10 s" or "10 min"',
        'bridge.yaml:6: source.channels.include: must be a list (got G*); write include: ["G*"]',
        "bridge.yaml:6: source.channels.tabel: is not a known key; did you mean source.channels.table?",
        "bridge.yaml:9: dossier.location: is given twice, first on line 8; keep one of the two",
        f"bridge.yaml:10: design.leaf: {DURATION.replace('must be', 'must be auto, or')} (got 010); the unit is "
        'missing: write "010 s" or "010 min"',
        "bridge.yaml:11: rank: is not a known key; did you mean modes.rank?",
        f"--set: modes.rank: {RANK} (got 0)",
        "--set: engine.worker: is not a known key; did you mean engine.workers?",
    ]


def test_arguments_need_no_quotes_of_their_own():
    """A shell has taken them off already; the last one of a key counts."""
    job = parse_job(WIDE, "x", ["source.match=**/*.pq", "campaign=a #1", "modes.rank=3", "modes.rank=4"])
    assert (job.source.match, job.campaign, job.modes.rank) == ("**/*.pq", "a #1", 4)
    assert parse_job(WIDE, "x", ["source.match=[0-9]*.pq"]).source.match == "[0-9]*.pq"
    channels = parse_job(WIDE, "x", ["source.channels={include: [A*]}", "source.channels.exclude=[A3]"]).source.channels
    assert (channels.include, channels.exclude) == (("A*",), ("A3",))


def test_blank_sections_hold_the_defaults():
    """A file whose optional lines are all commented out is sound; so is an alias for a whole section."""
    text = WIDE + "design:\n  background:\nmodes:\nengine:\n"
    assert parse_job(text, "x").design == parse_job(WIDE, "x").design
    shared = with_line("  storage: &place {region: eu-north-1}") + "  storage: *place\n"
    assert parse_job(shared, "x").dossier.storage.region == "eu-north-1"


def test_missing_sections_are_told_key_by_key():
    """Nothing is left for a second round."""
    assert faults_of("modes: {rank: 3}\n") == [
        "bridge.yaml:1: campaign: is needed and missing; write campaign: NAME",
        "bridge.yaml:1: source.location: is needed and missing; write where the shards are: s3://bucket/folder/ or a "
        "local path",
        "bridge.yaml:1: source.layout: is needed and missing; write layout: wide, vector or array",
        "bridge.yaml:1: dossier.location: is needed and missing; write where Shardfold keeps its results: "
        "s3://bucket/folder/ or a local path",
        "bridge.yaml:1: source.time: is needed and missing; write time: COLUMN, or time: none if there are none",
    ]


def test_the_endpoint_argument_fills_gaps_only():
    """Locations on S3 that name none; checked like the rest."""
    job = parse_job(with_line("  storage: {endpoint: http://own:1}"), "x", endpoint="http://given:2/")
    assert (job.source.storage.endpoint, job.dossier.storage.endpoint) == ("http://own:1", "http://given:2")
    local = parse_job(WIDE, "x", ["source.location=/raw"], endpoint="http://given:2")
    assert local.source.storage.endpoint is None
    fault = faults_of(WIDE, endpoint="given")[0]
    assert fault.startswith("--endpoint: source.storage.endpoint: must be the address of an S3 service")


def test_files_that_cannot_be_read(tmp_path):
    """Missing, a folder, not UTF-8; a byte order mark is no harm."""
    job = tmp_path / "b.yaml"
    job.write_bytes(b"\xef\xbb\xbf" + WIDE.encode())
    assert load_job(job).campaign == "skelbeck"
    job.write_bytes(b"campaign: x\nsource: K\xf6ln\n")
    for path, told in [
        (tmp_path / "no.yaml", ": the job file cannot be read: no such file or directory; check the path"),
        (tmp_path, ": the job file cannot be read: is a directory; check the path"),
        (job, ":2: must be UTF-8 text; byte 22 of the file is not; save it as UTF-8"),
    ]:
        with pytest.raises(JobInvalid) as caught:
            load_job(path)
        assert caught.value.faults == (f"{path}{told}",)
        assert caught.value.exit_status == 2
