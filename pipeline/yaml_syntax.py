"""What a YAML syntax error means to somebody who writes a job: the parser's complaint turned into rule and remedy.

No parser here, only its words and the text. Text is shown in a message only where it cannot be a secret.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

from shardfold.job_faults import Fault, Spot, holds_secret, looks_secret

MOST_TAB_LINES = 20

_GLUED = re.compile(r"\s*(?:- )?[\w.-]+:[^\s/]")
_KEYS = re.compile(r"([\w.-]+)\s*:")


@dataclass(frozen=True)
class Complaint:
    """The parser's words; lines and columns count from 0, ``since`` is where the broken construct began."""

    problem: str
    context: str
    at: tuple[int, int]
    since: tuple[int, int]


def explain(text: str, spot: Spot, complaint: Complaint) -> list[Fault]:
    """Return the faults behind a syntax error: one, or one for each line that is indented with a tab."""
    lines = text.splitlines() or [""]
    if "'\\t'" in complaint.problem and (tabbed := _tabbed(lines)):
        rule, remedy = "a tab stands in the indentation, and YAML takes only blanks", "replace the tab by blanks"
        return [Fault(spot.at(line + 1, 1, exact=True), "", rule, remedy=remedy) for line in tabbed[:MOST_TAB_LINES]]
    (line, column), rule, remedy = _meaning(lines, complaint)
    return [Fault(spot.at(line + 1, column + 1, exact=True), "", rule, remedy=remedy)]


def _tabbed(lines: list[str]) -> list[int]:
    return [number for number, line in enumerate(lines) if re.match(r" *\t\s*[^\s#]", line)]


def _meaning(lines: list[str], complaint: Complaint) -> tuple[tuple[int, int], str, str]:
    """Return where the mistake is, the rule and the remedy."""
    words = f"{complaint.context} {complaint.problem}"
    if "'\\t'" in complaint.problem:
        return complaint.at, "a tab cannot stand here: YAML takes only blanks", "replace it by blanks"
    sign = re.search(r"scanning an (alias|anchor)|undefined (alias)|cannot start any (token)", words)
    if sign:
        at = complaint.at if "undefined" in words or "token" in words else complaint.since
        return _unquoted(lines, at)
    for pattern, began, rule, remedy in _MEANINGS:
        if re.search(pattern, words):
            return complaint.since if began else complaint.at, rule, remedy
    return _structure(lines, complaint, words)


def _unquoted(lines: list[str], at: tuple[int, int]) -> tuple[tuple[int, int], str, str]:
    """Return the meaning of a value that starts with a sign, or of a pattern ([0-9]*.npy) taken for a list."""
    line = lines[at[0]] if at[0] < len(lines) else ""
    column = _start_of_pattern(line, at[1])
    before, value = line[:column], line[column:]
    rule = f"a value that starts with {value[:1]} needs quotes: the sign has a meaning of its own in YAML"
    return (at[0], column), rule, "put it in quotes" if _may_be_secret(line, before) else _in_quotes(before, value)


def _may_be_secret(line: str, before: str) -> bool:
    """Return whether a line may hold a secret; where the key stands on another line that cannot be told."""
    keys = _KEYS.findall(before)
    return not keys or holds_secret(line) or any(looks_secret(("storage", key)) for key in keys)


def _in_quotes(before: str, rest: str) -> str:
    """Return what to write: the value in quotes, with its key unless it stands within brackets."""
    inner = re.search(r":\s+[\[{]", before) is not None
    found = re.match(r"[^\s,\]}]+" if inner else r".+?(?=\s+#|\s*$)", rest)
    if found is None or '"' in found[0] or "\\" in found[0]:
        return "put it in quotes"
    return f'write "{found[0]}"' if inner else f'write {_KEYS.findall(before)[-1]}: "{found[0]}"'


def _start_of_pattern(line: str, column: int) -> int:
    found = re.match(r"\s*(?:- )?[\w.-]+:\s+(?=\[[^\s,]*\]\S)", line)
    return found.end() if found and line[column - 1 : column] == "]" else column


_INNER = "and put values that hold , [ ] { } or # in quotes"
# Words of the parser, whether the mistake is where the construct began, the rule, the remedy; the first match counts.
_MEANINGS = (
    ("unknown escape", False, "a backslash inside double quotes is an escape in YAML", "use single quotes instead"),
    ("scanning a (double-)?quoted scalar", True, "the quote that opens here is not closed", "close it"),
    ("stream end", False, "the text ends before a [ or { is closed", "close it"),
    ("single document", False, "a second document starts here; a job is one document", "remove the line ---"),
    ("document start", False, "text follows after the end of the document", "remove the line ... above"),
    ("sequence entries are not", False, "a list must start on a line of its own", "write [a, b] on this line"),
    ("scanning a directive", False, "a line that starts with % needs quotes", "put the text in quotes"),
    ("flow sequence.*expected", True, "the list that opens with [ here is not closed", f"close it with ], {_INNER}"),
    ("flow mapping.*expected", True, "the mapping that opens with { here is not closed", f"close it with }}, {_INNER}"),
    ("a tag|tag handle", False, "a value that starts with ! needs quotes", "put the value in quotes"),
)


def _structure(lines: list[str], complaint: Complaint, words: str) -> tuple[tuple[int, int], str, str]:
    """Return the meaning of an error of colons and indentation."""
    glued = _glued(lines, complaint)
    if glued is not None:
        return glued, "a blank must follow the colon after a key", "write key: value"
    bare = _bare(lines, complaint.at[0]) if "mapping values are not allowed" in words else None
    if bare is not None or "simple key" in words:
        rule = "this line is neither a key with a colon nor part of a value"
        return bare or complaint.since, rule, "write key: value"
    if "mapping values are not allowed" in words:
        rule = "a key cannot stand here: the line is indented below a value, or its value holds a colon and a blank"
        return complaint.at, rule, "align the key with its neighbours, or put the value in quotes"
    if "'<scalar>'" in words:
        return complaint.at, "text follows after a closed quote or bracket", "put the whole value in one pair of quotes"
    if "<block end>" in words:
        return complaint.at, "the indentation fits no line above", "align the key with its neighbours"
    problem = re.sub(r"'[^'<]{2,}'", "...", complaint.problem)  # names of anchors and tags may be secrets
    return complaint.at, f"is not valid YAML here: {problem}", ""


def _bare(lines: list[str], number: int) -> tuple[int, int] | None:
    """Return where the words without a colon start that run on into the key of a line."""
    above = [line for line in range(number) if lines[line].strip()]
    if not above or ":" in lines[above[-1]] or lines[above[-1]].lstrip().startswith("#"):
        return None
    return above[-1], len(lines[above[-1]]) - len(lines[above[-1]].lstrip())


def _glued(lines: list[str], complaint: Complaint) -> tuple[int, int] | None:
    """Return where a key and its value are glued, on the line of the error or the one before."""
    for number in (complaint.since[0], complaint.at[0], complaint.at[0] - 1):
        if 0 <= number < len(lines) and (found := _GLUED.match(lines[number])):
            return number, found.end() - 1
    return None
