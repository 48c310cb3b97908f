"""What is fixed for a dossier's life: resolved once from the job and the first inventory, then only compared.

``auto`` values are decided here by rules that depend on shapes and the first inventory alone, never on memory or
on the number of workers, so that the same campaign gives the same dossier everywhere. No storage, no tasks.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass, fields
from statistics import median
from typing import Any, Literal

import numpy as np

from shardfold.errors import DesignDiffers, InputError
from shardfold.ids import Shard, digest_value
from shardfold.job import Job
from shardfold.kernels.addressed import GENERATOR_VERSION
from shardfold.kernels.background import Terms
from shardfold.kernels.cost import block_samples
from shardfold.kernels.whole import Shape, stored_dtype
from shardfold.quantities import format_duration

FORMAT = 2
KERNEL_VERSION = 2
CHECK_ROWS = 10
LARGE_PIECE_RATIO = 20
LONGEST_LEAF_SAMPLES = 65_536
MOST_HASH_BITS = 12
DECIDED_RANK = 10
MOST_DECIDED = 64
EXTRA_MODES = 8
EXACT_CHANNELS = 1024

_NS = {"us": 10**3, "ms": 10**6, "s": 10**9, "min": 60 * 10**9, "h": 3600 * 10**9, "d": 86400 * 10**9}
_ROUND_STEPS = (
    *((n, unit) for unit in ("us", "ms") for n in (1, 2, 5, 10, 20, 50, 100, 200, 500)),
    *((n, unit) for unit in ("s", "min") for n in (1, 2, 5, 10, 15, 30)),
    *((n, "h") for n in (1, 2, 3, 6, 12)),
    *((n, "d") for n in (1, 2, 5, 10, 30, 100, 365, 1000, 3650, 36500)),
)
ROUND_SPANS = tuple(n * _NS[unit] for n, unit in _ROUND_STEPS)


@dataclass(frozen=True)
class Design:
    """The fixed facts of a dossier.

    Attributes
    ----------
    leaf_ns : int
        Span of a leaf in nanoseconds, counted from the Unix epoch; 0 without times.
    leaf_bits : int
        Without times: leaves are this many leading bits of the hash of the shard's name.
    width : int
        Rows k of the probe; equal to the number of channels where ``identity``.
    identity : bool
        The probe is the identity (few channels): nothing is lost, coefficients are read again.
    trend_origin_ns, trend_unit_ns : int
        The trend is counted in leaves from the edge before the first sample known at creation; 0 and 0 without one.
    cycles_ns : tuple of int
        Periods of the declared cycles.
    channels_request : str
        What the job said of channels, in words.
    table_digest : str
        Digest of the stored table.
    """

    campaign: str
    layout: str
    channels: int
    channels_request: str
    timed: bool
    zoned: bool
    scale: str
    gaps: str
    mean: bool
    trend_origin_ns: int
    trend_unit_ns: int
    cycles_ns: tuple[int, ...]
    summary: Literal["whole", "exact"]
    width: int
    identity: bool
    check_rows: int
    leaf_ns: int
    leaf_bits: int
    block_samples: int
    blas: str
    seed: int
    mixed_units: bool
    table_digest: str = ""
    generator: int = GENERATOR_VERSION
    kernel: int = KERNEL_VERSION
    format: int = FORMAT

    def record(self) -> dict[str, Any]:
        """Return the JSON form."""
        return asdict(self)

    @classmethod
    def from_record(cls, record: dict[str, Any]) -> Design:
        """Return the design of a stored JSON form."""
        values = {field.name: record[field.name] for field in fields(cls)}
        return cls(**values | {"cycles_ns": tuple(values["cycles_ns"])})

    @property
    def terms(self) -> Terms:
        """Return the functions of time whose products are kept."""
        return Terms(self.trend_origin_ns, self.trend_unit_ns, self.cycles_ns)

    def most_modes(self, rank: object) -> int:
        """Return how many modes a result may have: those asked for, and some that cannot be told from the last."""
        room = self.channels if self.identity else self.width - 1
        return min(room, rank + EXTRA_MODES if isinstance(rank, int) else MOST_DECIDED)

    @property
    def exact(self) -> bool:
        """Return whether the summary is a triangular factor."""
        return self.summary == "exact"

    @property
    def digest(self) -> str:
        """Return the digest that names everything made under this design."""
        return digest_value(self.record())

    def shape(self, probe_rows: int) -> Shape:
        """Return the shape of a summary.

        The check rows go along in every read: 6 q of some 4 k + 6 q operations per value, for which a read can be
        judged by itself, leaf by leaf. With the identity probe nothing is estimated and there are none.
        """
        checks = 0 if self.identity else self.check_rows
        return Shape(self.channels, probe_rows, checks, checks, self.terms.count, self.identity)


def resolve(job: Job, shards: Sequence[Shard], channels_request: str, channels: int) -> Design:
    """Return the design of a new dossier.

    Parameters
    ----------
    job : Job
        The settings; ``auto`` values are decided here.
    shards : sequence of Shard
        The first inventory.
    channels_request : str
        Digest of what the job says of channels.
    channels : int
        Number of channels m.

    Raises
    ------
    InputError
        If the asked width cannot carry the asked rank.
    """
    width, identity = _width(job, channels)
    timed = job.source.time is not None
    leaf_ns, leaf_bits = _leaf(job, shards, channels, width)
    background = job.design.background
    return Design(
        campaign=job.campaign,
        layout=job.source.layout,
        channels=channels,
        channels_request=channels_request,
        timed=timed,
        zoned=any(shard.zoned for shard in shards),
        scale=job.design.scale,
        gaps=job.design.gaps,
        mean=True,
        trend_origin_ns=_first_edge(shards, leaf_ns) if background.trend else 0,
        trend_unit_ns=leaf_ns if background.trend else 0,
        cycles_ns=background.cycles,
        summary=choose_summary(job, channels, identity)[0],
        width=width,
        identity=identity,
        check_rows=CHECK_ROWS,
        leaf_ns=leaf_ns,
        leaf_bits=leaf_bits,
        block_samples=block_samples(channels),
        blas=job.design.blas,
        seed=job.design.seed,
        mixed_units=job.design.mixed_units,
    )


def compare(stored: Design, job: Job, channels_request: str, bytes_to_read: int) -> None:
    """Check that the job asks for nothing but the stored design; ``auto`` accepts what is stored.

    Raises
    ------
    DesignDiffers
        Naming every key that differs, both values, and what a new dossier would read.
    """
    asked: dict[str, tuple[Any, Any]] = {
        "campaign": (stored.campaign, job.campaign),
        "source.layout": (stored.layout, job.source.layout),
        "source.time": ("times" if stored.timed else "none", "none" if job.source.time is None else "times"),
        "source.channels": (stored.channels_request, channels_request),
        "design.scale": (stored.scale, job.design.scale),
        "design.gaps": (stored.gaps, job.design.gaps),
        "design.background.trend": (stored.trend_unit_ns > 0, job.design.background.trend),
        "design.background.cycles": (_periods(stored.cycles_ns), _periods(job.design.background.cycles)),
        "design.blas": (stored.blas, job.design.blas),
        "design.seed": (stored.seed, job.design.seed),
        "design.mixed_units": (stored.mixed_units, job.design.mixed_units),
    }
    if job.design.summary != "auto":
        asked["design.summary"] = (stored.summary, job.design.summary)
    if job.design.width != "auto":
        wanted = stored.channels if 2 * int(job.design.width) >= stored.channels else job.design.width
        asked["design.width"] = (stored.width, wanted)
    if job.design.leaf != "auto" and stored.timed:
        asked["design.leaf"] = (format_duration(stored.leaf_ns), format_duration(int(job.design.leaf)))
    differing = {key: pair for key, pair in asked.items() if pair[0] != pair[1]}
    if differing:
        raise DesignDiffers(
            "the job's design is not the one this dossier was created with",
            where=", ".join(differing),
            rule="a dossier keeps its design",
            got="; ".join(f"{key}: stored ({a}), asked ({b})" for key, (a, b) in differing.items()),
            remedy=f"go back to the stored values, or name a new dossier.location, which reads "
            f"{bytes_to_read:,} bytes of the campaign again",
        )


def choose_summary(job: Job, channels: int, identity: bool) -> tuple[Literal["whole", "exact"], str]:
    """Return which summary a new dossier keeps, and why.

    With every channel kept, a triangular factor takes as long as the products do (measured up to 1,024 channels), and
    holds singular values down to 1e-14 of the first instead of 1e-7. So the range asked for never decides.
    """
    asked = job.design.summary
    if asked == "exact":
        return "exact", "asked for: a triangular factor of all channels; coefficients are read again"
    if not identity:
        return "whole", "every shard holds all channels of its samples"
    few = f"{channels} channels are few enough to keep all; coefficients are read again"
    if asked == "whole":
        return "whole", few
    if channels <= EXACT_CHANNELS:
        return "exact", f"{few}, and a triangular factor costs no more than their products"
    return "whole", few


def expected_rank(rank: object) -> int:
    """Return how many modes a design makes room for: those asked for, or 10 where the data decide."""
    return rank if isinstance(rank, int) else DECIDED_RANK


def leaf_samples_wanted(width: int, itemsize: int) -> int:
    """Return how many samples a leaf should hold so that its sums are a small share of the raw bytes."""
    stack = width + 2 * CHECK_ROWS
    return LARGE_PIECE_RATIO * stack * 8 // itemsize


def _width(job: Job, channels: int) -> tuple[int, bool]:
    rank = expected_rank(job.modes.rank)
    if rank > channels and rank == job.modes.rank:
        raise InputError(
            "more modes are asked for than there are channels",
            where="modes.rank",
            rule=f"at most the number of channels, {channels}",
            got=str(rank),
            remedy=f"--set modes.rank={channels} or less",
        )
    asked = job.design.width
    width = max(64, rank + 14, min(5 * rank, 2 * rank + 60)) if asked == "auto" else int(asked)
    if 2 * width >= channels or job.design.summary == "exact":
        return channels, True
    if width <= rank:
        raise InputError(
            "the probe is too narrow for the rank",
            where="design.width",
            rule=f"more than modes.rank, {rank}; 14 more is common",
            got=str(width),
            remedy="--set design.width=auto",
        )
    return width, False


def _periods(cycles_ns: Sequence[int]) -> str:
    """Return cycles in words; their order means nothing."""
    return ", ".join(format_duration(period) for period in sorted(cycles_ns)) or "none"


def _first_edge(shards: Sequence[Shard], leaf_ns: int) -> int:
    firsts = [shard.first for shard in shards if shard.first is not None]
    return min(firsts) // leaf_ns * leaf_ns if firsts else 0


def _leaf(job: Job, shards: Sequence[Shard], channels: int, width: int) -> tuple[int, int]:
    itemsize = max((stored_dtype(np.dtype(shard.dtype)).itemsize for shard in shards), default=8)
    wanted = leaf_samples_wanted(width, itemsize)
    rows = sum(shard.rows for shard in shards)
    if job.source.time is None:
        return 0, min(MOST_HASH_BITS, max(0, (rows // wanted).bit_length() - 1))
    if job.design.leaf != "auto":
        return int(job.design.leaf), 0
    return _round_leaf(shards, rows, wanted), 0


def _round_leaf(shards: Sequence[Shard], rows: int, wanted: int) -> int:
    """Return a round span with enough samples that no row group crosses twice; shard-long if that is not too long."""
    spans = [s.last - s.first for s in shards if s.first is not None and s.last is not None]
    groups = [g.last - g.first for s in shards for g in s.groups if g.first is not None and g.last is not None]
    seconds_per_row = sum(spans) / max(1, rows - len(spans))
    least = max(wanted * seconds_per_row, max(groups, default=0) + 1)
    shard_long = next((span for span in ROUND_SPANS if span >= max(least, median(spans or [0]) + 1)), ROUND_SPANS[-1])
    if seconds_per_row and shard_long / seconds_per_row <= LONGEST_LEAF_SAMPLES:
        return shard_long
    return next((span for span in ROUND_SPANS if span >= least), ROUND_SPANS[-1])
