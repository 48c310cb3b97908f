"""Peak bytes and work of a run, from shapes alone, before the first read; and the refusal that shows both numbers.

A worker's private memory is the largest of three phases (read a cell, add up, write coefficients) on top of the
interpreter with its libraries. The constants were measured (see DEVELOPERS.md, how to measure); a benchmark holds
reality below the promise.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from shardfold.design import Design
from shardfold.errors import PlanRefused
from shardfold.kernels import cost
from shardfold.kernels.whole import Shape, stored_dtype
from shardfold.plan import TREE_BITS, Cell
from shardfold.readers import group_peak_bytes

MIB = 1024 * 1024
INTERPRETER_BYTES = 220 * MIB
DRIVER_BYTES = 260 * MIB
RAY_NODE_BYTES = 450 * MIB
OBJECT_STORE_BYTES = 128 * MIB
TRANSFER_BYTES = 12 * MIB
"""Sub-ranges in flight while a row group is fetched."""


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
    summary = cost.summary_bytes(shape)
    phases = {
        "read": _read_phase(design, shape, cells, summary),
        "add up": {"interpreter": INTERPRETER_BYTES, "sums held at once": (TREE_BITS + 4) * summary},
        "coefficients": _coefficient_phase(design, shape, cells, rank),
    }
    driver = DRIVER_BYTES + cost.finish_bytes(shape) + sum(1024 + 64 * len(c.pieces) for c in cells)
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
        cell = max(cells, key=_largest_group)
        piece = max(cell.pieces, key=lambda p: max(group_peak_bytes(g) for g in p.shard.groups))
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


def _largest_group(cell: Cell) -> int:
    return max((group_peak_bytes(g) for piece in cell.pieces for g in piece.shard.groups), default=0)


def _read_phase(design: Design, shape: Shape, cells: Sequence[Cell], summary: int) -> dict[str, int]:
    itemsize = max((cell.dtype.itemsize for cell in cells), default=8)
    x_bytes = max((_x_bytes(shape, cell) for cell in cells), default=0)
    return {
        "interpreter": INTERPRETER_BYTES,
        "row group": max(map(_largest_group, cells), default=0) + TRANSFER_BYTES,
        "block": shape.m * design.block_samples * itemsize,
        "kernel": cost.fold_bytes(shape, design.block_samples, itemsize),
        "summary": 2 * summary,
        "probe": 0 if shape.identity else shape.k * shape.m * 12 + shape.q_theta * shape.m * 8,
        "stored X": 3 * x_bytes,
    }


def _coefficient_phase(design: Design, shape: Shape, cells: Sequence[Cell], rank: int) -> dict[str, int]:
    rows: dict[int, int] = {}
    x_bytes: dict[int, int] = {}
    for cell in cells:
        rows[cell.leaf] = rows.get(cell.leaf, 0) + cell.rows
        x_bytes[cell.leaf] = x_bytes.get(cell.leaf, 0) + _x_bytes(shape, cell)
    group = max(map(_largest_group, cells), default=0) + TRANSFER_BYTES if shape.identity else 0
    return {
        "interpreter": INTERPRETER_BYTES,
        "row group": group + (design.block_samples * shape.m * 16 if shape.identity else 0),
        "X of a leaf": 2 * max(x_bytes.values(), default=0),
        "coefficients of a leaf": 5 * (rank + 2) * 8 * max(rows.values(), default=0),
    }


def _x_bytes(shape: Shape, cell: Cell) -> int:
    per_sample = 0 if shape.identity else shape.k * stored_dtype(cell.dtype).itemsize
    return cell.rows * (per_sample + np.dtype(np.int64).itemsize)
