"""Events of a run as a person follows them: a bar on a terminal, plain lines elsewhere, nothing when quiet.

Logs go to standard error; standard output belongs to what a command answers.
"""

from __future__ import annotations

import time
from types import TracebackType

from rich.console import Console
from rich.progress import (
    BarColumn,
    MofNCompleteColumn,
    Progress,
    TaskID,
    TextColumn,
    TimeRemainingColumn,
)

from shardfold.events import (
    Committed,
    Event,
    Found,
    Noted,
    Published,
    Refused,
    StageDone,
    StageStarted,
    TaskDone,
)

LINE_SECONDS = 10.0
TOLD_IN_FULL = 20
"""Refused shards that are told with rule, value and remedy; of the others one line is said."""


class Teller:
    """Listens to a run and tells it; use as a context.

    Parameters
    ----------
    quiet : bool
        Say nothing but refused shards.
    """

    def __init__(self, quiet: bool) -> None:
        self._quiet = quiet
        self._console = Console(stderr=True, highlight=False, soft_wrap=True)
        self._bar: Progress | None = None
        self._task: TaskID | None = None
        self._total, self._done, self._bytes, self._bytes_total = 0, 0, 0, 0
        self._shards, self._shards_total = 0, 0
        self._begin = self._said = 0.0
        self._refused = 0

    def __enter__(self) -> Teller:
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        self._end_bar()

    def __call__(self, event: Event) -> None:
        """Tell one event."""
        if isinstance(event, StageStarted):
            self._start(event)
        elif isinstance(event, TaskDone):
            self._advance(event)
        elif isinstance(event, StageDone):
            self._end_stage(event)
        elif isinstance(event, Refused):
            self._refuse(event)
        else:
            self._line(_sentence(event))

    def _refuse(self, event: Refused) -> None:
        if event.standing:
            return
        self._refused += 1
        told = event.message if self._refused <= TOLD_IN_FULL else event.message.partition("\n")[0]
        self._line(f"refused {event.shard}: {told}", always=True)

    def _start(self, event: StageStarted) -> None:
        self._total, self._done = event.tasks, 0
        self._bytes, self._bytes_total = 0, event.bytes_to_read
        self._shards, self._shards_total = 0, event.shards
        self._begin = self._said = time.monotonic()
        if self._quiet:
            return
        if self._console.is_terminal:
            self._bar = Progress(
                TextColumn("{task.description:>12}"),
                BarColumn(bar_width=28),
                MofNCompleteColumn(),
                TextColumn("{task.fields[note]}"),
                TimeRemainingColumn(),
                console=self._console,
                transient=True,
            )
            self._bar.start()
            self._task = self._bar.add_task(event.stage, total=event.tasks, note="")
        else:
            size = f", {_size(event.bytes_to_read)}" if event.bytes_to_read else ""
            self._line(f"{event.stage}: {_count(event.tasks, 'task')}{size}")

    def _advance(self, event: TaskDone) -> None:
        self._done += 1
        self._bytes += event.bytes_read
        self._shards += event.shards
        if self._bar is not None and self._task is not None:
            self._bar.update(self._task, advance=1, note=self._note())
        elif time.monotonic() - self._said >= LINE_SECONDS:
            self._said = time.monotonic()
            left = (self._said - self._begin) / self._done * (self._total - self._done)
            self._line(f"{event.stage}: {self._done} of {self._total}, {self._note()}, about {left:.0f} s left")

    def _end_stage(self, event: StageDone) -> None:
        self._end_bar()
        seconds = time.monotonic() - self._begin
        self._line(f"{event.stage}: {self._done} done in {seconds:.1f} s{', ' + self._note() if self._bytes else ''}")

    def _note(self) -> str:
        if not self._bytes:
            return ""
        rate = self._bytes / max(1e-9, time.monotonic() - self._begin)
        shards = f"{self._shards}/{self._shards_total} shards, " if self._shards_total else ""
        return f"{shards}{_size(self._bytes)}, {_size(rate)}/s"

    def _end_bar(self) -> None:
        if self._bar is not None:
            self._bar.stop()
        self._bar = self._task = None

    def _line(self, text: str, always: bool = False) -> None:
        if text and (always or not self._quiet):
            self._console.print(text, markup=False)


def _sentence(event: Event) -> str:
    if isinstance(event, Found):
        others = ((event.unsettled, "left for later"), (event.refused, "refused"))
        counts = [_count(event.shards, "shard"), *(f"{count} {what}" for count, what in others if count)]
        return f"campaign: {', '.join(counts)}"
    if isinstance(event, Noted):
        return f"note: {event.text}"
    if isinstance(event, Committed):
        return f"ledger {event.number}: {_count(event.shards, 'shard')}, {event.leaves} leaves"
    if isinstance(event, Published):
        return "" if event.new else "nothing new: the result stands as it was published"
    return ""


def _count(count: int, what: str) -> str:
    return f"{count:,} {what}{'' if count == 1 else 's'}"


def _size(count: float) -> str:
    for unit in ("B", "kB", "MB", "GB"):
        if count < 1000:
            return f"{count:.3g} {unit}"
        count /= 1000
    return f"{count:.3g} TB"


