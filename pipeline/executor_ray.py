"""The executor on Ray: bounded back-pressure, retries for lost workers, a stall limit. The only importer of ray.

Workers get a task and the workplace, both small; everything large goes through storage, so losing a node loses no
work that was stored. Credentials reach workers by the environment of their node, never inside a task.
"""

from __future__ import annotations

import os
import shutil
import signal
import tempfile
import threading
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Any

os.environ.setdefault("RAY_USAGE_STATS_ENABLED", "0")
os.environ.setdefault("RAY_ACCEL_ENV_VAR_OVERRIDE_ON_ZERO", "0")

import ray

from shardfold.blas import CORE_VARIABLE
from shardfold.budget import OBJECT_STORE_BYTES
from shardfold.errors import ClusterFailed, ShardfoldError
from shardfold.tasks import Outcome, Task, Workplace, perform

STALL_SECONDS = 1800.0
LONGEST_TEMPORARY_FOLDER = 30
LOST_WORKER_RETRIES = 3


class RayExecutor:
    """Performs tasks on a Ray cluster, or on a local Ray that it starts and ends itself.

    Parameters
    ----------
    workers : int or None
        Tasks at once; ``None`` takes all CPUs of the cluster.
    address : str or None
        Address of a running cluster; ``None`` uses ``RAY_ADDRESS`` if set, else a local Ray.
    blas : str
        ``any``, or the kernel that every worker must run.

    Raises
    ------
    ClusterFailed
        If Ray cannot be started or reached.
    """

    def __init__(self, workers: int | None, address: str | None, blas: str = "any") -> None:
        self._owns = not ray.is_initialized()
        self._folder: Path | None = None
        address = address or os.environ.get("RAY_ADDRESS")
        if self._owns and address:
            _init(address, {"address": address})
        elif self._owns:
            self._folder = Path(tempfile.mkdtemp(prefix="sf-ray-", dir=_short_temporary_folder()))
            _init("local", _local_options(workers, self._folder))
        cpus = int(ray.cluster_resources().get("CPU", 1))
        # One more than there are CPUs keeps every worker busy; a number that was asked for is kept to.
        self._most_flying = min(workers, cpus) if workers else cpus + 1
        variables = {} if blas == "any" else {"env_vars": {CORE_VARIABLE: blas}}
        self._remote = ray.remote(
            num_cpus=1, max_retries=LOST_WORKER_RETRIES, retry_exceptions=False, runtime_env=variables or None
        )(perform)

    def perform(self, workplace: Workplace, tasks: Sequence[Task]) -> Iterator[tuple[Task, Outcome]]:
        """Yield each task with its outcome as it is done.

        Raises
        ------
        ClusterFailed
            If a worker is lost more often than allowed, or nothing ends for a long time.
        """
        shared = ray.put(workplace)
        waiting = iter(tasks)
        flying: dict[Any, Task] = {}
        # Where the stage ends early, tasks in flight are left to end or to go down with this driver: cancelling one
        # that is just done makes Ray 2.60 abort the process.
        while True:
            while len(flying) < self._most_flying and (task := next(waiting, None)) is not None:
                flying[self._remote.remote(shared, task)] = task
            if not flying:
                return
            done, _ = ray.wait(list(flying), num_returns=1, timeout=STALL_SECONDS, fetch_local=False)
            if not done:
                raise _stalled(len(flying))
            yield flying.pop(done[0]), _get(done[0])

    def nodes(self) -> int:
        """Return the number of live nodes."""
        return sum(1 for node in ray.nodes() if node["Alive"])

    def sees_on_every_node(self, path: Path) -> bool:
        """Return whether a task on each live node finds the file, as a shared folder must."""
        look = ray.remote(num_cpus=0)(os.path.exists)
        pin = ray.util.scheduling_strategies.NodeAffinitySchedulingStrategy
        ids = [node["NodeID"] for node in ray.nodes() if node["Alive"]]
        return all(ray.get([look.options(scheduling_strategy=pin(i, soft=False)).remote(str(path)) for i in ids]))

    def close(self) -> None:
        """End the local Ray, or leave the cluster."""
        if self._owns and ray.is_initialized():
            ray.shutdown()
        if self._folder is not None:
            shutil.rmtree(self._folder, ignore_errors=True)


def _local_options(workers: int | None, folder: Path) -> dict[str, Any]:
    # Ray retries a task that ran out of memory for ever by default, and never removes its session folder.
    os.environ.setdefault("RAY_task_oom_retries", "3")
    return {
        "address": "local",
        "num_cpus": workers,
        "include_dashboard": False,
        "object_store_memory": OBJECT_STORE_BYTES,
        "_temp_dir": str(folder),
    }


def _short_temporary_folder() -> str:
    """Return a folder for Ray's sockets, whose paths may have 107 characters."""
    usual = tempfile.gettempdir()
    return usual if len(usual) <= LONGEST_TEMPORARY_FOLDER else "/tmp"


def _init(place: str, options: dict[str, Any]) -> None:
    try:
        with _sigterm_kept():
            ray.init(logging_level="ERROR", log_to_driver=False, **options)
    except (ConnectionError, RuntimeError, ValueError, TimeoutError) as error:
        raise ClusterFailed(
            "a local Ray could not be started" if place == "local" else "Ray could not be reached",
            where="engine.address",
            rule="a running Ray cluster of this Ray version, or nothing for a local one",
            got=f"{place}: {str(error).splitlines()[0]}",
            remedy="check the address, or run with --set engine.workers=serial",
        ) from error


@contextmanager
def _sigterm_kept() -> Iterator[None]:
    """Keep the program's own handler of SIGTERM: Ray sets one, when it starts, that ends the process with status 15."""
    before = signal.getsignal(signal.SIGTERM)
    if not callable(before) or threading.current_thread() is not threading.main_thread():
        yield
        return
    try:
        yield
    except SystemExit as end:
        if end.code == signal.SIGTERM:
            before(signal.SIGTERM, None)
        raise
    finally:
        signal.signal(signal.SIGTERM, before)


def _get(reference: Any) -> Outcome:
    try:
        outcome: Outcome = ray.get(reference)
    except ray.exceptions.RayTaskError as error:
        cause = error.cause
        if isinstance(cause, ShardfoldError):
            raise cause from None
        raise
    except ray.exceptions.RayError as error:
        raise ClusterFailed(
            "a worker was lost more often than allowed",
            where="Ray",
            rule=f"{LOST_WORKER_RETRIES} retries of a task whose worker dies",
            got=f"{type(error).__name__}: {str(error).strip().splitlines()[0]}",
            remedy="look for lack of memory on the nodes (engine.memory, engine.workers), then run again",
        ) from error
    return outcome


def _stalled(flying: int) -> ClusterFailed:
    return ClusterFailed(
        "nothing has ended for a long time",
        where="Ray",
        rule=f"one task ends within {STALL_SECONDS:g} s",
        got=f"{flying} tasks in flight",
        remedy="see that the cluster has free CPUs and that its nodes answer, then run again",
    )
