"""Listing and footers -> a frozen list of shards, and the channels of a campaign.

Nothing is planned here and no measured value is read.
"""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Iterable, Iterator, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace
from itertools import islice
from typing import Protocol

from shardfold.channels import ChannelTable, keep_names
from shardfold.errors import InputError, NothingToRead, ShardRefused, VersionChanged
from shardfold.ids import ObjectInfo, Shard
from shardfold.job_places import pattern_regex
from shardfold.readers import ByteSource, ChannelSettings, Reader
from shardfold.readers.batch import some_names


class Campaign(ByteSource, Protocol):
    """What an inventory needs of a store."""

    @property
    def name(self) -> str:
        """Return what messages call the location."""
        ...

    def list(self, prefix: str = "") -> Iterator[ObjectInfo]:
        """Yield every object whose key starts with the prefix, in any order."""
        ...


@dataclass(frozen=True)
class Refusal:
    """One shard version that cannot be used, and why (`ShardfoldError.as_record`)."""

    key: str
    version: str
    error_record: Mapping[str, str]


@dataclass(frozen=True)
class Inventory:
    """What a campaign holds at one moment.

    Attributes
    ----------
    shards : tuple of Shard
        Described shards, sorted by key.
    unsettled : tuple of str
        Keys of objects too young to be read, or replaced while they were described, sorted.
    refused : tuple of Refusal
        Shards that break a rule, sorted by key.
    listed, listed_bytes : int
        Number and size of all matching objects, whether described or not.
    sampled : bool
        True if a limit left settled shards undescribed.
    """

    shards: tuple[Shard, ...]
    unsettled: tuple[str, ...]
    refused: tuple[Refusal, ...]
    listed: int
    listed_bytes: int
    sampled: bool


def take_inventory(
    store: Campaign,
    reader: Reader,
    match: str,
    settle_ns: int,
    now: float,
    known: Mapping[tuple[str, str], Shard | None] | None = None,
    *,
    threads: int = 16,
    limit: int | None = None,
) -> Inventory:
    """List a campaign and describe its shards.

    Parameters
    ----------
    match : str
        Glob over keys: ``*`` and ``?`` stay within a folder, ``**/`` is any depth, none included.
    settle_ns : int
        Objects younger than this many nanoseconds are left for the next run.
    now : float
        Seconds since the epoch on the store's clock.
    known : mapping of (key, version) to Shard
        Shards described before; they are neither read nor too young.
    threads : int
        Footers read at a time.
    limit : int, optional
        Most footers to read, evenly spread over the keys.

    Raises
    ------
    NothingToRead
        When nothing matches.
    ServiceFailed
        When the store fails.
    """
    known = known or {}
    found = _matching(store, match)
    old = [shard for info in found if (shard := known.get((info.key, info.version))) is not None]
    young, fresh = _by_age([info for info in found if known.get((info.key, info.version)) is None], settle_ns, now)
    chosen = _spread(fresh, limit)
    described = _describe_all(store, reader, chosen, threads)
    changed = [info.key for info, outcome in zip(chosen, described, strict=True) if outcome is None]
    return Inventory(
        shards=_sorted_and_shared([*old, *(outcome for outcome in described if isinstance(outcome, Shard))]),
        unsettled=tuple(sorted([*young, *changed])),
        refused=tuple(outcome for outcome in described if isinstance(outcome, Refusal)),
        listed=len(found),
        listed_bytes=sum(info.size for info in found),
        sampled=len(chosen) < len(fresh),
    )


def choose_channels(inventory: Inventory, settings: ChannelSettings, table: ChannelTable | None) -> tuple[str, ...]:
    """Return the channels of a campaign: the table's if there is one, else those that most shards have.

    Between equally frequent sets the one of the smallest key wins; include and exclude patterns apply.

    Raises
    ------
    InputError
        When no channel is left.
    """
    names: tuple[str, ...] = ()
    if table is not None:
        names = table.names
    elif inventory.shards:
        names = Counter(shard.channels for shard in inventory.shards).most_common(1)[0][0]
    kept = keep_names(names, settings.include, settings.exclude)
    if not kept:
        got = f"{some_names(names)}; include {settings.include}, exclude {settings.exclude}"
        raise InputError("no channel is left", rule="source.channels keeps at least one", got=got)
    return kept


def agree(shard: Shard, channels: Sequence[str]) -> None:
    """Check that a shard holds exactly these channels, in any order.

    Raises
    ------
    ShardRefused
        Naming up to three channels that are missing and three that are not expected.
    """
    if shard.channels == tuple(channels):
        return
    have, want = set(shard.channels), set(channels)
    missing = [name for name in channels if name not in have]
    unexpected = [name for name in shard.channels if name not in want]
    if missing or unexpected:
        parts = [f"missing {some_names(missing)}"] if missing else []
        parts += [f"not expected {some_names(unexpected)}"] if unexpected else []
        raise ShardRefused(
            "the shard's channels differ from the campaign's",
            shard=shard.key,
            version=shard.info.version,
            rule=f"the same {len(channels)} channels in every shard",
            got=f"{len(shard.channels)} channels; " + "; ".join(parts),
            remedy="leave channels out with source.channels.exclude, or the shard with source.match",
        )


def _matching(store: Campaign, match: str) -> list[ObjectInfo]:
    pattern = pattern_regex(match)
    folder = re.split(r"[*?\[]", match)[0].rpartition("/")
    found = [info for info in store.list("".join(folder[:2])) if pattern.fullmatch(info.key)]
    if not found:
        there = [info.key for info in islice(store.list(), 3)]
        raise NothingToRead(
            "nothing matches",
            where=store.name,
            rule=f"source.match {match!r}",
            got=f"keys such as {', '.join(sorted(there))}" if there else "an empty location",
            remedy="correct source.location or source.match",
        )
    return sorted(found, key=lambda info: info.key)


def _by_age(infos: Sequence[ObjectInfo], settle_ns: int, now: float) -> tuple[list[str], list[ObjectInfo]]:
    """Return the keys of what is too young, and what is old enough."""
    old = [info for info in infos if (now - info.modified) * 1e9 >= settle_ns]
    return [info.key for info in infos if (now - info.modified) * 1e9 < settle_ns], old


def _spread(infos: Sequence[ObjectInfo], limit: int | None) -> Sequence[ObjectInfo]:
    if limit is None or len(infos) <= limit:
        return infos
    return [infos[i * len(infos) // limit] for i in range(limit)]


def _describe_all(
    store: Campaign, reader: Reader, infos: Sequence[ObjectInfo], threads: int
) -> list[Shard | Refusal | None]:
    """Describe each; ``None`` stands for an object that was replaced or removed since it was listed."""

    def describe(info: ObjectInfo) -> Shard | Refusal | None:
        try:
            return reader.describe(store, info)
        except ShardRefused as error:
            return Refusal(info.key, info.version, error.as_record())
        except VersionChanged:
            return None

    pool = ThreadPoolExecutor(threads, thread_name_prefix="footers")
    try:
        return list(pool.map(describe, infos))
    finally:
        pool.shutdown(cancel_futures=True)


def _sorted_and_shared(shards: Iterable[Shard]) -> tuple[Shard, ...]:
    """Sort by key, and let shards with equal channels share one tuple: ten thousand copies would fill memory."""
    pool: dict[tuple[str, ...], tuple[str, ...]] = {}
    return tuple(
        replace(shard, channels=pool.setdefault(shard.channels, shard.channels))
        for shard in sorted(shards, key=lambda shard: shard.key)
    )
