"""What a run would do, said before it does it: reads, work, memory, storage, seconds. No measured value is read."""

from __future__ import annotations

import time
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from shardfold import budget, dossier, layout
from shardfold.blas import core_type, one_thread
from shardfold.design import Design, choose_summary, expected_rank
from shardfold.errors import InputError
from shardfold.events import Listener
from shardfold.gather import moment
from shardfold.job import Job
from shardfold.kernels.whole import Shape, stored_dtype
from shardfold.ledger import Entry
from shardfold.plan import Cell, bytes_to_read, cut, tree
from shardfold.quantities import format_duration
from shardfold.refusals import found_in, nothing_left, refusal_of
from shardfold.run import check_rank, check_shards, reads_of, shapes_of
from shardfold.site import Site, look
from shardfold.summaries import bytes_of, fold_flops
from shardfold.sums import leaf_names

FOOTERS_READ = 200
ASSUMED_BYTES_PER_SECOND = 100e6
"""Read rate of one worker that seconds are forecast with; the forecast says so."""


@dataclass(frozen=True)
class Forecast:
    """A forecast as plain values, for people and for ``--json``, and the error that a run would end with at once."""

    figures: dict[str, Any]
    refusal: InputError | None = None


def forecast(job: Job, workers: int, listen: Listener) -> Forecast:
    """Return what `run` would do for a job.

    Parameters
    ----------
    job : Job
        The settings.
    workers : int
        Workers it would have.
    listen : Listener
        Told what was found.
    """
    site = look(job, listen, sample=FOOTERS_READ)
    design = site.dossier.design
    shape = design.shape(design.width)
    facts = dossier.probe_facts(site.dossier.store, design, 1) if site.exists else None
    cutting = cut(list(site.shards.values()), design, 1, shape, facts[1] if facts else "")
    cells = cutting.cells
    stored = _stored(site) if site.exists else set()
    reads = reads_of(job, design)
    serial = job.engine.workers == "serial"
    shapes = shapes_of(design, expected_rank(job.modes.rank), reads)
    modes = design.most_modes(job.modes.rank)
    memory = max(
        (budget.budget(design, s, cells, modes, 1 if serial else workers, serial) for s in shapes),
        key=lambda plan: plan.worker_bytes,
    )
    # Where footers were sampled, amounts are scaled up to all shards; spans and memory are those of the sample.
    scale = _scale(site)
    refused = site.standing | {e.shard: refusal_of(e, site.shards[e.shard], site.under) for e in cutting.refused}
    figures = {
        "campaign": job.campaign,
        "shards": _shards(site, refused),
        "samples": round(scale * sum(shard.rows for key, shard in site.shards.items() if key not in refused)),
        "channels": design.channels,
        "span": _span(site),
        "summary": _summary(job, design),
        "leaf": format_duration(design.leaf_ns) if design.timed else f"{1 << design.leaf_bits} by hash of the name",
        "cells": {"all": round(scale * len(cells)), "stored": sum(cell.name in stored for cell in cells)},
        "reads": _reads(cells, stored, reads, job, design, scale),
        "work": _work(design, shapes, cells, stored, workers, scale),
        "memory": _memory(memory, job.engine.memory_bytes),
        "storage_bytes": round(scale * _storage(design, shapes, cells)),
        "dossier": "exists" if site.exists else "would be created",
        "blas": core_type(),
    }
    return Forecast(figures, _refusal(site, cells, refused, memory))


def _refusal(site: Site, cells: Sequence[Cell], refused: dict[str, Entry], memory: budget.Budget) -> InputError | None:
    """Return the error with which a run would end before it reads, or ``None``."""
    try:
        check_shards(site)
        check_rank(site)
        if not cells:
            raise nothing_left(refused)
        budget.check(memory, site.job.engine.memory_bytes, cells)
    except InputError as error:
        return error
    return None


def _stored(site: Site) -> set[str]:
    found = (layout.parse_cell(info.key) for info in site.dossier.store.list(f"{layout.LEAVES}01/"))
    return {parsed[2] for parsed in found if parsed is not None}


def _shards(site: Site, refused: dict[str, Entry]) -> dict[str, Any]:
    inventory = site.inventory
    return {
        "to_take_in": len(site.shards.keys() - refused.keys()),
        "left_for_later": len(inventory.unsettled),
        "refused": {key: found_in(entry) for key, entry in sorted(refused.items())},
        "withdrawn": len(site.withdrawn),
        "not_listed_any_more": len(site.absent),
        "footers_read": "sampled" if inventory.sampled else "all",
    }


def _span(site: Site) -> list[str] | None:
    firsts = [shard.first for shard in site.shards.values() if shard.first is not None]
    lasts = [shard.last for shard in site.shards.values() if shard.last is not None]
    if not firsts:
        return None
    return [moment(min(firsts)), moment(max(lasts))]


def _summary(job: Job, design: Design) -> str:
    """Return which summary is kept, and why."""
    kind = "exact" if design.exact else "whole"
    if not design.identity:
        kind += f", probe of {design.width} rows"
    chosen, why = choose_summary(job, design.channels, design.identity)
    return f"{kind}: {why if chosen == design.summary else 'what the dossier was created with'}"


def _scale(site: Site) -> float:
    inventory = site.inventory
    described = len(inventory.shards) + len(inventory.refused)
    return (inventory.listed - len(inventory.unsettled)) / described if inventory.sampled else 1.0


def _reads(
    cells: Sequence[Cell], stored: set[str], reads: int, job: Job, design: Design, scale: float
) -> dict[str, Any]:
    once = scale * sum(cell.stored_bytes for cell in cells)
    return {
        "passes": reads,
        "bytes_first": round(scale * bytes_to_read(cells, stored)),
        "bytes_further": round(once * (reads - 1)),
        "bytes_for_coefficients": round(once) if design.identity else 0,
        "more_if_needed": job.modes.reads == "auto" and not design.identity,
    }


def _work(
    design: Design, shapes: Sequence[Shape], cells: Sequence[Cell], stored: set[str], workers: int, scale: float
) -> dict[str, Any]:
    fresh = [cell for cell in cells if cell.name not in stored]
    rows, data = sum(cell.rows for cell in fresh), sum(cell.stored_bytes for cell in fresh)
    flops = scale * sum(fold_flops(design, shape, rows) for shape in shapes)
    seconds = (flops / _flops_per_second() + scale * data * len(shapes) / ASSUMED_BYTES_PER_SECOND) / workers
    return {
        "flops": flops,
        "workers": workers,
        "seconds_about": round(seconds, 1),
        "assumed_read_rate": f"{ASSUMED_BYTES_PER_SECOND / 1e6:g} MB/s per worker",
    }


def _memory(memory: budget.Budget, limit: int) -> dict[str, Any]:
    return {
        "worker_bytes": memory.worker_bytes,
        "worker_limit_bytes": limit,
        "worker_terms": {phase: dict(terms) for phase, terms in memory.phases.items()},
        "driver_bytes": memory.driver_bytes,
        "object_store_bytes": memory.object_store_bytes,
        "node_bytes": memory.node_bytes,
    }


def _storage(design: Design, shapes: Sequence[Shape], cells: Sequence[Cell]) -> int:
    sums = sum(len(nodes) for nodes in tree(1, leaf_names(cells), design.kernel)) if cells else 0
    total = 0
    for shape in shapes:
        per_sample = 0 if shape.identity else shape.k
        x_bytes = sum(cell.rows * per_sample * stored_dtype(cell.dtype).itemsize for cell in cells)
        total += (len(cells) + sums) * bytes_of(design, shape) + x_bytes
    return total


def _flops_per_second() -> float:
    """Measure one float64 product of about 20 milliseconds."""
    left, right = np.ones((512, 2048)), np.ones((2048, 96))
    with one_thread():
        begin = time.perf_counter()
        for _ in range(3):
            left @ right
        return 3 * 2.0 * 512 * 2048 * 96 / (time.perf_counter() - begin)


