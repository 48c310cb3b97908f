"""``shardfold check`` says which summary a run would keep and why, and that ``reads: auto`` may read more."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from campaigns import even_times, job_text, write_vector
from terminal import shardfold

from shardfold.events import StageStarted
from shardfold.executor import SerialExecutor
from shardfold.job import load_job
from shardfold.run import run
from shardfold.store import open_store

SAMPLES = 400


class Desk:
    """A campaign of some channels, and what ``check`` says of jobs on it."""

    def __init__(self, folder: Path, channels: int = 40) -> None:
        self.folder = folder
        rng = np.random.Generator(np.random.PCG64(3))
        matrix = rng.standard_normal((channels, 4)) @ rng.standard_normal((4, SAMPLES))
        matrix += 0.01 * rng.standard_normal(matrix.shape)
        write_vector(open_store(f"{folder}/campaign"), matrix, even_times(SAMPLES), shards=2, row_group=40)

    def job(self, design: dict[str, Any] | None = None, **modes: Any) -> Path:
        path = self.folder / "job.yaml"
        blocks = {"design": {"leaf": "10 s", **(design or {})}, "modes": {"rank": 3, **modes}}
        places = (f"{self.folder}/campaign", f"{self.folder}/dossier")
        path.write_text(job_text(*places, "vector", engine={"workers": "serial"}, **blocks))
        return path

    def says(self, job: Path) -> tuple[str, dict[str, Any], dict[str, str]]:
        """Return the summary as JSON has it, all of the JSON, and the lines of the text by their first word."""
        document = shardfold("check", job, "--json").document
        text = shardfold("check", job)
        assert text.status == 0, text.err
        lines = {line.split()[0]: line.split(maxsplit=1)[1] for line in text.out.splitlines()}
        assert lines["summary"] == document["summary"]
        return document["summary"], document, lines


CASES = {
    "few channels": (40, {}, "exact: 40 channels are few enough"),
    "few, co-moments asked for": (40, {"summary": "whole"}, "whole: 40 channels are few enough"),
    "few, a factor asked for": (40, {"summary": "exact"}, "exact: asked for"),
    "many channels": (300, {}, "whole, probe of 64 rows: every shard holds all channels"),
    "many, co-moments asked for": (300, {"summary": "whole"}, "whole, probe of 64 rows: every shard holds all"),
    "many, a factor asked for": (300, {"summary": "exact"}, "exact: asked for"),
}


@pytest.mark.parametrize("name", CASES)
def test_check_names_the_summary_and_why_and_the_run_keeps_to_it(name: str, tmp_path: Path) -> None:
    channels, design, words = CASES[name]
    desk = Desk(tmp_path, channels)
    job = desk.job(design)
    summary, document, _ = desk.says(job)
    assert summary.startswith(words)
    identity = "probe" not in words
    assert ("coefficients are read again" in summary) == identity
    once, coefficients = document["reads"]["bytes_first"], document["reads"]["bytes_for_coefficients"]
    assert coefficients == (once if identity else 0)
    stages: dict[str, int] = {}

    def listen(event: Any) -> None:
        if isinstance(event, StageStarted) and event.bytes_to_read:
            stages[event.stage] = event.bytes_to_read

    report = run(load_job(job, ()), SerialExecutor, listen)
    assert stages == {"read": once} | ({"coefficients": coefficients} if identity else {})
    design_made = shardfold("show", report.location, "--json").document["manifest"]["design"]
    assert design_made["summary"] == words.split(":")[0].split(",")[0]
    assert design_made["identity"] == identity


@pytest.mark.parametrize(("kept", "asked"), [("whole", "auto"), ("exact", "auto")])
def test_what_a_dossier_was_created_with_is_said(kept: str, asked: str, tmp_path: Path) -> None:
    desk = Desk(tmp_path)
    assert shardfold("run", desk.job({"summary": kept})).status == 0
    summary, document, lines = desk.says(desk.job({"summary": asked}))
    assert summary.startswith(f"{kept}: ")
    assert document["dossier"] == lines["dossier"] == "exists"
    assert ("what the dossier was created with" in summary) == (kept == "whole")  # auto would take the factor today


def test_another_summary_than_the_stored_one_is_refused_by_name(tmp_path: Path) -> None:
    desk = Desk(tmp_path)
    assert shardfold("run", desk.job({"summary": "exact"})).status == 0
    answer = shardfold("check", desk.job({"summary": "whole"}))
    assert answer.status == 2
    answer.says("design.summary", "stored (exact), asked (whole)")


@pytest.mark.parametrize(("channels", "more"), [(300, True), (40, False)])
def test_auto_says_that_more_reads_may_follow_where_they_can(channels: int, more: bool, tmp_path: Path) -> None:
    desk = Desk(tmp_path, channels)
    for reads in ("auto", 1):
        _, document, lines = desk.says(desk.job(reads=reads))
        expected = more and reads == "auto"
        assert document["reads"]["passes"] == 1
        assert document["reads"]["more_if_needed"] is expected
        assert ("more where the tolerance asks for it" in lines["reads"]) is expected
    _, document, _ = desk.says(desk.job(reads=3))
    assert document["reads"]["passes"] == (3 if more else 1)
    assert document["reads"]["more_if_needed"] is False


@pytest.mark.parametrize("channels", [300, 40])
def test_with_everything_stored_check_says_so(channels: int, tmp_path: Path) -> None:
    desk = Desk(tmp_path, channels)
    job = desk.job(reads="auto")
    assert shardfold("run", job).status == 0
    _, document, lines = desk.says(job)
    assert document["cells"]["stored"] == document["cells"]["all"] > 1
    assert document["reads"]["bytes_first"] == 0
    assert lines["dossier"] == "exists"
