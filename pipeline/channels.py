"""The channel table: what each channel is called, its unit, how its raw values become values, and where it sits.

A table comes from a Parquet or CSV file or is the plain default; it is stored with units and descriptions in its
field metadata. Nothing here reads shards, and nothing here decides which channels a campaign has.
"""

from __future__ import annotations

import io
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from fnmatch import fnmatchcase
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.csv as pa_csv
import pyarrow.parquet as pq
from numpy.typing import NDArray

from shardfold.errors import JobInvalid

Floats = NDArray[np.float64]

FACTORS = ("gain", "shift", "scale", "weight")
DESCRIPTIONS = {
    "channel": "name of the channel, as in the shards",
    "unit": "unit of (raw * gain + shift)",
    "gain": "factor from raw values to the channel's unit",
    "shift": "added after the gain, in the channel's unit",
    "scale": "the channel is divided by it, in the channel's unit",
    "weight": "quadrature or mass weight; its square root multiplies the amplitude",
}
_RULES = {
    "gain": "finite and not zero",
    "shift": "finite",
    "scale": "finite and above zero",
    "weight": "finite and above zero",
}
_MOST_FAULTS = 20


@dataclass(frozen=True, eq=False)
class ChannelTable:
    """Everything known about ``m`` channels before a value is read; arrays are read-only.

    A prepared value is ``sqrt(weight) / scale * (raw * gain + shift)``; ``raw * gain + shift`` is in ``unit``.
    ``positions`` holds any further numeric columns (coordinates), each of length ``m``.
    """

    names: tuple[str, ...]
    unit: tuple[str, ...]
    gain: Floats
    shift: Floats
    scale: Floats
    weight: Floats
    positions: Mapping[str, Floats] = field(default_factory=dict)

    def select(self, names: Sequence[str]) -> ChannelTable:
        """Return the table of some of its channels, in the order asked for.

        Raises
        ------
        KeyError
            When a name is not in the table.
        """
        row_of = {name: row for row, name in enumerate(self.names)}
        rows = [row_of[name] for name in names]
        return ChannelTable(
            names=tuple(names),
            unit=tuple(self.unit[row] for row in rows),
            gain=_frozen(self.gain[rows]),
            shift=_frozen(self.shift[rows]),
            scale=_frozen(self.scale[rows]),
            weight=_frozen(self.weight[rows]),
            positions={name: _frozen(values[rows]) for name, values in self.positions.items()},
        )


def default_table(names: Sequence[str]) -> ChannelTable:
    """Return the table of channels about which nothing is known: gain, scale and weight 1, shift 0, no unit."""
    ones, zeros = _frozen(np.ones(len(names))), _frozen(np.zeros(len(names)))
    return ChannelTable(tuple(names), ("",) * len(names), gain=ones, shift=zeros, scale=ones, weight=ones)


def units_conflict(table: ChannelTable) -> tuple[str, str] | None:
    """Return the first two differing units of a table, or ``None``; channels without a unit are not compared."""
    units = list(dict.fromkeys(unit for unit in table.unit if unit))
    return (units[0], units[1]) if len(units) > 1 else None


def keep_names(names: Iterable[str], include: Sequence[str] | None, exclude: Sequence[str]) -> tuple[str, ...]:
    """Return the names that match an ``include`` pattern (``None``: all do) and no ``exclude`` pattern, in order."""
    return tuple(
        name
        for name in names
        if (include is None or any(fnmatchcase(name, pattern) for pattern in include))
        and not any(fnmatchcase(name, pattern) for pattern in exclude)
    )


def read_table(source: Path | bytes, name: str = "") -> ChannelTable:
    """Return the channel table of a Parquet or CSV file.

    Parameters
    ----------
    source : Path or bytes
        A local file, or the bytes of one fetched from elsewhere.
    name : str
        What messages call the file; a path names itself.

    Raises
    ------
    JobInvalid
        With every fault of the table: no ``channel`` column, names missing or repeated, cells that are not
        numbers, scale or weight not above zero.
    """
    data = source.read_bytes() if isinstance(source, Path) else source
    return from_arrow(_parse(data, name or str(source)), name or str(source))


def from_arrow(table: pa.Table, name: str) -> ChannelTable:
    """Return the channel table held by an Arrow table; the inverse of `to_arrow`.

    Raises
    ------
    JobInvalid
        As `read_table`.
    """
    names = _names(table, name)
    faults = list(_name_faults(names))
    factors: dict[str, Any] = {}
    for column in (factor for factor in FACTORS if factor in table.column_names):
        values = _numbers(table, column)
        if values is None:
            faults.append(f"{column}: must be numbers (got {table.schema.field(column).type})")
        else:
            factors[column] = _frozen(values)
            faults.extend(_factor_faults(column, values, names))
    if faults:
        shown = [f"{name}: {fault}" for fault in faults[:_MOST_FAULTS]]
        raise JobInvalid(f"faults in the channel table: {len(faults)}", where=name, faults=tuple(shown))
    return replace(default_table(names), unit=_units(table), positions=_positions(table), **factors)


def to_arrow(table: ChannelTable) -> pa.Table:
    """Return the table as Arrow columns, with descriptions and units of columns in field metadata."""
    columns = {"channel": pa.array(table.names, pa.string()), "unit": pa.array(table.unit, pa.string())}
    columns.update({factor: pa.array(getattr(table, factor)) for factor in FACTORS})
    columns.update({name: pa.array(values, from_pandas=True) for name, values in table.positions.items()})
    fields = [
        pa.field(name, column.type, metadata={"description": DESCRIPTIONS.get(name, "position of the channel")})
        for name, column in columns.items()
    ]
    return pa.table(list(columns.values()), schema=pa.schema(fields))


def _parse(data: bytes, name: str) -> pa.Table:
    try:
        if data[:4] == b"PAR1":
            return pq.read_table(io.BytesIO(data), use_threads=False)
        options = pa_csv.ConvertOptions(strings_can_be_null=False, column_types={"channel": pa.string()})
        return pa_csv.read_csv(io.BytesIO(data), convert_options=options)
    except (pa.ArrowException, OSError, ValueError) as error:
        raise JobInvalid(
            "the channel table cannot be read",
            where=name,
            rule="a Parquet file, or CSV with one header line",
            got=str(error).splitlines()[0],
        ) from error


def _names(table: pa.Table, name: str) -> tuple[str, ...]:
    if "channel" not in table.column_names:
        raise JobInvalid(
            "the channel table has no column of names",
            where=name,
            rule="a column 'channel' with the channels' names as in the shards",
            got=", ".join(table.column_names) or "no columns",
        )
    return tuple("" if value is None else str(value) for value in table.column("channel").to_pylist())


def _name_faults(names: Sequence[str]) -> Iterator[str]:
    first_row: dict[str, int] = {}
    for row, channel in enumerate(names):
        if not channel:
            yield f"row {row + 1}: channel: must not be empty"
        elif channel in first_row:
            yield f"row {row + 1}: channel: must be unique (got {channel!r} again, first in row {first_row[channel]})"
        first_row.setdefault(channel, row + 1)
    if not names:
        yield "must hold at least one channel"


def _factor_faults(column: str, values: Floats, names: Sequence[str]) -> Iterator[str]:
    good = np.isfinite(values)
    if column != "shift":
        good &= values != 0
    if column in ("scale", "weight"):
        good &= values > 0
    for row in np.flatnonzero(~good).tolist():
        remedy = "; leave the channel out instead" if values[row] == 0 else ""
        yield f"row {row + 1}: {column} of {names[row]!r}: must be {_RULES[column]} (got {values[row]:g}){remedy}"


def _numbers(table: pa.Table, column: str) -> Floats | None:
    kind = table.schema.field(column).type
    if not (pa.types.is_integer(kind) or pa.types.is_floating(kind)):
        return None
    return np.asarray(table.column(column).cast(pa.float64()).to_numpy(), dtype=np.float64)


def _units(table: pa.Table) -> tuple[str, ...]:
    if "unit" not in table.column_names:
        return ("",) * int(table.num_rows)
    values = table.column("unit").to_pylist()
    return tuple("" if value is None else str(value) for value in values)


def _positions(table: pa.Table) -> Mapping[str, Floats]:
    found = {name: _numbers(table, name) for name in table.column_names if name not in DESCRIPTIONS}
    return {name: _frozen(values) for name, values in found.items() if values is not None}


def _frozen(values: Floats) -> Floats:
    values = np.array(values, dtype=np.float64)
    values.setflags(write=False)
    return values
