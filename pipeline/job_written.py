"""What a user wrote, before any rule of a value: the file's entries, with ``--set`` and ``--endpoint`` laid over them.

Credentials are found and taken out here, before anything else can put them into a message. No models.
"""

from __future__ import annotations

import re
from collections.abc import Sequence

from shardfold.job_faults import NOT_SHOWN, Fault, Spot, holds_secret, looks_secret
from shardfold.yaml_lines import Document, Entry, read_document

MOST_CHARACTERS = 200_000

_NEEDED_SECTIONS = ("source", "dossier")
_KEY = re.compile(r"[A-Za-z_][\w-]*(\.[A-Za-z_][\w-]*)*")
_NAME = re.compile(r"[A-Za-z_-]{1,40}")
_CHAIN = "credentials come from the environment (AWS_ACCESS_KEY_ID, ...) or a profile (AWS_PROFILE) alone"


def written_job(
    text: str,
    name: str,
    sections: Sequence[tuple[str, ...]],
    overrides: Sequence[str] = (),
    endpoint: str | None = None,
) -> tuple[Entry | None, list[Fault]]:
    """Return the entries of a job and the faults of text, arguments and credentials.

    Parameters
    ----------
    text, name : str
        YAML, and what messages call it.
    sections : sequence of tuple of str
        Paths that hold keys of their own; left blank, they hold none and everything below has its default.
    overrides : sequence of str
        ``key=value``, laid over the text in order.
    endpoint : str, optional
        For locations on S3 that name none.

    Returns
    -------
    root : Entry or None
        ``None`` if the text cannot be read.
    faults : list of Fault
    """
    root, faults = _read(text, Spot.file(name))
    below = root or Entry(None, Spot.file(name), keys={})
    for number, override in enumerate(overrides, start=1):
        faults += _lay_over(below, override, Spot.option("--set", number))
    if root is None:
        return None, faults
    _open_sections(root, sections)
    if endpoint is not None:
        _fill_endpoint(root, endpoint)
    return root, faults + _take_out_secrets(root)


def _read(text: str, start: Spot) -> tuple[Entry | None, list[Fault]]:
    if len(text) > MOST_CHARACTERS:
        return None, [Fault(start, "", f"must be at most {MOST_CHARACTERS} characters", f"{len(text)}", "is it a job?")]
    document = read_document(text, start)
    root = document.root
    if root is None and not document.faults:
        return None, [Fault(start, "", "is empty", remedy="write campaign: NAME and what follows")]
    if root is None or root.void:
        return None, document.faults
    if root.keys is not None:
        return root, document.faults
    kind = "a list" if root.items is not None else "a single value"
    return None, [Fault(root.spot, "", "must hold keys and values, such as campaign: NAME", kind)]


def _lay_over(root: Entry, override: str, spot: Spot) -> list[Fault]:
    """Put one ``key=value`` into the entries."""
    key, equals, value = override.partition("=")
    key = key.strip()
    if not equals or not _KEY.fullmatch(key):
        shown = key if _KEY.fullmatch(key) and not holds_secret(key) else NOT_SHOWN
        return [Fault(spot, "", "must be KEY=VALUE with a dotted key, such as modes.rank=12", shown)]
    path = tuple(key.split("."))
    document = _read_value(value, spot)
    if document.faults:
        return [Fault(spot, key, fault.rule, remedy=fault.remedy) for fault in document.faults]
    section = root
    for length, part in enumerate(path[:-1], start=1):
        assert section.keys is not None
        section = section.keys.setdefault(part, Entry(None, spot, keys={}))
        if section.blank:
            section.keys = {}
        if section.keys is None:
            outer = ".".join(path[:length])
            rule = f"cannot be set: {outer} holds a value, not keys"
            return [Fault(spot, key, rule, remedy=f"set {outer} as a whole")]
    assert section.keys is not None
    section.keys[path[-1]] = document.root or Entry(None, spot)
    return []


def _read_value(value: str, spot: Spot) -> Document:
    """Return the value of an override; what YAML would take as a sign or a comment is text on a command line."""
    text = value.strip()
    pattern = text[:1] in ("[", "{") and text[-1:] not in ("]", "}")
    if pattern or text.startswith(tuple("*&!%@`|>#")):
        return Document(Entry(text, spot, written=text))
    document = read_document(text, spot)
    root = document.root
    scalar = root is not None and root.keys is None and root.items is None and not root.quoted
    if scalar and root is not None and root.written != text:
        return Document(Entry(text, spot, written=text))
    return document


def _open_sections(root: Entry, sections: Sequence[tuple[str, ...]]) -> None:
    """Blank sections hold no keys; the sections that every job needs are there, so that all they miss is told."""
    assert root.keys is not None
    for name in _NEEDED_SECTIONS:
        root.keys.setdefault(name, Entry(None, root.spot, keys={}))
    for path in sections:
        entry = root.at(path)
        if entry is not None and entry.blank:
            entry.keys = {}


def _fill_endpoint(root: Entry, endpoint: str) -> None:
    spot = Spot.option("--endpoint")
    for name in _NEEDED_SECTIONS:
        section = root.at((name,))
        location = root.at((name, "location"))
        if section is None or section.keys is None or location is None or not _on_s3(location):
            continue
        storage = section.keys.setdefault("storage", Entry(None, spot, keys={}))
        if storage.keys is not None and "endpoint" not in storage.keys:
            storage.keys["endpoint"] = Entry(endpoint, spot, written=endpoint)


def _on_s3(location: Entry) -> bool:
    return location.written.lower().startswith("s3://")


def _take_out_secrets(root: Entry) -> list[Fault]:
    """Return a fault for each credential, and forget its value."""
    faults = []
    for path, entry in root.walk():  # what is made void is not walked into
        fault = _secret(path, entry)
        if fault is not None:
            entry.make_void()
            faults.append(fault)
    return faults


def _secret(path: tuple[str, ...], entry: Entry) -> Fault | None:
    key = ".".join(path)
    if looks_secret(path):
        return Fault(entry.spot, key, "must not stand in a job", NOT_SHOWN, _CHAIN)
    if holds_secret(entry.written) or ("storage" in path and "@" in entry.written):
        rule = "must not carry credentials such as user:password, which would end in logs and manifests"
        return Fault(entry.spot, key, rule, NOT_SHOWN, _CHAIN)
    if "storage" in path[:-1] and not _NAME.fullmatch(path[-1]):
        rule = "holds a key that is no name, perhaps a credential that slipped out of place"
        return Fault(entry.spot, ".".join(path[:-1]), rule, NOT_SHOWN, _CHAIN)
    if path[-1:] == ("profile",) and "storage" in path:
        return Fault(entry.spot, key, "must not stand in a job", remedy="set AWS_PROFILE in the environment")
    return None
