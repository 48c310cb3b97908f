"""A whole run against reading and decoding the same shards and throwing them away, with the same Ray workers.

Run ``python tests/bench/run_against_reading.py``. It starts an S3 server and a local Ray, writes one vector campaign
per compression, and in turn reads it through the package's readers (one task per shard, so many at once as there are
workers) and runs it into a new dossier: inventory, sums, modes, coefficients, result and all. The engine's start is in
neither. It prints every pair and the ratios, by the clock and by processor time (driver, workers and S3 server), and
the share of the machine that others took meanwhile: a pair counts for what it says only where that is small.

On one machine the S3 server shares the processors with the workers, and nothing waits for a network. ``--link 100``
lets each worker wait in every read as if its bytes came at 100 MB/s, which takes no processor time.
"""

from __future__ import annotations

import argparse
import os
import threading
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from statistics import median
from typing import Any

import big_campaign
import psutil
import ray

from shardfold.events import StageDone, StageStarted
from shardfold.executor_ray import RayExecutor
from shardfold.ids import Shard
from shardfold.job import Job, parse_job
from shardfold.local_s3 import Seaweed
from shardfold.readers import reader_for
from shardfold.run import run
from shardfold.site import look, settings
from shardfold.store import connect
from shardfold.store_s3 import S3Adapter


@dataclass(frozen=True)
class Cost:
    """What something took: seconds by the clock and of processors, and the share of the machine that others took."""

    wall: float
    processor: float
    others: float


def main() -> None:
    """Print one table per compression."""
    parser = argparse.ArgumentParser(description=__doc__)
    big_campaign.options(parser, gigabytes=2.0)
    parser.add_argument("--compressions", nargs="+", default=["none", "zstd"])
    parser.add_argument("--workers", type=int, default=2)
    parser.add_argument("--repeats", type=int, default=3)
    parser.add_argument("--link", type=float, default=0.0, help="MB/s of one worker's reads; 0: as fast as they come")
    given = parser.parse_args()
    with Seaweed() as server:
        os.environ.update(server.environment)
        if given.link:
            # Ray passes the hook to every worker; the executor then finds Ray running.
            hook = {"worker_process_setup_hook": _slow_link(given.link * 1e6)}
            ray.init(num_cpus=given.workers, include_dashboard=False, log_to_driver=False, runtime_env=hook)
        engine = RayExecutor(given.workers, None)
        try:
            for compression in given.compressions:
                campaign = big_campaign.chosen(given, compression)
                server.make_bucket(compression.lower() + "-bench")
                _compare(campaign, server.endpoint, given.workers, given.repeats)
        finally:
            engine.close()
            ray.shutdown()


def _slow_link(bytes_per_second: float) -> Callable[[], None]:
    """Return what makes the reads of a process take at least as long as a link would that its threads share."""

    def slow_down() -> None:
        read, link = S3Adapter.read, threading.Lock()

        def late(*arguments: Any) -> memoryview:
            with link:
                begin = time.perf_counter()
                data = read(*arguments)
                time.sleep(max(0.0, begin + len(data) / bytes_per_second - time.perf_counter()))
            return data

        S3Adapter.read = late  # type: ignore[method-assign]

    return slow_down


def _compare(campaign: big_campaign.Campaign, endpoint: str, workers: int, repeats: int) -> None:
    bucket = f"s3://{campaign.compression.lower()}-bench"
    stored = big_campaign.write_apart(f"{bucket}/campaign", endpoint, campaign)
    print(f"{campaign}, {stored / 1e9:.2f} GB stored, {workers} workers")
    pairs = []
    stages: dict[str, float] = {}
    for repeat in range(repeats + 1):
        job = _job(campaign, bucket, endpoint, workers, repeat)
        reading = _cost(_read, job, workers)
        whole = _cost(_run, job, workers, stages)
        if repeat == 0:
            continue  # imports and first connections
        pairs.append((reading, whole))
        _line("wall", reading.wall, whole.wall)
        _line(", processor", reading.processor, whole.processor)
        print(f", others {reading.others:.0%} and {whole.others:.0%}")
    walls, processor = [w.wall / r.wall for r, w in pairs], [w.processor / r.processor for r, w in pairs]
    rate = campaign.values_bytes / median(whole.wall for _, whole in pairs) / 1e6
    print(
        f"  median ratio {median(walls):.2f}, by processor time {median(processor):.2f}; the run does {rate:.0f} MB/s"
    )
    print("  the last run: " + ", ".join(f"{stage} {seconds:.1f} s" for stage, seconds in stages.items()))


def _line(name: str, reading: float, whole: float) -> None:
    print(f"  {name}: reading {reading:.1f} s, run {whole:.1f} s, ratio {whole / reading:.2f}", end="")


def _job(campaign: big_campaign.Campaign, bucket: str, endpoint: str, workers: int, repeat: int) -> Job:
    text = f"""
campaign: speed
source: {campaign.source(f"{bucket}/campaign", endpoint)}
dossier: {{location: {bucket}/dossier-{repeat}, storage: {{endpoint: '{endpoint}', region: us-east-1}}}}
engine: {{workers: {workers}}}
"""
    return parse_job(text, "bench.yaml")


def _cost(work: Callable[..., None], *arguments: Any) -> Cost:
    busy, own, begin = _busy_seconds(), _own_seconds(), time.perf_counter()
    work(*arguments)
    wall, own = time.perf_counter() - begin, _own_seconds() - own
    return Cost(wall, own, max(0.0, _busy_seconds() - busy - own) / (wall * psutil.cpu_count()))


def _busy_seconds() -> float:
    """Return what all processors of the machine have been busy for, time taken by a hypervisor included."""
    times = psutil.cpu_times()
    return sum(times) - times.idle - times.iowait - times.guest - times.guest_nice


def _own_seconds() -> float:
    """Return what this process and all that it started have used; the workers live on from repeat to repeat."""
    me = psutil.Process()
    times = [process.cpu_times() for process in (me, *me.children(recursive=True))]
    return sum(t.user + t.system for t in times)


def _read(job: Job, workers: int) -> None:
    """Read every shard, a task each; what is decoded is counted and dropped."""
    site = look(job, lambda event: None)
    read = ray.remote(num_cpus=1)(_read_shard)
    waiting: Iterator[Shard] = iter(site.shards.values())
    flying, rows = [], 0
    while True:
        while len(flying) < workers and (shard := next(waiting, None)) is not None:
            flying.append(read.remote(job, shard))
        if not flying:
            break
        (done,), flying = ray.wait(flying, num_returns=1)
        rows += ray.get(done)
    assert rows == sum(shard.rows for shard in site.shards.values())


def _read_shard(job: Job, shard: Shard) -> int:
    reader, store = reader_for(job.source), connect(settings(job, "source"))
    batches = reader.batches(store, shard, 0, len(shard.groups), shard.channels)
    return sum(batch.values.shape[1] for batch in batches)


def _run(job: Job, workers: int, stages: dict[str, float]) -> None:
    begun: dict[str, float] = {}

    def listen(event: object) -> None:
        if isinstance(event, StageStarted):
            begun[event.stage] = time.perf_counter()
        elif isinstance(event, StageDone):
            stages[event.stage] = time.perf_counter() - begun[event.stage]

    # The executor finds the Ray that main started, and leaves it running.
    run(job, lambda: RayExecutor(workers, None), listen)


if __name__ == "__main__":
    main()
