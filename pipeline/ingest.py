"""Bringing the cells of one read into storage and the ledger: what is there is skipped, what is refused is replanned.

A shard is in when all its pieces are in stored cells; a cell never holds a refused shard. So a refusal drops the shard,
the cells it shared are planned again without it, and the loop ends when a plan has been carried out without a refusal.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from typing import Any

import numpy as np

from shardfold import artifacts, layout
from shardfold.errors import ShardRefused, WriterConflict
from shardfold.events import Committed, Listener, Refused, StageDone, StageStarted, TaskDone
from shardfold.executor import Executor
from shardfold.gather import check_repeats
from shardfold.ids import Shard, digest_bytes
from shardfold.kernels.whole import Shape
from shardfold.ledger import Entry, Leaf, LeafState, Ledger, commit, difference, load
from shardfold.plan import Cell, by_leaf, bytes_to_read, cut
from shardfold.refusals import beside_vanished, changed_between_reads, message_of, nothing_left, refusal_of, vanished
from shardfold.store import Store
from shardfold.tasks import CellRead, ReadCell, Refusal, Workplace

COMMIT_LEAVES = 100
COMMIT_SECONDS = 600.0
COMMIT_TRIES = 8


@dataclass
class Intake:
    """The working state of a run's reads.

    Attributes
    ----------
    shards : dict of key to Shard
        What shall be in; refused ones leave it.
    absent : frozenset of str
        Keys that are in but no longer listed: kept, and never read again.
    under : str
        Digest of the source settings, by which refusals are judged.
    """

    store: Store
    workplace: Workplace
    executor: Executor
    listen: Listener
    clock: Callable[[], float]
    software: str
    ledger: Ledger
    shards: dict[str, Shard]
    absent: frozenset[str]
    under: str
    refused: dict[str, Entry] = field(default_factory=dict)
    bytes_read: int = 0
    cells_read: int = 0
    cores: set[str] = field(default_factory=set)
    pieces: dict[str, tuple[dict[str, Any], ...]] = field(default_factory=dict)

    def cells(self, read: int, shape: Shape, probe_digest: str) -> tuple[Cell, ...]:
        """Return the cells of a read; shards that cannot be cut are refused on the way."""
        while True:
            cutting = cut(list(self.shards.values()), self.workplace.design, read, shape, probe_digest)
            if not cutting.refused:
                return cutting.cells
            for error in cutting.refused:
                self.drop(error)

    def drop(self, error: ShardRefused) -> None:
        """Take a refused shard out of what shall be in; of two rivals the one already in stays."""
        key, rival = error.shard, error.rival
        if rival and rival not in self.shards:
            return  # one of the two is out already: the next plan shows whether the other is sound
        if rival and self.is_in(key) and not self.is_in(rival):
            key, rival = rival, key
        shard = self.shards.pop(key, None)
        if shard is None:
            return
        self.refuse(refusal_of(error, shard, self.under, self._rival_facts(rival) if rival != key else {}))

    def first_to_drop(self, error: ShardRefused) -> tuple[bool, bool, str]:
        """Sort refusals so that no shard is dropped for the sake of one that is dropped later."""
        neither_in = not (self.is_in(error.shard) or self.is_in(error.rival))
        return bool(error.rival), neither_in, error.shard

    def _rival_facts(self, key: str) -> dict[str, str]:
        version = {"rival_version": self.shards[key].info.version} if key and key not in self.absent else {}
        return {"rival": key, **version} if key else {}

    def refuse(self, entry: Entry) -> None:
        """Note a refusal and say it, once."""
        before = self.ledger.entry(entry.key, entry.version)
        standing = before is not None and before.state == "refused" and before.why == entry.why
        self.refused[entry.key] = entry
        self.listen(Refused(entry.key, message_of(entry), standing))

    def rows_of(self, read: int) -> dict[int, int]:
        """Return the samples of each leaf that is in, by the ledger."""
        return {leaf: state.rows for (number, leaf), state in self.ledger.leaves.items() if number == read}

    def is_in(self, key: str) -> bool:
        """Return whether the ledger says that this shard, in the version at hand, is in."""
        shard = self.shards.get(key)
        entry = self.ledger.entry(key, shard.info.version) if shard is not None else None
        return entry is not None and entry.state == "in"


@dataclass(frozen=True)
class Pass:
    """A read that is done: its number, the shape of its summaries, its cells, and the probes up to its own."""

    read: int
    shape: Shape
    cells: tuple[Cell, ...]
    probes: tuple[str, ...]


def bring_in(intake: Intake, read: int, shape: Shape, probe_digest: str) -> tuple[Cell, ...]:
    """Carry out one read and return its cells, all of them stored and committed.

    Raises
    ------
    InputError
        If no shard is left.
    """
    while True:
        cells = intake.cells(read, shape, probe_digest)
        stored = _stored(intake.store, read)
        todo = [cell for cell in cells if cell.name not in stored]
        blocked = blocked_by_vanished(intake, todo)
        refusals = blocked or _read(intake, read, shape, cells, todo)
        if not refusals:
            refusals = list(_rivals(intake, read, cells).values())
        for error in sorted(refusals, key=intake.first_to_drop):
            if read > 1:
                raise changed_between_reads(error)
            intake.drop(error)
        if not intake.shards:
            _commit(intake, read, ())
            raise nothing_left(intake.refused)
        if not refusals:
            _commit(intake, read, cells, final=True)
            return cells


def _read(
    intake: Intake, read: int, shape: Shape, cells: Sequence[Cell], todo: Sequence[Cell]
) -> list[ShardRefused]:
    if not todo:
        return []
    intake.store.check_writable()
    stage = f"read {read}" if read > 1 else "read"
    left = _pieces_left(todo)
    intake.listen(StageStarted(stage, len(todo), bytes_to_read(todo, ()), len(left)))
    refusals: list[ShardRefused] = []
    missing = {cell.name for cell in todo}
    last_commit, leaves_since = intake.clock(), 0
    for task, outcome in intake.executor.perform(intake.workplace, [ReadCell(cell, shape) for cell in todo]):
        assert isinstance(task, ReadCell)
        if isinstance(outcome, Refusal):
            refusals.append(outcome.error)
            continue
        assert isinstance(outcome, CellRead)
        missing.discard(task.cell.name)
        intake.pieces[task.cell.name] = outcome.pieces
        intake.bytes_read += outcome.bytes_read
        intake.cells_read += 1
        intake.cores.add(outcome.core)
        intake.listen(TaskDone(stage, outcome.bytes_read, _count_down(left, task.cell)))
        leaves_since += 1
        if leaves_since >= COMMIT_LEAVES or intake.clock() - last_commit >= COMMIT_SECONDS:
            complete = _complete(cells, missing)
            rivals = _rivals(intake, read, complete)
            refusals += rivals.values()
            _commit(intake, read, tuple(cell for cell in complete if cell.leaf not in rivals))
            last_commit, leaves_since = intake.clock(), 0
    intake.listen(StageDone(stage))
    return refusals


def _complete(cells: Sequence[Cell], missing: set[str]) -> tuple[Cell, ...]:
    """Return the cells of the leaves of which no cell is missing."""
    open_leaves = {cell.leaf for cell in cells if cell.name in missing}
    return tuple(cell for cell in cells if cell.leaf not in open_leaves)


def _commit(intake: Intake, read: int, cells: Sequence[Cell], final: bool = False) -> None:
    """Commit leaves that are complete, the shards that are wholly in them, and refusals.

    The final commit of a read also empties the leaves that no shard reaches any more.
    """
    leaves = _leaf_states(intake, read, cells)
    if final:
        leaves |= {leaf: LeafState((), 0) for leaf in intake.ledger.leaves if leaf[0] == read and leaf not in leaves}
    entries = [*intake.refused.values(), *(_entries(intake, cells) if read == 1 else ())]
    for _ in range(COMMIT_TRIES):
        delta = difference(intake.ledger, entries, leaves)
        try:
            before = intake.ledger.number
            intake.ledger = commit(intake.store, intake.ledger, delta, intake.software)
        except WriterConflict:
            intake.ledger = load(intake.store)
            continue
        if intake.ledger.number != before:
            intake.listen(Committed(intake.ledger.number, len(delta.leaves), len(delta.shards)))
        return
    raise _outpaced()


def _leaf_states(intake: Intake, read: int, cells: Sequence[Cell]) -> dict[Leaf, LeafState]:
    """Return the state of each leaf; rows of a leaf that is in the ledger with these cells are not asked for again."""
    states = {}
    for number, group in by_leaf(cells).items():
        leaf, names = (read, number), tuple(cell.name for cell in group)
        before = intake.ledger.leaves.get(leaf)
        if before is not None and before.cells == names:
            states[leaf] = before
            continue
        rows = sum(record["rows"] for cell in group for record in _records(intake, cell))
        states[leaf] = LeafState(names, rows)
    return states


def _entries(intake: Intake, cells: Sequence[Cell]) -> list[Entry]:
    """Return the entries of the shards whose every piece is in the given cells and which are not in yet."""
    found: dict[str, list[Cell]] = {}
    for cell in cells:
        for piece in cell.pieces:
            found.setdefault(piece.shard.key, []).append(cell)
    span = intake.workplace.design.leaf_ns
    entries = []
    for key, group in sorted(found.items()):
        shard = intake.shards[key]
        whole = not intake.workplace.design.timed or _all_pieces(shard, span, len(group))
        if whole and not intake.is_in(key):
            entries.append(_entry_in(intake, shard, group))
    return entries


def _all_pieces(shard: Shard, span: int, found: int) -> bool:
    edges = [(g.first, g.last) for g in shard.groups if g.first is not None and g.last is not None]
    return found == len({leaf for first, last in edges for leaf in range(first // span, last // span + 1)})


def _entry_in(intake: Intake, shard: Shard, cells: Sequence[Cell]) -> Entry:
    records = [r for cell in cells for r in _records(intake, cell) if r["shard"] == shard.key]
    firsts = [r["first"] for r in records if r["first"] is not None]
    lasts = [r["last"] for r in records if r["last"] is not None]
    return Entry(
        shard.key,
        shard.info.version,
        "in",
        intake.under,
        shard,
        rows=sum(r["rows"] for r in records),
        first=min(firsts, default=None),
        last=max(lasts, default=None),
        digest=digest_bytes("".join(r["digest"] for r in records).encode()),
    )


def _records(intake: Intake, cell: Cell) -> tuple[dict[str, Any], ...]:
    """Return what was found of each piece of a cell, from this run or from the stored cell's header."""
    if cell.name not in intake.pieces:
        header = artifacts.read_header(intake.store, layout.cell_key(cell.read, cell.leaf, cell.name), "cell")
        intake.pieces[cell.name] = tuple(header.facts["pieces"])
        intake.cores.add(header.facts["core"])
    return intake.pieces[cell.name]


def _stored(store: Store, read: int) -> set[str]:
    found = (layout.parse_cell(info.key) for info in store.list(f"{layout.LEAVES}{read:02d}/"))
    return {name for parsed in found if parsed is not None for name in [parsed[2]]}


def _pieces_left(cells: Sequence[Cell]) -> dict[str, int]:
    left: dict[str, int] = {}
    for cell in cells:
        for piece in cell.pieces:
            left[piece.shard.key] = left.get(piece.shard.key, 0) + 1
    return left


def _count_down(left: dict[str, int], cell: Cell) -> int:
    done = 0
    for piece in cell.pieces:
        left[piece.shard.key] -= 1
        done += left[piece.shard.key] == 0
    return done


def blocked_by_vanished(intake: Intake, todo: Sequence[Cell]) -> list[ShardRefused]:
    """Return refusals of new shards whose cell would need a shard that is no longer there.

    Raises
    ------
    InputError
        If a cell holds no new shard, so that nothing but the vanished one can help.
    """
    refusals = []
    for cell in todo:
        gone = [p.shard.key for p in cell.pieces if p.shard.key in intake.absent]
        new = [p.shard for p in cell.pieces if p.shard.key not in intake.absent and not intake.is_in(p.shard.key)]
        if gone and not new:
            raise vanished(cell, gone)
        refusals += [beside_vanished(shard, gone[0]) for shard in new if gone]
    return refusals


def _rivals(intake: Intake, read: int, cells: Sequence[Cell]) -> dict[int, ShardRefused]:
    """Return refusals of shards that repeat a time of another cell, by leaf; leaves committed so have none."""
    if read > 1 or not intake.workplace.design.timed:
        return {}
    refusals = {}
    for leaf, group in by_leaf(cells).items():
        before = intake.ledger.leaves.get((read, leaf))
        if len(group) < 2 or (before is not None and before.cells == tuple(cell.name for cell in group)):
            continue
        if not _overlap([_records(intake, cell) for cell in group]):
            continue
        owners: list[tuple[str, str, int]] = []
        times = []
        for cell in group:
            key = layout.cell_key(read, leaf, cell.name)
            header = artifacts.read_header(intake.store, key, "cell")
            times.append(artifacts.read_arrays(intake.store, key, header, ("times",))["times"])
            owners += [(r["shard"], r["version"], r["rows"]) for r in _records(intake, cell)]
        try:
            check_repeats(np.concatenate(times), owners)
        except ShardRefused as error:
            refusals[leaf] = error
    return refusals


def _overlap(cells: Sequence[tuple[dict[str, Any], ...]]) -> bool:
    spans = []
    for records in cells:
        firsts = [r["first"] for r in records if r["first"] is not None]
        lasts = [r["last"] for r in records if r["last"] is not None]
        if firsts:
            spans.append((min(firsts), max(lasts)))
    spans.sort()
    return any(later[0] <= earlier[1] for earlier, later in pairwise(spans))


def _outpaced() -> WriterConflict:
    return WriterConflict(
        "other writers kept committing first",
        where=layout.LEDGER,
        rule=f"one of {COMMIT_TRIES} tries lands",
        remedy="run again when the other run has ended",
    )

