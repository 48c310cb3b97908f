"""What people decide about shards: taken out of the sums, or let back in, each with a reason, an author and a time.

A decision is one ledger commit and nothing else; the next run carries it out. Which shards it names is checked against
what the ledger holds, so that a slip of the pen cannot pass for a decision.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from datetime import UTC, datetime

from shardfold.errors import InputError, WriterConflict
from shardfold.job_faults import nearest
from shardfold.ledger import Delta, Entry, Ledger, State, commit, load
from shardfold.store import Store

COMMIT_TRIES = 8
AUTHOR_VARIABLES = ("SHARDFOLD_AUTHOR", "USER", "LOGNAME")


@dataclass(frozen=True)
class Decision:
    """What a decision did: the commit's number, the shards it changed, and those that were as wanted before."""

    number: int
    changed: tuple[str, ...]
    unchanged: tuple[str, ...]


def withdraw(store: Store, keys: Sequence[str], because: str, software: str) -> Decision:
    """Take shards out of the sums, in the versions that are in; the next run adds up again without them.

    Parameters
    ----------
    store : Store
        The dossier's place.
    keys : sequence of str
        Shards that are in or were refused.
    because : str
        The reason.
    software : str
        Version, for the commit.

    Raises
    ------
    InputError
        If a shard is not in the ledger, or there is no reason.
    """
    return _decide(store, keys, because, software, "withdrawn", lambda entry: entry.state in ("in", "readmitted"))


def readmit(store: Store, keys: Sequence[str], because: str, software: str) -> Decision:
    """Let withdrawn shards back in; the next run takes them in, without reading what is stored of them still.

    Parameters and errors are those of ``withdraw``.
    """
    return _decide(store, keys, because, software, "readmitted", lambda entry: entry.state == "withdrawn")


def prune(store: Store, vanished: Sequence[str], count: int, software: str) -> Decision:
    """Take out shards that are in but no longer listed; exactly as many as were expected, or none.

    Raises
    ------
    InputError
        If another number has vanished.
    """
    if len(vanished) != count:
        raise InputError(
            "another number of shards has vanished than was to be taken out",
            where="--prune",
            rule=f"the number of shards that are in but not listed, {len(vanished)}",
            got=str(count),
            remedy="look at the campaign first: 'shardfold check JOB' counts them" if vanished else "leave --prune out",
        )
    because = f"not listed any more; taken out with --prune {count}"
    return _decide(store, vanished, because, software, "vanished", lambda entry: entry.state in ("in", "readmitted"))


def _decide(
    store: Store, keys: Sequence[str], because: str, software: str, state: State, due: Callable[[Entry], bool]
) -> Decision:
    if not because.strip():
        raise InputError("a decision needs a reason", where="--because", rule="a text that others understand", got="''")
    for _ in range(COMMIT_TRIES):
        ledger = load(store)
        entries = [_entry(ledger, key) for key in dict.fromkeys(keys)]
        changed = [entry for entry in entries if due(entry)]
        wrong = [entry for entry in entries if not due(entry) and not _as_wanted(entry, state)]
        if wrong:
            raise _not_possible(wrong[0], state)
        said = {"reason": because.strip(), "author": _author(), "when": datetime.now(UTC).isoformat(timespec="seconds")}
        delta = Delta(tuple(replace(entry, state=state, why=said) for entry in sorted(changed, key=lambda e: e.key)))
        try:
            number = commit(store, ledger, delta, software).number
        except WriterConflict:
            continue
        names = tuple(entry.key for entry in changed)
        return Decision(number, names, tuple(entry.key for entry in entries if entry.key not in names))
    raise WriterConflict(
        "other writers kept committing first",
        where="the ledger",
        rule=f"one of {COMMIT_TRIES} tries lands",
        remedy="run the same command again",
    )


def _as_wanted(entry: Entry, state: State) -> bool:
    return entry.state == state or (state == "readmitted" and entry.state == "in")


def _entry(ledger: Ledger, key: str) -> Entry:
    entry = ledger.shards.get(key)
    if entry is not None:
        return entry
    near = nearest(key, ledger.shards)
    raise InputError(
        "a shard is not in the ledger",
        where=key,
        rule="the key of a shard below the campaign's location, as 'shardfold ledger' lists it",
        got=f"none of {len(ledger.shards)} shards",
        remedy=f"did you mean {near}?" if near else "",
    )


def _not_possible(entry: Entry, state: State) -> InputError:
    what = "taken out" if state == "withdrawn" else "let back in"
    return InputError(
        f"the shard cannot be {what}",
        where=entry.key,
        rule="a shard that is in" if state == "withdrawn" else "a shard that was withdrawn",
        got=f"{entry.state}" + (f": {entry.why['what']}" if entry.why.get("what") else ""),
        remedy="a refused shard is out already" if entry.state == "refused" else "",
    )


def _author() -> str:
    return next((os.environ[name] for name in AUTHOR_VARIABLES if os.environ.get(name)), "")
