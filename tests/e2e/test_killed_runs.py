"""A run killed at any moment is finished by the same command: same bits, nothing read twice, nothing half-made seen.

The moment is a request: a forwarder in front of the S3 server kills the process with SIGKILL when the n-th request
comes in, so no clock decides. GETs are counted there too, independently of the package's own counting.
"""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import threading
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from shardfold import layout
from shardfold.artifacts import unpack
from shardfold.store import Store, open_store

CHANNELS, SHARDS, ROWS, GROUPS = 240, 12, 1000, 2
KILLS = 10


def write_campaign(store: Store) -> None:
    """Write twelve shards of two row groups, each about a megabyte, a quarter of an hour long."""
    rng = np.random.Generator(np.random.PCG64(11))
    patterns = rng.standard_normal((CHANNELS, 6)) * 2.0 ** -np.arange(6)
    step = 900 * 10**9 // ROWS
    for number in range(SHARDS):
        times = 1_932_000_300 * 10**9 + (number * ROWS + np.arange(ROWS)) * step
        values = (patterns @ rng.standard_normal((6, ROWS)) + 0.01 * rng.standard_normal((CHANNELS, ROWS))).T
        column = pa.FixedSizeListArray.from_arrays(pa.array(values.astype(np.float32).ravel()), CHANNELS)
        table = pa.table({"t": pa.array(times, pa.timestamp("ns")), "v": column})
        sink = pa.BufferOutputStream()
        pq.write_table(table, sink, row_group_size=ROWS // GROUPS, compression="none")
        store.put(f"part-{number:03d}.parquet", bytes(sink.getvalue()))


def write_job(path: Path, bucket: Any, endpoint: str, dossier: str, workers: str, design: str) -> Path:
    storage = f'storage: {{endpoint: "{endpoint}"}}'
    path.write_text(
        f"""
campaign: killed
source: {{location: {bucket.location}/campaign, layout: vector, time: t, values: v, settle: 0 s, {storage}}}
dossier: {{location: {bucket.location}/{dossier}, {storage}}}
design: {{{design}, leaf: 15 min}}
modes: {{rank: 4, reads: 2}}
engine: {{workers: {workers}}}
"""
    )
    return path


def start(job: Path) -> subprocess.Popen[bytes]:
    environment = {**os.environ, "RAY_USAGE_STATS_ENABLED": "0", "RAY_AUTH_MODE": "disabled"}
    return subprocess.Popen(
        [sys.executable, "-m", "shardfold", "run", str(job), "--quiet"],
        env=environment,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
    )


def finish(job: Path) -> None:
    process = start(job)
    _, errors = process.communicate(timeout=120)
    assert process.returncode == 0, errors.decode()


class KillAt:
    """Kills a process when the n-th request comes in; later requests wait for its end."""

    def __init__(self, proxy: Any, number: int) -> None:
        self._left, self._lock = number, threading.Lock()
        self.process: subprocess.Popen[bytes] | None = None
        self.killed = False
        proxy.before = self

    def __call__(self, method: str, path: str) -> None:
        with self._lock:
            self._left -= 1
            if self._left == 0 and self.process is not None and self.process.poll() is None:
                os.kill(self.process.pid, signal.SIGKILL)
                self.killed = True


def results(store: Store) -> dict[str, dict[str, bytes]]:
    """Return the Parquet files of every published result, by folder."""
    keys = [info.key for info in store.list(layout.RESULTS)]
    folders = [parsed[1] for key in keys if (parsed := layout.parse_manifest(key)) is not None]
    return {
        folder: {
            key.removeprefix(folder): bytes(store.read(key))
            for key in keys
            if key.startswith(folder) and key.endswith(".parquet")
        }
        for folder in folders
    }


def whole_objects(store: Store) -> set[str]:
    """Assert that every object under a final name is whole; return the names of the stored cells of the first read."""
    cells = set()
    for info in store.list():
        data = bytes(store.read(info.key))
        parsed = layout.parse_cell(info.key)
        if parsed is not None or layout.parse_node(info.key) is not None:
            unpack(data, "cell" if parsed else "sum", info.key)
        elif info.key.endswith(".parquet"):
            pq.read_metadata(pa.BufferReader(data))
        if parsed is not None and parsed[0] == 1:
            cells.add(info.key)
    return cells


def requests_of_a_run(bucket: Any, proxy: Any, path: Path, workers: str, design: str) -> tuple[int, dict[str, bytes]]:
    """Run undisturbed; return how many requests it made and the Parquet files of its result."""
    proxy.forget()
    finish(write_job(path / "whole.yaml", bucket, proxy.endpoint, "whole", workers, design))
    (undisturbed,) = results(open_store(f"{bucket.location}/whole", bucket.endpoint)).values()
    return sum(proxy.counts().values()), undisturbed


def kill_and_finish(
    bucket: Any, proxy: Any, path: Path, how: tuple[str, str], moment: int, number: int, undisturbed: dict[str, bytes]
) -> bool:
    """Kill one run at a request, finish it, and hold the outcome against the undisturbed run; was it killed?"""
    name = f"killed-{number}"
    job = write_job(path / f"{name}.yaml", bucket, proxy.endpoint, name, *how)
    trap = KillAt(proxy, moment)
    process = trap.process = start(job)
    process.communicate(timeout=120)
    proxy.before = None
    dossier = open_store(f"{bucket.location}/{name}", bucket.endpoint)
    stored = whole_objects(dossier)
    assert len(results(dossier)) <= (0 if trap.killed else 1)
    shards_done = {unpack(dossier.read(key), "cell", key)[0]["pieces"][0]["shard"] for key in stored}
    proxy.forget()
    finish(job)
    for shard in shards_done:
        # The second read, or that of the coefficients, takes a footer and two row groups; the first read nothing but,
        # at most, a footer.
        assert proxy.count("GET", f"campaign/{shard}") <= 1 + 1 + GROUPS
    (again,) = results(dossier).values()
    assert again == undisturbed
    return trap.killed


PROBE = "width: 20"


@pytest.mark.parametrize(
    ("workers", "design", "kills"),
    [("serial", PROBE, KILLS), ("2", PROBE, 2), ("serial", "summary: exact", 2)],
    ids=["serial", "2", "exact"],
)
def test_a_killed_run_is_finished_by_the_same_command(
    bucket: Any, proxy: Any, tmp_path: Path, workers: str, design: str, kills: int
) -> None:
    write_campaign(open_store(f"{bucket.location}/campaign", bucket.endpoint))
    total, undisturbed = requests_of_a_run(bucket, proxy, tmp_path, workers, design)
    rng = np.random.Generator(np.random.PCG64(2031))
    moments = rng.choice(np.arange(3, total - 2), size=kills, replace=False)
    killed = [
        kill_and_finish(bucket, proxy, tmp_path, (workers, design), int(moment), number, undisturbed)
        for number, moment in enumerate(moments)
    ]
    assert sum(killed) >= kills - 1  # a request count may be a little lower than in the undisturbed run
