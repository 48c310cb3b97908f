"""Where times come from: a column, or an even grid whose start is given or stands in the shard's name.

Nothing here reads a store or a column.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from decimal import Decimal
from typing import Protocol, runtime_checkable

import numpy as np

from shardfold.ids import ObjectInfo
from shardfold.readers.batch import refused
from shardfold.readers.times import LARGEST, LEAST, RANGE_RULE, SECOND, Times

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
