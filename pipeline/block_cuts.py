"""Samples as they come are cut into blocks by count alone, so batches, row groups and read sizes leave no trace.

What comes of a block is not known here, nor where its samples were stored.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from shardfold.readers import Batch

Array = npt.NDArray[Any]


@dataclass(frozen=True, eq=False)
class Block:
    """Some samples in the order they came; views that hold until the next block is asked for.

    Attributes
    ----------
    raw : ndarray (m, n)
        Values in the memory order of their layout.
    times : int64 (n,)
        Nanoseconds, or rows within the shard where there are no times.
    owners : int64 (n,)
        Number of the piece that each sample is of.
    """

    raw: Array
    times: Array
    owners: Array


class BlockCutter:
    """Gathers samples until they are a full block.

    Parameters
    ----------
    channels, length : int
        Size of a full block.
    dtype : dtype
        One type that holds all values.
    """

    def __init__(self, channels: int, length: int, dtype: np.dtype[np.generic]) -> None:
        self._channels, self._dtype = channels, dtype
        self._raw: Array | None = None
        self._times = np.empty(length, np.int64)
        self._owners = np.empty(length, np.int64)
        self._filled = 0

    def add(self, times: Array, values: Array, owner: int) -> Iterator[Block]:
        """Take samples (m, n) of one piece in, and yield every block that becomes full."""
        start = 0
        while start < len(times):
            start += self._fill(times[start:], values[:, start:], owner)
            if self._filled == len(self._times):
                yield from self.rest()

    def rest(self) -> Iterator[Block]:
        """Yield what is left as a shorter block, unless nothing is."""
        n, self._filled = self._filled, 0
        if n and self._raw is not None:
            yield Block(self._raw[:, :n], self._times[:n], self._owners[:n])

    def _fill(self, times: Array, values: Array, owner: int) -> int:
        if self._raw is None:
            # Blocks take the memory order of the layout: whole channels or whole samples side by side.
            order: Any = "C" if channel_major(values) else "F"
            self._raw = np.empty((self._channels, len(self._times)), self._dtype, order=order)
        count: int = min(len(times), len(self._times) - self._filled)
        place = slice(self._filled, self._filled + count)
        self._raw[:, place] = values[:, :count]
        self._times[place] = times[:count]
        self._owners[place] = owner
        self._filled += count
        return count


def samples_of_leaf(batch: Batch, leaf_ns: int, leaf: int, inside: bool) -> tuple[Array, Array]:
    """Return times and values of the samples of a batch that lie in a leaf.

    Parameters
    ----------
    batch : Batch
        Without times, row numbers stand for them.
    leaf_ns, leaf : int
        Span and number of the leaf.
    inside : bool
        All samples are known to lie in it.
    """
    times = batch.times if batch.times is not None else batch.first_row + np.arange(batch.values.shape[1])
    if inside:
        return times, batch.values
    found = np.flatnonzero(times // leaf_ns == leaf)
    if len(found) == 0 or found[-1] - found[0] + 1 == len(found):
        run = slice(found[0], found[-1] + 1) if len(found) else slice(0)
        return times[run], batch.values[:, run]
    values = batch.values[:, found] if channel_major(batch.values) else batch.values.T[found].T
    return times[found], values


def channel_major(values: Array) -> bool:
    """Return whether the samples of a channel lie side by side."""
    return bool(values.strides[0] > values.strides[1])
