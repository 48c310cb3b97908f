"""From settings, inventory and ledger to a frozen plan: pieces, cells, leaves, the fixed tree, projected bytes.

Pure: the same values in give the same plan out. Nothing here reads, writes or asks a clock. Everything that could
make a run fail for its size is refused here, from shapes, before the first read.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Collection, Iterable, Sequence
from dataclasses import dataclass

import numpy as np

from shardfold.design import LARGE_PIECE_RATIO, Design
from shardfold.errors import ShardRefused
from shardfold.ids import Shard, digest_value
from shardfold.kernels.addressed import name_keys
from shardfold.kernels.whole import Shape
from shardfold.quantities import format_duration
from shardfold.summaries import bytes_of

TREE_BITS = 3
"""Each stored sum covers an aligned run of 2**3 children, summed in one task; the bits are those of the full tree."""


MOST_TERMS = 256
"""Leaves are joined until they are no more than so many where modes are judged leaf by leaf."""


@dataclass(frozen=True)
class Piece:
    """The samples of one shard version in one leaf: runs of row groups, and whether all their rows are inside."""

    shard: Shard
    runs: tuple[tuple[int, int], ...]
    inside: bool

    @property
    def rows(self) -> int:
        """Return an upper bound of the samples."""
        return sum(g.rows for start, stop in self.runs for g in self.shard.groups[start:stop])

    @property
    def stored_bytes(self) -> int:
        """Return what reading the piece transfers."""
        return sum(g.stored_bytes for start, stop in self.runs for g in self.shard.groups[start:stop])

    @property
    def decoded_bytes(self) -> int:
        """Return what the row groups become in memory."""
        return sum(g.decoded_bytes for start, stop in self.runs for g in self.shard.groups[start:stop])


@dataclass(frozen=True)
class Cell:
    """What is stored and summed together: one large piece, or all small pieces of a leaf, in key order."""

    read: int
    leaf: int
    pieces: tuple[Piece, ...]
    name: str

    @property
    def dtype(self) -> np.dtype[np.generic]:
        """Return the one type that holds the values of all pieces."""
        return np.result_type(*{np.dtype(piece.shard.dtype) for piece in self.pieces})

    @property
    def rows(self) -> int:
        """Return an upper bound of the samples."""
        return sum(piece.rows for piece in self.pieces)

    @property
    def stored_bytes(self) -> int:
        """Return what reading the cell transfers."""
        return sum(piece.stored_bytes for piece in self.pieces)


@dataclass(frozen=True)
class Node:
    """A sum of an aligned run of children; at level 0 the children are the leaves' cells."""

    level: int
    index: int
    name: str
    children: tuple[tuple[int, tuple[str, ...]], ...]


@dataclass(frozen=True)
class Cutting:
    """All cells of one read, and the shards that cannot be cut under the design."""

    cells: tuple[Cell, ...]
    refused: tuple[ShardRefused, ...]


def cut(shards: Sequence[Shard], design: Design, read: int, shape: Shape, probe_digest: str) -> Cutting:
    """Return the cells of one read.

    Parameters
    ----------
    shards : sequence of Shard
        Any order; the outcome does not depend on it.
    design : Design
        Leaf span, widths.
    read : int
        Number of the read, from 1.
    shape : Shape
        Shape of its summaries.
    probe_digest : str
        Digest of its frozen probe; part of every cell's name.
    """
    pieces_of: dict[int, list[Piece]] = defaultdict(list)
    refused = []
    for shard in sorted(shards, key=lambda s: s.key):
        try:
            for leaf, piece in _pieces(shard, design):
                pieces_of[leaf].append(piece)
        except ShardRefused as error:
            refused.append(error)
    large = LARGE_PIECE_RATIO * bytes_of(design, shape)
    cells = []
    for leaf, pieces in sorted(pieces_of.items()):
        alone = [(piece,) for piece in pieces if piece.decoded_bytes >= large]
        together = tuple(piece for piece in pieces if piece.decoded_bytes < large)
        for group in sorted([*alone, *([together] if together else [])], key=lambda g: g[0].shard.key):
            cells.append(Cell(read, leaf, group, _cell_name(design, read, leaf, group, probe_digest)))
    return Cutting(tuple(cells), tuple(refused))


def by_leaf(cells: Iterable[Cell]) -> dict[int, tuple[Cell, ...]]:
    """Return the cells of each leaf, leaves and cells in the order in which they are summed."""
    found: dict[int, list[Cell]] = defaultdict(list)
    for cell in cells:
        found[cell.leaf].append(cell)
    return {leaf: tuple(group) for leaf, group in sorted(found.items())}


def tree(read: int, leaves: dict[int, tuple[str, ...]], kernel: int) -> tuple[tuple[Node, ...], ...]:
    """Return the levels of sums above the leaves, lowest first; the only node of the last level is the root.

    A node with one child at a higher level is the child itself and is not stored twice. Runs are aligned
    (``number >> 3``), so a leaf's path never depends on which other leaves exist.
    """
    levels = []
    entries = {leaf: (leaf, cells) for leaf, cells in leaves.items()}
    level = 0
    while level == 0 or len(entries) > 1:
        final = level > 0 and {index >> TREE_BITS for index in entries} == set(entries)
        runs: dict[int, list[tuple[int, tuple[str, ...]]]] = defaultdict(list)
        for index, (_, names) in sorted(entries.items()):
            runs[0 if final else index >> TREE_BITS].append((index, names))
        nodes = tuple(
            Node(level, index, _node_name(read, level, index, run, kernel), tuple(run)) for index, run in runs.items()
        )
        levels.append(tuple(node for node in nodes if level == 0 or len(node.children) > 1))
        entries = {n.index: (n.index, n.children[0][1] if level and len(n.children) == 1 else (n.name,)) for n in nodes}
        level += 1
    return tuple(nodes for nodes in levels if nodes)


def leaf_of_shard(key: str, bits: int) -> int:
    """Return the leaf of a shard without times: the leading bits of its name's hash."""
    return int(name_keys([key])[0]) >> (64 - bits) if bits else 0


def bytes_to_read(cells: Iterable[Cell], stored: Collection[str]) -> int:
    """Return what reading the cells that are not stored yet will transfer."""
    return sum(cell.stored_bytes for cell in cells if cell.name not in stored)


def _pieces(shard: Shard, design: Design) -> Iterable[tuple[int, Piece]]:
    if not design.timed:
        return [(leaf_of_shard(shard.key, design.leaf_bits), Piece(shard, ((0, len(shard.groups)),), True))]
    span = design.leaf_ns
    touched: dict[int, list[int]] = defaultdict(list)
    inside: dict[int, bool] = defaultdict(lambda: True)
    for number, group in enumerate(shard.groups):
        if group.first is None or group.last is None:
            continue
        low, high = group.first // span, group.last // span
        if high > low + 1:
            raise _too_long(shard, group.last - group.first, span)
        for leaf in range(low, high + 1):
            touched[leaf].append(number)
            inside[leaf] &= low == high
    return [(leaf, Piece(shard, _runs(groups), inside[leaf])) for leaf, groups in sorted(touched.items())]


def _runs(numbers: Sequence[int]) -> tuple[tuple[int, int], ...]:
    runs: list[tuple[int, int]] = []
    for number in numbers:
        if runs and runs[-1][1] == number:
            runs[-1] = (runs[-1][0], number + 1)
        else:
            runs.append((number, number + 1))
    return tuple(runs)


def _cell_name(design: Design, read: int, leaf: int, pieces: Sequence[Piece], probe_digest: str) -> str:
    inputs = [[p.shard.key, p.shard.info.version, [list(run) for run in p.runs]] for p in pieces]
    return digest_value([design.digest, read, leaf, inputs, probe_digest])


def _node_name(read: int, level: int, index: int, run: Sequence[tuple[int, tuple[str, ...]]], kernel: int) -> str:
    return digest_value([read, level, index, [[number, list(names)] for number, names in run], kernel])


def _too_long(shard: Shard, span: int, leaf: int) -> ShardRefused:
    return ShardRefused(
        "one row group crosses more than one leaf edge, so it would be read more than twice",
        shard=shard.key,
        version=shard.info.version,
        rule=f"a row group is not longer than design.leaf, {format_duration(leaf)}",
        got=f"a row group of {span / 1e9:.9g} s",
        remedy=f"a dossier with design.leaf of at least {span / 1e9:.9g} s, or shards with shorter row groups",
    )
