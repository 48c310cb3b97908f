"""The end of a run: from the cells of the last read to a published result, or to the one that stands already.

The result's id is the digest of what went in, so the same inputs find the result that stands, also after a commit that
changed nothing of them.
"""

from __future__ import annotations

import json
import socket
from collections.abc import Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime
from importlib.metadata import version
from typing import Any

from shardfold import layout
from shardfold.assess import Assessment
from shardfold.blas import core_type, one_thread
from shardfold.events import Published
from shardfold.finish import finding_of, write_parts
from shardfold.gather import moment
from shardfold.ids import digest_value
from shardfold.ingest import Intake, Pass, blocked_by_vanished
from shardfold.publish import manifest, put_all, quality, result_tables, seal, shards_digest
from shardfold.site import Site
from shardfold.store import Store

PACKAGES = ("numpy", "scipy", "pyarrow", "ray", "s3fs")


@dataclass(frozen=True)
class Conclusion:
    """Where the result is, whether this run published it, how many reads it took, and how much the modes hold."""

    location: str
    new: bool
    reads: int
    quality: dict[str, Any] = field(default_factory=dict)


def conclude(site: Site, intake: Intake, done: Pass, judged: Assessment, started: datetime) -> Conclusion:
    """Publish the result of what is in.

    Parameters
    ----------
    site, intake
        Where the run stands, and what it took in.
    done : Pass
        The last read.
    judged : Assessment
        Its modes and what can be said of them.
    started : datetime
        When the run began.
    """
    identity = _identity(site, intake, done.probes)
    result_id, store = digest_value(identity), site.dossier.store
    folder = f"{site.job.dossier.location.rstrip('/')}/"
    prefix = layout.result_prefix(intake.ledger.number, result_id)
    files, numbers = _write(site, intake, done, judged, prefix)
    facts = identity | {
        "id": result_id,
        "ledger_number": intake.ledger.number,
        "quality": numbers,
        "job": _job(site),
        "set": [o for o in site.job.overrides if o.partition("=")[0].partition(".")[0].strip() == "modes"],
        "blas": sorted(intake.cores | {core_type()}),
        "shards": _shards(site, intake),
        "withdrawn": _withdrawn(site),
    }
    new = seal(store, prefix, manifest(facts, files, _made(started, intake)))
    intake.listen(Published(folder + prefix, new=new))
    return Conclusion(folder + prefix, new, done.read, numbers)


def standing(site: Site, intake: Intake, probes: Sequence[str]) -> Conclusion | None:
    """Return the result of what is in, if it stands already."""
    found = _standing(site.dossier.store, digest_value(_identity(site, intake, probes)))
    if found is None:
        return None
    place = f"{site.job.dossier.location.rstrip('/')}/{found}"
    intake.listen(Published(place, new=False))
    return Conclusion(place, False, len(probes))


@one_thread()
def _write(
    site: Site, intake: Intake, done: Pass, judged: Assessment, prefix: str
) -> tuple[dict[str, str], dict[str, Any]]:
    """Write coefficients and tables; return the digest of each file, and how much the modes hold."""
    if done.shape.identity:
        blocked_by_vanished(intake, done.cells)  # the coefficients are read again
    finding = finding_of(site.dossier, judged)
    rows = intake.rows_of(done.read)
    parts, spectrum, bytes_read = write_parts(
        finding, done.shape, done.cells, rows, prefix, site.workplace, intake.executor, intake.listen
    )
    intake.bytes_read += bytes_read
    files = put_all(site.dossier.store, prefix, result_tables(finding, spectrum.dominant_hz()))
    return files | {key.removeprefix(prefix): digest for key, digest in parts}, quality(finding)


def _standing(store: Store, result_id: str) -> str | None:
    """Return the folder of the published result with this id, or ``None``.

    Only results of the highest ledger number count: where a newer one stands, an older one with the same inputs is
    published again, or ``latest`` would go on showing what is no longer in.
    """
    published = [found for info in store.list(layout.RESULTS) if (found := layout.parse_manifest(info.key)) is not None]
    newest = max((number for number, _ in published), default=0)
    for number, folder in published:
        if number != newest or not folder.endswith(f"-{result_id[:8]}/"):
            continue
        if json.loads(bytes(store.read(folder + layout.MANIFEST)))["id"] == result_id:
            return folder
    return None


def _identity(site: Site, intake: Intake, probes: Sequence[str]) -> dict[str, Any]:
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


def _job(site: Site) -> dict[str, Any]:
    job = site.job
    return {
        "digest": job.text_digest,
        "overrides": list(job.overrides),
        "source": {"location": job.source.location, "match": job.source.match},
        "asked": job.design_record(),
    }


def _shards(site: Site, intake: Intake) -> list[dict[str, Any]]:
    entries = (intake.ledger.shards[key] for key in sorted(intake.shards))
    return [
        {
            "key": entry.key,
            "version": entry.version,
            "rows": entry.rows,
            "first": _instant(entry.first),
            "last": _instant(entry.last),
            "digest": entry.digest,
            "listed": entry.key not in site.absent,
        }
        for entry in entries
    ]


def _withdrawn(site: Site) -> list[dict[str, Any]]:
    return [
        {"key": entry.key, "version": entry.version, **entry.why} for _, entry in sorted(site.withdrawn.items())
    ]


def _instant(value: int | None) -> str | None:
    return None if value is None else moment(value)


def _made(started: datetime, intake: Intake) -> dict[str, Any]:
    """Return how the result came to be; no part of its identity."""
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
