"""What a user wrote, before any rule of a single value: the file's entries with ``--set`` and ``--endpoint`` laid over them.

Credentials are found and taken out here, before anything else can put them into a message.
"""

from __future__ import annotations

import re
from collections.abc import Sequence

from shardfold.job_faults import Fault, Spot, holds_secret, looks_secret
from shardfold.yaml_lines import Document, Entry, read_document

SECTIONS = (
    ("source",),
    ("source", "channels"),
    ("source", "storage"),
    ("dossier",),
    ("dossier", "storage"),
    ("design",),
    ("design", "background"),
    ("modes",),
    ("engine",),
)
MOST_CHARACTERS = 1_000_000

_KEY = re.compile(r"[A-Za-z_][\w-]*(\.[A-Za-z_][\w-]*)*")
_CHAIN = "credentials come from the environment (AWS_ACCESS_KEY_ID ...) or a profile (AWS_PROFILE)"


def written_job(
    text: str, name: str, overrides: Sequence[str] = (), endpoint: str | None = None
) -> tuple[Entry | None, list[Fault]]:
    """Return the entries of a job and the faults of text, arguments and credentials.

    Parameters
    ----------
    text, name : str
        YAML, and what messages call it.
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
    start = Spot.file(name)
    if len(text) > MOST_CHARACTERS:
        return None, [Fault(start, "", f"must be a job: at most {MOST_CHARACTERS} characters", f"{len(text)}")]
    document = read_document(text, start)
    root, faults = document.root, list(document.faults)
    if root is None and not faults:
        return None, [Fault(start, "", "is empty", remedy="see the commented job files in configs/")]
    if root is not None and root.keys is None:
        rule = "must be keys and values, such as campaign: NAME"
        return None, [Fault(root.spot, "", rule, _kind(root))]
    for number, override in enumerate(overrides, start=1):
        faults += _lay_over(root or Entry(None, start, keys={}), override, Spot.option("--set", number))
    if root is None:
        return None, faults
    _open_empty_sections(root)
    if endpoint is not None:
        _fill_endpoint(root, endpoint)
    return root, faults + _take_out_secrets(root)


def _kind(root: Entry) -> str:
    return "a list" if root.items is not None else "a single value"


def _lay_over(root: Entry, override: str, spot: Spot) -> list[Fault]:
    """Put one ``key=value`` into the entries."""
    key, equals, value = override.partition("=")
    key = key.strip()
    if not equals or not _KEY.fullmatch(key):
        shown = key if _KEY.fullmatch(key) else ""
        return [Fault(spot, "", "must be KEY=VALUE with a dotted key, such as modes.rank=12", shown)]
    path = tuple(key.split("."))
    document = _read_value(value, spot)
    if document.faults:
        return [Fault(spot, key, fault.rule, remedy=fault.remedy) for fault in document.faults]
    entry = document.root or Entry(None, spot)
    section = root
    for length, part in enumerate(path[:-1], start=1):
        keys = section.keys if section.keys is not None else {}
        inner = keys.setdefault(part, Entry(None, spot, keys={}))
        if inner.keys is None and (inner.items is not None or inner.value is not None):
            rule = f"cannot be set: {'.'.join(path[:length])} holds a value and no keys"
            return [Fault(spot, key, rule, remedy=f"set {'.'.join(path[:length])} as a whole")]
        if inner.keys is None:
            inner.keys = {}
        section = inner
    assert section.keys is not None
    section.keys[path[-1]] = entry
    return []


def _read_value(value: str, spot: Spot) -> Document:
    """Return the value of an override; what YAML would take as a sign or a comment is text on a command line."""
    text = value.strip()
    document = read_document(value, spot)
    scalar = document.root is not None and document.root.keys is None and document.root.items is None
    cut = scalar and not document.root.quoted and document.root.written != text
    if cut or text[:1] in tuple("*&!%@`"):
        return Document(Entry(text, spot, written=text))
    return document


def _open_empty_sections(root: Entry) -> None:
    """A section whose keys are all commented out holds the defaults."""
    for path in SECTIONS:
        entry = root.at(path)
        if entry is not None and entry.keys is None and entry.items is None and entry.value is None and not entry.written:
            entry.keys = {}


def _fill_endpoint(root: Entry, endpoint: str) -> None:
    spot = Spot.option("--endpoint")
    for section in ("source", "dossier"):
        location, keys = root.at((section, "location")), (root.at((section,)) or root).keys
        if location is None or keys is None or not str(location.value).startswith("s3://"):
            continue
        storage = keys.setdefault("storage", Entry(None, spot, keys={}))
        if storage.keys is not None and "endpoint" not in storage.keys:
            storage.keys["endpoint"] = Entry(endpoint, spot, written=endpoint)


def _take_out_secrets(root: Entry) -> list[Fault]:
    """Return a fault for each credential, and blank its value."""
    faults = []
    for path, entry in list(root.walk()):
        key = ".".join(path)
        if looks_secret(path):
            faults.append(Fault(entry.spot, key, "must not stand in a job", "a value that is not shown", _CHAIN))
        elif isinstance(entry.value, str) and (holds_secret(entry.value) or ("storage" in path and "@" in entry.value)):
            rule = "must not carry credentials: they would end in logs and manifests"
            faults.append(Fault(entry.spot, key, rule, "a value that is not shown", _CHAIN))
        elif path[-1:] == ("profile",) and "storage" in path:
            faults.append(Fault(entry.spot, key, "must not stand in a job", remedy="set AWS_PROFILE"))
        else:
            continue
        entry.value, entry.written, entry.secret, entry.keys, entry.items = None, "", True, None, None
    return faults
