"""The settings of a job as frozen models: every key, its type, its default, the rule of its value.

Inert values: comparable, hashable, picklable. No text, no files; the rules themselves stand in `job_values`,
relations between keys in `job_rules`.
"""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Discriminator,
    Field,
    Tag,
    ValidationInfo,
    field_validator,
)

from shardfold.job_places import parse_endpoint, resolve
from shardfold.job_values import (
    CYCLES,
    READS,
    REMOVED,
    SEED,
    WIDTH,
    WORKERS,
    acute_angle,
    always_true,
    auto_or_duration,
    background_term,
    core_type,
    cycle_period,
    energy_share,
    keys_pattern,
    one_line,
    positive_duration,
    rank_keys,
    rank_kind,
    ray_address,
    some_patterns,
    table_name,
    time_keys,
    time_kind,
    time_regex,
    worker_memory,
)
from shardfold.quantities import parse_duration, parse_instant


def _resolved(written: str, info: ValidationInfo) -> str:
    context: dict[str, Path] = info.context or {}
    return resolve(written, context.get("folder", Path()))


Word = Annotated[str, AfterValidator(one_line)]
Location = Annotated[str, AfterValidator(_resolved)]
Patterns = tuple[Annotated[str, AfterValidator(one_line)], ...]
Step = Annotated[int, BeforeValidator(positive_duration)]
Angle = Annotated[float, BeforeValidator(acute_angle)]
Term = Literal["mean", "trend", "cycles"] | int


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

    pattern: Annotated[str, AfterValidator(time_regex)] = Field(alias="from_name")
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

    include: Annotated[Patterns | None, AfterValidator(some_patterns)] = None
    exclude: Patterns = ()
    table: Annotated[str, AfterValidator(table_name), AfterValidator(_resolved)] | None = None


class Source(Settings):
    """The campaign: where the shards are and how to read them."""

    location: Location
    match: Annotated[str, AfterValidator(keys_pattern)] = "**/*.parquet"
    layout: Literal["wide", "vector", "array"]
    time: Annotated[Time | None, BeforeValidator(time_keys)] = None
    values: Word | None = None
    orient: Literal["samples_by_channels", "channels_by_samples"] = "samples_by_channels"
    channels: Channels = Channels()
    settle_ns: Annotated[int, BeforeValidator(parse_duration)] = Field(default=600 * 10**9, alias="settle")
    storage: Storage = Storage()
    shared: bool = False


class Place(Settings):
    """Where the dossier is kept."""

    location: Location
    storage: Storage = Storage()
    shared: bool = False


class Background(Settings):
    """Known functions of time that are kept beside the sums, so that they can be removed after the fact.

    Attributes
    ----------
    cycles : tuple of int
        Periods in nanoseconds, as declared: different, each at least 2.
    """

    mean: Annotated[bool, BeforeValidator(always_true)] = True
    trend: bool = False
    cycles: Annotated[tuple[Annotated[int, BeforeValidator(cycle_period)], ...], BeforeValidator(CYCLES)] = ()

    def in_order(self, terms: tuple[Term, ...]) -> tuple[Term, ...]:
        """Return the declared ones of some terms in their one order: mean, trend, then each cycle as declared."""
        named = {*terms, *(self.cycles if "cycles" in terms else ())}
        return tuple(term for term in ("mean", "trend", *self.cycles) if term in named)


class Design(Settings):
    """What is fixed when the dossier is created; ``auto`` is decided then and stored."""

    scale: Literal["none", "table"] = "none"
    gaps: Literal["refuse"] = "refuse"
    background: Background = Background()
    summary: Literal["auto", "whole", "exact"] = "auto"
    width: Annotated[Literal["auto"] | int, BeforeValidator(WIDTH)] = "auto"
    leaf: Annotated[Literal["auto"] | int, BeforeValidator(auto_or_duration)] = "auto"
    blas: Annotated[str, AfterValidator(core_type)] = "any"
    seed: Annotated[int, BeforeValidator(SEED)] = 20310301
    mixed_units: bool = False


class EnergyRank(Settings):
    """As many modes as hold a share of the energy."""

    energy: Annotated[float, BeforeValidator(energy_share)]


class AngleRank(Settings):
    """As many modes as are right within an angle."""

    angle_deg: Angle = Field(alias="angle")


Rank = Annotated[
    Annotated[int | Literal["noise_edge"], Tag("<number>")]
    | Annotated[EnergyRank, Tag("<energy>")]
    | Annotated[AngleRank, Tag("<angle>")],
    Discriminator(rank_kind),
]


class Modes(Settings):
    """What is computed from the sums; may differ from result to result of one dossier.

    Attributes
    ----------
    remove : tuple
        Background terms: ``"mean"``, ``"trend"``, and the period of each cycle in nanoseconds. In a job they have their
        one order (`Background.in_order`), and ``"cycles"`` has become the cycles that are declared.
    tolerance_deg : float
        The angle within which a mode counts as resolved.
    """

    rank: Annotated[Rank, BeforeValidator(rank_keys)] = 10
    reads: Annotated[Literal["auto"] | int, BeforeValidator(READS)] = 1
    remove: Annotated[tuple[Annotated[Term, BeforeValidator(background_term)], ...], BeforeValidator(REMOVED)] = (
        "mean",
    )
    tolerance_deg: Angle = Field(default=5.0, alias="tolerance")


class Engine(Settings):
    """Who does the work; never changes a result."""

    workers: Annotated[Literal["auto", "serial"] | int, BeforeValidator(WORKERS)] = "auto"
    address: Annotated[str, AfterValidator(ray_address)] | None = None
    memory_bytes: Annotated[int, BeforeValidator(worker_memory)] = Field(default=2 * 2**30, alias="memory")


class JobKeys(Settings):
    """The keys that a job file may hold."""

    campaign: Word
    source: Source
    dossier: Place
    design: Design = Design()
    modes: Modes = Modes()
    engine: Engine = Engine()

    @field_validator("modes")
    @classmethod
    def _in_order(cls, modes: Modes, info: ValidationInfo) -> Modes:
        """Give removed terms their one form. It leaves undeclared ones out, which the relations of keys refuse."""
        design = info.data.get("design")
        if design is None:  # faulty, and told
            return modes
        return modes.model_copy(update={"remove": design.background.in_order(modes.remove)})


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
