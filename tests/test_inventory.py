"""Listing and footers become a frozen inventory; the channels of a campaign follow from it."""

from __future__ import annotations

import io
import threading
from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from pathlib import Path
from types import SimpleNamespace as Plain
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from shardfold.channels import default_table
from shardfold.errors import InputError, NothingToRead, ShardRefused, StorageFailed, VersionChanged
from shardfold.ids import ObjectInfo, RowGroup, Shard
from shardfold.inventory import Inventory, Refusal, agree, choose_channels, take_inventory
from shardfold.job import TimeColumn
from shardfold.job_places import pattern_regex
from shardfold.readers import reader_for
from shardfold.store import StoreSettings, connect

MINUTE = 60 * 10**9
ALL = Plain(include=None, exclude=())


def shard_of(key: str, channels: tuple[str, ...] = ("a", "b"), version: str = "1") -> Shard:
    return Shard(ObjectInfo(key, version, 10, 0.0), (RowGroup(3, 8, 8, 0, 2),), channels, "float32")


@dataclass
class Campaign:
    """Objects with ages, and what describing each of them ends in."""

    ages: dict[str, float]
    endings: dict[str, Exception] = field(default_factory=dict)
    listings: list[str] = field(default_factory=list)
    described: list[str] = field(default_factory=list)
    name: str = "s3://campaign"

    def list(self, prefix: str = "") -> Iterator[ObjectInfo]:
        self.listings.append(prefix)
        for key in sorted(self.ages, reverse=True):
            if key.startswith(prefix):
                yield ObjectInfo(key, "1", 10, 1000.0 - self.ages[key])

    def read(self, key: str, *, version: str | None = None, start: int = 0, stop: int | None = None) -> bytes:
        raise AssertionError("only readers read")

    def describe(self, store: Any, info: ObjectInfo) -> Shard:
        self.described.append(info.key)
        if info.key in self.endings:
            raise self.endings[info.key]
        return replace(shard_of(info.key), info=info, channels=tuple(["a", "b"]))  # noqa: C409 - a tuple of its own


def take(campaign: Campaign, match: str = "**/*.parquet", settle_ns: int = 0, **options: Any) -> Inventory:
    return take_inventory(campaign, campaign, match, settle_ns, 1000.0, **options)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("match", "keys"),
    [
        ("**/*.parquet", ["a.parquet", "d/b.parquet", "d/e/c.parquet"]),
        ("*.parquet", ["a.parquet"]),
        ("d/*.parquet", ["d/b.parquet"]),
        ("d/**/*.parquet", ["d/b.parquet", "d/e/c.parquet"]),
        ("**/e/*", ["d/e/c.parquet"]),
        ("d/**", ["d/b.parquet", "d/e/c.parquet", "d/x(1)+.npy"]),
        ("?.parquet", ["a.parquet"]),
        ("**/[b-c].parquet", ["d/b.parquet", "d/e/c.parquet"]),
        ("**/[!bc].parquet", ["a.parquet"]),
        ("**", ["a.parquet", "d/b.parquet", "d/e/c.parquet", "d/x(1)+.npy"]),
        ("d/x(1)+.npy", ["d/x(1)+.npy"]),
    ],
)
def test_the_glob_matches_as_people_expect(match: str, keys: list[str]) -> None:
    there = ["a.parquet", "d/b.parquet", "d/e/c.parquet", "d/x(1)+.npy"]
    assert [key for key in there if pattern_regex(match).fullmatch(key)] == keys


def test_only_the_folder_before_the_first_wildcard_is_listed() -> None:
    campaign = Campaign({"2031/03/a.parquet": 1, "2032/03/b.parquet": 1})
    assert [shard.key for shard in take(campaign, "2031/0*/*.parquet").shards] == ["2031/03/a.parquet"]
    assert campaign.listings == ["2031/"]


def test_shards_come_in_key_order_and_are_all_counted() -> None:
    inventory = take(Campaign({"b.parquet": 1, "a.parquet": 1, "c/a.parquet": 1, "x.txt": 1}))
    assert [shard.key for shard in inventory.shards] == ["a.parquet", "b.parquet", "c/a.parquet"]
    assert (inventory.listed, inventory.listed_bytes, inventory.sampled) == (3, 30, False)


def test_young_objects_are_left_for_the_next_run() -> None:
    campaign = Campaign({"old.parquet": 600.0, "young.parquet": 599.0, "future.parquet": -5.0})
    inventory = take(campaign, settle_ns=10 * MINUTE)
    assert [shard.key for shard in inventory.shards] == ["old.parquet"]
    assert inventory.unsettled == ("future.parquet", "young.parquet")
    assert campaign.described == ["old.parquet"]


def test_a_young_match_is_not_an_empty_match() -> None:
    inventory = take(Campaign({"young.parquet": 1.0}), settle_ns=MINUTE)
    assert (inventory.shards, inventory.unsettled) == ((), ("young.parquet",))


def test_known_versions_are_neither_read_again_nor_too_young() -> None:
    campaign = Campaign({"a.parquet": 1.0, "b.parquet": 1e6, "c.parquet": 1e6})
    known = {("a.parquet", "1"): shard_of("a.parquet"), ("b.parquet", "0"): shard_of("b.parquet", version="0")}
    inventory = take(campaign, settle_ns=MINUTE, known=known)
    assert [shard.key for shard in inventory.shards] == ["a.parquet", "b.parquet", "c.parquet"]
    assert sorted(campaign.described) == ["b.parquet", "c.parquet"]


def test_a_limit_takes_an_even_sample_of_the_footers() -> None:
    campaign = Campaign({f"{i:03d}.parquet": 1.0 for i in range(100)})
    inventory = take(campaign, limit=4)
    assert [shard.key for shard in inventory.shards] == [f"{i:03d}.parquet" for i in (0, 25, 50, 75)]
    assert (inventory.listed, inventory.sampled) == (100, True)
    assert not take(campaign, limit=100).sampled


def test_a_refused_shard_keeps_its_reason_and_the_others_go_on() -> None:
    error = ShardRefused("no time column", shard="b.parquet", version="1", rule="one", got="none")
    inventory = take(Campaign({"a.parquet": 1, "b.parquet": 1, "c.parquet": 1}, {"b.parquet": error}))
    assert [shard.key for shard in inventory.shards] == ["a.parquet", "c.parquet"]
    record = {"what": "no time column", "where": "b.parquet", "rule": "one", "got": "none"}
    assert inventory.refused == (Refusal("b.parquet", "1", record),)


def test_a_shard_replaced_while_it_is_described_is_left_for_the_next_run() -> None:
    inventory = take(Campaign({"a.parquet": 1, "b.parquet": 1}, {"a.parquet": VersionChanged("replaced")}))
    assert [shard.key for shard in inventory.shards] == ["b.parquet"]
    assert inventory.unsettled == ("a.parquet",)


def test_a_store_that_fails_ends_the_inventory() -> None:
    campaign = Campaign({f"{i}.parquet": 1 for i in range(50)}, {"7.parquet": StorageFailed("no answer")})
    with pytest.raises(StorageFailed, match="no answer"):
        take(campaign, threads=2)
    assert not [thread for thread in threading.enumerate() if thread.name.startswith("footers")]


def test_equal_channels_are_one_tuple() -> None:
    one, two = take(Campaign({"a.parquet": 1, "b.parquet": 1})).shards
    assert one.channels is two.channels


def test_an_empty_match_says_what_is_there() -> None:
    campaign = Campaign({f"raw/{i}.csv": 1 for i in range(9)})
    with pytest.raises(NothingToRead) as caught:
        take(campaign, "raw/*.parquet")
    assert caught.value.where == "s3://campaign"
    assert caught.value.rule == "source.match 'raw/*.parquet'"
    assert caught.value.got == "keys such as raw/6.csv, raw/7.csv, raw/8.csv"


@pytest.mark.parametrize("kind", ["local", "s3"])
def test_an_inventory_of_real_stores(kind: str, tmp_path: Path, request: pytest.FixtureRequest) -> None:
    place = StoreSettings(str(tmp_path))
    if kind == "s3":
        bucket = request.getfixturevalue("bucket")
        place = StoreSettings(f"{bucket.location}/run", bucket.endpoint)
    store, sink = connect(place), io.BytesIO()
    pq.write_table(pa.table({"t": pa.array([0, 1], pa.timestamp("s")), "a": np.zeros(2)}), sink)
    for key in ("day 1/a.parquet", "day 2/b.parquet", "day 2/b.txt"):
        store.put(key, sink.getvalue())
    source = Plain(layout="wide", time=TimeColumn(column="t"), values=None, orient="", channels=ALL)
    inventory = take_inventory(store, reader_for(source), "day ?/*.parquet", 0, 1e12)
    assert [shard.key for shard in inventory.shards] == ["day 1/a.parquet", "day 2/b.parquet"]
    assert {shard.rows for shard in inventory.shards} == {2}
    assert inventory.listed_bytes == 2 * len(sink.getvalue())


def inventory_of(*shards: Shard) -> Inventory:
    return Inventory(shards, (), (), len(shards), 10 * len(shards), sampled=False)


def test_most_shards_choose_the_channels() -> None:
    shards = [shard_of("a", ("x",)), shard_of("b", ("x", "y")), shard_of("c", ("x", "y"))]
    assert choose_channels(inventory_of(*shards), ALL, None) == ("x", "y")
    assert choose_channels(inventory_of(*shards[:2]), ALL, None) == ("x",)


def test_a_channel_table_chooses_channels_and_their_order() -> None:
    chosen = choose_channels(inventory_of(shard_of("a", ("x", "y", "z"))), ALL, default_table(("z", "x")))
    assert chosen == ("z", "x")


def test_patterns_narrow_the_choice_and_must_leave_one() -> None:
    inventory = inventory_of(shard_of("a", ("G1", "G2", "T1")))
    assert choose_channels(inventory, Plain(include=("G*",), exclude=("G1",)), None) == ("G2",)
    with pytest.raises(InputError) as caught:
        choose_channels(inventory, Plain(include=("X*",), exclude=()), None)
    assert str(caught.value) == (
        "no channel is left\n  rule: source.channels keeps at least one\n  got: G1, G2, T1; include ('X*',), exclude ()"
    )


def test_order_does_not_matter_for_agreement_but_names_do() -> None:
    agree(shard_of("a", ("x", "y")), ("y", "x"))
    with pytest.raises(ShardRefused, match="3 channels; missing y; not expected p, q"):
        agree(shard_of("a", ("x", "p", "q")), ("x", "y"))
