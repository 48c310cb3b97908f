"""Layout ``vector``: one list of values per row, all of one length; channels are places in the list.

Lists are decoded and handed on a slice of rows at a time, as pyarrow's own memory where all channels are taken. A row
group at once would make pyarrow hold 2.1 to 4.2 times its decoded bytes (levels, growing buffers) and is no faster.
"""

from __future__ import annotations

import functools
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from shardfold.channels import keep_names
from shardfold.ids import ObjectInfo
from shardfold.readers.batch import refused
from shardfold.readers.columns import Columns, numeric_dtype
from shardfold.readers.footer import Footer, gap_dtype
from shardfold.readers.rowgroup import slices

_LENGTH_RULE = "every row holds one list, all of one length"


@dataclass(frozen=True)
class Vector:
    """Column ``values`` holds the lists; ``names`` are the channel table's, in list order, or empty."""

    values_column: str
    names: tuple[str, ...] = ()
    include: tuple[str, ...] | None = None
    exclude: tuple[str, ...] = ()

    def find(self, footer: Footer, time_field: int | None) -> Columns:
        """Return the channels in list order; the one leaf is that of the values."""
        field = footer.schema.get_field_index(self.values_column)
        kind: Any = pa.null() if field < 0 else footer.schema.field(field).type
        dtype = numeric_dtype(kind.value_type) if _is_list(kind) else None
        if dtype is None:
            rule = "source.values names a column of lists of numbers"
            got = f"type {kind}" if field >= 0 else f"columns {', '.join(footer.schema.names[:5])}"
            raise refused(footer.info, f"there are no vectors in {self.values_column!r}", rule=rule, got=got)
        leaf = footer.leaves[field][0]
        kept = keep_names(self._all_names(footer, leaf, kind), self.include, self.exclude)
        return Columns(kept, (leaf,), gap_dtype(footer, (leaf,), dtype))

    def values(
        self, reader: Any, footer: Footer, group: int, columns: Columns, channels: Sequence[str]
    ) -> Iterator[NDArray[Any]]:
        """Yield one row group's values slice by slice, F order: the transpose of rows as stored."""
        leaf = columns.leaves[0]
        names = self._all_names(footer, leaf, footer.schema.field(self.values_column).type)
        picks = None if tuple(channels) == names else places(names, channels)
        done = 0
        for batch in slices(reader, footer, group, (leaf,), len(names) * columns.dtype.itemsize):
            block = _block(footer, group, done, batch.column(0), len(names), columns.dtype)
            yield (block if picks is None else np.take(block, picks, axis=1)).T
            done += len(block)

    def _all_names(self, footer: Footer, leaf: int, kind: Any) -> tuple[str, ...]:
        length = kind.list_size if pa.types.is_fixed_size_list(kind) else _common_length(footer, leaf)
        return channel_names(footer.info, length, self.names)


def channel_names(info: ObjectInfo, length: int, names: tuple[str, ...]) -> tuple[str, ...]:
    """Return the names of ``length`` channels that a shard does not name itself: the table's, or numbers.

    Raises
    ------
    ShardRefused
        When the table names another number of channels.
    """
    if not names:
        return _numbered(length)
    if len(names) != length:
        got = f"{length} values in a sample, {len(names)} names"
        rule = "the channel table names every value of a sample, in order"
        raise refused(info, "the samples do not fit the channel table", rule=rule, got=got)
    return names


def places(names: Sequence[str], channels: Sequence[str]) -> NDArray[np.intp]:
    """Return the place of each channel among the names."""
    place_of = {name: place for place, name in enumerate(names)}
    return np.array([place_of[channel] for channel in channels], dtype=np.intp)


def _block(footer: Footer, group: int, done: int, lists: Any, length: int, dtype: np.dtype[Any]) -> NDArray[Any]:
    """Return some rows' lists as an array ``(rows, length)``, without a copy where nothing is null."""
    lengths = lists.value_lengths().fill_null(-1).to_numpy(zero_copy_only=False)
    wrong = np.flatnonzero(lengths != length)
    if wrong.size:
        row = footer.first_rows[group] + done + int(wrong[0])
        got = "null" if lengths[wrong[0]] < 0 else f"{lengths[wrong[0]]} values, not {length}"
        raise refused(footer.info, "vector lengths differ", place=f"row {row}", rule=_LENGTH_RULE, got=got)
    flat = lists.flatten()
    if flat.null_count and dtype.kind != "f":
        place, got = f"row group {group}", f"{flat.null_count} nulls"
        raise refused(footer.info, "values are missing", place=place, rule="none, says the footer", got=got)
    numbers: NDArray[Any] = flat.to_numpy(zero_copy_only=False)
    return numbers.astype(dtype, copy=False).reshape(-1, length)


def _is_list(kind: Any) -> bool:
    types = pa.types
    return bool(types.is_list(kind) or types.is_large_list(kind) or types.is_fixed_size_list(kind))


def _common_length(footer: Footer, leaf: int) -> int:
    lengths = set()
    for group, rows in enumerate(footer.rows):
        entries = footer.metadata.row_group(group).column(leaf).num_values
        if rows:
            lengths.add(entries // rows if entries % rows == 0 else -1)
    if len(lengths) != 1 or min(lengths) < 1:
        got = "row groups whose values are no multiple of their rows, or not the same multiple"
        raise refused(footer.info, "vector lengths differ", rule=_LENGTH_RULE, got=got)
    return int(lengths.pop())


@functools.lru_cache(maxsize=64)
def _numbered(length: int) -> tuple[str, ...]:
    digits = max(5, len(str(length - 1)))
    return tuple(f"ch{place:0{digits}d}" for place in range(length))
