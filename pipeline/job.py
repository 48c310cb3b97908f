"""The job: YAML text to frozen settings, every fault reported at once.

Nothing here reads more than the job file itself, and no setting ever holds a credential. The settings and their
defaults stand in `job_settings`, rules of values in `job_values`, relations between keys in `job_rules`, the wording of
faults in `job_wording`; what was written, with its lines, comes from `job_written`.
"""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from pydantic import ValidationError

from shardfold.errors import JobInvalid
from shardfold.ids import digest_bytes, digest_value
from shardfold.job_faults import Fault
from shardfold.job_keys import keys_of
from shardfold.job_rules import MATCH_OF_LAYOUT, broken_relations
from shardfold.job_settings import (
    AngleRank,
    Background,
    Channels,
    Design,
    EnergyRank,
    Engine,
    Job,
    JobKeys,
    Modes,
    Place,
    Source,
    Storage,
    TimeColumn,
    TimeFromName,
    TimeStart,
)
from shardfold.job_wording import fault_of
from shardfold.job_written import written_job
from shardfold.yaml_lines import Entry

__all__ = [
    "AngleRank",
    "Background",
    "Channels",
    "Design",
    "EnergyRank",
    "Engine",
    "Job",
    "Modes",
    "Place",
    "Source",
    "Storage",
    "TimeColumn",
    "TimeFromName",
    "TimeStart",
    "known_keys",
    "load_job",
    "parse_job",
]


def load_job(path: Path, overrides: Sequence[str] = (), endpoint: str | None = None) -> Job:
    """Return the settings of a job file.

    Parameters
    ----------
    path : Path
        The job file; relative local paths inside it start at its folder.
    overrides : sequence of str
        ``key=value`` with a dotted key; the value is YAML. The last one of a key counts.
    endpoint : str, optional
        S3 endpoint for locations on S3 that name none.

    Raises
    ------
    JobInvalid
        With all faults, in the order of the lines.
    """
    fault = ""
    try:
        data = path.read_bytes()
    except OSError as error:
        fault = f"{path}: the job file cannot be read: {(error.strerror or str(error)).lower()}; check the path"
    else:
        try:
            text = data.decode("utf-8-sig")
        except UnicodeDecodeError as error:
            line = data.count(b"\n", 0, error.start) + 1
            fault = f"{path}:{line}: must be UTF-8 text; byte {error.start + 1} of the file is not; save it as UTF-8"
    if fault:
        raise JobInvalid("the job has 1 fault", where=str(path), faults=(fault,))
    return parse_job(text, str(path), overrides, endpoint=endpoint, path=path.resolve())


def parse_job(
    text: str, name: str, overrides: Sequence[str] = (), *, endpoint: str | None = None, path: Path | None = None
) -> Job:
    """Return the settings of a job's text.

    Parameters
    ----------
    text : str
        YAML.
    name : str
        What messages call the text, usually the file.
    overrides, endpoint
        As in `load_job`.
    path : Path, optional
        The file it came from; without one, relative local paths start at the current folder.

    Raises
    ------
    JobInvalid
        With all faults, in the order of the lines.
    """
    root, faults = written_job(text, name, _SECTIONS, overrides, endpoint)
    folder = Path.cwd() if path is None else path.parent
    keys = None
    if root is not None:
        keys, more = _validated(root, faults, folder)
        faults += more
    if keys is None or faults:
        listed = tuple(str(fault) for fault in sorted(dict.fromkeys(faults), key=lambda fault: fault.spot))
        count = f"{len(listed)} fault{'s' if len(listed) > 1 else ''}"
        raise JobInvalid(f"the job has {count}", where=name, faults=listed)
    digest = digest_value([text, *overrides]) if overrides else digest_bytes(text.encode())
    parts = {field: getattr(keys, field) for field in JobKeys.model_fields}
    return Job(**parts, overrides=tuple(overrides), text_digest=digest, path=path)


def known_keys() -> tuple[str, ...]:
    """Return every dotted key that a job file may hold, in the order of the models."""
    return tuple(".".join(path) for path in _KEYS if path)


def _validated(root: Entry, told: list[Fault], folder: Path) -> tuple[JobKeys | None, list[Fault]]:
    """Return the settings if single values are sound, and the faults of values and relations not told yet."""
    _default_match(root)
    keys, records = None, []
    try:
        keys = JobKeys.model_validate(root.plain(), context={"folder": folder})
    except ValidationError as error:
        records = error.errors(include_url=False, include_input=False)
    found = [fault for record in records if (fault := fault_of(record, root, _KEYS)) is not None]
    faulty = frozenset(fault.key for fault in (*told, *found) if fault.key)
    return keys, found + broken_relations(root, faulty, folder)


def _default_match(root: Entry) -> None:
    """The default of ``source.match`` depends on the layout."""
    source, layout = root.at(("source",)), root.at(("source", "layout"))
    if source is not None and source.keys is not None and layout is not None and layout.value == "array":
        match = MATCH_OF_LAYOUT["array"]
        source.keys.setdefault("match", Entry(match, source.spot, written=match))


_KEYS = keys_of(JobKeys, hidden=TimeColumn)
_CHOICES = {("source", "time"), ("modes", "rank")}  # one of several kinds of value, some of which hold keys
_SECTIONS = tuple(path for path, key in _KEYS.items() if key.below and path not in _CHOICES)
