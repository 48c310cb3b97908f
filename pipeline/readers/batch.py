"""What every reader promises: a batch of samples, the reader's calls, and what a reader needs of a store.

No file format is known here.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from typing import Any, Protocol, TypeAlias

import numpy as np
from numpy.typing import NDArray

from shardfold.errors import ShardRefused
from shardfold.ids import ObjectInfo, Shard


@dataclass(frozen=True, eq=False)
class Batch:
    """Some samples of one row group: those of a slice where whole samples are stored side by side, else all.

    Attributes
    ----------
    first_row : int
        Row number of the first sample within its shard.
    times : int64 array of shape (n,), or None
        Nanoseconds since the Unix epoch, in the order of the shard.
    values : array of shape (m, n)
        As stored, in native byte order: C order from channel-major sources, F order from sample-major ones.
        Missing values are NaN.
    """

    first_row: int
    times: NDArray[np.int64] | None
    values: NDArray[Any]


Fetched: TypeAlias = Callable[[], Iterator[Batch]]
"""A row group whose stored bytes are in memory for as long as this is held; calling it decodes them, once."""


class ByteSource(Protocol):
    """The one call a reader makes of a store."""

    def read(
        self, key: str, *, version: str | None = None, start: int = 0, stop: int | None = None
    ) -> bytes | bytearray | memoryview:
        """Return exactly the bytes asked for, of exactly that version, or raise."""
        ...


class Reader(Protocol):
    """One source layout. Stateless between calls, safe to share between threads, picklable."""

    def describe(self, store: ByteSource, info: ObjectInfo) -> Shard:
        """Return what a shard's footer or header says, and its times where those are needed to know its span.

        Raises
        ------
        ShardRefused
            When the shard breaks a rule of its layout.
        """
        ...

    def fetched(
        self, store: ByteSource, shard: Shard, first_group: int, stop_group: int, channels: Sequence[str]
    ) -> Iterator[Fetched]:
        """Yield the row groups ``first_group <= g < stop_group`` in order, rows as ``channels`` are ordered.

        A step of the iterator asks the store and decodes nothing; a call of what it yields decodes and asks nothing,
        so that the one may go on while the other is waited for.

        Raises
        ------
        ShardRefused
            When a row group cannot be fetched or decoded, or holds less or other than was described.
        """
        ...

    def batches(
        self, store: ByteSource, shard: Shard, first_group: int, stop_group: int, channels: Sequence[str]
    ) -> Iterator[Batch]:
        """Yield the batches of the same row groups, fetched and decoded one after the other."""
        ...


def one_by_one(groups: Iterator[Fetched]) -> Iterator[Batch]:
    """Yield the batches of all row groups; no stored bytes are held while the next are fetched."""
    for fetched in groups:
        batches = fetched()
        del fetched
        yield from batches
        del batches


def refused(info: ObjectInfo, what: str, *, place: str = "", **parts: str) -> ShardRefused:
    """Return the error that refuses one shard; ``place`` is where in it, such as ``"row group 3"``."""
    where = f"{info.key}, {place}" if place else info.key
    return ShardRefused(what, shard=info.key, version=info.version, where=where, **parts)


def some_names(names: Sequence[str], most: int = 3) -> str:
    """Return the first few names for a message, with a count of the rest."""
    shown = ", ".join(names[:most])
    return f"{shown} and {len(names) - most} more" if len(names) > most else shown
