"""Whatever happens to a campaign, in any order: its result has the bits of a new dossier of what is in, and is sound.

Shards come, come late, are replaced, withdrawn, readmitted, vanish and are taken out by number; runs happen now and
then. The model is a dictionary. Each shard is alone in its leaf, so that a vanished one blocks no other.
"""

from __future__ import annotations

import os
import shutil
import tempfile
from pathlib import Path

import numpy as np
from campaigns import START_NS, job_text, put_table
from hypothesis import settings
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, initialize, invariant, precondition, rule

from shardfold.decisions import readmit, withdraw
from shardfold.executor import SerialExecutor
from shardfold.job import parse_job
from shardfold.run import Report, run
from shardfold.store import open_store
from shardfold.verify import verify

CHANNELS, ROWS, STEP_NS, SHARDS = 24, 16, 10**9, 6
NUMBERS = st.integers(0, SHARDS - 1)


def write(folder: Path, number: int, content: int) -> None:
    """Write a shard whose values depend on its number and on which content it has; each content has a time of its own.

    The time of a local file is its version.
    """
    rng = np.random.Generator(np.random.PCG64([number, content]))
    values = rng.standard_normal((CHANNELS, 3)) @ rng.standard_normal((3, ROWS)) + 0.1 * number
    times = START_NS // (ROWS * STEP_NS) * ROWS * STEP_NS + STEP_NS * (number * ROWS + np.arange(ROWS, dtype=np.int64))
    columns = {"t": times.astype("datetime64[ns]"), **{f"c{i:02d}": row for i, row in enumerate(values)}}
    put_table(open_store(f"{folder}"), name(number), columns)
    os.utime(folder / name(number), (10**9 + content, 10**9 + content))


def name(number: int) -> str:
    return f"part-{number}.parquet"


def run_in(folder: Path, prune: int | None = None) -> Report:
    design, modes = {"leaf": f"{ROWS} s", "width": 8}, {"rank": 2}
    text = job_text(f"{folder}/campaign", f"{folder}/dossier", "wide", design=design, modes=modes)
    return run(parse_job(text, "job.yaml"), SerialExecutor, lambda event: None, prune)


def files(report: Report) -> dict[str, bytes]:
    folder = Path(report.location)
    return {str(path.relative_to(folder)): path.read_bytes() for path in sorted(folder.rglob("*.parquet"))}


class History(RuleBasedStateMachine):
    """The dossier, and what should be in it: the content of each shard that is listed, in, and withdrawn."""

    @initialize()
    def begin(self) -> None:
        self.folder = Path(tempfile.mkdtemp())
        self.listed: dict[int, int] = {}
        self.inside: dict[int, int] = {}
        self.withdrawn: dict[int, int] = {}
        self.contents = 0
        for number in (1, 3):
            self.appears(number)
        self.runs()

    def teardown(self) -> None:
        if hasattr(self, "folder"):
            shutil.rmtree(self.folder)

    @property
    def store(self):  # type: ignore[no-untyped-def]
        return open_store(f"{self.folder}/dossier")

    @rule(number=NUMBERS)
    def appears(self, number: int) -> None:
        """A shard is new, late, or another version of one that was there."""
        self.contents += 1
        write(self.folder / "campaign", number, self.contents)
        self.listed[number] = self.contents

    @precondition(lambda self: len(self.listed) > 1)
    @rule(number=NUMBERS)
    def vanishes(self, number: int) -> None:
        if number in self.listed and len(self.listed) > 1:
            del self.listed[number]
            (self.folder / "campaign" / name(number)).unlink()

    @precondition(lambda self: len(self.inside) > 1)
    @rule(number=NUMBERS)
    def is_withdrawn(self, number: int) -> None:
        if number in self.inside:
            withdraw(self.store, [name(number)], "a test", "test")
            self.withdrawn[number] = self.inside.pop(number)

    @rule(number=NUMBERS)
    def is_readmitted(self, number: int) -> None:
        if number in self.withdrawn:
            readmit(self.store, [name(number)], "a test", "test")
            self.inside[number] = self.withdrawn.pop(number)

    @rule()
    def runs(self) -> None:
        self._expect_listed()
        if self.inside:
            self._compare(run_in(self.folder))

    @rule()
    def runs_and_prunes(self) -> None:
        vanished = [number for number in self.inside if number not in self.listed]
        kept = {n: c for n, c in self.inside.items() if n in self.listed}
        coming = {n: c for n, c in self.listed.items() if self.withdrawn.get(n) != c}
        if vanished and (kept or coming):
            self.inside = kept
            self._expect_listed()
            self._compare(run_in(self.folder, len(vanished)))

    def _expect_listed(self) -> None:
        """What is listed comes in, but for versions that were withdrawn."""
        for number, content in self.listed.items():
            if self.withdrawn.get(number) != content:
                self.inside[number] = content
                self.withdrawn.pop(number, None)

    def _compare(self, report: Report) -> None:
        fresh = Path(tempfile.mkdtemp())
        try:
            for number, content in self.inside.items():
                write(fresh / "campaign", number, content)
            assert files(report) == files(run_in(fresh))
        finally:
            shutil.rmtree(fresh)

    @invariant()
    def is_sound(self) -> None:
        if hasattr(self, "folder"):
            assert verify(self.store).faults == []


TestAnyHistory = History.TestCase
TestAnyHistory.settings = settings(max_examples=8, stateful_step_count=14, deadline=None, derandomize=True)
