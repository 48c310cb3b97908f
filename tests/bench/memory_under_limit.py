"""Private memory of every Ray worker against the plan, on a campaign many times larger than a worker may hold.

Run ``python tests/bench/memory_under_limit.py``. It starts an S3 server, writes the campaign, runs it with two Ray
workers, samples memory every 50 ms, and prints what was planned beside what was measured. It ends with status 1 where
the plan was too small, or more than twice what was measured.
"""

from __future__ import annotations

import argparse
import os
import sys
import time
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1]))

from big_campaign import Campaign, write
from process_memory import Peaks, Sampler
from seaweed import Seaweed
from shardfold import budget
from shardfold.events import StageDone, StageStarted
from shardfold.executor_ray import RayExecutor
from shardfold.job import Job, parse_job
from shardfold.run import run
from shardfold.site import look
from shardfold.plan import cut
from shardfold.store import open_store

MIB = 2**20


def main() -> None:
    """Print one table, and fail where plan and reality are apart."""
    options = _options()
    campaign = Campaign(
        options.layout,
        options.channels,
        int(options.gb * 1e9),
        int(options.shard_mib * MIB),
        int(options.group_mib * MIB),
        options.dtype,
        options.compression,
        options.orient,
    )
    with Seaweed() as server:
        os.environ.update(server.environment)
        server.make_bucket("bench")
        store = open_store("s3://bench/campaign", server.endpoint, "us-east-1")
        begin = time.perf_counter()
        stored = write(store, campaign)
        print(
            f"{campaign.layout} {campaign.dtype} {campaign.compression}: {campaign.shards} shards of "
            f"{campaign.shard_rows} samples x {campaign.channels} channels, row groups of {campaign.group_rows}; "
            f"{campaign.values_bytes / 1e9:.2f} GB of values, {stored / 1e9:.2f} GB stored "
            f"(written in {time.perf_counter() - begin:.0f} s)"
        )
        job = _job(campaign, server.endpoint, options)
        peaks, seconds = _measure(job, options.workers)
        plan = _plan(job, options.workers)
    print(f"run: {seconds:.1f} s, {campaign.values_bytes / seconds / 1e6:.0f} MB/s; {peaks.samples} samples of memory")
    sys.exit(0 if _print_table(plan, peaks, options.memory) else 1)


def _options() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--layout", choices=("vector", "wide", "array"), default="vector")
    parser.add_argument("--orient", choices=("samples_by_channels", "channels_by_samples"), default="samples_by_channels")
    parser.add_argument("--gb", type=float, default=6.0, help="values in all")
    parser.add_argument("--channels", type=int, default=3000)
    parser.add_argument("--dtype", default="float32")
    parser.add_argument("--compression", default="none")
    parser.add_argument("--shard-mib", type=float, default=150)
    parser.add_argument("--group-mib", type=float, default=48)
    parser.add_argument("--memory", default="600 MiB", help="engine.memory")
    parser.add_argument("--workers", type=int, default=2)
    parser.add_argument("--set", action="append", default=[], help="key=value of the job")
    return parser.parse_args()


def _job(campaign: Campaign, endpoint: str, options: argparse.Namespace) -> Job:
    text = f"""
campaign: memory
source: {campaign.source("s3://bench/campaign", endpoint)}
dossier: {{location: s3://bench/dossier, storage: {{endpoint: '{endpoint}', region: us-east-1}}}}
engine: {{memory: {options.memory}, workers: {options.workers}}}
"""
    return parse_job(text, "bench.yaml", options.set)


def _measure(job: Job, workers: int) -> tuple[Peaks, float]:
    with Sampler(without="weed") as sampler:

        def listen(event: object) -> None:
            if isinstance(event, StageStarted):
                sampler.phase = event.stage
            elif isinstance(event, StageDone):
                sampler.phase = "between stages"

        begin = time.perf_counter()
        run(job, lambda: RayExecutor(workers, None), listen)
        return sampler.peaks, time.perf_counter() - begin


def _plan(job: Job, workers: int) -> budget.Budget:
    """Return the plan of the run just made."""
    site = look(job, lambda event: None)
    design = site.dossier.design
    shape = design.shape(1, design.width)
    cells = cut(list(site.shards.values()), design, 1, shape, "").cells
    return budget.budget(design, shape, cells, job.modes.rank, workers, False)


def _print_table(plan: budget.Budget, peaks: Peaks, limit: str) -> bool:
    print(f"\n{'':34}{'plan MiB':>10}{'measured':>10}{'ratio':>7}")
    for phase, terms in plan.phases.items():
        _line(f"worker, {phase}", sum(terms.values()), peaks.worker_by_phase.get(phase, 0))
        print("    " + ", ".join(f"{term} {size / MIB:.0f}" for term, size in terms.items()))
    kept = [
        _line(f"worker, largest (limit {limit})", plan.worker_bytes, peaks.worker),
        _line("driver", plan.driver_bytes, peaks.driver),
        _line("node: workers, driver, engine", plan.node_bytes, peaks.node),
    ]
    _line("object store", plan.object_store_bytes, peaks.object_store)
    _line("engine's own processes", budget.RAY_NODE_BYTES, peaks.engine)
    print("between stages: a worker held " + f"{peaks.worker_by_phase.get('between stages', 0) / MIB:.0f} MiB")
    return all(kept)


def _line(name: str, plan: int, measured: int) -> bool:
    kept = measured <= plan <= 2 * measured
    ratio = plan / measured if measured else float("nan")
    print(f"{name:34}{plan / MIB:10.0f}{measured / MIB:10.0f}{ratio:7.2f}{'' if kept else '  not within 1 to 2'}")
    return kept


if __name__ == "__main__":
    main()
