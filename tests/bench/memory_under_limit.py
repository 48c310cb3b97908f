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

import big_campaign
from process_memory import Peaks, Sampler

from shardfold import budget
from shardfold.events import StageDone, StageStarted
from shardfold.executor_ray import RayExecutor
from shardfold.job import Job, parse_job
from shardfold.local_s3 import Seaweed
from shardfold.plan import cut
from shardfold.run import run
from shardfold.site import look

CAMPAIGN = "s3://bench/campaign"
MIB = 2**20


def main() -> None:
    """Print one table, and fail where plan and reality are apart."""
    parser = argparse.ArgumentParser(description=__doc__)
    big_campaign.options(parser, gigabytes=6.0)
    parser.add_argument("--memory", default="600 MiB", help="engine.memory")
    parser.add_argument("--workers", type=int, default=2)
    parser.add_argument("--set", action="append", default=[], help="key=value of the job")
    given = parser.parse_args()
    campaign = big_campaign.chosen(given)
    with Seaweed() as server:
        os.environ.update(server.environment)
        server.make_bucket("bench")
        begin = time.perf_counter()
        stored = big_campaign.write_apart(CAMPAIGN, server.endpoint, campaign)
        print(f"{campaign}, {stored / 1e9:.2f} GB stored (written in {time.perf_counter() - begin:.0f} s)")
        job = _job(campaign, server.endpoint, given)
        peaks, seconds = _measure(job, given.workers)
        plan = _plan(job, given.workers)
    print(f"run: {seconds:.1f} s, {campaign.values_bytes / seconds / 1e6:.0f} MB/s; {peaks.samples} samples of memory")
    sys.exit(0 if _print_table(plan, peaks, given.memory) else 1)


def _job(campaign: big_campaign.Campaign, endpoint: str, given: argparse.Namespace) -> Job:
    text = f"""
campaign: memory
source: {campaign.source(CAMPAIGN, endpoint)}
dossier: {{location: s3://bench/dossier, storage: {{endpoint: '{endpoint}', region: us-east-1}}}}
engine: {{memory: {given.memory}, workers: {given.workers}}}
"""
    return parse_job(text, "bench.yaml", given.set)


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
    shape = design.shape(design.width)
    cells = cut(list(site.shards.values()), design, 1, shape, "").cells
    return budget.budget(design, shape, cells, job.modes.rank, workers, False)


def _print_table(plan: budget.Budget, peaks: Peaks, limit: str) -> bool:
    print(f"\n{'':34}{'plan MiB':>10}{'measured':>10}{'ratio':>7}")
    for phase, terms in plan.phases.items():
        _line(f"worker, {phase}", sum(terms.values()), peaks.worker_by_phase.get(phase, 0))
        print("    " + ", ".join(f"{term} {size / MIB:.0f}" for term, size in terms.items()))
    kept = [
        _line(f"worker, largest (limit {limit})", plan.worker_bytes, peaks.worker),
        _line("  resident, shared code included", plan.worker_bytes, peaks.resident),
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
