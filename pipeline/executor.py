"""The executor's promises, and the serial one that is the oracle for every other.

Promises: every task is performed at least once and reported exactly once, in any order; an outcome never depends on
which worker made it; at most a few tasks are in flight per worker, so memory does not grow with the campaign; the
first error that is not a refused shard ends the stage, and nothing half-done is visible in storage then.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from typing import Protocol

from shardfold.tasks import Outcome, Task, Workplace, perform


class Executor(Protocol):
    """Performs tasks."""

    def perform(self, workplace: Workplace, tasks: Sequence[Task]) -> Iterator[tuple[Task, Outcome]]:
        """Yield each task with its outcome as it is done; refused shards are outcomes, other errors are raised."""
        ...

    def nodes(self) -> int:
        """Return on how many machines the workers are."""
        ...

    def close(self) -> None:
        """Give back what the executor holds. Idempotent."""
        ...


class SerialExecutor:
    """Performs tasks one after the other in this process."""

    def perform(self, workplace: Workplace, tasks: Sequence[Task]) -> Iterator[tuple[Task, Outcome]]:
        """Yield each task with its outcome, in order."""
        for task in tasks:
            yield task, perform(workplace, task)

    def nodes(self) -> int:
        """Return 1: this machine."""
        return 1

    def close(self) -> None:
        """Do nothing; no resources are held."""


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
