"""Memory of a run's processes while it goes on: sampled from the kernel's own books, by phase of the run.

Private bytes of a process are ``Private_Clean + Private_Dirty`` of ``/proc/PID/smaps_rollup``; the sum over a node is
that of ``Pss``, which counts what processes share once. ``VmHWM`` of ``/proc/PID/status`` is the kernel's own high
mark: no peak escapes it, and code that other processes map too is counted in full.
"""

from __future__ import annotations

import threading
from collections import defaultdict
from dataclasses import dataclass, field
from pathlib import Path

import psutil

SAMPLE_SECONDS = 0.05
LOOK_FOR_NEW_SECONDS = 0.5


@dataclass
class Peaks:
    """Largest bytes seen: private ones of one worker by phase and of the driver; sums over the node, shared once."""

    worker_by_phase: dict[str, int] = field(default_factory=lambda: defaultdict(int))
    resident: int = 0
    driver: int = 0
    object_store: int = 0
    engine: int = 0
    node: int = 0
    samples: int = 0

    @property
    def worker(self) -> int:
        """Return the largest private memory of one worker."""
        return max(self.worker_by_phase.values(), default=0)


class Sampler:
    """Samples this process and what it started, but for one program, until it is left; set ``phase`` as it changes."""

    def __init__(self, without: str) -> None:
        self.peaks = Peaks()
        self.phase = "start"
        self._without = without
        self._end = threading.Event()
        self._thread = threading.Thread(target=self._sample, name="memory sampler")

    def __enter__(self) -> Sampler:
        self._thread.start()
        return self

    def __exit__(self, *error: object) -> None:
        self._end.set()
        self._thread.join()

    def _sample(self) -> None:
        me = psutil.Process()
        rounds = round(LOOK_FOR_NEW_SECONDS / SAMPLE_SECONDS)
        processes: dict[int, str] = {}
        while not self._end.wait(SAMPLE_SECONDS):
            if self.peaks.samples % rounds == 0:
                processes = self._processes(me)
            self._take(processes)
            self.peaks.samples += 1

    def _processes(self, me: psutil.Process) -> dict[int, str]:
        found = {me.pid: "driver"}
        for child in me.children(recursive=True):
            try:
                line = child.cmdline()
            except psutil.NoSuchProcess:
                continue
            if line and not line[0].endswith(self._without):
                found[child.pid] = "worker" if line[0].startswith("ray::") else "engine"
        return found

    def _take(self, processes: dict[int, str]) -> None:
        peaks, node, engine = self.peaks, 0, 0
        for pid, role in processes.items():
            books = rollup(pid)
            if not books:
                continue
            private = books["Private_Clean"] + books["Private_Dirty"]
            node += books["Pss"]
            peaks.object_store = max(peaks.object_store, books.get("Pss_Shmem", 0))
            if role == "worker":
                peaks.worker_by_phase[self.phase] = max(peaks.worker_by_phase[self.phase], private)
                peaks.resident = max(peaks.resident, _in_bytes(f"/proc/{pid}/status").get("VmHWM", 0))
            elif role == "driver":
                peaks.driver = max(peaks.driver, private)
            else:
                engine += books["Pss"] - books.get("Pss_Shmem", 0)
        peaks.engine = max(peaks.engine, engine)
        peaks.node = max(peaks.node, node)


def rollup(pid: int) -> dict[str, int]:
    """Return the memory books of a process in bytes; empty if it is gone."""
    return _in_bytes(f"/proc/{pid}/smaps_rollup")


def _in_bytes(path: str) -> dict[str, int]:
    """Return the lines ``Name:  123 kB`` of a file of the kernel."""
    try:
        lines = [line.split() for line in Path(path).read_text().splitlines()]
    except (FileNotFoundError, ProcessLookupError, PermissionError):
        return {}
    return {words[0].rstrip(":"): int(words[1]) * 1024 for words in lines if words[-1] == "kB"}
