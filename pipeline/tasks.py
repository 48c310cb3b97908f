"""What a worker does: read a cell, add up a run of leaves, write one part of the coefficients.

Each task is a frozen value, idempotent, and writes at most one object under a name that its inputs fix, so it may be
performed twice, or again after a crash, with the same outcome. Large arrays stay in storage; outcomes are small.
Nothing here knows how tasks reach a worker.
"""

from __future__ import annotations

import io
from collections.abc import Callable, Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass
from functools import lru_cache
from typing import Any, TypeAlias

import numpy as np
import numpy.typing as npt

from shardfold import artifacts, layout
from shardfold.allocator import lean_memory
from shardfold.blas import check_core, core_type, one_thread
from shardfold.channels import ChannelTable, read_table
from shardfold.design import Design
from shardfold.errors import ShardRefused, VersionChanged
from shardfold.gather import CellGather
from shardfold.ids import digest_bytes
from shardfold.job import Source
from shardfold.kernels.addressed import STREAM_CHECK, name_keys, normals
from shardfold.kernels.background import Terms, functions
from shardfold.kernels.blocks import Preparation
from shardfold.kernels.spectra import segment_power
from shardfold.kernels.whole import Probe, Shape
from shardfold.leaf_terms import TakeTerms, TermsTaken, take_terms
from shardfold.plan import Cell, Node, Piece
from shardfold.project import CellProjector
from shardfold.readers import Fetched, Reader, reader_for
from shardfold.store import Counting, Store, StoreSettings, connect
from shardfold.summaries import AnySummary, arrays_of, from_arrays, merge_into, to_arrays
from shardfold.tables import coefficient_table

Array = npt.NDArray[Any]


@dataclass(frozen=True)
class Workplace:
    """What every task of a run shares: places, source settings, design, and the names that vectors and arrays lack."""

    campaign: StoreSettings
    dossier: StoreSettings
    source: Source
    design: Design
    source_names: tuple[str, ...] = ()


@dataclass(frozen=True)
class ReadCell:
    """Read the pieces of a cell, store its summary and X."""

    cell: Cell
    shape: Shape


@dataclass(frozen=True)
class AddUp:
    """Sum an aligned run of leaves or of lower sums, and store the sum."""

    read: int
    node: Node
    shape: Shape


@dataclass(frozen=True)
class CoefficientMap:
    """How X (or prepared raw data, with the identity probe) becomes coefficients.

    Attributes
    ----------
    rows : ndarray (r, k)
        Row map; with the identity probe the transposed modes.
    centre : ndarray (k,)
        What is taken off before: the mean in the space of X, zeros where the mean is kept.
    removed : tuple of int
        Functions of time that are taken off as well.
    weights, about : ndarray (r, p'), (p',)
        Their share in the coefficients, and what is taken off the functions before.
    """

    rows: Array
    centre: Array
    removed: tuple[int, ...]
    weights: Array
    about: Array

    def background(self, terms: Terms, times: Array) -> Array:
        """Return what the background holds of the coefficients at some times (r, n), zeros (r, 1) if nothing."""
        if not self.removed:
            return np.zeros((len(self.rows), 1))
        known = functions(terms, times)[list(self.removed)]
        return self.weights @ (known - self.about[:, np.newaxis])


@dataclass(frozen=True)
class WriteCoefficients:
    """Write the coefficients of one leaf from stored X, or by reading its cells again with the identity probe."""

    key: str
    leaf: int
    cells: tuple[Cell, ...]
    shape: Shape
    mapping: CoefficientMap
    segment: int
    unit: str
    groups: tuple[str | None, ...]


@dataclass(frozen=True)
class CellRead:
    """A cell is in storage; what its pieces were, and how many bytes of the campaign were read for it."""

    pieces: tuple[dict[str, Any], ...]
    n: int
    core: str
    bytes_read: int


@dataclass(frozen=True)
class Added:
    """A sum is in storage."""


@dataclass(frozen=True)
class PartWritten:
    """A part of the coefficients is in storage.

    ``power`` (r, segment/2 + 1) and ``segments`` sum up its spectrum; ``steps`` are the least and the largest
    distance of two samples in nanoseconds, zeros where there are none.
    """

    key: str
    rows: int
    digest: str
    steps: tuple[int, int]
    power: Array
    segments: int
    bytes_read: int


@dataclass(frozen=True)
class Refusal:
    """A shard of the task cannot be trusted."""

    error: ShardRefused


Task: TypeAlias = ReadCell | AddUp | TakeTerms | WriteCoefficients
Outcome: TypeAlias = CellRead | Added | TermsTaken | PartWritten | Refusal


def perform(workplace: Workplace, task: Task) -> Outcome:
    """Do a task and return its outcome; a refused shard is an outcome, every other failure is raised."""
    check_core(workplace.design.blas)
    with one_thread(), lean_memory():
        try:
            if isinstance(task, ReadCell):
                return read_cell(workplace, task)
            if isinstance(task, AddUp):
                return add_up(workplace, task)
            if isinstance(task, TakeTerms):
                return take_terms(_desk(workplace).dossier, workplace.design, task)
            return write_coefficients(workplace, task)
        except ShardRefused as error:
            return Refusal(error)


def read_cell(workplace: Workplace, task: ReadCell) -> CellRead:
    """Read a cell's pieces in order, fold them, store the record."""
    desk = _desk(workplace)
    cell, store = task.cell, desk.campaign
    before = store.snapshot().bytes_read
    gather = CellGather(
        workplace.design,
        task.shape,
        desk.preparation,
        _probe(workplace, cell.read, task.shape),
        desk.table.names,
        cell.dtype,
        cell.rows,
        cell.name,
    )
    _each_batch(desk, cell, gather)
    facts, arrays = gather.finish()
    facts |= {"read": cell.read, "leaf": cell.leaf, "design": workplace.design.digest, "core": core_type()}
    record = artifacts.pack("cell", facts, arrays)
    del gather, arrays
    desk.dossier.create(layout.cell_key(cell.read, cell.leaf, cell.name), record)
    return CellRead(tuple(facts["pieces"]), facts["n"], facts["core"], store.snapshot().bytes_read - before)


def add_up(workplace: Workplace, task: AddUp) -> Added:
    """Sum a run of children in the order of the full binary tree over their numbers."""
    store, node = _desk(workplace).dossier, task.node
    total = sum_of_children(store, workplace.design, task)
    record = artifacts.pack("sum", {"n": total.n, "level": node.level, "index": node.index}, to_arrays(total))
    store.create(layout.node_key(task.read, node.name), record)
    return Added()


def sum_of_children(store: Store, design: Design, task: AddUp) -> AnySummary:
    """Return the sum of a node's children, from storage."""
    bottom = task.node.level == 0

    def load(number: int, names: tuple[str, ...]) -> AnySummary:
        total: AnySummary | None = None
        for name in names:
            key = layout.cell_key(task.read, number, name) if bottom else layout.node_key(task.read, name)
            part = load_summary(store, key, "cell" if bottom else "sum", design, task.shape)
            if total is None:
                total = part
            else:
                merge_into(total, part)
        assert total is not None
        return total

    return dyadic_sum(dict(task.node.children), load)


def dyadic_sum(
    children: dict[int, tuple[str, ...]], load: Callable[[int, tuple[str, ...]], AnySummary]
) -> AnySummary:
    """Return the sum of the children in the order of the binary tree over their numbers.

    Two neighbours are merged as soon as both are complete, so at most one summary per level is held. The order
    depends on the numbers alone: a child that does not exist leaves the others' order as it is.
    """
    if len(children) == 1:
        ((number, names),) = children.items()
        return load(number, names)
    low, high = min(children), max(children)
    # The highest bit in which the numbers differ parts them; numbers of different sign part at the sign.
    bit = 64 if (low < 0) != (high < 0) else (low ^ high).bit_length() - 1
    left = {n: names for n, names in children.items() if n >> bit == low >> bit}
    right = {n: names for n, names in children.items() if n >> bit != low >> bit}
    total = dyadic_sum(left, load)
    merge_into(total, dyadic_sum(right, load))
    return total


def load_summary(store: Store, key: str, kind: str, design: Design, shape: Shape) -> AnySummary:
    """Return the summary of a stored cell or sum, without its X; the arrays are owned and writable."""
    header = artifacts.read_header(store, key, kind)
    return from_arrays(design, shape, artifacts.read_arrays(store, key, header, arrays_of(design)))


def write_coefficients(workplace: Workplace, task: WriteCoefficients) -> PartWritten:
    """Write one leaf's coefficients in the order of time."""
    desk = _desk(workplace)
    before = desk.campaign.snapshot().bytes_read
    make = _coefficients_by_reading if task.shape.identity else _coefficients_of_x
    timed = workplace.design.timed
    times, owners, values = _in_order([make(workplace, desk, cell, task) for cell in task.cells], timed)
    shards = None if timed else [str(owner) for owner in owners]
    data = coefficient_table(times, shards, values, workplace.design.zoned, task.unit, task.groups)
    desk.dossier.put(task.key, data)
    steps = np.diff(times) if timed and len(times) > 1 else np.zeros(1, np.int64)
    power, segments = segment_power(np.nan_to_num(values), task.segment) if task.segment else (np.zeros((0, 0)), 0)
    return PartWritten(
        task.key,
        len(times),
        digest_bytes(data),
        (int(steps.min()), int(steps.max())),
        power,
        segments,
        desk.campaign.snapshot().bytes_read - before,
    )


def _in_order(parts: list[tuple[Array, ...]], timed: bool) -> tuple[Array, ...]:
    """Join times, owners and coefficients and sort them by time, or by owner and row; copied only where need be."""
    if len(parts) > 1:
        parts = [tuple(np.concatenate(arrays, axis=-1) for arrays in zip(*parts, strict=True))]
    times, owners, values = parts.pop()
    order = np.argsort(times, kind="stable") if timed else np.lexsort((times, owners))
    if np.array_equal(order, np.arange(len(order))):
        return times, owners, values
    return times[order], owners[order], values[:, order]


def _coefficients_of_x(workplace: Workplace, desk: _Desk, cell: Cell, task: WriteCoefficients) -> tuple[Array, ...]:
    key = layout.cell_key(cell.read, cell.leaf, cell.name)
    header = artifacts.read_header(desk.dossier, key, "cell")
    names = ("times", "x", "x_counts", "x_centres")
    times, x, counts, centres = artifacts.read_arrays(desk.dossier, key, header, names).values()
    values = np.empty((len(task.mapping.rows), len(times)))
    start = 0
    for count, centre in zip(counts, centres, strict=True):
        block = slice(start, start + int(count))
        offset = task.mapping.rows @ (centre - task.mapping.centre)
        values[:, block] = task.mapping.rows @ x[block].T.astype(np.float64) + offset[:, None]
        values[:, block] -= task.mapping.background(workplace.design.terms, times[block])
        start += int(count)
    pieces = header.facts["pieces"]
    owners = np.array([piece["shard"] if not workplace.design.timed else "" for piece in pieces])
    return times, np.repeat(owners, [piece["rows"] for piece in pieces]), values


def _coefficients_by_reading(
    workplace: Workplace, desk: _Desk, cell: Cell, task: WriteCoefficients
) -> tuple[Array, ...]:
    mapping = task.mapping
    projector = CellProjector(workplace.design, desk.preparation, mapping.rows, mapping.centre, cell.dtype)
    _each_batch(desk, cell, projector)
    times, owners, values = projector.finish()
    values -= mapping.background(workplace.design.terms, times)
    return times, owners, values


def _each_batch(desk: _Desk, cell: Cell, sink: CellGather | CellProjector) -> None:
    """Hand all batches of a cell on; the next row group travels while the batches of one are worked on.

    It sets out when the first batch is decoded: most readers hold no stored bytes of their own by then.
    """
    groups, current = _fetched(desk, cell), None
    with ThreadPoolExecutor(1, "fetch ahead") as thread:
        ahead: Future[tuple[Piece, Fetched] | None] | None = thread.submit(next, groups, None)
        while ahead is not None and (group := ahead.result()) is not None:
            (piece, decode), ahead, group = group, None, None
            if piece is not current:
                sink.begin(piece.shard)
            batches, current = decode(), piece
            del decode
            for batch in batches:
                ahead = ahead or thread.submit(next, groups, None)
                sink.take(batch, cell.leaf, piece.inside)
                del batch
            ahead = ahead or thread.submit(next, groups, None)  # a row group without a batch must not end the cell


def _fetched(desk: _Desk, cell: Cell) -> Iterator[tuple[Piece, Fetched]]:
    for piece in cell.pieces:
        try:
            for start, stop in piece.runs:
                for group in desk.reader.fetched(desk.campaign, piece.shard, start, stop, desk.table.names):
                    yield piece, group
                    del group
        except VersionChanged as error:
            raise ShardRefused(
                "the shard was replaced or removed while it was read",
                shard=piece.shard.key,
                version=piece.shard.info.version,
                rule="a shard version is read whole or not at all",
                got=str(error.got or error.what),
                remedy="run again: the next run takes the version that is there then",
            ) from error


@dataclass(frozen=True)
class _Desk:
    """A worker's open stores, reader and prepared channel table, kept between tasks."""

    campaign: Counting
    dossier: Store
    reader: Reader
    table: ChannelTable
    preparation: Preparation


@lru_cache(maxsize=2)
def _desk(workplace: Workplace) -> _Desk:
    dossier = connect(workplace.dossier)
    table = read_table(bytes(dossier.read(layout.channels_key(1))), layout.channels_key(1))
    return _Desk(
        connect(workplace.campaign),
        dossier,
        reader_for(workplace.source, workplace.source_names),
        table,
        Preparation.build(table.gain, table.shift, table.scale, table.weight),
    )


@lru_cache(maxsize=2)
def _probe(workplace: Workplace, read: int, shape: Shape) -> Probe:
    desk = _desk(workplace)
    keys = name_keys(desk.table.names)
    check = normals(workplace.design.seed, STREAM_CHECK, keys, shape.q_theta)
    if shape.identity:
        return Probe(None, check)
    data = io.BytesIO(desk.dossier.read(layout.probe_key(read)))
    return Probe(np.load(data, allow_pickle=False), check)
