"""The page to read first: a run in seven calls.

Look at the campaign and its dossier; plan and refuse what is too large; bring the cells of each read into storage;
add them up; finish; write the coefficients; publish. Every call leaves storage in a state from which the same command
goes on, so a run may be killed anywhere.
"""

from __future__ import annotations

import socket
import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime
from importlib.metadata import version
from typing import Any

from shardfold import budget, dossier, layout
from shardfold.blas import core_type
from shardfold.design import Design
from shardfold.errors import InputError, RecordCorrupt
from shardfold.events import Listener, Noted, Published
from shardfold.executor import Executor
from shardfold.finish import finding_of, too_few_samples, write_parts, write_probe
from shardfold.gather import moment
from shardfold.ids import digest_value
from shardfold.ingest import Intake, blocked_by_vanished, bring_in
from shardfold.job import Job
from shardfold.kernels.factors import probe_width
from shardfold.kernels.whole import Shape, Summary
from shardfold.plan import Cell
from shardfold.publish import manifest, put_all, quality, result_tables, seal, shards_digest
from shardfold.refusals import nothing_left
from shardfold.site import Site, look
from shardfold.sums import add_all
from shardfold.tasks import Outcome, Task, Workplace

PACKAGES = ("numpy", "scipy", "pyarrow", "ray", "s3fs")


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
    """

    location: str
    new: bool
    ledger_number: int
    reads: int
    cells_read: int
    bytes_read: int
    newly_refused: int
    standing_refused: int
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
        return _publish(site, intake, shape, cells, probes, started)
    finally:
        executor.close()


class Deferred:
    """An executor that is started by its first task."""

    def __init__(self, make: Callable[[], Executor]) -> None:
        self._make = make
        self._made: Executor | None = None

    def perform(self, workplace: Workplace, tasks: Sequence[Task]) -> Iterator[tuple[Task, Outcome]]:
        """Start the executor if there is a task, and let it perform them."""
        return self._executor().perform(workplace, tasks) if tasks else iter(())

    def nodes(self) -> int:
        """Return on how many machines the workers are."""
        return self._executor().nodes()

    def close(self) -> None:
        """End the executor if it was started."""
        if self._made is not None:
            self._made.close()

    def _executor(self) -> Executor:
        if self._made is None:
            self._made = self._make()
        return self._made


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


def _sum(site: Site, intake: Intake, read: int, shape: Shape, cells: Sequence[Cell]) -> Summary:
    return add_all(site.dossier.store, site.workplace, intake.executor, intake.listen, read, shape, cells)


def _freeze_probe(site: Site, intake: Intake, read: int, shape: Shape, cells: Sequence[Cell]) -> None:
    """Freeze the probe of the next read, unless an earlier run did."""
    if dossier.probe_facts(site.dossier.store, site.dossier.design, read + 1) is None:
        write_probe(site.dossier, _sum(site, intake, read, shape, cells), site.job.modes.rank, read + 1)


def _publish(
    site: Site, intake: Intake, shape: Shape, cells: Sequence[Cell], probes: Sequence[str], started: datetime
) -> Report:
    facts = _identity_facts(site, intake, probes)
    result_id = digest_value(facts)
    prefix = layout.result_prefix(intake.ledger.number, result_id)
    store = site.dossier.store
    location = f"{site.job.dossier.location.rstrip('/')}/{prefix}"
    if store.head(prefix + layout.MANIFEST) is not None:
        intake.listen(Published(location, new=False))
        return _report(site, intake, location, False, len(probes), {})
    if shape.identity:
        blocked_by_vanished(intake, cells)  # the coefficients are read again
    summary = _sum(site, intake, len(probes), shape, cells)
    finding = finding_of(
        site.dossier, summary, site.job.modes.rank, "mean" not in site.job.modes.remove, intake.listen
    )
    rows_of = intake.rows_of(len(probes))
    parts, spectrum = write_parts(
        finding, shape, cells, rows_of, prefix, site.workplace, intake.executor, intake.listen
    )
    digests = put_all(store, prefix, result_tables(finding, spectrum.dominant_hz()))
    digests |= {key.removeprefix(prefix): digest for key, digest in parts}
    facts |= {
        "id": result_id,
        "ledger_number": intake.ledger.number,
        "quality": quality(finding),
        "set": [o for o in site.job.overrides if o.partition("=")[0].partition(".")[0].strip() == "modes"],
        "blas": sorted(intake.cores | {core_type()}),
        "shards": _shard_records(site, intake),
    }
    new = seal(store, prefix, manifest(facts, digests, _made(started, intake)))
    intake.listen(Published(location, new=new))
    return _report(site, intake, location, new, len(probes), facts["quality"])


def _identity_facts(site: Site, intake: Intake, probes: Sequence[str]) -> dict[str, Any]:
    """Return what the result id is the digest of."""
    return {
        "campaign": site.job.campaign,
        "design": site.dossier.design.record(),
        "design_digest": site.dossier.design.digest,
        "inputs_digest": shards_digest([(s.key, s.info.version) for s in intake.shards.values()]),
        "corrections": [],
        "modes": site.job.modes_record(),
        "probes": list(probes),
        "reads": len(probes),
        "software": intake.software,
    }


def _shard_records(site: Site, intake: Intake) -> list[dict[str, Any]]:
    entries = (intake.ledger.shards[key] for key in sorted(intake.shards))
    return [
        {
            "key": e.key,
            "version": e.version,
            "rows": e.rows,
            "first": _instant(e.first),
            "last": _instant(e.last),
            "digest": e.digest,
            "listed": e.key not in site.absent,
        }
        for e in entries
    ]


def _instant(value: int | None) -> str | None:
    return None if value is None else moment(value)


def _made(started: datetime, intake: Intake) -> dict[str, Any]:
    ended = datetime.now(UTC)
    return {
        "start": started.isoformat(timespec="seconds"),
        "end": ended.isoformat(timespec="seconds"),
        "seconds": round((ended - started).total_seconds(), 3),
        "host": socket.gethostname(),
        "packages": {name: version(name) for name in PACKAGES},
        "cells_read": intake.cells_read,
        "bytes_read": intake.bytes_read,
    }


def _report(
    site: Site, intake: Intake, location: str, new: bool, reads: int, numbers: dict[str, Any]
) -> Report:
    fresh = sum(1 for key, entry in intake.refused.items() if site.ledger.shards.get(key) != entry)
    return Report(
        location=location,
        new=new,
        ledger_number=intake.ledger.number,
        reads=reads,
        cells_read=intake.cells_read,
        bytes_read=intake.bytes_read,
        newly_refused=fresh,
        standing_refused=len(intake.refused) - fresh,
        quality=numbers,
    )
