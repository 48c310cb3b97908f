"""Refused shards as the ledger remembers them and as people read of them, and how long a refusal holds.

Pure: entries and errors in, entries, errors and texts out. Who refuses, and when, is decided elsewhere.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from shardfold.errors import InputError, ShardRefused, VersionChanged, told
from shardfold.ids import Shard
from shardfold.ledger import Entry, Ledger
from shardfold.plan import Cell


def refusal_of(error: ShardRefused, shard: Shard, under: str, rival: Mapping[str, str] | None = None) -> Entry:
    """Return what the ledger says of a shard that is refused.

    Parameters
    ----------
    error : ShardRefused
        Why; of two rivals it may name the other one.
    shard : Shard
        Who.
    under : str
        Digest of the source settings it was judged by.
    rival : mapping, optional
        ``rival``, and ``rival_version`` if it was listed: whose way this shard was in.
    """
    where = {} if shard.key == error.shard else {"where": shard.key}
    why = {**error.as_record(), **where, **(rival or {})}
    return Entry(shard.key, shard.info.version, "refused", under, shard, why=why)


def still_refused(entry: Entry, state: Ledger, listed: Mapping[str, str]) -> bool:
    """Return whether a refusal of an earlier run still holds: one for a rival's sake does while that is as it was.

    Parameters
    ----------
    entry : Entry
        What the ledger says of the shard.
    state : Ledger
        All that it says.
    listed : mapping of key to version
        The shards that can be read now.
    """
    rival, version = entry.why.get("rival"), entry.why.get("rival_version")
    if entry.state != "refused" or rival is None:
        return entry.state == "refused"
    if version is None or rival in listed:
        return listed.get(rival) == version
    kept = state.entry(rival, version)
    return kept is not None and kept.state == "in"


def message_of(entry: Entry) -> str:
    """Return why a shard is refused: what, with the place within the shard, and a line each for the other parts."""
    place = entry.why.get("where", "").removeprefix(entry.key).removeprefix(", ")
    return told({**entry.why, "where": place})


def found_in(entry: Entry) -> str:
    """Return in one line what is wrong with a refused shard, and the value that shows it."""
    return "; got ".join(entry.why[part] for part in ("what", "got") if entry.why.get(part))


def nothing_left(refused: Mapping[str, Entry]) -> InputError:
    """Return the error for a campaign of which every shard is refused."""
    key, entry = min(refused.items())
    return InputError(
        "no shard can be taken in",
        where=key,
        rule=entry.why.get("rule", "at least one shard that can be trusted"),
        got=f"{len(refused)} refused; the first: {found_in(entry)}",
        remedy=entry.why.get("remedy", "see the reasons above"),
    )


def beside_vanished(shard: Shard, gone: str) -> ShardRefused:
    """Return the refusal of a new shard whose cell would need one that is in and no longer there."""
    return ShardRefused(
        "it shares a small cell with a shard that has vanished",
        shard=shard.key,
        version=shard.info.version,
        rival=gone,
        rule="to add it, all small shards of its leaf are read again",
        got=f"{gone} is not listed any more",
        remedy=f"put {gone} back under its name, or take it out with --prune, then run again",
    )


def vanished(cell: Cell, gone: Sequence[str]) -> InputError:
    """Return the error for a cell that must be read again though some of its shards are no longer there."""
    return InputError(
        "a shard that is in has vanished, and what it gave must be read again",
        where=gone[0],
        rule=f"the shards of leaf {cell.leaf}, read {cell.read}, are still in the campaign",
        got=f"{len(gone)} of them {'is' if len(gone) == 1 else 'are'} not listed any more",
        remedy="put the shard back under its name, or take it out with 'shardfold run JOB --prune N'",
    )


def changed_between_reads(error: ShardRefused) -> VersionChanged:
    """Return the error for a shard that was sound when it was first read, and is not when it is read again."""
    return VersionChanged(
        "a shard changed between its first reading and a further one; nothing was published",
        where=error.shard,
        rule="every reading sees the same shard versions",
        got="; got ".join(part for part in (error.what, error.got) if part),
        remedy="run again: the shard is taken as it is then",
    )
