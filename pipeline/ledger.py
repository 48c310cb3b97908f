"""The ledger: numbered commits, each a small change, of which shards are in and which cells hold them.

A commit is one conditional create, so two writers cannot both have a number. It carries its own digest and that of the
one before. It ends in one of three ways: landed,
refused (another writer took the number), or unknown (the answer was lost; the token in the body, read back, tells).
State is the replay of all commits. Corrections and checkpoints have room as further fields of a delta; a reader refuses
a format newer than its own.
"""

from __future__ import annotations

import json
import uuid
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace
from datetime import UTC, datetime
from typing import Any, Literal

from shardfold import layout
from shardfold.errors import RecordCorrupt, WriterConflict
from shardfold.ids import ObjectInfo, RowGroup, Shard, canonical_json, digest_bytes, digest_value
from shardfold.store import Created, Store

FORMAT = 2
State = Literal["in", "refused", "withdrawn", "readmitted", "vanished"]


@dataclass(frozen=True)
class Entry:
    """What the ledger says of one shard version.

    A withdrawn shard is out until it is readmitted; then it is in as soon as a run has taken it in. A vanished one was
    no longer listed and taken out by decision; it comes in again if it is listed again. ``why`` says what
    is wrong with a refused shard, and who decided what for which reason of a withdrawn one.

    ``shard`` is what its footer said, kept so that no footer is read twice; ``first``, ``last``, ``rows`` and
    ``digest`` are what was found when it was read; ``under`` is the digest of the source settings it was judged by.
    """

    key: str
    version: str
    state: State
    under: str
    shard: Shard | None = None
    rows: int = 0
    first: int | None = None
    last: int | None = None
    digest: str = ""
    why: Mapping[str, str] = field(default_factory=dict)


Leaf = tuple[int, int]
"""Read number and leaf number."""


@dataclass(frozen=True)
class LeafState:
    """The cells of a leaf, in the order in which they are summed, and its samples."""

    cells: tuple[str, ...]
    rows: int


@dataclass(frozen=True)
class Ledger:
    """The replayed state: shards by key, cell names by (read, leaf), the highest number and its digest."""

    number: int = 0
    head: str = ""
    shards: Mapping[str, Entry] = field(default_factory=dict)
    leaves: Mapping[Leaf, LeafState] = field(default_factory=dict)

    def entry(self, key: str, version: str) -> Entry | None:
        """Return what is said of a shard version, or ``None``."""
        found = self.shards.get(key)
        return found if found is not None and found.version == version else None

    def known(self) -> dict[tuple[str, str], Shard]:
        """Return the footers that need not be read again, by key and version."""
        return {(e.key, e.version): e.shard for e in self.shards.values() if e.shard is not None}


@dataclass(frozen=True)
class Delta:
    """A change: entries that are new or differ, and leaves whose list of cells is new or differs."""

    shards: tuple[Entry, ...] = ()
    leaves: Mapping[Leaf, LeafState] = field(default_factory=dict)

    def __bool__(self) -> bool:
        return bool(self.shards or self.leaves)


def difference(ledger: Ledger, shards: Iterable[Entry], leaves: Mapping[Leaf, LeafState]) -> Delta:
    """Return only what the ledger does not say already."""
    return Delta(
        tuple(sorted((e for e in shards if ledger.shards.get(e.key) != e), key=lambda e: e.key)),
        {leaf: state for leaf, state in sorted(leaves.items()) if ledger.leaves.get(leaf) != state},
    )


def load(store: Store) -> Ledger:
    """Return the state after all commits.

    Raises
    ------
    RecordCorrupt
        If a number is missing, a link to the one before is broken, or a commit's format is unknown.
    """
    numbers = sorted(n for info in store.list(layout.LEDGER) if (n := layout.parse_commit(info.key)) is not None)
    if numbers != list(range(1, len(numbers) + 1)):
        missing = sorted(set(range(1, (numbers or [0])[-1] + 1)) - set(numbers))
        raise _corrupt(layout.LEDGER, "every number from 1 on", f"missing: {missing[:5]}")
    ledger = Ledger()
    for number in numbers:
        ledger = apply_commit(ledger, bytes(store.read(layout.commit_key(number))), number)
    return ledger


def apply_commit(ledger: Ledger, body: bytes, number: int) -> Ledger:
    """Return the state after one more commit, its link checked."""
    key = layout.commit_key(number)
    try:
        commit = json.loads(body)
        if commit["format"] != FORMAT:
            raise _corrupt(key, f"format {FORMAT}", str(commit["format"]))
        digest = digest_value({name: value for name, value in commit.items() if name != "digest"})
        if commit["digest"] != digest:
            raise _corrupt(key, f"digest {commit['digest']}", digest)
        if commit["number"] != number or commit["parent"] != ledger.head:
            raise _corrupt(key, f"commit {number} on {ledger.head!r}", f"{commit['number']} on {commit['parent']!r}")
        shards = {record["key"]: _entry(record) for record in commit["shards"]}
        leaves = {(r["read"], r["leaf"]): LeafState(tuple(r["cells"]), r["rows"]) for r in commit["leaves"]}
    except (ValueError, KeyError, TypeError) as error:
        raise _corrupt(key, "a ledger commit", f"{type(error).__name__}: {error}") from error
    return Ledger(number, digest_bytes(body), {**ledger.shards, **shards}, {**ledger.leaves, **leaves})


def commit(store: Store, ledger: Ledger, delta: Delta, software: str) -> Ledger:
    """Write one commit and return the state after it.

    Raises
    ------
    WriterConflict
        If another writer took the number. Nothing was written; load the ledger again and decide anew.
    """
    if not delta:
        return ledger
    number = ledger.number + 1
    record = {
        "format": FORMAT,
        "number": number,
        "parent": ledger.head,
        "token": uuid.uuid4().hex,
        "written": datetime.now(UTC).isoformat(timespec="seconds"),
        "software": software,
        "shards": [_record(entry) for entry in delta.shards],
        "leaves": [
            {"read": read, "leaf": leaf, "cells": list(state.cells), "rows": state.rows}
            for (read, leaf), state in delta.leaves.items()
        ],
    }
    body = canonical_json(record | {"digest": digest_value(record)})
    key = layout.commit_key(number)
    if store.create(key, body) is not Created.LANDED and bytes(store.read(key)) != body:
        raise WriterConflict(
            "another writer committed first",
            where=key,
            rule="one writer has a number",
            got="a commit that is not ours",
            remedy="run again: what is in storage already is not read again",
        )
    return apply_commit(ledger, body, number)


def _record(entry: Entry) -> dict[str, Any]:
    record: dict[str, Any] = {
        "key": entry.key,
        "version": entry.version,
        "state": entry.state,
        "under": entry.under,
        "rows": entry.rows,
        "first": entry.first,
        "last": entry.last,
        "digest": entry.digest,
        "why": dict(entry.why),
    }
    if entry.shard is not None:
        shard = entry.shard
        record["footer"] = {
            "size": shard.info.size,
            "modified": shard.info.modified,
            "dtype": shard.dtype,
            "zoned": shard.zoned,
            "groups": [[g.rows, g.stored_bytes, g.decoded_bytes, g.first, g.last] for g in shard.groups],
        }
    return record


def _entry(record: dict[str, Any]) -> Entry:
    names = ("key", "version", "state", "under", "rows", "first", "last", "digest", "why")
    entry = Entry(**{name: record[name] for name in names})
    footer = record.get("footer")
    if footer is None:
        return entry
    info = ObjectInfo(entry.key, entry.version, footer["size"], footer["modified"])
    groups = tuple(RowGroup(*group) for group in footer["groups"])
    return replace(entry, shard=Shard(info, groups, (), footer["dtype"], footer["zoned"]))


def _corrupt(key: str, rule: str, got: str) -> RecordCorrupt:
    return RecordCorrupt(
        "the ledger is not as it was written",
        where=key,
        rule=rule,
        got=got,
        remedy="restore the object from a copy; do not delete commits",
    )
