"""Peak bytes and work of a run, from shapes alone, before the first read; and the refusal that shows both numbers.

A worker's private memory is the largest of three phases (read a cell, add up, write coefficients) on top of the
interpreter with its libraries. The constants were measured with ``tests/bench/memory_under_limit.py``, which holds
reality below the promise.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from shardfold.design import Design
from shardfold.errors import PlanRefused
from shardfold.kernels.whole import Shape, stored_dtype
from shardfold.plan import MOST_TERMS, TREE_BITS, Cell
from shardfold.readers import group_peak_bytes, shard_peak_bytes
from shardfold.summaries import bytes_of, finish_bytes, fold_bytes

MIB = 1024 * 1024

INTERPRETER_BYTES = 240 * MIB
"""A worker between tasks, once it has done some: 125 to 158 MiB of its own (72 before the first), and some 95 MiB of
code, which it shares with other processes of the same installation and would hold alone on a node of its own."""

DRIVER_BYTES = 280 * MIB
"""The driver before it holds a sum or thousands of shards: 140 to 250 MiB of its own, and the same code."""

RAY_NODE_BYTES = 450 * MIB
"""Ray's own processes on a node, counted once where they share: 276 to 340 MiB with two workers."""

OBJECT_STORE_BYTES = 128 * MIB
"""What a local Ray may take of shared memory; tasks and outcomes are small, and 2 MiB of it were ever in use."""

TRANSFER_BYTES = 12 * MIB
"""Bodies of answers on their way into a row group's place: four requests at once, a MiB or two each."""

SHARD_BYTES, GROUP_BYTES, CELL_BYTES = 2048, 256, 2048
"""What the driver holds of a shard, of each of its row groups, and of a cell (measured: 450, 230 and 660; the rest is
for the ledger entry and the record in the manifest)."""

FOOTERS_AT_ONCE = 16
"""Shards that the inventory describes at the same time."""


@dataclass(frozen=True)
class Budget:
    """Planned peak bytes.

    Attributes
    ----------
    phases : mapping of phase to mapping of term to bytes
        What a worker holds in each phase, the interpreter included.
    driver_bytes, object_store_bytes, node_bytes : int
        The driver, Ray's shared memory, and all of it on a node with every worker.
    """

    phases: Mapping[str, Mapping[str, int]]
    driver_bytes: int
    object_store_bytes: int
    workers: int

    @property
    def worker_bytes(self) -> int:
        """Return the private memory of one worker at its peak."""
        return max(sum(terms.values()) for terms in self.phases.values())

    @property
    def node_bytes(self) -> int:
        """Return what one node holds if driver and all workers are on it."""
        ray = RAY_NODE_BYTES if self.object_store_bytes else 0
        return self.workers * self.worker_bytes + self.driver_bytes + self.object_store_bytes + ray

    @property
    def largest(self) -> tuple[str, str, int]:
        """Return the phase, the term and the bytes of what weighs most, the interpreter apart."""
        phase, terms = max(self.phases.items(), key=lambda item: sum(item[1].values()))
        term, size = max(((k, v) for k, v in terms.items() if k != "interpreter"), key=lambda item: item[1])
        return phase, term, size


def budget(design: Design, shape: Shape, cells: Sequence[Cell], rank: int, workers: int, serial: bool) -> Budget:
    """Return the planned peaks of a run over some cells.

    Parameters
    ----------
    design, shape
        Widths and block length.
    cells : sequence of Cell
        All cells of the read, stored or not (coefficients touch all).
    rank : int
        Number of modes written.
    workers : int
        Workers per node.
    serial : bool
        Everything happens in the driver's process; no Ray.
    """
    summary = bytes_of(design, shape)
    phases = {
        "read": _read_phase(design, shape, cells, summary),
        "add up": {"interpreter": INTERPRETER_BYTES, "sums held at once": (TREE_BITS + 4) * summary},
        "coefficients": _coefficient_phase(design, shape, cells, rank),
    }
    describing = FOOTERS_AT_ONCE * max((_footer_bytes(design.layout, cell) for cell in cells), default=0)
    judging = summary + finish_bytes(design, shape) + _terms_bytes(shape, rank)
    driver = DRIVER_BYTES + max(describing, judging) + sum(map(_records_bytes, cells))
    return Budget(phases, driver, 0 if serial else OBJECT_STORE_BYTES, workers)


def check(plan: Budget, limit_bytes: int, cells: Sequence[Cell]) -> None:
    """Refuse a plan that needs more than a worker may have.

    Raises
    ------
    PlanRefused
        Naming the plan's figure, the limit, and what weighs most.
    """
    if plan.worker_bytes <= limit_bytes:
        return
    phase, term, size = plan.largest
    where = ""
    if term == "row group":
        pieces = (piece for cell in cells for piece in cell.pieces)
        piece = max(pieces, key=lambda p: max(g.stored_bytes + g.decoded_bytes for g in p.shard.groups))
        where = f" (the largest row group is in {piece.shard.key})"
    raise PlanRefused(
        "a worker would need more memory than it may have; nothing was read",
        where="engine.memory",
        rule=f"at most {limit_bytes / MIB:,.0f} MiB of private memory per worker, interpreter included",
        got=f"{plan.worker_bytes / MIB:,.0f} MiB planned while it does '{phase}', "
        f"of it {size / MIB:,.0f} MiB for '{term}'{where}",
        remedy=f"engine.memory: {-(-plan.worker_bytes // MIB)} MiB, or {_REMEDIES.get(term, 'fewer channels')}",
    )


_REMEDIES = {
    "row group": "shards written again with smaller row groups",
    "stored X": "a shorter design.leaf (a new dossier)",
    "X of a leaf": "a shorter design.leaf (a new dossier)",
    "summary": "a smaller design.width (a new dossier)",
    "sums held at once": "a smaller design.width (a new dossier)",
}


def _largest_group(layout: str, cells: Sequence[Cell]) -> int:
    return max((_group_bytes(layout, cell) for cell in cells), default=0) + TRANSFER_BYTES


def _group_bytes(layout: str, cell: Cell) -> int:
    """Return what reading a cell holds of its shards at most."""
    most = max(shard_peak_bytes(piece.shard, layout) for piece in cell.pieces)
    groups = [g for piece in cell.pieces for start, stop in piece.runs for g in piece.shard.groups[start:stop]]
    # An array as fetched is the batch; the bound's second one is the next on its way, of which there may be none.
    return most - groups[0].stored_bytes if layout == "array" and len(groups) == 1 else most


def _footer_bytes(layout: str, cell: Cell) -> int:
    """Return the largest footer, of which the readers' bound counts two beside a row group."""
    shards = (piece.shard for piece in cell.pieces)
    return max((shard_peak_bytes(s, layout) - max(map(group_peak_bytes, s.groups))) // 2 for s in shards)


def _terms_bytes(shape: Shape, rank: int) -> int:
    """Return what the leaf terms hold: as they come, stacked, and once more while they are joined."""
    return 3 * MOST_TERMS * rank * (shape.k + shape.q_theta) * 8


def _records_bytes(cell: Cell) -> int:
    groups = sum(len(piece.shard.groups) for piece in cell.pieces)
    return CELL_BYTES + SHARD_BYTES * len(cell.pieces) + GROUP_BYTES * groups


def _read_phase(design: Design, shape: Shape, cells: Sequence[Cell], summary: int) -> dict[str, int]:
    itemsize = max((cell.dtype.itemsize for cell in cells), default=8)
    x_bytes = max((_x_bytes(shape, cell) for cell in cells), default=0)
    return {
        "interpreter": INTERPRETER_BYTES,
        "row group": _largest_group(design.layout, cells),
        "block": shape.m * design.block_samples * itemsize,
        "kernel": fold_bytes(design, shape, design.block_samples, itemsize),
        "summary": 2 * summary,
        "probe": 0 if shape.identity else shape.k * shape.m * 12 + shape.q_theta * shape.m * 8,
        # Beside its own place, X is in the record that is written; when that is sent, only there and in the request.
        "stored X": 2 * x_bytes,
    }


def _coefficient_phase(design: Design, shape: Shape, cells: Sequence[Cell], rank: int) -> dict[str, int]:
    rows: dict[int, int] = {}
    for cell in cells:
        rows[cell.leaf] = rows.get(cell.leaf, 0) + cell.rows
    x_bytes = max((_x_bytes(shape, cell) for cell in cells), default=0)
    # Without times every sample carries its shard's name: in UTF-32 while parts are joined and sorted, then as text.
    names = 0 if design.timed else 12 * max((len(p.shard.key) for c in cells for p in c.pieces), default=0) + 128
    group = _largest_group(design.layout, cells) if shape.identity else 0
    return {
        "interpreter": INTERPRETER_BYTES,
        "row group": group + (design.block_samples * shape.m * 16 if shape.identity else 0),
        "X of a leaf": x_bytes,
        "coefficients of a leaf": (5 * (rank + 2) * 8 + names) * max(rows.values(), default=0),
    }


def _x_bytes(shape: Shape, cell: Cell) -> int:
    per_sample = 0 if shape.identity else shape.k * stored_dtype(cell.dtype).itemsize
    return cell.rows * (per_sample + np.dtype(np.int64).itemsize)
