"""YAML text as plain values that still know the line they stand on; the YAML parser is used here only.

Values come from the safe scalar types alone; nothing in the text can name a Python object. What YAML itself would read
in a surprising way (``10:00`` as 600, ``010`` as 8, dates) stays the text that was written. Mistakes become faults
with line and column. Nothing here knows which keys a job has.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass, field

import yaml
from yaml.constructor import ConstructorError, SafeConstructor
from yaml.reader import ReaderError

from shardfold.job_faults import NOT_SHOWN, Fault, Spot
from shardfold.yaml_syntax import Complaint, explain

MOST_VALUES = 20_000
MOST_LEVELS = 20

_TAG = "tag:yaml.org,2002:"
_PLAIN_TYPES = {"null", "bool", "int", "float", "str", "timestamp", "value", "merge", "map", "seq"}
_PLAIN_INT = re.compile(r"[-+]?(0|[1-9][0-9_]*|0x[0-9a-fA-F_]+|0b[01_]+)")
_LONGEST_SHOWN = 200


@dataclass
class Entry:
    """One value of the text: a scalar, a list of entries (``items``), or a mapping of entries (``keys``).

    ``spot`` is where its key stands (for an item of a list, where the item stands), ``written`` the text of a scalar
    as it was written. A ``void`` entry has lost its value to a fault that is told already.
    """

    value: object
    spot: Spot
    written: str = ""
    quoted: bool = False
    void: bool = False
    keys: dict[str, Entry] | None = None
    items: list[Entry] | None = None

    @property
    def blank(self) -> bool:
        """Return whether nothing at all is written."""
        return self.keys is None and self.items is None and self.value is None and not self.written and not self.void

    def at(self, path: tuple[str, ...]) -> Entry | None:
        """Return the entry at a path of keys below this one, ``None`` if there is none."""
        if not path:
            return self
        inner = (self.keys or {}).get(path[0])
        return None if inner is None else inner.at(path[1:])

    def walk(self, path: tuple[str, ...] = ()) -> Iterator[tuple[tuple[str, ...], Entry]]:
        """Yield this entry and all below it, with their paths of keys; an item has the path of its list."""
        yield path, self
        for key, inner in (self.keys or {}).items():
            yield from inner.walk((*path, key))
        for inner in self.items or []:
            yield from inner.walk(path)

    def plain(self) -> object:
        """Return the value without spots: mappings as dict, lists as tuple, scalars as they are."""
        if self.keys is not None:
            return {key: inner.plain() for key, inner in self.keys.items()}
        if self.items is not None:
            return tuple(inner.plain() for inner in self.items)
        return self.value

    def make_void(self) -> None:
        """Forget the value, so that no message can show it and no further rule looks at it."""
        self.value, self.written, self.keys, self.items, self.void = None, "", None, None, True

    def shown(self) -> str:
        """Return what a message may show of the value."""
        if self.void:
            return NOT_SHOWN
        if self.keys is not None:
            return f"a mapping with {', '.join(self.keys)}" if self.keys else "an empty mapping"
        if self.items is not None:
            return f"a list of {len(self.items)}" if self.items else "an empty list"
        if self.value is None:
            return "nothing"
        text = self.written if len(self.written) <= _LONGEST_SHOWN else self.written[: _LONGEST_SHOWN - 3] + "..."
        return f'"{text}"' if self.quoted or text != text.strip() or not text.isprintable() else text


@dataclass
class Document:
    """What a text holds: its root (``None`` if it is empty or cannot be read) and the faults of the text itself."""

    root: Entry | None
    faults: list[Fault] = field(default_factory=list)


def read_document(text: str, spot: Spot) -> Document:
    """Return the values of a YAML text with their lines.

    Parameters
    ----------
    text : str
        One YAML document.
    spot : Spot
        Where it starts; inner spots are lines of the same name.
    """
    try:
        node = yaml.compose(text, yaml.SafeLoader)
    except yaml.MarkedYAMLError as error:
        return Document(None, explain(text, spot, _complaint(error)))
    except ReaderError as error:
        return Document(None, [_bad_character(text, spot, error)])
    except RecursionError:
        return Document(None, [Fault(spot, "", "is nested too deeply to be a job")])
    if node is None:
        return Document(None)
    reader = _Reader(spot)
    return Document(reader.entry(node, (), reader.spot_of(node)), reader.faults)


def _complaint(error: yaml.MarkedYAMLError) -> Complaint:
    at = (error.problem_mark.line, error.problem_mark.column) if error.problem_mark else (0, 0)
    since = (error.context_mark.line, error.context_mark.column) if error.context_mark else at
    return Complaint(error.problem or "", error.context or "", at, since)


def _bad_character(text: str, spot: Spot, error: ReaderError) -> Fault:
    before = text[: error.position]
    line, column = before.count("\n") + 1, error.position - (before.rfind("\n") + 1) + 1
    code = ord(text[error.position])
    return Fault(
        spot.at(line, column, exact=True),
        "",
        f"the character U+{code:04X} is not allowed in YAML",
        remedy="remove it; it is often left by copying",
    )


class _Reader:
    """Turns nodes into entries and gathers faults on the way."""

    def __init__(self, start: Spot) -> None:
        self.start = start
        self.faults: list[Fault] = []
        self.open: list[yaml.Node] = []
        self.count = 0

    def entry(self, node: yaml.Node, path: tuple[str, ...], spot: Spot) -> Entry:
        """Return the entry of a node; where it cannot be had, a fault and a void entry."""
        self.count += 1
        refusal = self._refusal(node)
        if refusal is not None:
            if self.count <= MOST_VALUES + 1:
                self._fault(spot, path, *refusal)
            return Entry(None, spot, void=True)
        self.open.append(node)
        made = self._made(node, path, spot)
        self.open.pop()
        return made

    def spot_of(self, node: yaml.Node) -> Spot:
        """Return where a node starts."""
        return self.start.at(node.start_mark.line + 1, node.start_mark.column + 1)

    def _refusal(self, node: yaml.Node) -> tuple[str, str] | None:
        if node in self.open:
            return "must not contain itself", "remove the alias"
        if self.count > MOST_VALUES:
            return f"holds more than {MOST_VALUES} values, too many for a job", ""
        if len(self.open) > MOST_LEVELS:
            return "is nested too deeply to be a job", ""
        if node.tag.removeprefix(_TAG) not in _PLAIN_TYPES:
            return "must not carry a YAML tag (a word that starts with !)", "put the value in quotes"
        return None

    def _fault(self, spot: Spot, path: tuple[str, ...], rule: str, remedy: str = "") -> None:
        self.faults.append(Fault(spot, ".".join(path), rule, remedy=remedy))

    def _made(self, node: yaml.Node, path: tuple[str, ...], spot: Spot) -> Entry:
        if isinstance(node, yaml.MappingNode):
            return Entry(None, spot, keys=self._keys(node, path))
        if isinstance(node, yaml.SequenceNode):
            return Entry(None, spot, items=[self.entry(item, path, self.spot_of(item)) for item in node.value])
        made = Entry(None, spot, written=str(node.value), quoted=getattr(node, "style", None) in ("'", '"'))
        self._fill(made, node, path)
        return made

    def _keys(self, node: yaml.MappingNode, path: tuple[str, ...]) -> dict[str, Entry]:
        keys: dict[str, Entry] = {}
        for key_node, value_node in node.value:
            spot = self.spot_of(key_node)
            if not isinstance(key_node, yaml.ScalarNode):
                remedy = "write key: value, and put a value that starts with { or [ in quotes"
                self._fault(spot, path, "has a key that is not plain text", remedy)
                continue
            key = str(key_node.value)
            if key_node.tag == _TAG + "merge":
                self._fault(spot, (*path, key), "is YAML's merge key, which is not read here", "write the keys out")
            elif key in keys:
                first = "" if spot.argument else f", first on line {keys[key].spot.line}"
                self._fault(spot, (*path, key), f"is given twice{first}", "keep one of the two")
            else:
                keys[key] = self.entry(value_node, (*path, key), spot)
        return keys

    def _fill(self, made: Entry, node: yaml.Node, path: tuple[str, ...]) -> None:
        """Give a scalar its value: the text as written wherever YAML's own reading would surprise."""
        kind = node.tag.removeprefix(_TAG)
        surprising = ":" in made.written or (kind == "int" and not _PLAIN_INT.fullmatch(made.written))
        if kind in ("str", "timestamp", "value", "merge") or (kind in ("int", "float") and surprising):
            made.value = made.written
            return
        try:
            made.value = SafeConstructor().construct_object(node)
        except (ConstructorError, ValueError, KeyError, AttributeError):
            self._fault(made.spot, path, f"is marked as {kind} but is none", "leave the mark out")
            made.make_void()
