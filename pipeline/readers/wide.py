"""Layout ``wide``: one numeric column per channel, one row per sample.

Columns are decoded a few at a time into one channel-major array, so that only those few exist twice.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from shardfold.channels import keep_names
from shardfold.readers.batch import refused
from shardfold.readers.columns import Columns, numeric_dtype
from shardfold.readers.footer import Footer, gap_dtype
from shardfold.readers.rowgroup import SLICE_BYTES, slices

# Measured: one column a call costs a fifth more time, 256 hold half of the row group twice.
COLUMNS_AT_ONCE = 8


@dataclass(frozen=True)
class Wide:
    """Every column but the time is a channel, unless the patterns leave it out."""

    include: tuple[str, ...] | None = None
    exclude: tuple[str, ...] = ()

    def find(self, footer: Footer, time_field: int | None) -> Columns:
        """Return the channels in column order; their type is the common one of all of them."""
        time_name = None if time_field is None else footer.schema.field(time_field).name
        names = keep_names((n for n in footer.schema.names if n != time_name), self.include, self.exclude)
        if not names:
            got = f"{len(footer.schema.names)} columns, none of them left"
            raise refused(footer.info, "the shard has no channels", rule="at least one column besides time", got=got)
        fields = [footer.schema.get_field_index(name) for name in names]
        dtypes = {name: numeric_dtype(footer.schema.field(i).type) for name, i in zip(names, fields, strict=True)}
        _all_numeric(footer, dtypes)
        common = np.result_type(*{dtype for dtype in dtypes.values() if dtype is not None})
        leaves = tuple(footer.leaves[field][0] for field in fields)
        return Columns(names, leaves, gap_dtype(footer, leaves, np.dtype(common)))

    def values(
        self, reader: Any, footer: Footer, group: int, columns: Columns, channels: Sequence[str]
    ) -> Iterator[NDArray[Any]]:
        """Yield one row group's values at once, C order; its stored bytes are let go before."""
        rows = footer.rows[group]
        values = np.empty((len(channels), rows), columns.dtype)
        leaves = columns.leaves_of(channels)
        step = min(COLUMNS_AT_ONCE, max(1, SLICE_BYTES // (rows * values.itemsize)))
        for first in range(0, len(channels), step):
            some = slice(first, first + step)
            _fill(reader, footer, group, leaves[some], channels[some], values[some])
        del reader
        yield values


def _all_numeric(footer: Footer, dtypes: dict[str, np.dtype[Any] | None]) -> None:
    wrong = [name for name, dtype in dtypes.items() if dtype is None]
    if wrong:
        kinds = ", ".join(f"{name!r} of type {footer.schema.field(name).type}" for name in wrong[:3])
        more = f" and {len(wrong) - 3} more" if len(wrong) > 3 else ""
        remedy = f"leave it out with source.channels.exclude: [{wrong[0]!r}], or make it source.time"
        rule = "integers or floats"
        raise refused(footer.info, "a channel is not numeric", rule=rule, got=kinds + more, remedy=remedy)


def _fill(
    reader: Any, footer: Footer, group: int, leaves: Sequence[int], channels: Sequence[str], into: NDArray[Any]
) -> None:
    """Decode a few columns into as many rows of the value array."""
    row_of = {channel: row for row, channel in enumerate(channels)}
    done = 0
    for batch in slices(reader, footer, group, leaves, len(channels) * into.itemsize):
        stop = done + len(batch)
        for name, column in zip(batch.schema.names, batch.columns, strict=True):
            if column.null_count and into.dtype.kind != "f":
                place, got = f"row group {group}, channel {name!r}", f"{column.null_count} nulls"
                raise refused(footer.info, "values are missing", place=place, rule="none, says the footer", got=got)
            into[row_of[name], done:stop] = column.to_numpy(zero_copy_only=False)
        done = stop
