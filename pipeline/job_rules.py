"""Relations between keys: what one key asks of another, checked on what was written so that one fault hides no other.

Each rule looks at raw values and stays silent where a key it needs is already faulty. No models and no storage.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from shardfold import layout
from shardfold.job_faults import Fault, one_of
from shardfold.job_places import inside, is_local, parse_endpoint, pattern_regex, resolve
from shardfold.quantities import parse_duration
from shardfold.yaml_lines import Entry

MATCH_OF_LAYOUT = {"wide": "**/*.parquet", "vector": "**/*.parquet", "array": "**/*.npy"}

_STORAGE_KEYS = ("endpoint", "region", "anonymous")
_UNDECLARED = "must be declared in design.background to be removed"
_FIXED = "which is fixed when the dossier is created"


@dataclass(frozen=True)
class Written:
    """What a job holds, as far as it is sound: raw values by dotted key."""

    root: Entry
    faulty: frozenset[str]
    folder: Path

    def entry(self, key: str) -> Entry | None:
        """Return the entry of a key that is given and has no fault on, above or below it."""
        found = self.root.at(tuple(key.split(".")))
        return None if found is None or not self.sound(key) else found

    def sound(self, key: str) -> bool:
        """Return whether a key, given or not, has no fault on, above or below it."""
        return not any(f == key or f.startswith(key + ".") or key.startswith(f + ".") for f in self.faulty)

    def value(self, key: str) -> Any:
        """Return the raw value of a sound key, ``None`` for all others."""
        found = self.entry(key)
        return None if found is None else found.plain()

    def given(self, key: str) -> bool:
        """Return whether a key is written and not left blank, soundly or not."""
        found = self.root.at(tuple(key.split(".")))
        return found is not None and not found.blank

    def is_section(self, key: str) -> bool:
        """Return whether a key holds keys, soundly or not."""
        found = self.root.at(tuple(key.split(".")))
        return found is not None and found.keys is not None

    def location(self, key: str) -> str | None:
        """Return a location in its one form."""
        written = self.value(key)
        return resolve(written, self.folder) if isinstance(written, str) else None

    def items(self, key: str) -> list[Entry]:
        """Return the items of a sound list, none of all others."""
        found = self.entry(key)
        return [] if found is None else found.items or []

    def fault(self, key: str, rule: str, remedy: str = "") -> Fault:
        """Return a fault on a key, or on the section it is missing from."""
        path, entry = tuple(key.split(".")), None
        for length in range(len(path), -1, -1):
            entry = self.root.at(path[:length])
            if entry is not None:
                break
        shown = entry.shown() if entry is not None and self.given(key) else ""
        return Fault((entry or self.root).spot, key, rule, shown, remedy)


def broken_relations(root: Entry, faulty: frozenset[str], folder: Path) -> list[Fault]:
    """Return the faults of all relations between keys.

    Parameters
    ----------
    root : Entry
        The job as written.
    faulty : frozenset of str
        Dotted keys that have a fault of their own already.
    folder : Path
        Where relative local paths start.
    """
    written = Written(root, faulty, folder)
    return [fault for rule in _RULES for fault in rule(written)]


def _time_of_layout(written: Written) -> Iterator[Fault]:
    layout_name, time = written.value("source.layout"), written.value("source.time")
    if written.is_section("source") and written.root.at(("source", "time")) is None:
        example = "time: {from_name: REGEX, step: 125 ms}" if layout_name == "array" else "time: COLUMN"
        yield written.fault("source.time", "is needed and missing", f"write {example}, or time: none if there are none")
    elif layout_name == "array" and isinstance(time, str) and time != "none":
        rule = "must not be a column with layout array, which has no columns"
        remedy = "write {from_name: REGEX, step: 125 ms}, {start: TIME, step: 125 ms} or none"
        yield written.fault("source.time", rule, remedy)


def _values_of_layout(written: Written) -> Iterator[Fault]:
    kind = written.value("source.layout")
    if kind == "vector" and not written.given("source.values"):
        yield written.fault("source.values", "is needed with layout vector", "name the column that holds the vectors")
    elif kind in ("wide", "array") and written.given("source.values"):
        reason = "every column of numbers is a channel" if kind == "wide" else "the array is the values"
        yield written.fault("source.values", f"has no meaning with layout {kind}: {reason}", "leave it out")
    elif kind == "vector" and written.value("source.values") == written.value("source.time") is not None:
        yield written.fault("source.values", "must be another column than source.time")


def _orient_of_layout(written: Written) -> Iterator[Fault]:
    kind = written.value("source.layout")
    if kind in ("wide", "vector") and written.given("source.orient"):
        yield written.fault("source.orient", f"has no meaning with layout {kind}, only with array", "leave it out")


def _leaf_of_time(written: Written) -> Iterator[Fault]:
    leaf, time = written.value("design.leaf"), written.value("source.time")
    if leaf in (None, "auto"):
        return
    if time == "none":
        rule = "must be auto with time: none, where leaves are counted by shard name"
        yield written.fault("design.leaf", rule, "leave it out")
    elif isinstance(time, dict) and parse_duration(leaf) < parse_duration(time["step"]):
        yield written.fault("design.leaf", "must be at least one step of source.time", f'the step is "{time["step"]}"')


def _scale_of_table(written: Written) -> Iterator[Fault]:
    if written.value("design.scale") == "table" and not written.given("source.channels.table"):
        remedy = "add source.channels.table, or write scale: none"
        yield written.fault("design.scale", "must be none without a channel table", remedy)


def _background_of_time(written: Written) -> Iterator[Fault]:
    if written.value("source.time") != "none":
        return
    for name, empty, reason in (("trend", "false", "is no trend"), ("cycles", "[]", "are no cycles")):
        if written.value(f"design.background.{name}"):
            rule = f"must be {empty} with time: none: without times there {reason}"
            yield written.fault(f"design.background.{name}", rule, "leave it out")


def _removed_terms_are_declared(written: Written) -> Iterator[Fault]:
    for item in written.items("modes.remove"):
        term = str(item.value)
        if term == "mean":
            continue
        if written.value("source.time") == "none":
            rule, remedy = "must be mean with time: none: without times there is nothing else to remove", "leave it out"
        else:
            rule, remedy = _undeclared_trend(written) if term == "trend" else _undeclared_cycle(written, term)
        if rule:
            yield Fault(item.spot, "modes.remove", rule, item.shown(), remedy)


def _undeclared_trend(written: Written) -> tuple[str, str]:
    """Return rule and remedy of a trend that is removed and not declared; nothing if all is well or told already."""
    key = "design.background.trend"
    if not written.sound(key) or written.value(key) is True:
        return "", ""
    return _UNDECLARED, f"add {key}: true, {_FIXED}, or leave it out"


def _undeclared_cycle(written: Written, term: str) -> tuple[str, str]:
    """Return the same of a cycle, or of all: ``cycles``."""
    key = "design.background.cycles"
    declared = {parse_duration(period): f'"{period}"' for period in written.value(key) or ()}
    if not written.sound(key) or (declared and (term == "cycles" or parse_duration(term) in declared)):
        return "", ""
    if declared:
        remedy = f"write one of them, or add it to {key}, {_FIXED}"
        return f"must be a declared cycle, {one_of(declared.values())}", remedy
    return _UNDECLARED, f'add {key}: ["{"12.42 h" if term == "cycles" else term}"], {_FIXED}, or leave it out'


def _keys_of_location(written: Written) -> Iterator[Fault]:
    for section in ("source", "dossier"):
        location = written.location(f"{section}.location")
        if location is None:
            continue
        if not any(place.startswith("s3://") for place in _places_of(written, section)):
            for key in (f"{section}.storage.{name}" for name in _STORAGE_KEYS):
                if written.entry(key) is not None:
                    rule = f"has no meaning: {section}.location is not on S3"
                    yield written.fault(key, rule, "leave it out, or write the location as s3://bucket/folder/")
        if not is_local(location) and written.value(f"{section}.shared"):
            rule = f"has no meaning: {section}.location is not a local path"
            yield written.fault(f"{section}.shared", rule, "leave it out")


def _places_of(written: Written, section: str) -> list[str]:
    """Return the locations that are reached through a section's storage; the channel table may be elsewhere."""
    places = [written.location(f"{section}.location"), written.location(f"{section}.channels.table")]
    return [place for place in places if place is not None]


def _dossier_can_be_written(written: Written) -> Iterator[Fault]:
    location = written.location("dossier.location")
    if location is not None and not is_local(location) and not location.startswith("s3://"):
        rule = "must be on S3 or a local path: other stores cannot create an object only if it is absent"
        yield written.fault("dossier.location", rule, "write s3://bucket/folder/ or a path")
    elif location is not None and written.value("dossier.storage.anonymous") is True and not is_local(location):
        yield written.fault("dossier.storage.anonymous", "must be false: a dossier is written", "leave it out")


def _dossier_and_campaign_are_apart(written: Written) -> Iterator[Fault]:
    source, dossier = written.location("source.location"), written.location("dossier.location")
    if source is None or dossier is None or not _same_store(written, source, dossier):
        return
    if inside(source, dossier) is not None:
        rule = "must not hold the campaign: all that lies in a dossier belongs to it and may be collected"
        yield written.fault("dossier.location", rule, "give the dossier a folder of its own")
        return
    below = inside(dossier, source)
    listed = None if below is None else next(_listed(written, [f"{below}/{key}" for key in _dossier_keys()]), None)
    if listed is not None:
        rule = f"must not lie where source.match lists it: {listed} would be read as a shard"
        yield written.fault("dossier.location", rule, "move the dossier out of the campaign, or narrow source.match")


def _table_is_no_shard(written: Written) -> Iterator[Fault]:
    source, table = written.location("source.location"), written.location("source.channels.table")
    below = None if source is None or table is None else inside(table, source)
    if below and next(_listed(written, [below]), None):
        rule = f"must not lie where source.match lists it: {below} would be read as a shard"
        yield written.fault("source.channels.table", rule, "move the table out of the campaign, or narrow source.match")


def _address_of_workers(written: Written) -> Iterator[Fault]:
    if written.value("engine.workers") == "serial" and written.value("engine.address") is not None:
        yield written.fault("engine.address", "has no meaning with workers: serial, which uses no Ray", "leave one out")


def _same_store(written: Written, source: str, dossier: str) -> bool:
    """Return whether two locations can be in one store; an endpoint that is not given may be any."""
    if not (source.startswith("s3://") and dossier.startswith("s3://")):
        return True
    given = [written.value(f"{section}.storage.endpoint") for section in ("source", "dossier")]
    return len({parse_endpoint(endpoint) for endpoint in given if endpoint is not None}) < 2


def _listed(written: Written, keys: list[str]) -> Iterator[str]:
    """Yield the keys that ``source.match`` lists."""
    match = written.value("source.match")
    if match is None and not written.given("source.match"):
        match = MATCH_OF_LAYOUT.get(written.value("source.layout"))
    if isinstance(match, str):
        regex = pattern_regex(match)
        yield from (key.lstrip("/") for key in keys if regex.fullmatch(key.lstrip("/")))


def _dossier_keys() -> list[str]:
    """Return one key of each kind that a dossier holds."""
    result = layout.result_prefix(1, "0" * 40)
    name = "0" * 40
    tables = ("modes", "mode_table", "channel_summary", "background", "coefficients/part-00000")
    return [
        *(f"{result}{table}.parquet" for table in tables),
        f"{result}{layout.MANIFEST}",
        layout.channels_key(1),
        layout.probe_key(1),
        layout.cell_key(1, 0, name),
        layout.node_key(1, name),
        layout.commit_key(1),
        layout.DESIGN,
    ]


_RULES: tuple[Callable[[Written], Iterator[Fault]], ...] = (
    _time_of_layout,
    _values_of_layout,
    _orient_of_layout,
    _leaf_of_time,
    _scale_of_table,
    _background_of_time,
    _removed_terms_are_declared,
    _keys_of_location,
    _dossier_can_be_written,
    _dossier_and_campaign_are_apart,
    _table_is_no_shard,
    _address_of_workers,
)
