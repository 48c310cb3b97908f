"""What is learned of the modes leaf by leaf, from stored sums alone: the ground of what the campaign's length allows.

Only the products of the stack are read of each cell, some tens of kilobytes; nothing of the campaign. A run of leaves
is one task, and many leaves are joined so that what comes back stays small.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from shardfold import artifacts, layout
from shardfold.design import Design
from shardfold.kernels.background import Removal
from shardfold.kernels.leaves import LeafTerms, join
from shardfold.kernels.whole import Shape
from shardfold.plan import MOST_TERMS, Cell, by_leaf
from shardfold.store import Store
from shardfold.summaries import ModeMap, right_arrays_of, terms_of

Array = npt.NDArray[Any]

LEAVES_A_TASK = 16


@dataclass(frozen=True)
class TakeTerms:
    """Take the terms of a run of leaves: in each group all leaves are joined."""

    read: int
    groups: tuple[tuple[tuple[int, tuple[str, ...]], ...], ...]
    mapping: ModeMap
    number: int


@dataclass(frozen=True)
class TermsTaken:
    """The terms of a run of leaves, and which run it was."""

    number: int
    terms: tuple[LeafTerms, ...]


def mode_map(shape: Shape, removal: Removal, rows: Array, checks: Array, count: int) -> ModeMap:
    """Return the map of some modes, without what is as long as the channels."""
    light = replace(removal, mean=np.empty(0), weights=np.empty((0, 0)))
    return ModeMap(shape, light, rows, checks, count)


def terms_tasks(read: int, cells: Sequence[Cell], mapping: ModeMap) -> list[TakeTerms]:
    """Return the tasks that take the terms of all leaves, in order of leaves."""
    leaves = [(leaf, tuple(cell.name for cell in group)) for leaf, group in by_leaf(cells).items()]
    together = -(-len(leaves) // MOST_TERMS)
    groups = list(_runs(leaves, together))
    size = max(1, LEAVES_A_TASK // together)
    return [TakeTerms(read, tuple(run), mapping, number) for number, run in enumerate(_runs(groups, size))]


def take_terms(store: Store, design: Design, task: TakeTerms) -> TermsTaken:
    """Read the products of each leaf's cells and return the leaf terms."""
    return TermsTaken(task.number, tuple(_joined(store, design, task, group) for group in task.groups))


def _joined(
    store: Store, design: Design, task: TakeTerms, group: tuple[tuple[int, tuple[str, ...]], ...]
) -> LeafTerms:
    found = [_terms(store, design, task, leaf, name) for leaf, names in group for name in names]
    total = found[0]
    for terms in found[1:]:
        total = join(total, terms)
    return total


def _terms(store: Store, design: Design, task: TakeTerms, leaf: int, name: str) -> LeafTerms:
    key = layout.cell_key(task.read, leaf, name)
    header = artifacts.read_header(store, key, "cell")
    # One ranged read from the first array to the last: the large one between is spared, as n is in the header too.
    names = [name for name in right_arrays_of(design) if name != "n" or design.exact]
    arrays = artifacts.read_arrays(store, key, header, names)
    return terms_of(design, {"n": np.array(header.facts["n"]), **arrays}, task.mapping)


def _runs(items: Sequence[Any], length: int) -> Iterator[tuple[Any, ...]]:
    return (tuple(items[start : start + length]) for start in range(0, len(items), length))
