"""What a dossier holds and what came of it: every shard with its state and why, every published result.

Reads the ledger and the manifests, nothing else, and writes nothing.
"""

from __future__ import annotations

import json
from collections import Counter
from dataclasses import dataclass, field
from typing import Any

from shardfold import layout
from shardfold.gather import moment
from shardfold.ledger import Entry, load
from shardfold.refusals import found_in
from shardfold.store import Store


@dataclass(frozen=True)
class ShardRow:
    """One shard as the ledger has it."""

    key: str
    version: str
    state: str
    rows: int
    first: str | None
    last: str | None
    why: str
    author: str
    when: str


@dataclass(frozen=True)
class ResultRow:
    """One published result, by what its manifest says."""

    folder: str
    ledger_number: int
    published: str
    shards: int
    samples: int
    modes: int
    reads: int
    captured_fraction: float
    removed: str
    overrides: tuple[str, ...]
    verdicts: dict[str, int] = field(default_factory=dict)


def shard_rows(store: Store) -> tuple[int, list[ShardRow]]:
    """Return the ledger's number, and its shards in the order of their keys."""
    ledger = load(store)
    return ledger.number, [_shard_row(entry) for _, entry in sorted(ledger.shards.items())]


def result_rows(store: Store) -> list[ResultRow]:
    """Return the published results, oldest first."""
    found = [layout.parse_manifest(info.key) for info in store.list(layout.RESULTS)]
    folders = [parsed[1] for parsed in found if parsed is not None]
    rows = [_result_row(folder, json.loads(bytes(store.read(folder + layout.MANIFEST)))) for folder in folders]
    return sorted(rows, key=lambda row: (row.ledger_number, row.published))


def _shard_row(entry: Entry) -> ShardRow:
    why = entry.why.get("reason", "") if entry.state in ("withdrawn", "readmitted", "vanished") else found_in(entry)
    first, last = (None if time is None else moment(time) for time in (entry.first, entry.last))
    author, when = entry.why.get("author", ""), entry.why.get("when", "")
    return ShardRow(entry.key, entry.version, entry.state, entry.rows, first, last, why, author, when)


def _result_row(folder: str, manifest: dict[str, Any]) -> ResultRow:
    quality = manifest["quality"]
    verdicts = Counter(row["verdict"] for row in quality["accuracy"] if row["verdict"] is not None)
    return ResultRow(
        folder=folder,
        ledger_number=manifest["ledger_number"],
        published=manifest["made"]["end"],
        shards=len(manifest["shards"]),
        samples=quality["samples"],
        modes=quality["modes"],
        reads=manifest["reads"],
        captured_fraction=quality["captured_fraction"],
        removed=quality["removed"],
        overrides=tuple(manifest["set"]),
        verdicts=dict(sorted(verdicts.items())),
    )
