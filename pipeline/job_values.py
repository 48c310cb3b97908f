"""The rules of single values: each function takes what was written and returns the setting, or says which rule it breaks.

No models and no keys of other places; quantities and locations have modules of their own.
"""

from __future__ import annotations

import re
from typing import Any

from shardfold.quantities import RuleBroken, parse_bytes, parse_duration

LEAST_MEMORY_BYTES = 256 * 2**20
WIDEST_PROBE = 65_536

_TIME_RULE = "must be the name of the time column, {from_name: REGEX, step: DURATION}, {start: TIME, step: DURATION} or none"


def a_word(text: str) -> str:
    """Return a name: not empty, one line."""
    if not text.strip() or re.search(r"[\x00-\x1f\x7f]", text):
        raise RuleBroken("must be a name on one line, not empty")
    return text


def a_pattern(text: str) -> str:
    """Return a pattern over keys or channel names."""
    a_word(text)
    if "://" in text or text.startswith("/"):
        raise RuleBroken("must be a pattern below the location, without location or leading slash", 'such as "**/*.parquet"')
    return text


def a_regex(text: str) -> str:
    """Return a regular expression with one group, or with a group named ``time``."""
    try:
        compiled = re.compile(text)
    except re.error as error:
        raise RuleBroken(f"must be a regular expression: {error}") from None
    if compiled.groups != 1 and "time" not in compiled.groupindex:
        rule = "must have one group around the time, or a group named time"
        raise RuleBroken(rule, "such as 'blade-(\\d{8}T\\d{6})\\.npy'; write (?:...) for groups that are no time")
    return text


def a_table(text: str) -> str:
    """Return the location of a channel table."""
    if not re.search(r"\.(csv|parquet)$", text.strip(), re.IGNORECASE):
        raise RuleBroken("must be a table in .csv or .parquet")
    return text


def a_time(value: Any) -> Any:
    """Return the keys of where times come from; ``None`` for no times at all."""
    if value == "none":
        return None
    if isinstance(value, str) and value.strip():
        return {"column": value}
    if not isinstance(value, dict) or ("from_name" in value) + ("start" in value) != 1:
        remedy = "write time: none if the shards hold no times" if value is None else ""
        raise RuleBroken(_TIME_RULE, remedy)
    return value


def time_kind(value: Any) -> str:
    """Return which of the three kinds a value of `a_time` is."""
    return next((f"<{name}>" for name in ("from_name", "start") if name in value), "<column>")


def positive_duration(value: object) -> int:
    """Return a duration of at least a nanosecond."""
    duration = parse_duration(value)
    if duration < 1:
        raise RuleBroken("must be longer than nothing")
    return duration


def auto_or_duration(value: object) -> Any:
    """Return ``"auto"`` or a duration in nanoseconds."""
    return value if value == "auto" else positive_duration(value)


def auto_or_width(value: object) -> Any:
    """Return ``"auto"`` or a number of probe rows."""
    return _word_or_count(value, ("auto",), WIDEST_PROBE)


def workers(value: object) -> Any:
    """Return ``"auto"``, ``"serial"`` or a number of workers."""
    return _word_or_count(value, ("auto", "serial"), 1_000_000)


def ray_address(text: str) -> str:
    """Return the address of a running Ray."""
    if text.startswith("ray://"):
        rule = "must be HOST:PORT or auto; Ray Client (ray://) is not used"
        raise RuleBroken(rule, "start the run as a job on the cluster, with address: auto")
    return a_word(text)


def memory_size(value: object) -> int:
    """Return the private memory of a worker in bytes."""
    size = parse_bytes(value)
    if size < LEAST_MEMORY_BYTES:
        raise RuleBroken("must be at least 256 MiB, of which the interpreter and its libraries take most")
    return size


def known_terms(terms: tuple[str, ...]) -> tuple[str, ...]:
    """Return background terms, each once."""
    if len(set(terms)) != len(terms):
        raise RuleBroken("must name each term once")
    return terms


def _word_or_count(value: object, words: tuple[str, ...], most: int) -> Any:
    whole = isinstance(value, int) and not isinstance(value, bool) and 1 <= value <= most
    if value in words or whole:
        return value
    raise RuleBroken(f"must be {', '.join(words)} or a whole number from 1 to {most}")
