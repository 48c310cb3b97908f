"""Durations, sizes in bytes, instants and angles, read from text and written back.

All but angles are exact integers: a value that is not a whole number of nanoseconds or bytes is refused, never
rounded. An angle is a float64 of degrees. Nothing here knows about files, keys or settings; a broken rule says what was
wanted and what to write instead.
"""

from __future__ import annotations

import math
import re
from collections.abc import Collection
from datetime import UTC, datetime, timedelta
from decimal import Decimal
from fractions import Fraction
from typing import Any

DURATION_UNITS = {
    "ns": 1,
    "us": 10**3,
    "ms": 10**6,
    "s": 10**9,
    "min": 60 * 10**9,
    "h": 3600 * 10**9,
    "d": 86400 * 10**9,
}
BYTE_UNITS = {"B": 1} | {
    name + suffix: step**power
    for suffix, step in (("B", 1000), ("iB", 1024))
    for power, name in enumerate(("k" if suffix == "B" else "K", "M", "G", "T"), start=1)
}

ANGLE_UNITS = ("deg", "rad")

_DURATION_OTHER_NAMES = {
    "µs": "us", "μs": "us", "usec": "us", "msec": "ms", "sec": "s", "secs": "s", "second": "s", "seconds": "s",
    "m": "min", "mins": "min", "minute": "min", "minutes": "min", "hr": "h", "hrs": "h", "hour": "h", "hours": "h",
    "day": "d", "days": "d", "milliseconds": "ms", "microseconds": "us", "nanoseconds": "ns",
}  # fmt: skip
_BYTE_OTHER_NAMES = {
    "b": "B", "bytes": "B", "byte": "B", "K": "KiB", "Ki": "KiB", "M": "MiB", "Mi": "MiB", "G": "GiB", "Gi": "GiB",
    "T": "TiB", "Ti": "TiB", "KB": "kB", "kb": "kB", "mb": "MB", "gb": "GB", "tb": "TB", "kib": "KiB", "mib": "MiB",
    "gib": "GiB", "tib": "TiB", "kiB": "KiB",
}  # fmt: skip

_ANGLE_OTHER_NAMES = {
    "°": "deg", "º": "deg", "degs": "deg", "degree": "deg", "degrees": "deg", "rads": "rad", "radian": "rad",
    "radians": "rad",
}  # fmt: skip

_QUANTITY = re.compile(r"([0-9]{1,30}(?:\.[0-9]{1,30})?|\.[0-9]{1,30})[ \t]*([^\W\d_]*|°)")
_INSTANT = re.compile(
    r"(\d{4}-\d{2}-\d{2})(?:(?:[Tt]|[ \t]+)(\d{2}:\d{2}(?::\d{2})?)(?:\.(\d{1,9}))?[ \t]*([Zz]|[+-]\d{2}:?\d{2})?)?"
)
_LARGEST = 2**63 - 1


class RuleBroken(ValueError):
    """A value breaks a rule; ``rule`` says what is wanted and ``remedy`` what to write instead."""

    def __init__(self, rule: str, remedy: str = "") -> None:
        super().__init__(f"{rule}; {remedy}" if remedy else rule)
        self.rule, self.remedy = rule, remedy

    def __reduce__(self) -> tuple[Any, ...]:
        return (type(self), (self.rule, self.remedy))


def parse_duration(value: object) -> int:
    """Return a duration in nanoseconds.

    Parameters
    ----------
    value : object
        Text such as ``"125 ms"``, ``"10 min"``, ``"1.5 s"``, ``"30 d"``; anything else breaks the rule.

    Raises
    ------
    RuleBroken
        If the unit is missing or unknown, the value negative, not whole in nanoseconds, or beyond 292 years.
    """
    wanted = 'must be a duration: a number and a unit (ns, us, ms, s, min, h or d), such as "10 min"'
    _refuse_bare_number(value, wanted, ("s", "min"))
    number, unit = _split(value, wanted)
    if unit.lower() in ("hz", "khz"):
        raise RuleBroken(wanted, _time_of_rate(number, unit))
    factor = DURATION_UNITS[_known(number, unit, DURATION_UNITS, _DURATION_OTHER_NAMES, wanted)]
    return _whole(Fraction(number) * factor, "nanoseconds", DURATION_UNITS)


def parse_bytes(value: object) -> int:
    """Return a number of bytes.

    Parameters
    ----------
    value : object
        Text such as ``"600 MiB"`` or ``"2 GB"``; ``kB, MB, GB, TB`` count in thousands, ``KiB ... TiB`` in 1024.

    Raises
    ------
    RuleBroken
        If the unit is missing or unknown, or the value is negative or not whole.
    """
    wanted = 'must be a size: a number and a unit (B, kB, MB, GB, TB, KiB, MiB, GiB or TiB), such as "2 GiB"'
    _refuse_bare_number(value, wanted, ("MiB", "GiB"))
    number, unit = _split(value, wanted)
    factor = BYTE_UNITS[_known(number, unit, BYTE_UNITS, _BYTE_OTHER_NAMES, wanted)]
    return _whole(Fraction(number) * factor, "bytes", BYTE_UNITS)


def parse_instant(value: object) -> int:
    """Return an instant in nanoseconds since the Unix epoch; without a zone it is taken as UTC.

    Parameters
    ----------
    value : object
        ISO 8601 text: ``2031-04-12``, ``2031-04-12T06:00:00Z``, ``2031-04-12 06:00:00.125+02:00``.

    Raises
    ------
    RuleBroken
        If the text is no such instant, or lies outside the years 1678 to 2261 that 64 bits of nanoseconds hold.
    """
    wanted = "must be a date and time, such as 2031-04-12T06:00:00Z"
    found = _INSTANT.fullmatch(value.strip()) if isinstance(value, str) else None
    if found is None:
        raise RuleBroken(wanted, "write year-month-day, T, hour:minute:second, and Z or an offset such as +02:00")
    day, clock, fraction, zone = found.groups()
    try:
        instant = datetime.fromisoformat(f"{day}T{clock or '00:00'}{_offset(zone)}")
    except ValueError as error:
        raise RuleBroken(wanted, f"there is no such date or time: {error}") from None
    elapsed = instant - datetime(1970, 1, 1, tzinfo=UTC)
    nanoseconds = elapsed // timedelta(microseconds=1) * 1000 + int((fraction or "").ljust(9, "0"))
    if abs(nanoseconds) > _LARGEST:
        raise RuleBroken("must lie in the years 1678 to 2261, which 64 bits of nanoseconds can hold")
    return nanoseconds


def parse_angle(value: object) -> float:
    """Return an angle in degrees, the float64 nearest to what is written.

    Parameters
    ----------
    value : object
        Text such as ``"5 deg"``, ``"0.5 deg"``, ``"0.1 rad"``; anything else breaks the rule.

    Raises
    ------
    RuleBroken
        If the unit is missing or unknown, or the value negative.
    """
    wanted = 'must be an angle: a number and a unit (deg or rad), such as "5 deg"'
    _refuse_bare_number(value, wanted, ("deg",))
    number, unit = _split(value, wanted)
    angle = float(Fraction(number))
    return angle if _known(number, unit, ANGLE_UNITS, _ANGLE_OTHER_NAMES, wanted) == "deg" else math.degrees(angle)


def format_duration(duration_ns: int) -> str:
    """Return the shortest exact text of a duration, such as ``"10 min"``; `parse_duration` reads it back."""
    return _format(duration_ns, DURATION_UNITS)


def format_bytes(size_bytes: int) -> str:
    """Return the shortest exact text of a size, such as ``"2 GiB"``; `parse_bytes` reads it back."""
    return _format(size_bytes, BYTE_UNITS)


def rounded_up(angle_deg: float) -> str:
    """Return an angle in degrees to two digits, never smaller than it is: for bounds."""
    if angle_deg <= 0:
        return "0"
    step = 10.0 ** (math.floor(math.log10(angle_deg)) - 1)
    return f"{math.ceil(angle_deg / step - 1e-9) * step:.2g}"


def format_angle(angle_deg: float) -> str:
    """Return the shortest text of an angle, such as ``"5 deg"``; `parse_angle` reads it back (from 1e-12 deg on)."""
    digits = f"{Decimal(repr(float(angle_deg))):f}"
    return f"{digits.removesuffix('.0')} deg"


def _refuse_bare_number(value: object, wanted: str, units: tuple[str, ...]) -> None:
    text = str(value).strip()
    if not isinstance(value, bool) and re.fullmatch(r"[0-9.]+", text):
        examples = " or ".join(f'"{text} {unit}"' for unit in units)
        raise RuleBroken(wanted, f"the unit is missing: write {examples}")


def _split(value: object, wanted: str) -> tuple[str, str]:
    text = value.strip() if isinstance(value, str) else ""
    found = _QUANTITY.fullmatch(text)
    if found is None:
        raise RuleBroken(wanted, "it cannot be negative" if text.startswith("-") else "")
    return found[1], found[2]


def _known(number: str, unit: str, units: Collection[str], other_names: dict[str, str], wanted: str) -> str:
    """Return the unit if it is one of those known; else the rule is broken, with the unit that may have been meant."""
    if unit in units:
        return unit
    meant = other_names.get(unit) or other_names.get(unit.lower()) or ""
    meant = meant or next((known for known in units if known.lower() == unit.lower()), "")
    raise RuleBroken(wanted, f'write "{number} {meant}"' if meant else f"{unit} is not one of the units")


def _whole(amount: Fraction, plural: str, units: dict[str, int]) -> int:
    if amount.denominator != 1:
        nearest = _format(round(amount), units)
        raise RuleBroken(f"must be a whole number of {plural}", f'the nearest is "{nearest}"')
    if amount > _LARGEST:
        raise RuleBroken(f"must be at most 2**63 - 1 {plural}")
    return int(amount)


def _time_of_rate(number: str, unit: str) -> str:
    """Return the remedy for a rate: of samples it tells the step between two, of a cycle its period."""
    rate = Fraction(number) * (1000 if unit.lower() == "khz" else 1)
    time_ns = 10**9 / rate if rate else Fraction(0)
    if not time_ns or time_ns.denominator != 1:
        return "give the time from one to the next instead of the rate"
    return f'give the time from one to the next instead of the rate: "{format_duration(int(time_ns))}"'


def _offset(zone: str | None) -> str:
    return "+00:00" if zone is None or zone in "Zz" else zone


def _format(amount: int, units: dict[str, int]) -> str:
    fitting = [(abs(amount) // size, name) for name, size in units.items() if amount % size == 0]
    count, name = min(fitting, key=lambda pair: pair[0]) if amount else (0, next(iter(units)))
    return f"{'-' if amount < 0 else ''}{count} {name}"
