"""Layout ``wide``: one numeric column per channel, one row per sample.

Columns are decoded a few at a time into one channel-major array, so that only those few exist twice.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from shardfold.channels import keep_names
from shardfold.readers.batch import refused
from shardfold.readers.columns import Columns, numeric_dtype
from shardfold.readers.footer import Footer, gap_dtype, refusing

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
    ) -> NDArray[Any]:
        """Return one row group's values, C order."""
        values = np.empty((len(channels), footer.rows[group]), columns.dtype)
        for first in range(0, len(channels), COLUMNS_AT_ONCE):
            some = channels[first : first + COLUMNS_AT_ONCE]
            row_of = {channel: first + i for i, channel in enumerate(some)}
            with refusing(footer.info, "the row group cannot be decoded", place=f"row group {group}"):
                table = reader.read_row_group(group, column_indices=list(columns.leaves_of(some)), use_threads=False)
            for name, column in zip(table.column_names, table.columns, strict=True):
                _fill(footer, f"row group {group}, channel {name!r}", column, values[row_of[name]])
        return values


def _all_numeric(footer: Footer, dtypes: dict[str, np.dtype[Any] | None]) -> None:
    wrong = [name for name, dtype in dtypes.items() if dtype is None]
    if wrong:
        kinds = ", ".join(f"{name!r} of type {footer.schema.field(name).type}" for name in wrong[:3])
        more = f" and {len(wrong) - 3} more" if len(wrong) > 3 else ""
        remedy = f"leave it out with source.channels.exclude: [{wrong[0]!r}], or make it source.time"
        rule = "integers or floats"
        raise refused(footer.info, "a channel is not numeric", rule=rule, got=kinds + more, remedy=remedy)


def _fill(footer: Footer, place: str, column: Any, into: NDArray[Any]) -> None:
    if len(column) != len(into):
        got = f"{len(column)} of {len(into)}"
        raise refused(footer.info, "the column holds fewer values than promised", place=place, got=got)
    if column.null_count and into.dtype.kind != "f":
        got = f"{column.null_count} nulls"
        raise refused(footer.info, "values are missing", place=place, rule="none, says the footer", got=got)
    into[:] = column.to_numpy()
