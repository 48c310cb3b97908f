"""Time columns of any type -> integer nanoseconds since the Unix epoch, and what their statistics promise of them.

Nothing here reads a store.
"""

from __future__ import annotations

import json
from collections.abc import Callable
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

Times = NDArray[np.int64]

LEAST, LARGEST = -(2**63) + 1, 2**63 - 1  # the least int64 is NaT for NumPy, so it is not a time
SECOND = 10**9
DAY = 86_400 * SECOND
RANGE_RULE = "times between the years 1677 and 2262, which 64 bits of nanoseconds can hold"
_UNITS = {"s": SECOND, "ms": 10**6, "us": 10**3, "ns": 1}


class TimeFault(ValueError):
    """A time that cannot be used; ``row`` counts from the start of the column at hand."""

    def __init__(self, what: str, row: int, rule: str, got: str) -> None:
        super().__init__(what)
        self.what, self.row, self.rule, self.got = what, row, rule, got


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
    with np.errstate(over="ignore"):
        nanoseconds = np.rint(seconds * 1e9)
    bad = ~(np.abs(nanoseconds) < 2.0**63)  # NaN compares false, so it is bad
    if bad.any():
        row = int(np.argmax(bad))
        raise TimeFault("a time is not usable", row, f"a finite number of seconds; {RANGE_RULE}", f"{seconds[row]:g}")
    return nanoseconds.astype(np.int64)


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
