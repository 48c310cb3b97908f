"""Shards that are no longer listed are kept until they are taken out by number; then they never were."""

from __future__ import annotations

import json
from pathlib import Path

import pytest
from campaigns import even_times, job_text, with_spectrum, write_vector
from terminal import Answer, shardfold

from shardfold import ledger
from shardfold.store import open_store

GONE = ("part-003.parquet", "part-010.parquet")


class Place:
    """A campaign of 16 small shards, four to a leaf or each alone in its own."""

    def __init__(self, folder: Path, leaf: str, without: tuple[str, ...] = ()) -> None:
        self.folder = folder
        matrix = with_spectrum(120, 640, [8.0, 4.0, 2.0, 1.0])
        write_vector(open_store(f"{folder}/campaign"), matrix, even_times(640, 10**9), shards=16, row_group=20)
        for key in without:
            self.shard(key).unlink()
        self.job = folder / "job.yaml"
        design = {"leaf": leaf, "width": 20}
        modes, engine = {"rank": 3}, {"workers": "serial"}
        text = job_text(f"{folder}/campaign", f"{folder}/dossier", "vector", design=design, modes=modes, engine=engine)
        self.job.write_text(text)

    def shard(self, key: str) -> Path:
        return self.folder / "campaign" / key

    def run(self, *arguments: str) -> Answer:
        return shardfold("run", self.job, *arguments)

    def files(self) -> dict[str, bytes]:
        """Return the tables of the newest result."""
        folder = max((self.folder / "dossier" / "results").iterdir(), key=lambda path: path.stat().st_mtime_ns)
        return {str(path.relative_to(folder)): path.read_bytes() for path in sorted(folder.rglob("*.parquet"))}

    def states(self) -> dict[str, str]:
        return {key: e.state for key, e in ledger.load(open_store(f"{self.folder}/dossier")).shards.items()}


@pytest.mark.parametrize("leaf", ["40 s", "160 s"], ids=["alone", "four to a cell"])
def test_vanished_shards_are_kept_until_they_are_taken_out(leaf: str, tmp_path: Path) -> None:
    place, clean = Place(tmp_path / "a", leaf), Place(tmp_path / "b", leaf, GONE)
    assert place.run("--quiet").status == 0
    whole, kept = place.files(), [place.shard(key).read_bytes() for key in GONE]
    for key in GONE:
        place.shard(key).unlink()
    answer = place.run()
    assert answer.status == 0
    answer.says("2 shards (part-003.parquet, part-010.parquet) kept, though not listed any more")
    assert place.files() == whole

    wrong = place.run("--prune", "3")
    assert wrong.status == 2
    wrong.says("--prune", "are in but not listed, 2", "got: 3")
    assert {place.states()[key] for key in GONE} == {"in"}

    assert place.run("--prune", "2", "--quiet").status == 0
    assert clean.run("--quiet").status == 0
    assert place.files() == clean.files()
    assert {place.states()[key] for key in GONE} == {"vanished"}
    listed = json.loads(shardfold("ledger", place.job, "--json").out)["shards"]
    reasons = {row["why"] for row in listed if row["state"] == "vanished"}
    assert reasons == {"not listed any more; taken out with --prune 2"}

    for key, data in zip(GONE, kept, strict=True):
        place.shard(key).write_bytes(data)
    assert place.run("--quiet").status == 0
    assert place.files() == whole
    assert {place.states()[key] for key in GONE} == {"in"}


def test_an_empty_listing_is_no_reason_to_take_anything_out(tmp_path: Path) -> None:
    place = Place(tmp_path, "160 s")
    place.run("--quiet")
    for path in (tmp_path / "campaign").iterdir():
        path.unlink()
    answer = place.run("--prune", "16")
    assert answer.status == 2
    answer.says("nothing matches")
    assert set(place.states().values()) == {"in"}


def test_nothing_has_vanished(tmp_path: Path) -> None:
    place = Place(tmp_path, "160 s")
    place.run("--quiet")
    answer = place.run("--prune", "1")
    assert answer.status == 2
    answer.says("are in but not listed, 0", "leave --prune out")
