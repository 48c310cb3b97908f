"""The rules of single values: each takes what was written and returns the setting, or says which rule is broken.

No models and no keys of other places; quantities and locations have modules of their own.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Hashable
from fractions import Fraction
from typing import Any

from shardfold.job_faults import nearest, one_of
from shardfold.job_places import pattern_regex
from shardfold.quantities import RuleBroken, parse_angle, parse_bytes, parse_duration

LEAST_MEMORY_BYTES = 256 * 2**20
WIDEST_PROBE = 65_536
MOST_WORKERS = 100_000
MOST_READS = 5
MOST_CYCLES = 12
LEAST_PERIOD_NS = 2
LARGEST = 2**63 - 1
TERMS = ("mean", "trend", "cycles")
TIME_GROUPS = ("time", "seconds", "milliseconds", "microseconds", "nanoseconds")
CORE_TYPES = (
    "any", "Prescott", "Core2", "Penryn", "Dunnington", "Nehalem", "Sandybridge", "Haswell", "SkylakeX", "Cooperlake",
    "SapphireRapids", "Barcelona", "Bulldozer", "Piledriver", "Steamroller", "Excavator", "Zen", "armv8",
    "neoversen1", "neoversev1", "neoversen2", "cortexa57", "thunderx2t99",
)  # fmt: skip

_TIME_RULE = (
    "must be the name of the time column, {from_name: REGEX, step: DURATION}, {start: TIME, step: DURATION} or none"
)
_RANK_FORMS = ("{energy: SHARE}", "{angle: ANGLE}")
_RANK_EXAMPLES = {"energy": "{energy: 0.99}", "angle": "{angle: 5 deg}"}
_TERM_RULE = 'must be mean, trend, cycles or a single cycle by its period, such as "12.42 h"'


def one_line(text: str) -> str:
    """Return a name: not empty, one line."""
    if not text.strip():
        raise RuleBroken("must not be empty")
    odd = next((letter for letter in text if not letter.isprintable()), "")
    if odd:
        raise RuleBroken(f"must be one line of printable characters; U+{ord(odd):04X} is none", "remove that character")
    return text


def keys_pattern(text: str) -> str:
    """Return a pattern over the keys below a location."""
    one_line(text)
    if "://" in text or text.startswith(("/", "./", "../")):
        remedy = 'write what comes after the location, such as "**/*.parquet"'
        raise RuleBroken("must be a pattern of what lies below the location, without the location itself", remedy)
    if re.search(r"\{[^}]*,[^}]*\}", text):
        raise RuleBroken("must be a pattern of *, **, ? and [abc]; {a,b} is not one of them", "use * or [abc]")
    try:
        pattern_regex(text)
    except re.error as error:
        raise RuleBroken(f"must be a pattern that can be matched ({error})") from None
    return text


def some_patterns(patterns: tuple[str, ...] | None) -> tuple[str, ...] | None:
    """Return patterns of channels to take: at least one, or ``None`` for all."""
    if patterns is not None and not patterns:
        raise RuleBroken("must hold at least one pattern", "leave it out to take all channels")
    return patterns


def time_regex(text: str) -> str:
    """Return a regular expression with one group, or with a group named after what it holds."""
    try:
        compiled = re.compile(text)
    except re.error as error:
        raise RuleBroken(f"must be a regular expression ({error})") from None
    if compiled.groups != 1 and not compiled.groupindex.keys() & set(TIME_GROUPS):
        rule = f"must have one group, around the time, or a group named {one_of(TIME_GROUPS)}"
        remedy = r"such as 'blade-(\d{8}T\d{6})\.npy' or '_(?P<seconds>\d+)\.npy'; write (?:...) for other groups"
        raise RuleBroken(rule, remedy)
    return text


def table_name(text: str) -> str:
    """Return the location of a channel table as it was written."""
    if not re.search(r"\.(csv|parquet)$", text.strip(), re.IGNORECASE):
        raise RuleBroken("must be a table in .csv or .parquet")
    return text


def time_keys(value: Any) -> Any:
    """Return the keys of where times come from; ``None`` for no times at all."""
    if value == "none":
        return None
    if isinstance(value, str) and value.strip():
        return {"column": value}
    if not isinstance(value, dict) or ("from_name" in value) + ("start" in value) != 1:
        raise RuleBroken(_TIME_RULE, "write time: none if the shards hold no times" if value in (None, False) else "")
    return value


def time_kind(value: Any) -> str:
    """Return which of the three kinds a value of `time_keys` is, or the model made of it, as when it is dumped."""
    keys = value if isinstance(value, dict) else value.model_dump(by_alias=True)
    return next((f"<{key}>" for key in ("from_name", "start") if key in keys), "<column>")


def positive_duration(value: object) -> int:
    """Return a duration of at least a nanosecond."""
    duration = parse_duration(value)
    if duration < 1:
        raise RuleBroken("must be longer than nothing")
    return duration


def auto_or_duration(value: object) -> Any:
    """Return ``"auto"`` or a duration in nanoseconds."""
    if value == "auto":
        return value
    try:
        return positive_duration(value)
    except RuleBroken as broken:
        raise RuleBroken(broken.rule.replace("must be", "must be auto, or", 1), broken.remedy) from None


def whole_number(
    least: int, most: int, words: tuple[str, ...] = (), forms: tuple[str, ...] = ()
) -> Callable[[object], Any]:
    """Return the rule of a whole number between two limits, or one of a few words; ``forms`` are only named."""
    limits = f"{least} or more" if most == LARGEST else f"from {least} to {most}"
    wanted = f"must be {one_of([*words, *forms, f'a whole number, {limits}'])}"

    def check(value: object) -> Any:
        if value in words or (isinstance(value, int) and not isinstance(value, bool) and least <= value <= most):
            return value
        raise RuleBroken(wanted, _plain_digits(value, least, most) or _near(value, words))

    return check


def rank_keys(value: Any) -> Any:
    """Return a number of modes, ``noise_edge``, or the one key that decides it."""
    if isinstance(value, dict) and len(value) == 1 and value.keys() <= _RANK_EXAMPLES.keys():
        return value
    try:
        return _RANK(value)
    except RuleBroken as broken:
        remedy = _meant_by(value) if isinstance(value, dict) else broken.remedy or _rank_form(value)
        raise RuleBroken(broken.rule, remedy) from None


def rank_kind(value: Any) -> str:
    """Return which of the kinds a value of `rank_keys` is, or the model made of it, as when it is dumped."""
    keys = value.keys() if isinstance(value, dict) else getattr(value, "model_fields_set", ())
    return next((f"<{kind}>" for kind in _RANK_EXAMPLES for key in keys if key.startswith(kind)), "<number>")


def energy_share(value: object) -> float:
    """Return a share of the energy: above 0 and at most 1."""
    if isinstance(value, int | float) and not isinstance(value, bool) and 0 < value <= 1:
        return float(value)
    raise RuleBroken("must be a share of the energy, a number above 0 and at most 1", _share_meant(value))


def acute_angle(value: object) -> float:
    """Return an angle in degrees: above 0 and below 90."""
    angle = parse_angle(value)
    if not 0 < angle < 90:
        raise RuleBroken("must be an angle above 0 deg and below 90 deg", "5 deg is usual")
    return angle


def cycle_period(value: object) -> int:
    """Return the period of a cycle in nanoseconds."""
    period = parse_duration(value)
    if period < LEAST_PERIOD_NS:
        raise RuleBroken(f"must be a period of at least {LEAST_PERIOD_NS} ns")
    return period


def background_term(value: object) -> str | int:
    """Return ``mean``, ``trend``, ``cycles`` for all of them, or the period of a single cycle in nanoseconds."""
    if isinstance(value, str) and value in TERMS:
        return value
    try:
        return cycle_period(value)
    except RuleBroken as broken:
        rule = _TERM_RULE if broken.rule.startswith("must be a duration") else broken.rule
        raise RuleBroken(rule, broken.remedy or _near(value, TERMS)) from None


def each_once(meaning: Callable[[object], Hashable], thing: str, most: int = 0) -> Callable[[object], Any]:
    """Return the rule of a list without repeats, told in the words of the list; items of no meaning pass.

    Parameters
    ----------
    meaning : callable
        The rule of one item. Items that break it are told by that rule alone.
    thing : str
        What an item is called.
    most : int, optional
        How many there may be.
    """

    def check(value: object) -> Any:
        if not isinstance(value, tuple):
            return value
        if most and len(value) > most:
            raise RuleBroken(f"must hold at most {most} {thing}s")
        try:
            remedy = _repeat([(meaning(item), str(item)) for item in value])
        except RuleBroken:
            return value
        if remedy:
            raise RuleBroken(f"must name each {thing} once", remedy)
        return value

    return check


def always_true(value: object) -> bool:
    """Return true: the mean is kept beside the sums in any case."""
    if value is not True:
        rule = "must be true: the mean is kept in any case, so that it can be removed or not after the fact"
        raise RuleBroken(rule, "write modes.remove: [] to leave it in")
    return True


def ray_address(text: str) -> str:
    """Return the address of a running Ray."""
    if text.startswith("ray://"):
        rule = "must be HOST:PORT or auto; Ray Client (ray://) is not used"
        raise RuleBroken(rule, "start the run on the cluster as a Ray job, with address: auto")
    if not re.fullmatch(r"auto|local|[\w.-]+:\d{1,5}|\[[0-9a-fA-F:]+\]:\d{1,5}", text):
        raise RuleBroken("must be HOST:PORT or auto", "leave it out to use RAY_ADDRESS, or a Ray of its own")
    return text


def core_type(text: str) -> str:
    """Return ``any`` or the name of an OpenBLAS core type; names that are new to this list are taken as they are."""
    known = next((core for core in CORE_TYPES if core.lower() == text.lower()), "")
    if not re.fullmatch(r"\w+", text) or text in ("auto", "none", "all") or known not in ("", text):
        remedy = f"write {known}" if known else "write any if it does not matter"
        raise RuleBroken("must be any or an OpenBLAS core type such as Haswell, SkylakeX or Zen", remedy)
    return text


def worker_memory(value: object) -> int:
    """Return the private memory of a worker in bytes."""
    size = parse_bytes(value)
    if size < LEAST_MEMORY_BYTES:
        raise RuleBroken("must be at least 256 MiB: interpreter and libraries alone take most of that")
    return size


def _plain_digits(value: object, least: int, most: int) -> str:
    """Return a remedy for a number that was not written in plain digits."""
    text = str(value).strip()
    if not isinstance(value, str | float) or not re.fullmatch(r"\d+(\.0*)?", text):
        return ""
    number = int(text.partition(".")[0])
    return f"write {number}" if least <= number <= most else ""


def _near(value: object, words: tuple[str, ...]) -> str:
    """Return a remedy for a word that is almost a known one."""
    near = nearest(value, words) if isinstance(value, str) else ""
    return f"did you mean {near}?" if near else ""


def _meant_by(keys: dict[str, Any]) -> str:
    """Return a remedy for keys of a rank that are none, or are too many."""
    if _RANK_EXAMPLES.keys() <= keys.keys():
        return "keep one of the two"
    for key in keys:
        word, colon, value = key.partition(":")
        if colon and word in _RANK_EXAMPLES:
            return f"a blank must follow the colon: {{{word}: {value}}}"
        if near := nearest(key, _RANK_EXAMPLES):
            return "keep that key alone" if near == key else f"did you mean {near}?"
    return ""


def _rank_form(value: object) -> str:
    """Return a remedy for a share or an angle that stands without its key, or for a key without its value."""
    share = _number(value)
    if share is not None and 0 < share < 1:
        return f"write {{energy: {float(share):.15g}}} for that share of the energy"
    try:
        acute_angle(value)
    except RuleBroken:
        near = nearest(value, _RANK_EXAMPLES) if isinstance(value, str) else ""
        return f"write it with its value, such as {_RANK_EXAMPLES[near]}" if near else ""
    return f"write {{angle: {value}}} for the modes within that angle"


def _share_meant(value: object) -> str:
    """Return a remedy for a share in quotes, a percentage, or a number that must be one."""
    share = _number(value)
    if share is None or share <= 0:
        return "write a number such as 0.99"
    if 10 < share <= 100:
        share /= 100
    return f"write {float(share):.15g}" if share <= 1 else "1 is all of it"


def _number(value: object) -> Fraction | None:
    """Return the number that a value or a text stands for, ``%`` understood; ``None`` if it is none."""
    text = "" if isinstance(value, bool) else str(value).strip()
    found = re.fullmatch(r"(-?\d{1,30}(?:\.\d{0,30})?|-?\.\d{1,30}|\d(?:\.\d{1,30})?[eE]-\d{1,2})[ \t]*(%?)", text)
    return None if found is None else Fraction(found[1]) / (100 if found[2] else 1)


def _repeat(items: list[tuple[Hashable, str]]) -> str:
    """Return a remedy for the first item that is there already, nothing if all are different."""
    seen: dict[Hashable, str] = {}
    for meaning, written in items:
        if meaning in seen:
            first = seen[meaning]
            return f"{written} stands twice" if first == written else f"{written} is {first} again"
        seen[meaning] = written
    single = next((written for meaning, written in items if isinstance(meaning, int)), "")
    return f"cycles stands for all of them: leave {single} out" if single and "cycles" in seen else ""


_RANK = whole_number(1, LARGEST, ("noise_edge",), _RANK_FORMS)
READS = whole_number(1, MOST_READS, ("auto",))
SEED = whole_number(0, LARGEST)
WIDTH = whole_number(1, WIDEST_PROBE, ("auto",))
WORKERS = whole_number(1, MOST_WORKERS, ("auto", "serial"))
CYCLES = each_once(cycle_period, "cycle", MOST_CYCLES)
REMOVED = each_once(background_term, "term")
