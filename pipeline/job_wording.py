"""From a validator's complaint to a fault that its reader can act on: unknown keys, missing keys, wrong values.

Works on plain records (type, location, context); knows the models only as a table of keys.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Literal, get_args, get_origin

from shardfold.job_faults import Fault, nearest, one_of
from shardfold.quantities import RuleBroken
from shardfold.yaml_lines import Entry

Path = tuple[str, ...]


@dataclass(frozen=True)
class Key:
    """What is known of one key: the keys below it, and the words that are its values, where these are listed."""

    below: tuple[str, ...]
    words: tuple[str, ...]
    needs_text: bool = False


def fault_of(error: Mapping[str, Any], root: Entry, keys: Mapping[Path, Key]) -> Fault:
    """Return the fault of one complaint about the values below ``root``."""
    path = tuple(str(part) for part in error["loc"] if not str(part).startswith("<"))
    kind = str(error["type"])
    if kind == "extra_forbidden":
        return unknown_key(path, root, keys)
    if kind == "missing":
        return missing_key(path, root)
    entry = _deepest(root, path)
    broken = error.get("ctx", {}).get("error")
    if isinstance(broken, RuleBroken):
        rule, remedy = broken.rule, broken.remedy
    else:
        rule, remedy = _standard(kind, error.get("ctx", {}), path, entry, keys)
    return Fault(entry.spot, ".".join(path), rule, entry.shown(), remedy)


def unknown_key(path: Path, root: Entry, keys: Mapping[Path, Key]) -> Fault:
    """Return the fault of a key that no job knows, with the nearest one that it does."""
    siblings = keys[path[:-1]].below if path[:-1] in keys else ()
    near = nearest(path[-1], siblings)
    if near:
        remedy = f"did you mean {'.'.join((*path[:-1], near))}?"
    elif elsewhere := [".".join(known) for known in keys if known[-1:] == path[-1:]]:
        remedy = f"did you mean {one_of(elsewhere)}?"
    else:
        remedy = f"known here: {', '.join(siblings)}" if siblings else ""
    return Fault(_deepest(root, path).spot, ".".join(path), "is not a known key", remedy=remedy)


def missing_key(path: Path, root: Entry) -> Fault:
    """Return the fault of a key that every job needs."""
    return Fault(_deepest(root, path).spot, ".".join(path), "is needed and missing")


def _deepest(root: Entry, path: Path) -> Entry:
    """Return the entry of a path, or of the longest part of it that is there."""
    entry = root
    for part in path:
        inner = (entry.keys or {}).get(part)
        if inner is None and entry.items is not None and part.isdigit() and int(part) < len(entry.items):
            inner = entry.items[int(part)]
        if inner is None:
            return entry
        entry = inner
    return entry


def _standard(kind: str, context: Mapping[str, Any], path: Path, entry: Entry, keys: Mapping[Path, Key]) -> tuple[str, str]:
    name = next((part for part in reversed(path) if not part.isdigit()), "")
    if kind == "literal_error":
        words = next((keys[path[:n]].words for n in range(len(path), 0, -1) if path[:n] in keys), ())
        near = nearest(entry.written, words)
        return f"must be {one_of(words)}", f"did you mean {near}?" if near and near != entry.written else ""
    if kind == "string_type":
        in_quotes = f'write {name}: "{entry.written}"' if entry.written and not entry.secret else ""
        return "must be text", in_quotes
    if kind in ("tuple_type", "list_type"):
        one = f'write {name}: ["{entry.written}"]' if entry.written and not entry.secret else f"write {name}: [...]"
        return "must be a list", one
    if kind in ("model_type", "model_attributes_type", "dict_type"):
        below = keys[path].below if path in keys else ()
        return f"must hold keys of its own: {', '.join(below)}", ""
    if kind in ("bool_type", "bool_parsing"):
        return "must be true or false", ""
    if kind in ("int_type", "int_parsing", "int_from_float"):
        return "must be a whole number", ""
    limits = {"greater_than_equal": ("ge", "at least"), "less_than_equal": ("le", "at most"), "less_than": ("lt", "less than")}
    if kind in limits:
        name, words = limits[kind]
        return f"must be {words} {context[name]}", ""
    return "is not valid here", ""


def key_table(fields: Sequence[tuple[Path, tuple[str, ...], Any]]) -> dict[Path, Key]:
    """Return what is known of each key from (path, keys below, annotation)."""
    return {path: Key(below, _words(annotation)) for path, below, annotation in fields}


def _words(annotation: Any) -> tuple[str, ...]:
    """Return the listed words of an annotation, wherever they stand in it."""
    if get_origin(annotation) is Literal:
        return tuple(str(word).lower() if isinstance(word, bool) else str(word) for word in get_args(annotation))
    return tuple(word for part in get_args(annotation) for word in _words(part))
