"""One reader per source layout: a shard becomes its description, then bounded batches of samples.

``reader_for`` is the door. Readers know file formats; they know nothing of leaves, summaries or settings files.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Protocol

from shardfold.errors import InputError
from shardfold.readers.batch import Batch, ByteSource, Fetched, Reader
from shardfold.readers.grids import TimeRule
from shardfold.readers.npy import NpyReader
from shardfold.readers.parquet import ParquetReader
from shardfold.readers.peaks import group_peak_bytes, shard_peak_bytes
from shardfold.readers.vector import Vector
from shardfold.readers.wide import Wide

__all__ = [
    "Batch",
    "ByteSource",
    "ChannelSettings",
    "Fetched",
    "Reader",
    "SourceSettings",
    "group_peak_bytes",
    "reader_for",
    "shard_peak_bytes",
]


class ChannelSettings(Protocol):
    """The part of ``source.channels`` that readers need."""

    @property
    def include(self) -> tuple[str, ...] | None:
        """Return the patterns of names to take, ``None`` for all."""
        ...

    @property
    def exclude(self) -> tuple[str, ...]:
        """Return the patterns of names to leave out."""
        ...


class SourceSettings(Protocol):
    """The part of ``source`` that readers need."""

    @property
    def layout(self) -> str:
        """Return ``wide``, ``vector`` or ``array``."""
        ...

    @property
    def time(self) -> TimeRule:
        """Return where times come from."""
        ...

    @property
    def values(self) -> str | None:
        """Return the column of vectors."""
        ...

    @property
    def orient(self) -> str:
        """Return ``samples_by_channels`` or ``channels_by_samples``."""
        ...

    @property
    def channels(self) -> ChannelSettings:
        """Return which channels to take."""
        ...


def reader_for(source: SourceSettings, names: Sequence[str] = ()) -> Reader:
    """Return the reader of a job's source.

    Parameters
    ----------
    source : SourceSettings
        The ``source`` block of a job.
    names : sequence of str
        The channel table's names, in order, for layouts whose shards name no channels; without a table they are
        ``ch00000`` and so on.

    Raises
    ------
    InputError
        When the layout is not known, or ``vector`` comes without a column of values.
    """
    include, exclude = source.channels.include, tuple(source.channels.exclude)
    include = None if include is None else tuple(include)
    if source.layout == "wide":
        return ParquetReader(Wide(include, exclude), source.time)
    if source.layout == "vector" and source.values:
        return ParquetReader(Vector(source.values, tuple(names), include, exclude), source.time)
    if source.layout == "array":
        return NpyReader(source.orient, source.time, tuple(names), include, exclude)
    raise InputError("no reader for this source", rule="layout wide, vector (with values) or array", got=source.layout)
