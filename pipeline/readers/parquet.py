"""Parquet shards of either layout: footer -> described shard, row group -> batch.

What a row group's columns become is the layout's part (``wide``, ``vector``); which bytes are fetched is
``footer``'s and ``rowgroup``'s. Here they are put together with the times, and what was promised is held against what
came.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import partial
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from shardfold.ids import ObjectInfo, RowGroup, Shard
from shardfold.readers.batch import (
    Batch,
    ByteSource,
    Fetched,
    one_by_one,
    refused,
    some_names,
)
from shardfold.readers.columns import Columns
from shardfold.readers.footer import Footer, read_footer, refusing, spans_to_read
from shardfold.readers.grids import ColumnRule, Grid, TimeRule, grid_of
from shardfold.readers.rowgroup import open_group, slices
from shardfold.readers.times import TimeFault, Times, column_times, is_time_type, statistics_span

_TIME_BYTES = 8


class Layout(Protocol):
    """How the columns of a Parquet file hold channels."""

    def find(self, footer: Footer, time_field: int | None) -> Columns:
        """Return the shard's channels; raise ShardRefused where they break a rule."""
        ...

    def values(
        self, reader: Any, footer: Footer, group: int, columns: Columns, channels: Sequence[str]
    ) -> Iterator[NDArray[Any]]:
        """Yield one row group's values ``(m, some samples)``, rows as ``channels`` are ordered."""
        ...


@dataclass(frozen=True)
class ParquetReader:
    """Reads Parquet shards of one layout with one rule for times."""

    layout: Layout
    time: TimeRule

    def describe(self, store: ByteSource, info: ObjectInfo) -> Shard:
        """Describe a shard from its footer; see `Reader`."""
        shard = self._open(store, info)
        groups = tuple(_describe_group(store, shard, group) for group in range(len(shard.footer.rows)))
        return Shard(info, groups, shard.columns.channels, str(shard.columns.dtype), shard.zoned)

    def fetched(
        self, store: ByteSource, shard: Shard, first_group: int, stop_group: int, channels: Sequence[str]
    ) -> Iterator[Fetched]:
        """Yield some row groups as they are fetched; see `Reader`."""
        opened = self._open(store, shard.info)
        _same_as_described(opened.footer, shard)
        needed = opened.needed(opened.columns.leaves_of(channels))
        for group in range(first_group, stop_group):
            if shard.groups[group].rows:
                decode = partial(self._decode, opened, group, shard.groups[group], channels)
                # No name is given to the stored bytes here, lest they be held while the next are fetched.
                yield partial(decode, open_group(store, opened.footer, group, needed))

    def batches(
        self, store: ByteSource, shard: Shard, first_group: int, stop_group: int, channels: Sequence[str]
    ) -> Iterator[Batch]:
        """Yield the batches of some row groups; see `Reader`."""
        return one_by_one(self.fetched(store, shard, first_group, stop_group, channels))

    def _open(self, store: ByteSource, info: ObjectInfo) -> _Opened:
        footer = read_footer(store, info)
        if not sum(footer.rows):
            raise refused(info, "the shard holds no samples", rule="at least one row", got="0 rows")
        with refusing(info, "the footer cannot be understood"):
            time_field = _time_field(footer, self.time)
            columns = self.layout.find(footer, time_field)
            zoned = time_field is not None and bool(getattr(footer.schema.field(time_field).type, "tz", None))
        grid = grid_of(self.time, info, sum(footer.rows))
        return _Opened(footer, columns, time_field, grid, grid.zoned if grid else zoned)

    def _decode(
        self, opened: _Opened, group: int, described: RowGroup, channels: Sequence[str], reader: Any
    ) -> Iterator[Batch]:
        footer, times = opened.footer, None
        if opened.grid:
            times = opened.grid.times(footer.first_rows[group], footer.rows[group])
        elif opened.time_field is not None:
            times = _read_times(reader, footer, group, opened.time_field)
            _within_described(footer.info, group, times, described)
        parts = self.layout.values(reader, footer, group, opened.columns, channels)
        del reader  # a layout that needs the stored bytes no more can let them go
        done = 0
        for values in parts:
            rows = slice(done, done + values.shape[1])
            yield Batch(footer.first_rows[group] + done, None if times is None else times[rows], values)
            done = rows.stop


@dataclass(frozen=True)
class _Opened:
    """One shard whose footer has been read and understood."""

    footer: Footer
    columns: Columns
    time_field: int | None
    grid: Grid | None
    zoned: bool

    def needed(self, leaves: Sequence[int]) -> list[int]:
        """Return the leaf columns to fetch for some channels, the time's included."""
        return [*leaves, *([] if self.time_field is None else self.footer.leaves[self.time_field])]


def _describe_group(store: ByteSource, shard: _Opened, group: int) -> RowGroup:
    rows = shard.footer.rows[group]
    if not rows:
        return RowGroup(0, 0, 0, None, None)
    with refusing(shard.footer.info, "the footer cannot be understood", place=f"row group {group}"):
        spans = spans_to_read(shard.footer, group, shard.needed(shard.columns.leaves))
    row_bytes = len(shard.columns.channels) * shard.columns.dtype.itemsize
    row_bytes += _TIME_BYTES * (shard.time_field is not None or shard.grid is not None)
    first, last = _group_span(store, shard, group)
    return RowGroup(rows, sum(span.stop - span.start for span in spans), rows * row_bytes, first, last)


def _group_span(store: ByteSource, shard: _Opened, group: int) -> tuple[int | None, int | None]:
    """Return the least and largest time: from the grid, the statistics or, where they do not say, the column."""
    footer = shard.footer
    if shard.grid:
        return shard.grid.span(footer.first_rows[group], footer.rows[group])
    if shard.time_field is None:
        return None, None
    (leaf,) = footer.leaves[shard.time_field]
    kind = footer.schema.field(shard.time_field).type
    with refusing(footer.info, "the footer cannot be understood", place=f"row group {group}"):
        known = statistics_span(footer.metadata.row_group(group).column(leaf), kind)
    if known:
        return known
    times = _read_times(open_group(store, footer, group, [leaf]), footer, group, shard.time_field)
    return int(times.min()), int(times.max())


def _time_field(footer: Footer, rule: TimeRule) -> int | None:
    if not isinstance(rule, ColumnRule):
        return None
    field: int = footer.schema.get_field_index(rule.column)
    if field < 0:
        raise refused(
            footer.info,
            f"there is no time column {rule.column!r}",
            rule="source.time names a column of every shard",
            got=f"columns {some_names(footer.schema.names, 5)}",
            remedy="correct source.time, or set it to none",
        )
    kind = footer.schema.field(field).type
    if not is_time_type(kind):
        rule_text = "timestamps, dates, or seconds since the Unix epoch as numbers"
        got = f"type {kind}"
        raise refused(footer.info, f"the time column {rule.column!r} holds no times", rule=rule_text, got=got)
    return field


def _read_times(reader: Any, footer: Footer, group: int, time_field: int) -> Times:
    """Return the times of one row group, converted a slice at a time so that no second column is held."""
    times, done = np.empty(footer.rows[group], np.int64), 0
    for batch in slices(reader, footer, group, footer.leaves[time_field], _TIME_BYTES):
        try:
            times[done : done + len(batch)] = column_times(batch.column(0))
        except TimeFault as fault:
            name = footer.schema.field(time_field).name
            place = f"column {name!r}, row {footer.first_rows[group] + done + fault.row}"
            remedy = "mend the shard's time column, or leave the shard out with source.match"
            raise refused(
                footer.info, fault.what, place=place, rule=fault.rule, got=fault.got, remedy=remedy
            ) from fault
        done += len(batch)
    return times


def _within_described(info: ObjectInfo, group: int, times: Times, described: RowGroup) -> None:
    """Times outside the footer's statistics would fall into leaves that nobody planned, and be lost."""
    first, last = int(times.min()), int(times.max())
    if described.first is None or described.last is None or not described.first <= first <= last <= described.last:
        raise refused(
            info,
            "times contradict the footer",
            place=f"row group {group}",
            rule=f"times within the footer's statistics, {described.first} to {described.last} ns",
            got=f"{first} to {last} ns",
            remedy="write the shard again: its statistics are wrong",
        )


def _same_as_described(footer: Footer, shard: Shard) -> None:
    if footer.rows != tuple(group.rows for group in shard.groups):
        got = f"{sum(footer.rows)} rows in {len(footer.rows)} row groups"
        rule = f"{shard.rows} rows in {len(shard.groups)} row groups, as it was described"
        raise refused(shard.info, "the shard is not as it was described", rule=rule, got=got, remedy="run again")
