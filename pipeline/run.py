"""The page to read first: a run in seven calls.

Look at the campaign and its dossier; refuse what cannot be or is too large; create the dossier; plan a read; bring its
cells into storage; freeze the probe of the next; conclude with a result. Every call leaves storage in a state from
which the same command goes on, so a run may be killed anywhere.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime
from importlib.metadata import version
from typing import Any

from shardfold import budget, dossier, layout
from shardfold.conclude import Conclusion, conclude, sum_of
from shardfold.design import Design
from shardfold.errors import InputError, RecordCorrupt
from shardfold.events import Listener, Noted
from shardfold.executor import Deferred, Executor
from shardfold.finish import too_few_samples, write_probe
from shardfold.ingest import Intake, bring_in
from shardfold.job import Job
from shardfold.kernels.factors import probe_width
from shardfold.kernels.whole import Shape
from shardfold.plan import Cell
from shardfold.refusals import found_in, nothing_left
from shardfold.site import Site, look


@dataclass(frozen=True)
class Report:
    """What a run did.

    Attributes
    ----------
    location : str
        The result's folder.
    new : bool
        Whether this run published it.
    newly_refused, standing_refused : int
        Shards refused by this run, and by earlier ones for the same reason.
    refused : dict of key to str
        What is wrong with each of them.
    """

    location: str
    new: bool
    ledger_number: int
    reads: int
    cells_read: int
    bytes_read: int
    newly_refused: int
    standing_refused: int
    refused: dict[str, str] = field(default_factory=dict)
    quality: dict[str, Any] = field(default_factory=dict)


def run(job: Job, make_executor: Callable[[], Executor], listen: Listener) -> Report:
    """Do what is outstanding for a job, and only that.

    Parameters
    ----------
    job : Job
        The settings.
    make_executor : callable
        Returns the executor; called before the first task, so a run with nothing to do starts no engine.
    listen : Listener
        Told every event.

    Raises
    ------
    ShardfoldError
        See `errors.py` for what to do about each kind.
    """
    started = datetime.now(UTC)
    site = look(job, listen)
    executor = Deferred(make_executor)
    try:
        check_rank(site)
        intake = _intake(site, executor, listen)
        reads = reads_of(job, site.dossier.design)
        if reads < job.modes.reads:
            listen(Noted("the probe is the identity and exact: one read is enough"))
        _refuse_too_large(site, intake, reads)
        if not site.exists and dossier.create(site.dossier).design != site.dossier.design:
            return run(job, make_executor, listen)  # another writer was faster: look again, at what he made
        probes: list[str] = []
        for read in range(1, reads + 1):
            shape, digest = plan_read(site, intake, read)
            cells = bring_in(intake, read, shape, digest)
            probes.append(digest)
            if read < reads:
                _freeze_probe(site, intake, read, shape, cells)
        return _report(site, intake, conclude(site, intake, shape, cells, probes, started))
    finally:
        executor.close()


def _intake(site: Site, executor: Executor, listen: Listener) -> Intake:
    intake = Intake(
        store=site.dossier.store,
        workplace=site.workplace,
        executor=executor,
        listen=listen,
        clock=time.monotonic,
        software=version("shardfold"),
        ledger=site.ledger,
        shards=dict(site.shards),
        absent=site.absent,
        under=site.under,
    )
    for entry in site.standing.values():
        intake.refuse(entry)
    return intake


def reads_of(job: Job, design: Design) -> int:
    """Return how many reads are made: one where the probe is the identity, which no further read can improve."""
    return 1 if design.identity else job.modes.reads


def plan_read(site: Site, intake: Intake, read: int) -> tuple[Shape, str]:
    """Return shape and probe digest of a read whose probe is frozen."""
    facts = dossier.probe_facts(site.dossier.store, site.dossier.design, read)
    if facts is None:
        raise RecordCorrupt(
            "the frozen probe is missing",
            where=layout.probe_key(read),
            rule="a dossier keeps the probe of every read",
            remedy="restore the object from a copy",
        )
    return site.dossier.design.shape(read, facts[0]), facts[1]


def shapes_of(design: Design, rank: int, reads: int) -> list[Shape]:
    """Return the shapes of all reads, known before the first: each further probe is wider by its random rows."""
    widths = [design.width]
    for _ in range(1, reads):
        widths.append(probe_width(widths[-1], rank))
    return [design.shape(read, width) for read, width in enumerate(widths, 1)]


def _refuse_too_large(site: Site, intake: Intake, reads: int) -> None:
    """Refuse before the first read, and before a dossier is made, what any of the reads has too little memory for."""
    design, engine, rank = site.dossier.design, site.job.engine, site.job.modes.rank
    for read, shape in enumerate(shapes_of(design, rank, reads), 1):
        cells = intake.cells(read, shape, "")
        if not cells and not site.exists:
            raise nothing_left(intake.refused)
        plan = budget.budget(design, shape, cells, rank, 1, engine.workers == "serial")
        budget.check(plan, engine.memory_bytes, cells)


def check_rank(site: Site) -> None:
    """Refuse more modes than there are samples or channels, or than the probe can carry."""
    rows = sum(shard.rows for shard in site.shards.values())
    if site.job.modes.rank > rows:
        raise too_few_samples(site.job.modes.rank, rows)
    if site.job.modes.rank > site.dossier.design.channels:
        raise InputError(
            "more modes are asked for than there are channels",
            where="modes.rank",
            rule=f"at most the number of channels, {site.dossier.design.channels}",
            got=str(site.job.modes.rank),
            remedy=f"--set modes.rank={site.dossier.design.channels}",
        )
    if not site.dossier.design.identity and site.job.modes.rank >= site.dossier.design.width:
        raise InputError(
            "the dossier's probe is too narrow for the rank",
            where="modes.rank",
            rule=f"less than the dossier's design.width, {site.dossier.design.width}",
            got=str(site.job.modes.rank),
            remedy="a smaller rank, or a new dossier",
        )


def _freeze_probe(site: Site, intake: Intake, read: int, shape: Shape, cells: Sequence[Cell]) -> None:
    """Freeze the probe of the next read, unless an earlier run did."""
    if dossier.probe_facts(site.dossier.store, site.dossier.design, read + 1) is None:
        write_probe(site.dossier, sum_of(site, intake, read, shape, cells), site.job.modes.rank, read + 1)


def _report(site: Site, intake: Intake, end: Conclusion) -> Report:
    fresh = sum(1 for key, entry in intake.refused.items() if site.ledger.shards.get(key) != entry)
    return Report(
        location=end.location,
        new=end.new,
        ledger_number=intake.ledger.number,
        reads=end.reads,
        cells_read=intake.cells_read,
        bytes_read=intake.bytes_read,
        newly_refused=fresh,
        standing_refused=len(intake.refused) - fresh,
        refused={key: found_in(entry) for key, entry in sorted(intake.refused.items())},
        quality=end.quality,
    )
