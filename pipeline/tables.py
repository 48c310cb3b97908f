"""The tables of a result as Parquet: columns, units and descriptions in the field metadata.

Arrays in, bytes out. Any Arrow reader opens them without this package. No storage here.
"""

from __future__ import annotations

import io
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt
import pyarrow as pa
import pyarrow.parquet as pq

Array = npt.NDArray[Any]


@dataclass(frozen=True)
class Column:
    """One column: values, unit and what it is. Floats that are NaN are written as null: there is no such figure.

    ``facts`` are further entries of the field's metadata.
    """

    values: Sequence[Any] | Array
    unit: str
    about: str
    kind: Any = None
    facts: Mapping[str, str] = field(default_factory=dict)

    def array(self) -> Any:
        """Return the Arrow array."""
        if isinstance(self.values, np.ndarray) and self.values.dtype.kind == "f":
            return pa.array(self.values, type=self.kind, from_pandas=True)
        return pa.array(self.values, type=self.kind)


def to_parquet(columns: Mapping[str, Column], facts: Mapping[str, str] | None = None) -> bytes:
    """Return a Parquet file of the columns, the same bytes for the same values."""
    arrays = {name: column.array() for name, column in columns.items()}
    fields = [
        pa.field(name, arrays[name].type, metadata={"unit": column.unit, "description": column.about, **column.facts})
        for name, column in columns.items()
    ]
    return arrow_bytes(pa.table(list(arrays.values()), schema=pa.schema(fields, metadata=dict(facts or {}))))


def arrow_bytes(table: Any) -> bytes:
    """Return an Arrow table as a Parquet file, the same bytes for the same table."""
    sink = io.BytesIO()  # grows in small steps and hands its bytes on uncopied; Arrow's own doubles, then is copied
    # Numbers that hardly ever repeat make a dictionary that is built, given up and paid for.
    words = [field.name for field in table.schema if not pa.types.is_primitive(field.type)]
    pq.write_table(table, sink, compression="zstd", compression_level=3, store_schema=True, use_dictionary=words)
    return sink.getvalue()


def mode_names(rank: int, stem: str) -> list[str]:
    """Return ``stem_01 ...``, with as many digits as the rank needs, at least two."""
    digits = max(2, len(str(rank)))
    return [f"{stem}_{number:0{digits}d}" for number in range(1, rank + 1)]


def coefficient_table(
    times: Array,
    shards: Sequence[str] | None,
    coefficients: Array,
    zoned: bool,
    unit: str,
    groups: Sequence[str | None],
) -> bytes:
    """Return one part of the coefficients.

    Parameters
    ----------
    times : ndarray (n,)
        Integer nanoseconds, or row numbers where `shards` is given.
    shards : sequence of str, optional
        Shard of each sample, where there are no times.
    coefficients : ndarray (r, n)
        One row per mode; NaN where the mode is under the rounding floor.
    groups : sequence of str or None, length r
        Name of each mode's group, if it has one.
    """
    columns: dict[str, Column] = {}
    if shards is None:
        kind = pa.timestamp("ns", tz="UTC" if zoned else None)
        columns["time"] = Column(times, "", "instant of the sample", kind)
    else:
        columns["shard"] = Column(pa.array(shards).dictionary_encode(), "", "shard that holds the sample")
        columns["row"] = Column(times, "", "row of the sample within its shard, from 0")
    about = "coefficient of the mode; carries the energy (modes have unit length)"
    for name, row, group in zip(mode_names(len(coefficients), "c"), coefficients, groups, strict=True):
        columns[name] = Column(row, unit, about, facts={} if group is None else {"group": group})
    return to_parquet(columns)


def read_table(data: Any) -> Any:
    """Return the Arrow table of a Parquet file's bytes."""
    return pq.read_table(pa.BufferReader(data))
