"""The job: YAML text to frozen settings, every fault reported at once.

Settings are inert values: comparable, hashable, picklable, with default values filled in and local paths resolved.
Nothing here reads more than the job file itself, and no setting ever holds a credential. Which keys depend on each
other stands in `job_rules`, how a broken rule is worded in `job_wording`.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Annotated, Any, Literal, get_args

from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Discriminator,
    Field,
    Tag,
    ValidationError,
    ValidationInfo,
)

from shardfold.errors import JobInvalid
from shardfold.ids import digest_bytes, digest_value
from shardfold.job_faults import Fault, Spot
from shardfold.job_places import parse_endpoint, resolve
from shardfold.job_rules import MATCH_OF_LAYOUT, broken_relations
from shardfold.job_values import (
    a_pattern,
    a_regex,
    a_table,
    a_time,
    a_word,
    auto_or_duration,
    auto_or_width,
    known_terms,
    memory_size,
    positive_duration,
    ray_address,
    time_kind,
    workers,
)
from shardfold.job_wording import fault_of, key_table
from shardfold.job_written import written_job
from shardfold.quantities import parse_duration, parse_instant
from shardfold.yaml_lines import Entry


def _resolved(written: str, info: ValidationInfo) -> str:
    return resolve(written, info.context["folder"])


def _resolved_table(written: str, info: ValidationInfo) -> str:
    return resolve(a_table(written), info.context["folder"])


Word = Annotated[str, AfterValidator(a_word)]
Location = Annotated[str, AfterValidator(_resolved)]
Patterns = tuple[Annotated[str, AfterValidator(a_pattern)], ...]
Step = Annotated[int, BeforeValidator(positive_duration)]


class Settings(BaseModel):
    """What all settings share: frozen, no unknown keys, no silent conversions, no values in foreign messages."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True, hide_input_in_errors=True)


class Storage(Settings):
    """How a location is reached: never with what, credentials come from the environment and profile chain."""

    endpoint: Annotated[str, BeforeValidator(parse_endpoint)] | None = None
    region: Word | None = None
    anonymous: bool = False


class TimeColumn(Settings):
    """Times stand in a column of the shard."""

    column: Word


class TimeFromName(Settings):
    """The first time is found in the shard's key by a pattern, the others follow in equal steps."""

    pattern: Annotated[str, AfterValidator(a_regex)] = Field(alias="from_name")
    step_ns: Step = Field(alias="step")


class TimeStart(Settings):
    """A single shard starts at a given time and goes on in equal steps."""

    start_ns: Annotated[int, BeforeValidator(parse_instant)] = Field(alias="start")
    step_ns: Step = Field(alias="step")


Time = Annotated[
    Annotated[TimeColumn, Tag("<column>")]
    | Annotated[TimeFromName, Tag("<from_name>")]
    | Annotated[TimeStart, Tag("<start>")],
    Discriminator(time_kind),
]


class Channels(Settings):
    """Which channels take part, and the table that describes them."""

    include: Patterns | None = None
    exclude: Patterns = ()
    table: Annotated[str, AfterValidator(_resolved_table)] | None = None


class Source(Settings):
    """The campaign: where the shards are and how to read them."""

    location: Location
    match: Annotated[str, AfterValidator(a_pattern)] = "**/*.parquet"
    layout: Literal["wide", "vector", "array"]
    time: Annotated[Time | None, BeforeValidator(a_time)] = None
    values: Word | None = None
    orient: Literal["samples_by_channels", "channels_by_samples"] = "samples_by_channels"
    channels: Channels = Channels()
    settle_ns: Annotated[int, BeforeValidator(parse_duration)] = Field(600 * 10**9, alias="settle")
    storage: Storage = Storage()
    shared: bool = False


class Place(Settings):
    """Where the dossier is kept."""

    location: Location
    storage: Storage = Storage()
    shared: bool = False


class Background(Settings):
    """Known functions of time that are kept beside the sums, so that they can be removed after the fact."""

    mean: Literal[True] = True


class Design(Settings):
    """What is fixed when the dossier is created; ``auto`` is decided then and stored."""

    scale: Literal["none", "table"] = "none"
    gaps: Literal["refuse"] = "refuse"
    background: Background = Background()
    summary: Literal["auto", "whole"] = "auto"
    width: Annotated[Literal["auto"] | int, BeforeValidator(auto_or_width)] = "auto"
    leaf: Annotated[Literal["auto"] | int, BeforeValidator(auto_or_duration)] = "auto"
    blas: Word = "any"
    seed: int = Field(20310301, ge=0, lt=2**63)
    mixed_units: bool = False


class Modes(Settings):
    """What is computed from the sums; may differ from result to result of one dossier."""

    rank: int = Field(10, ge=1)
    reads: int = Field(1, ge=1, le=5)
    remove: Annotated[tuple[Literal["mean"], ...], AfterValidator(known_terms)] = ("mean",)


class Engine(Settings):
    """Who does the work; never changes a result."""

    workers: Annotated[Literal["auto", "serial"] | int, BeforeValidator(workers)] = "auto"
    address: Annotated[str, AfterValidator(ray_address)] | None = None
    memory_bytes: Annotated[int, BeforeValidator(memory_size)] = Field(2 * 2**30, alias="memory")


class JobKeys(Settings):
    """The keys that a job file may hold."""

    campaign: Word
    source: Source
    dossier: Place
    design: Design = Design()
    modes: Modes = Modes()
    engine: Engine = Engine()


class Job(JobKeys):
    """A checked job.

    Attributes
    ----------
    overrides : tuple of str
        What ``--set`` changed, as given.
    text_digest : str
        Digest of the job's text and its overrides.
    path : Path or None
        The job file, ``None`` if the text came from elsewhere.
    """

    overrides: tuple[str, ...] = ()
    text_digest: str
    path: Path | None = None

    def design_record(self) -> dict[str, Any]:
        """Return what the job says about the design, in JSON types, defaults filled in."""
        source = self.source.model_dump(mode="json", include={"layout", "time", "values", "orient", "channels"})
        source["channels"].pop("table")
        return {"campaign": self.campaign, "source": source, "design": self.design.model_dump(mode="json")}

    def modes_record(self) -> dict[str, Any]:
        """Return the ``modes:`` block in JSON types, defaults filled in."""
        return self.modes.model_dump(mode="json")


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
    name = str(path)
    try:
        text = path.read_bytes().decode("utf-8-sig")
    except OSError as error:
        fault = Fault(Spot.file(name), "", f"the job file cannot be read: {error.strerror}")
    except UnicodeDecodeError as error:
        fault = Fault(Spot.file(name), "", f"must be UTF-8 text (byte {error.start} is not)", remedy="save it as UTF-8")
    else:
        return parse_job(text, name, overrides, endpoint=endpoint, path=path.resolve())
    raise JobInvalid("the job has 1 fault", where=name, faults=(str(fault).replace(":1:", ":", 1),))


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
    root, faults = written_job(text, name, overrides, endpoint)
    folder = Path.cwd() if path is None else path.parent
    keys, more = (None, []) if root is None else _validated(root, faults, folder)
    faults += more
    if keys is None or faults:
        listed = tuple(str(fault) for fault in sorted(set(faults)))
        count = f"{len(listed)} fault{'s' if len(listed) > 1 else ''}"
        raise JobInvalid(f"the job has {count}", where=name, faults=listed)
    digest = digest_value([text, *overrides]) if overrides else digest_bytes(text.encode())
    parts = {field: getattr(keys, field) for field in JobKeys.model_fields}
    return Job(**parts, overrides=tuple(overrides), text_digest=digest, path=path)


def known_keys() -> tuple[str, ...]:
    """Return every dotted key that a job file may hold, in the order of the models."""
    return tuple(".".join(path) for path in KEYS if path)


def _validated(root: Entry, faults: list[Fault], folder: Path) -> tuple[JobKeys | None, list[Fault]]:
    """Return the settings if single values are sound, and the faults of values and relations."""
    keys, found = None, []
    try:
        keys = JobKeys.model_validate(root.plain(), context={"folder": folder})
    except ValidationError as error:
        found = [fault_of(record, root, KEYS) for record in error.errors(include_url=False, include_input=False)]
    told = {fault.key for fault in faults}
    found = [fault for fault in found if fault.key not in told]
    faulty = frozenset(fault.key for fault in (*faults, *found) if fault.key)
    return keys, found + broken_relations(root, faulty, folder)


def _fields(model: type[BaseModel], path: tuple[str, ...] = ()) -> Iterator[tuple[tuple[str, ...], tuple[str, ...], Any]]:
    """Yield (path, keys below, annotation) of a model's keys, depth first."""
    inner = {field.alias or name: field.annotation for name, field in model.model_fields.items()}
    if not path:
        yield path, tuple(inner), model
    for name, annotation in inner.items():
        models = _models(annotation)
        below = tuple(dict.fromkeys(key for part in models for key in _names(part)))
        yield (*path, name), below, annotation
        for part in models:
            yield from _fields(part, (*path, name))


def _names(model: type[BaseModel]) -> tuple[str, ...]:
    return tuple(field.alias or name for name, field in model.model_fields.items())


def _models(annotation: Any) -> list[type[BaseModel]]:
    """Return the models of an annotation that have keys of their own in a job file."""
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return [] if annotation is TimeColumn else [annotation]
    return [model for part in get_args(annotation) for model in _models(part)]


KEYS = key_table(list(_fields(JobKeys)))
