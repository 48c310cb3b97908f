"""The page to read first: a run in seven calls.

Look at the campaign and its dossier; refuse what cannot be or is too large; create the dossier; bring the cells of a
read into storage; judge what it can tell; freeze the probe of the next if there is to be one; conclude with a result.
Every call leaves storage in a state from which the same command goes on, so a run may be killed anywhere.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import UTC, datetime
from importlib.metadata import version
from typing import Any

from shardfold import budget, dossier, layout
from shardfold.advice import reading_words
from shardfold.assess import Assessment, assess, sum_of, too_few_samples
from shardfold.conclude import Conclusion, conclude, standing
from shardfold.decisions import prune as take_out
from shardfold.design import Design, expected_rank
from shardfold.errors import InputError, PlanRefused, RecordCorrupt
from shardfold.events import Listener, Noted
from shardfold.executor import Deferred, Executor
from shardfold.finish import write_probe
from shardfold.ingest import Intake, Pass, bring_in
from shardfold.job import Job
from shardfold.job_values import MOST_READS
from shardfold.kernels.factors import probe_width
from shardfold.kernels.whole import Shape
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
    withdrawn : dict of key to str
        Why each shard that was taken out by decision is out.
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
    withdrawn: dict[str, str] = field(default_factory=dict)
    quality: dict[str, Any] = field(default_factory=dict)


def run(job: Job, make_executor: Callable[[], Executor], listen: Listener, prune: int | None = None) -> Report:
    """Do what is outstanding for a job, and only that.

    Parameters
    ----------
    job : Job
        The settings.
    make_executor : callable
        Returns the executor; called before the first task, so a run with nothing to do starts no engine.
    listen : Listener
        Told every event.
    prune : int, optional
        Take out first so many shards that are in but no longer listed: exactly as many as there are.

    Raises
    ------
    ShardfoldError
        See `errors.py` for what to do about each kind.
    """
    started = datetime.now(UTC)
    site = look(job, listen)
    if prune is not None:
        take_out(site.dossier.store, site.vanished, prune, version("shardfold"))
        site = look(job, listen)
    executor = Deferred(make_executor)
    try:
        check_shards(site)
        check_rank(site)
        intake = _intake(site, executor, listen)
        reads = reads_of(job, site.dossier.design)
        if job.modes.reads != "auto" and reads < job.modes.reads:
            listen(Noted("all channels are kept and nothing is lost: one read is enough"))
        _refuse_too_large(site, intake, reads)
        if not site.exists and dossier.create(site.dossier).design != site.dossier.design:
            return run(job, make_executor, listen)  # another writer was faster: look again, at what he made
        done = _next_read(site, intake, None)
        while (end := _end(site, intake, done, reads, started)) is None:
            done = _next_read(site, intake, done)
        return _report(site, intake, end)
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
    """Return how many reads are made whatever they bring: one where no channel is lost, which none can improve."""
    return 1 if design.identity or job.modes.reads == "auto" else job.modes.reads


def _next_read(site: Site, intake: Intake, before: Pass | None) -> Pass:
    """Carry out the first read, or the one after ``before`` with a probe made from it."""
    read = 1 if before is None else before.read + 1
    if before is not None and dossier.probe_facts(site.dossier.store, site.dossier.design, read) is None:
        write_probe(site.dossier, sum_of(site, intake, before), expected_rank(site.job.modes.rank), read)
    shape, digest = _plan_read(site, read)
    cells = bring_in(intake, read, shape, digest)
    return Pass(read, shape, cells, (*(before.probes if before else ()), digest))


def _end(site: Site, intake: Intake, done: Pass, reads: int, started: datetime) -> Conclusion | None:
    """Return the result that stands or is published now, or ``None`` if another read comes first."""
    if done.read < reads:
        return None
    auto = site.job.modes.reads == "auto"
    first = auto and done.read == 1
    end = _standing_of_any_read(site, intake, done) if first else standing(site, intake, done.probes)
    if end is not None:
        return end
    judged = assess(site, intake, done)
    if auto and _reads_again(site, intake, done, judged):
        return None
    return conclude(site, intake, done, judged, started)


def _reads_again(site: Site, intake: Intake, done: Pass, judged: Assessment) -> bool:
    """Return whether another read is worth its price and fits into memory, and say why or why not."""
    if not judged.decision.again:
        intake.listen(Noted(f"no further read: {reading_words(judged)}"))
        return False
    refused = _too_large_for_another(site, intake, done)
    if refused is not None:
        intake.listen(Noted(f"another read would help, but {refused}"))
        return False
    intake.listen(Noted(f"reading again: {reading_words(judged)}"))
    return True


def _too_large_for_another(site: Site, intake: Intake, done: Pass) -> PlanRefused | None:
    design, engine = site.dossier.design, site.job.engine
    rank = expected_rank(site.job.modes.rank)
    modes = design.most_modes(site.job.modes.rank)
    shape = design.shape(probe_width(done.shape.k, rank))
    cells = intake.cells(done.read + 1, shape, "")
    try:
        plan = budget.budget(design, shape, cells, modes, 1, engine.workers == "serial")
        budget.check(plan, engine.memory_bytes, cells)
    except PlanRefused as error:
        return error
    return None


def _standing_of_any_read(site: Site, intake: Intake, first: Pass) -> Conclusion | None:
    """Return the result that stands for these inputs, whichever number of reads it took."""
    probes = list(first.probes)
    for read in range(2, MOST_READS + 2):
        end = standing(site, intake, probes)
        facts = dossier.probe_facts(site.dossier.store, site.dossier.design, read)
        if end is not None or facts is None or site.dossier.design.identity:
            return end
        probes.append(facts[1])
    return None


def _plan_read(site: Site, read: int) -> tuple[Shape, str]:
    """Return shape and probe digest of a read whose probe is frozen."""
    facts = dossier.probe_facts(site.dossier.store, site.dossier.design, read)
    if facts is None:
        raise RecordCorrupt(
            "the frozen probe is missing",
            where=layout.probe_key(read),
            rule="a dossier keeps the probe of every read",
            remedy="restore the object from a copy",
        )
    return site.dossier.design.shape(facts[0]), facts[1]


def shapes_of(design: Design, rank: int, reads: int) -> list[Shape]:
    """Return the shapes of all reads, known before the first: each further probe is wider by its random rows."""
    widths = [design.width]
    for _ in range(1, reads):
        widths.append(probe_width(widths[-1], rank))
    return [design.shape(width) for width in widths]


def _refuse_too_large(site: Site, intake: Intake, reads: int) -> None:
    """Refuse before the first read, and before a dossier is made, what any of the reads has too little memory for."""
    design, engine = site.dossier.design, site.job.engine
    modes = design.most_modes(site.job.modes.rank)
    for read, shape in enumerate(shapes_of(design, expected_rank(site.job.modes.rank), reads), 1):
        cells = intake.cells(read, shape, "")
        if not cells and not site.exists:
            raise nothing_left(intake.refused)
        plan = budget.budget(design, shape, cells, modes, 1, engine.workers == "serial")
        budget.check(plan, engine.memory_bytes, cells)


def check_shards(site: Site) -> None:
    """Refuse a campaign of which nothing is left."""
    if site.shards or site.standing or not site.withdrawn:
        return
    raise InputError(
        "every shard is withdrawn",
        where=site.job.dossier.location,
        rule="at least one shard that is in",
        got=f"{len(site.withdrawn)} withdrawn, none else",
        remedy="shardfold readmit DOSSIER SHARD --because TEXT",
    )


def check_rank(site: Site) -> None:
    """Refuse more modes than there are samples or channels, or than the probe can carry."""
    rank = site.job.modes.rank
    if not isinstance(rank, int):
        return
    rows = sum(shard.rows for shard in site.shards.values())
    if rank > rows:
        raise too_few_samples(rank, rows)
    if rank > site.dossier.design.channels:
        raise InputError(
            "more modes are asked for than there are channels",
            where="modes.rank",
            rule=f"at most the number of channels, {site.dossier.design.channels}",
            got=str(rank),
            remedy=f"--set modes.rank={site.dossier.design.channels}",
        )
    if not site.dossier.design.identity and rank >= site.dossier.design.width:
        raise InputError(
            "the dossier's probe is too narrow for the rank",
            where="modes.rank",
            rule=f"less than the dossier's design.width, {site.dossier.design.width}",
            got=str(rank),
            remedy="a smaller rank, or a new dossier",
        )


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
        withdrawn={key: entry.why.get("reason", "") for key, entry in sorted(site.withdrawn.items())},
        quality=end.quality,
    )
