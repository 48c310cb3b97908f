"""From a validator's complaint to a fault that its reader can act on: unknown keys, missing keys, wrong values.

Works on plain records (type, location, context) and knows the models only as a table of keys.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from shardfold.job_faults import Fault, nearest, one_of
from shardfold.job_keys import Key, Path, meant
from shardfold.quantities import RuleBroken
from shardfold.yaml_lines import Entry

_TRUTH = {"true": "true", "yes": "true", "1": "true", "false": "false", "no": "false", "0": "false"}
_NEEDED = {
    "campaign": "write campaign: NAME",
    "source.location": "write where the shards are: s3://bucket/folder/ or a local path",
    "source.layout": "write layout: wide, vector or array",
    "source.time.step": "write the time from one sample to the next, such as step: 125 ms",
    "dossier.location": "write where Shardfold keeps its results: s3://bucket/folder/ or a local path",
}


def fault_of(error: Mapping[str, Any], root: Entry, keys: dict[Path, Key]) -> Fault | None:
    """Return the fault behind one complaint about the values below ``root``; ``None`` if it is told already."""
    location = [part for part in error["loc"] if not str(part).startswith("<")]
    path = tuple(part for part in location if isinstance(part, str))
    entry = _deepest(root, location)
    if entry.void:
        return None
    kind, context = str(error["type"]), error.get("ctx", {})
    if kind == "extra_forbidden":
        return Fault(entry.spot, ".".join(path), "is not a known key", remedy=meant(path, keys))
    if kind == "missing":
        return Fault(entry.spot, ".".join(path), "is needed and missing", remedy=_NEEDED.get(".".join(path), ""))
    broken = context.get("error")
    if isinstance(broken, RuleBroken):
        rule, remedy = broken.rule, broken.remedy
    else:
        rule, remedy = _standard(kind, location, entry, keys.get(path, Key()))
    if entry.blank and not remedy:
        remedy = _NEEDED.get(".".join(path), "write a value, or leave the line out for the default")
    return Fault(entry.spot, ".".join(path), rule, entry.shown(), remedy)


def _deepest(root: Entry, location: Iterable[str | int]) -> Entry:
    """Return the entry of a location, or of the longest part of it that is there."""
    entry = root
    for part in location:
        if isinstance(part, int):
            inner = entry.items[part] if entry.items is not None and part < len(entry.items) else None
        else:
            inner = (entry.keys or {}).get(part)
        if inner is None:
            return entry
        entry = inner
    return entry


def _standard(kind: str, location: Sequence[str | int], entry: Entry, key: Key) -> tuple[str, str]:
    """Return rule and remedy of a value of the wrong type, or that is none of the listed words."""
    label = _label(location, entry)
    if kind == "literal_error":
        near = nearest(entry.written, key.words)
        return f"must be {one_of(key.words)}", f"did you mean {near}?" if near else ""
    if kind == "string_type":
        return "must be text", _quoted(label, entry)
    if kind == "tuple_type":
        return "must be a list", f'write {label}["{entry.written}"]' if entry.written else f"write {label}[...]"
    if kind in ("model_type", "model_attributes_type"):
        return f"must hold keys of its own: {', '.join(key.below)}", ""
    if kind == "bool_type":
        truth = _TRUTH.get(entry.written.lower(), "")
        return "must be true or false", f"write {label}{truth}" if truth else ""
    return f"is not valid here ({kind})", ""


def _label(location: Sequence[str | int], entry: Entry) -> str:
    """Return what stands before a value where it is written: nothing for an item of a list."""
    if not location or isinstance(location[-1], int):
        return ""
    return f"{'.'.join(map(str, location))}=" if entry.spot.argument else f"{location[-1]}: "


def _quoted(label: str, entry: Entry) -> str:
    if not entry.written:
        return "put it in quotes if the brackets belong to it" if entry.items or entry.keys else ""
    reason = f"YAML reads {entry.written} as {str(entry.value).lower()}: " if isinstance(entry.value, bool) else ""
    return f'{reason}write {label}"{entry.written}"'
