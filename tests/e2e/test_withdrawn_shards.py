"""Shards taken out by decision leave no trace in the result's bits, and come back without being read again."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from campaigns import even_times, job_text, with_spectrum, write_vector
from terminal import shardfold

from shardfold import layout, ledger
from shardfold.executor import SerialExecutor
from shardfold.job import parse_job
from shardfold.run import Report, run
from shardfold.store import open_store

CHANNELS, SAMPLES, SHARDS, STEP_NS = 200, 1280, 64, 10**9
SPOILED = "part-021.parquet"
BECAUSE = ("--because", "a gauge came loose")


class Place:
    """A campaign of 64 shards, one for each leaf or several to one, and its dossier."""

    def __init__(self, folder: Path, leaf: str, summary: str, *, without: str = "") -> None:
        self.folder = folder
        matrix = with_spectrum(CHANNELS if summary == "whole" else 40, SAMPLES, 2.0 ** -np.arange(12)) * 100
        width = SAMPLES // SHARDS
        matrix[3, 21 * width + 5] = 1e30
        self.campaign, self.dossier = open_store(f"{folder}/campaign"), open_store(f"{folder}/dossier")
        write_vector(self.campaign, matrix, even_times(SAMPLES, STEP_NS), shards=SHARDS)
        if without:
            (folder / "campaign" / without).unlink()
        text = job_text(
            f"{folder}/campaign", f"{folder}/dossier", "vector",
            design={"leaf": leaf, "width": 40, "summary": summary}, modes={"rank": 5}, engine={"workers": "serial"},
        )  # fmt: skip
        self.job = folder / "job.yaml"
        self.job.write_text(text)

    def run(self) -> Report:
        return run(parse_job(self.job.read_text(), "job.yaml"), SerialExecutor, lambda event: None)

    def decide(self, command: str, *arguments: str) -> Any:
        return shardfold(command, self.job, *arguments)

    def files(self, report: Report) -> dict[str, bytes]:
        folder = Path(report.location)
        return {str(path.relative_to(folder)): path.read_bytes() for path in sorted(folder.rglob("*.parquet"))}


KINDS = {"leaf each": ("20 s", "whole"), "together": ("5 min", "whole"), "exact": ("20 s", "exact")}


@pytest.fixture(params=KINDS.values(), ids=KINDS.keys())
def kind(request: pytest.FixtureRequest) -> tuple[str, str]:
    found: tuple[str, str] = request.param
    return found


def test_without_a_spoiled_shard_the_bits_are_those_of_a_dossier_that_never_had_it(
    kind: tuple[str, str], tmp_path: Path
) -> None:
    place, clean = Place(tmp_path / "a", *kind), Place(tmp_path / "b", *kind, without=SPOILED)
    spoiled = place.run()
    answer = place.decide("withdraw", SPOILED, *BECAUSE)
    assert answer.status == 0
    assert "a run is outstanding" in answer.out
    mended = place.run()
    assert mended.new
    assert mended.withdrawn == {SPOILED: "a gauge came loose"}
    wanted = clean.run()
    assert place.files(mended) == clean.files(wanted)
    assert place.files(mended) != place.files(spoiled)
    manifest = json.loads((Path(mended.location) / layout.MANIFEST).read_text())
    assert [(w["key"], w["reason"]) for w in manifest["withdrawn"]] == [(SPOILED, "a gauge came loose")]
    assert SPOILED not in [shard["key"] for shard in manifest["shards"]]

    assert place.decide("readmit", SPOILED, "--because", "it was another gauge").status == 0
    again = place.run()
    assert place.files(again) == place.files(spoiled)
    campaign = sum(path.stat().st_size for path in (tmp_path / "a" / "campaign").iterdir())
    # Cells are stored; a triangular factor reads for the coefficients, and the end of each of these tiny files twice.
    assert again.bytes_read <= (2 * campaign if kind[1] == "exact" else 0)
    assert ledger.load(place.dossier).shards[SPOILED].state == "in"


def test_a_withdrawn_shard_alone_in_its_leaf_costs_no_reading(tmp_path: Path) -> None:
    place = Place(tmp_path, "20 s", "whole")
    place.run()
    place.decide("withdraw", SPOILED, *BECAUSE)
    assert place.run().bytes_read == 0
    assert place.run().new is False


def test_decisions_that_change_nothing_and_that_cannot_be(tmp_path: Path) -> None:
    place = Place(tmp_path, "20 s", "whole")
    assert place.decide("withdraw", SPOILED, *BECAUSE).status == 2  # no dossier yet
    place.run()
    place.decide("withdraw", SPOILED, *BECAUSE)
    number = ledger.load(place.dossier).number
    twice = place.decide("withdraw", SPOILED, *BECAUSE)
    assert (twice.status, twice.out) == (0, f"{SPOILED}: as it was\n")
    assert ledger.load(place.dossier).number == number
    unknown = place.decide("withdraw", "part-21.parquet", *BECAUSE)
    assert unknown.status == 2
    unknown.says("a shard is not in the ledger", f"did you mean {SPOILED}?")
    blank = place.decide("withdraw", "part-001.parquet", "--because", " ")
    assert blank.status == 2
    blank.says("a decision needs a reason")
    check = json.loads(shardfold("check", place.job, "--json").out)
    assert (check["shards"]["withdrawn"], check["shards"]["to_take_in"]) == (1, SHARDS - 1)


def test_a_new_version_of_a_withdrawn_shard_comes_in(tmp_path: Path) -> None:
    place, clean = Place(tmp_path / "a", "20 s", "whole"), Place(tmp_path / "b", "20 s", "whole")
    place.run()
    place.decide("withdraw", SPOILED, *BECAUSE)
    place.run()
    for each in (place, clean):
        mended = np.ones((CHANNELS, SAMPLES)) * np.arange(SAMPLES)
        part = slice(21 * 20, 22 * 20)
        write_vector(each.campaign, mended[:, part], even_times(SAMPLES, STEP_NS)[part], shards=1, prefix="new-")
        (each.folder / "campaign" / "new-part-000.parquet").rename(each.folder / "campaign" / SPOILED)
    assert place.files(place.run()) == clean.files(clean.run())


def test_with_every_shard_withdrawn_a_run_says_so(tmp_path: Path) -> None:
    place = Place(tmp_path, "5 min", "whole")
    place.run()
    keys = sorted(path.name for path in (tmp_path / "campaign").iterdir())
    assert place.decide("withdraw", *keys, *BECAUSE).status == 0
    answer = shardfold("run", place.job)
    assert answer.status == 2
    answer.says("every shard is withdrawn", "shardfold readmit")
