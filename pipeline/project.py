"""Coefficients where no X is stored: the cell's shards are read again and projected on the modes, block by block.

No storage here: batches come in, arrays go out.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from shardfold.block_cuts import Block, BlockCutter, samples_of_leaf
from shardfold.design import Design
from shardfold.ids import Shard
from shardfold.kernels.blocks import Preparation
from shardfold.readers import Batch

Array = npt.NDArray[Any]


class CellProjector:
    """Projects the batches of one cell.

    Parameters
    ----------
    design : Design
        Block length, leaf span.
    preparation : Preparation
        Channel table as arrays.
    rows, centre : ndarray (r, m), (m,)
        What prepared samples are multiplied with, and what is taken off before.
    dtype : dtype
        One type that holds the values of all pieces.
    """

    def __init__(
        self, design: Design, preparation: Preparation, rows: Array, centre: Array, dtype: np.dtype[np.generic]
    ) -> None:
        self._design, self._preparation = design, preparation
        self._rows, self._centre = rows, centre[:, np.newaxis]
        self._cutter = BlockCutter(rows.shape[1], design.block_samples, dtype)
        self._shards: list[str] = []
        self._times: list[Array] = []
        self._owners: list[Array] = []
        self._values: list[Array] = []

    def begin(self, shard: Shard) -> None:
        """Say that the batches which follow are of this shard."""
        self._shards.append(shard.key)

    def take(self, batch: Batch, leaf: int, inside: bool) -> None:
        """Project the samples of a batch that lie in the leaf."""
        times, values = samples_of_leaf(batch, self._design.leaf_ns, leaf, inside)
        for block in self._cutter.add(times, values, len(self._shards) - 1):
            self._project(block)

    def finish(self) -> tuple[Array, Array, Array]:
        """Return times (n,), the shards' keys (n,), empty where samples have times, and coefficients (r, n)."""
        for block in self._cutter.rest():
            self._project(block)
        names = np.array([""] if self._design.timed else self._shards)
        owners = np.concatenate([*self._owners, np.empty(0, np.int64)])
        values = np.concatenate([*self._values, np.empty((len(self._rows), 0))], axis=1)
        times = np.concatenate([*self._times, np.empty(0, np.int64)])
        return times, names[np.zeros_like(owners) if self._design.timed else owners], values

    def _project(self, block: Block) -> None:
        prepared = self._preparation.prepare(block.raw)
        prepared -= self._centre
        self._values.append(self._rows @ prepared)
        self._times.append(block.times.copy())
        self._owners.append(block.owners.copy())
