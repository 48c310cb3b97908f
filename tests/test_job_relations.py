"""Keys that depend on each other: every relation broken alone, and places that must lie apart."""

from __future__ import annotations

import pytest
from job_texts import ARRAY, WIDE, faults_of

from shardfold.job import parse_job


@pytest.mark.parametrize(
    ("overrides", "told"),
    [
        (["source.layout=vector", "source.values=t"], "source.values: must be another column than source.time (got t)"),
        (
            ["source.values=v"],
            "source.values: has no meaning with layout wide: every column of numbers is a channel (got v); "
            "leave it out",
        ),
        (
            ["source.orient=samples_by_channels"],
            "source.orient: has no meaning with layout wide, only with array (got samples_by_channels); leave it out",
        ),
        (
            ["source.time=none", "design.leaf=1 h"],
            "design.leaf: must be auto with time: none, where leaves are counted by shard name (got 1 h); leave it out",
        ),
        (
            ["source.time={start: 2031-04-12, step: 1 s}", "design.leaf=1 ms"],
            'design.leaf: must be at least one step of source.time (got 1 ms); the step is "1 s"',
        ),
        (
            ["design.scale=table"],
            "design.scale: must be none without a channel table (got table); add source.channels.table, or write "
            "scale: none",
        ),
        (
            ["source.location=/raw", "source.storage.region=x"],
            "source.storage.region: has no meaning: source.location is not on S3 (got x); leave it out, or write the "
            "location as s3://bucket/folder/",
        ),
        (
            ["source.shared=true"],
            "source.shared: has no meaning: source.location is not a local path (got true); leave it out",
        ),
        (
            ["dossier.location=gs://b/x"],
            "dossier.location: must be on S3 or a local path: other stores cannot create an object only if it is "
            "absent (got gs://b/x); write s3://bucket/folder/ or a path",
        ),
        (
            ["dossier.storage.anonymous=true"],
            "dossier.storage.anonymous: must be false: a dossier is written (got true); leave it out",
        ),
        (
            ["engine.workers=serial", "engine.address=auto"],
            "engine.address: has no meaning with workers: serial, which uses no Ray (got auto); leave one out",
        ),
    ],
)
def test_keys_that_depend_on_each_other(overrides, told):
    """Each relation, broken alone."""
    assert faults_of(WIDE, *overrides) == [f"--set: {told}"]


def test_layouts_that_need_another_key():
    """Told on the section that lacks it, or on the key that cannot be."""
    assert faults_of(WIDE.replace("wide", "vector")) == [
        "bridge.yaml:2: source.values: is needed with layout vector; name the column that holds the vectors"
    ]
    assert faults_of(WIDE.replace("  time: t\n", "").replace("wide", "array")) == [
        "bridge.yaml:2: source.time: is needed and missing; write time: {from_name: REGEX, step: 125 ms}, or time: "
        "none if there are none"
    ]
    assert faults_of(WIDE.replace("wide", "array")) == [
        "bridge.yaml:5: source.time: must not be a column with layout array, which has no columns (got t); write "
        "{from_name: REGEX, step: 125 ms}, {start: TIME, step: 125 ms} or none"
    ]
    assert faults_of(ARRAY, "source.values=v") == [
        "--set: source.values: has no meaning with layout array: the array is the values (got v); leave it out"
    ]


def test_a_fault_of_one_key_hides_no_relation_of_others():
    """Nor does a relation speak of a key that is faulty already."""
    faults = faults_of(WIDE, "source.settle=10", "design.scale=table", "source.channels.table=g.xls", "source.values=v")
    assert [fault.split(": ")[1] for fault in faults] == ["source.settle", "source.channels.table", "source.values"]


@pytest.mark.parametrize(
    ("source", "dossier", "match", "told"),
    [
        ("/a/raw", "/a/raw", None, "must not hold the campaign"),
        ("/a/raw", "/a", None, "must not hold the campaign"),
        ("s3://bkt/x/", "s3://bkt", None, "must not hold the campaign"),
        ("/a/raw", "/a/raw/d", None, "must not lie where source.match lists it: d/results/"),
        ("/a/raw", "/a/raw/../raw/d", "*.parquet", None),
        ("/a/raw", "/a/raw/d", "d/**", "must not lie where source.match lists it: d/results/"),
        ("/a/raw", "/a/raw/d", "?/*/[0-9]*", "must not lie where source.match lists it: d/channels/0001.parquet"),
        ("/a/raw", "/a/raw/d", "[!d]/**", None),
        ("s3://bkt", "s3://bkt//d/", None, "must not lie where source.match lists it: d/results/"),
        ("/a/raw", "/a/rawer", None, None),
        ("s3://bkt/x", "s3://other/x/d", None, None),
        ("file:///a/raw", "/a/raw/d", None, "must not lie where source.match lists it"),
    ],
)
def test_a_dossier_is_never_read_as_shards_nor_holds_any(source, dossier, match, told):
    """By the pattern that lists the shards, on the keys that a dossier has."""
    overrides = [f"source.location={source}", f"dossier.location={dossier}"]
    overrides += [f"source.match={match}"] if match else []
    if told is None:
        assert parse_job(WIDE, "x", overrides).dossier.location
    else:
        (fault,) = faults_of(WIDE, *overrides)
        assert fault.startswith(f"--set: dossier.location: {told}")


def test_a_link_into_the_campaign_is_seen(tmp_path):
    """Local paths are compared where they lead."""
    (tmp_path / "raw").mkdir()
    (tmp_path / "elsewhere").symlink_to(tmp_path / "raw")
    (fault,) = faults_of(WIDE, f"source.location={tmp_path}/raw", f"dossier.location={tmp_path}/elsewhere/d")
    assert "d/results/" in fault


def test_one_bucket_name_at_two_services_is_two_places():
    """An endpoint that is not given may be either."""
    places = ["source.location=s3://bkt", "dossier.location=s3://bkt/d", "source.storage.endpoint=http://a:1"]
    assert "lists it" in faults_of(WIDE, *places)[0]
    assert "lists it" in faults_of(WIDE, *places, "dossier.storage.endpoint=HTTP://A:1/")[0]
    assert parse_job(WIDE, "x", [*places, "dossier.storage.endpoint=http://b:1"]).source.location == "s3://bkt"


def test_a_channel_table_is_never_read_as_a_shard():
    """The same trap as a dossier inside the campaign."""
    overrides = ["source.location=/a/raw", "source.channels.table=/a/raw/gauges.parquet"]
    assert "gauges.parquet would be read as a shard" in faults_of(WIDE, *overrides)[0]
    assert parse_job(WIDE, "x", [*overrides, "source.match=2031/*"]).source.match == "2031/*"


def test_a_table_on_s3_is_reached_through_the_storage_of_the_source():
    """Even where the shards are local."""
    overrides = ["source.location=/a/raw", "source.channels.table=s3://bkt/g.csv", "source.storage.region=x"]
    assert parse_job(WIDE, "x", overrides).source.storage.region == "x"
