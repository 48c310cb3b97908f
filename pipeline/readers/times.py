"""Times in any form a source has them -> integer nanoseconds since the Unix epoch.

Columns of timestamps, dates or seconds, times in the names of shards, and even grids. Nothing here reads a store.
"""

from __future__ import annotations

import json
import re
from collections.abc import Callable
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from decimal import Decimal
from typing import Any, Protocol, runtime_checkable

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from shardfold.ids import ObjectInfo
from shardfold.readers.batch import refused

Times = NDArray[np.int64]

LEAST, LARGEST = -(2**63) + 1, 2**63 - 1  # the least int64 is NaT for NumPy, so it is not a time
SECOND = 10**9
DAY = 86_400 * SECOND
RANGE_RULE = "times between the years 1677 and 2262, which 64 bits of nanoseconds can hold"
_UNITS = {"s": SECOND, "ms": 10**6, "us": 10**3, "ns": 1}
_NAMED_COUNTS = {"seconds": SECOND, "milliseconds": 10**6, "microseconds": 10**3, "nanoseconds": 1}
_CALENDAR = re.compile(
    r"(\d{4})[-_]?(\d\d)[-_]?(\d\d)"
    r"(?:[T_ -]?(\d\d)[:_.-]?(\d\d)(?:[:_.-]?(\d\d)(?:[.,](\d{1,9}))?)?)?"
    r"(Z|[+-]\d\d:?\d\d)?"
)


@runtime_checkable
class ColumnRule(Protocol):
    """Times are a column of the shard."""

    @property
    def column(self) -> str:
        """Return the column's name."""
        ...


@runtime_checkable
class NameRule(Protocol):
    """The first time is in the shard's name, the others follow at an even step."""

    @property
    def pattern(self) -> str:
        """Return the regular expression whose group is the time."""
        ...

    @property
    def step_ns(self) -> int:
        """Return the step in nanoseconds."""
        ...


@runtime_checkable
class StartRule(Protocol):
    """The first time is given, the others follow at an even step."""

    @property
    def start_ns(self) -> int:
        """Return the first time in nanoseconds since the Unix epoch."""
        ...

    @property
    def step_ns(self) -> int:
        """Return the step in nanoseconds."""
        ...


TimeRule = ColumnRule | NameRule | StartRule | None


class TimeFault(ValueError):
    """A time that cannot be used; ``row`` counts from the start of the column at hand."""

    def __init__(self, what: str, row: int, rule: str, got: str) -> None:
        super().__init__(what)
        self.what, self.row, self.rule, self.got = what, row, rule, got


@dataclass(frozen=True)
class Grid:
    """Evenly spaced times of one shard: ``first + row * step``, in nanoseconds."""

    first: int
    step: int
    zoned: bool

    def span(self, first_row: int, rows: int) -> tuple[int, int]:
        """Return the first and last time of some rows."""
        return self.first + first_row * self.step, self.first + (first_row + rows - 1) * self.step

    def times(self, first_row: int, rows: int) -> Times:
        """Return the times of some rows."""
        return self.first + self.step * np.arange(first_row, first_row + rows, dtype=np.int64)


def grid_of(rule: TimeRule, info: ObjectInfo, rows: int) -> Grid | None:
    """Return the even times that a rule gives to a shard of ``rows`` samples, or ``None`` if it gives none.

    Raises
    ------
    ShardRefused
        When the name does not hold a time as the pattern promises, or the times leave the range of 64 bits.
    """
    if isinstance(rule, NameRule):
        first, zoned = _time_in_name(rule.pattern, info)
        grid = Grid(first, rule.step_ns, zoned)
    elif isinstance(rule, StartRule):
        grid = Grid(rule.start_ns, rule.step_ns, zoned=True)
    else:
        return None
    if not LEAST <= grid.first <= grid.span(0, max(rows, 1))[1] <= LARGEST:
        raise refused(info, "the times leave the range", rule=RANGE_RULE, got=f"first {grid.first} ns, {rows} rows")
    return grid


def is_time_type(kind: Any) -> bool:
    """Return whether an Arrow type can be a time: timestamp, date, integer or floating seconds."""
    types = pa.types
    tests = (types.is_timestamp, types.is_date, types.is_integer, types.is_floating)
    return any(test(kind) for test in tests)


def column_times(column: Any) -> Times:
    """Return an Arrow time column as int64 nanoseconds since the Unix epoch.

    Timestamps are UTC instants whether or not they carry a zone, dates are midnights, plain numbers are seconds;
    floating seconds are rounded to the nearest nanosecond of their float64 value.

    Raises
    ------
    TimeFault
        On a null, NaN or infinite time, or one that 64 bits of nanoseconds cannot hold.
    """
    if column.null_count:
        row = int(np.argmax(column.is_null().to_numpy(zero_copy_only=False)))
        raise TimeFault("a time is missing", row, "every sample has a time", "null")
    kind = column.type
    if pa.types.is_floating(kind):
        return _float_times(column.to_numpy().astype(np.float64))
    factor = ns_per_unit(kind)
    width = pa.int32() if pa.types.is_date32(kind) else pa.int64()
    counts = column.to_numpy() if pa.types.is_integer(kind) else column.cast(width).to_numpy()
    return _scaled(counts, factor)


def ns_per_unit(kind: Any) -> int:
    """Return the nanoseconds of one count of an Arrow timestamp, date or integer type."""
    if pa.types.is_timestamp(kind):
        return _UNITS[kind.unit]
    if pa.types.is_date32(kind):
        return DAY
    return _UNITS["ms"] if pa.types.is_date64(kind) else SECOND


def _scaled(counts: NDArray[Any], factor: int) -> Times:
    bad = (counts > LARGEST // factor) | (counts < -(LARGEST // factor))
    if bad.any():
        row = int(np.argmax(bad))
        raise TimeFault("a time is out of range", row, RANGE_RULE, f"{counts[row]} times {factor} ns")
    return np.asarray(counts, dtype=np.int64) * factor


def _float_times(seconds: NDArray[np.float64]) -> Times:
    nanoseconds = np.rint(seconds * 1e9)
    bad = ~(np.abs(nanoseconds) < 2.0**63)  # NaN compares false, so it is bad
    if bad.any():
        row = int(np.argmax(bad))
        raise TimeFault("a time is not usable", row, f"a finite number of seconds; {RANGE_RULE}", f"{seconds[row]!r}")
    return nanoseconds.astype(np.int64)


def _time_in_name(pattern: str, info: ObjectInfo) -> tuple[int, bool]:
    match = re.search(pattern, info.key)
    rule = f"a name that matches source.time.from_name {pattern!r}"
    if match is None:
        remedy = "mend the pattern, or narrow source.match"
        raise refused(info, "the name holds no time", rule=rule, got=info.key, remedy=remedy)
    name, text = _time_text(match)
    time = _count(text, _NAMED_COUNTS[name]) if name in _NAMED_COUNTS else _calendar(text)
    if time is None:
        rule_text = "a calendar time such as 20310301T120000Z, or whole units since the Unix epoch"
        remedy = "for a count, name the group: (?P<seconds>...), milliseconds, microseconds or nanoseconds"
        raise refused(info, "the time in the name cannot be read", rule=rule_text, got=text, remedy=remedy)
    return time


def _time_text(match: re.Match[str]) -> tuple[str, str]:
    """Return the name of the group that holds the time, "" if it has none, and its text."""
    named = match.groupdict(default="")
    for name in ("time", *_NAMED_COUNTS):
        if name in named:
            return name, named[name]
    return "", (match.group(1) if match.re.groups else match.group(0)) or ""


def _count(text: str, unit: int) -> tuple[int, bool] | None:
    if not re.fullmatch(r"-?\d+(\.\d+)?", text):
        return None
    return int((Decimal(text) * unit).to_integral_value()), False


def _calendar(text: str) -> tuple[int, bool] | None:
    match = _CALENDAR.fullmatch(text)
    if match is None:
        return None
    *parts, fraction, zone = match.groups(default="")
    try:
        whole = datetime(*(int(part or 0) for part in parts), tzinfo=UTC)  # type: ignore[misc,arg-type]
    except ValueError:
        return None
    seconds = (whole - datetime(1970, 1, 1, tzinfo=UTC)) // timedelta(seconds=1) - _offset_seconds(zone)
    return seconds * SECOND + int(fraction.ljust(9, "0") or 0), bool(zone)


def _offset_seconds(zone: str) -> int:
    if zone in ("", "Z"):
        return 0
    seconds = int(zone[1:3]) * 3600 + int(zone[-2:]) * 60
    return -seconds if zone[0] == "-" else seconds


def statistics_span(chunk: Any, kind: Any) -> tuple[int, int] | None:
    """Return the least and largest time that a column chunk's statistics promise, or ``None`` if they cannot.

    They cannot where they are missing, where times are null, and for types whose stored order is another.
    """
    statistics = chunk.statistics
    if statistics is None or not statistics.has_min_max or not statistics.has_null_count or statistics.null_count:
        return None
    low, high = statistics.min_raw, statistics.max_raw
    if pa.types.is_floating(kind):
        return _raw_span(low, high, lambda seconds: int(np.rint(float(seconds) * 1e9)))
    unit = _stored_unit(chunk, kind)
    return None if unit is None else _raw_span(low, high, lambda count: int(count) * unit)


def _stored_unit(chunk: Any, kind: Any) -> int | None:
    """Return nanoseconds per stored count: Parquet may hold another unit than the Arrow type shows."""
    if chunk.physical_type == "INT96" or pa.types.is_unsigned_integer(kind):
        return None
    logical = json.loads(chunk.statistics.logical_type.to_json())
    if logical["Type"] == "Timestamp":
        return {"milliseconds": 10**6, "microseconds": 10**3, "nanoseconds": 1}.get(logical["timeUnit"])
    if logical["Type"] == "Date":
        return DAY
    return SECOND if pa.types.is_integer(kind) else None


def _raw_span(low: Any, high: Any, to_ns: Callable[[Any], int]) -> tuple[int, int] | None:
    try:
        first, last = to_ns(low), to_ns(high)
    except (ValueError, OverflowError):
        return None
    return (first, last) if LEAST <= first <= last <= LARGEST else None
