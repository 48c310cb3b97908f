"""Adding up the cells of a read in a fixed tree, level by level, each sum stored under what it sums.

A sum that is in storage is not made again, so after a change only one path is.
"""

from __future__ import annotations

from collections.abc import Sequence

from shardfold import layout
from shardfold.events import Listener, StageDone, StageStarted, TaskDone
from shardfold.executor import Executor
from shardfold.kernels.whole import Shape
from shardfold.plan import Cell, by_leaf, tree
from shardfold.store import Store
from shardfold.summaries import AnySummary
from shardfold.tasks import AddUp, Workplace, load_summary


def add_all(
    store: Store,
    workplace: Workplace,
    executor: Executor,
    listen: Listener,
    read: int,
    shape: Shape,
    cells: Sequence[Cell],
) -> AnySummary:
    """Return the sum of all cells of a read; the sums on the way are in storage afterwards."""
    levels = tree(read, leaf_names(cells), workplace.design.kernel)
    stored = {parsed[1] for info in store.list(layout.TREE) if (parsed := layout.parse_node(info.key)) is not None}
    todo = [[node for node in nodes if node.name not in stored] for nodes in levels]
    count = sum(map(len, todo))
    if count:
        listen(StageStarted("add up", count))
        for nodes in todo:
            for _ in executor.perform(workplace, [AddUp(read, node, shape) for node in nodes]):
                listen(TaskDone("add up"))
        listen(StageDone("add up"))
    (root,) = levels[-1]
    return load_summary(store, layout.node_key(read, root.name), "sum", workplace.design, shape)


def leaf_names(cells: Sequence[Cell]) -> dict[int, tuple[str, ...]]:
    """Return the cell names of each leaf, in the order in which they are summed."""
    return {leaf: tuple(cell.name for cell in group) for leaf, group in by_leaf(cells).items()}
