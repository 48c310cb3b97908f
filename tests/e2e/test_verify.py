"""``verify`` finds a dossier sound as it was written, and every kind of damage by the key it was done to."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from campaigns import even_times, job_text, run_job, with_spectrum, write_vector
from terminal import shardfold

from shardfold import artifacts, layout
from shardfold.store import open_store
from shardfold.verify import Verification, verify

KINDS = {"probe": (120, {"width": 20}), "exact": (24, {})}


def make(folder: Path, kind: str) -> Path:
    """Write a campaign and a dossier with two results, one of them of two reads where there is a probe."""
    channels, design = KINDS[kind]
    matrix = with_spectrum(channels, 1200, 2.0 ** -np.arange(10), 3)
    write_vector(open_store(f"{folder}/campaign"), matrix, even_times(1200), shards=6, row_group=40)
    for modes in ({"rank": 3}, {"rank": 2, "reads": 2}):
        text = job_text(
            f"{folder}/campaign", f"{folder}/dossier", "vector", design={**design, "leaf": "10 s"}, modes=modes
        )
        run_job(text)
    (folder / "job.yaml").write_text(text)
    return folder / "dossier"


@pytest.fixture(params=KINDS)
def dossier(request: pytest.FixtureRequest, tmp_path: Path) -> Path:
    return make(tmp_path, request.param)


def look(dossier: Path) -> Verification:
    return verify(open_store(str(dossier)))


def flip(path: Path, place: float = 0.5) -> None:
    data = bytearray(path.read_bytes())
    data[int(place * (len(data) - 1))] ^= 0x10
    path.write_bytes(bytes(data))


def test_as_it_was_written_a_dossier_is_sound(dossier: Path) -> None:
    seen = look(dossier)
    assert seen.faults == []
    reads = 2 if (dossier / "probes").exists() else 1
    assert (seen.cells, seen.results) == (reads * len(list((dossier / "leaves" / "01").iterdir())), 2)
    assert seen.sums >= reads
    answer = shardfold("verify", dossier.parent / "job.yaml")
    assert (answer.status, answer.out.startswith("sound: ")) == (0, True)


def test_it_stays_sound_when_a_shard_is_withdrawn_and_comes_back(dossier: Path) -> None:
    job = dossier.parent / "job.yaml"
    for command in ("withdraw", "readmit"):
        assert shardfold(command, job, "part-002.parquet", "--because", "a test").status == 0
        assert look(dossier).faults == []  # the run is outstanding
        assert shardfold("run", job, "--set", "engine.workers=serial", "--quiet").status == 0
        assert look(dossier).faults == []


def first(dossier: Path, pattern: str) -> Path:
    return sorted(dossier.glob(pattern))[0]


DAMAGE: dict[str, tuple[str, Callable[[Path], None], str]] = {
    "a cell's array": ("leaves/01/*/*.cell", flip, "digest"),
    "a cell's header": ("leaves/01/*/*.cell", lambda path: flip(path, 0.001), "record|header|digest"),
    "a cell cut short": ("leaves/01/*/*.cell", lambda path: path.write_bytes(path.read_bytes()[:-8]), "bytes"),
    "a cell gone": ("leaves/01/*/*.cell", Path.unlink, ""),
    "a sum": ("tree/01/*.sum", flip, "digest"),
    "a commit": ("ledger/*.json", flip, "digest|commit"),
    "the channel table": ("channels/0001.parquet", flip, "digest"),
    "modes": ("results/*/modes.parquet", flip, "digest"),
    "coefficients": ("results/*/coefficients/part-000001.parquet", flip, "digest"),
    "a file of a result gone": ("results/*/mode_table.parquet", Path.unlink, ""),
    "a manifest": ("results/*/manifest.json", lambda path: path.write_text("{"), "a manifest"),
}


@pytest.mark.parametrize("damage", DAMAGE)
def test_damage_is_found_where_it_was_done(damage: str, dossier: Path) -> None:
    pattern, work, rule = DAMAGE[damage]
    path = first(dossier, pattern)
    work(path)
    answer = shardfold("verify", dossier, "--json")
    assert answer.status == 5
    faults: list[dict[str, Any]] = json.loads(answer.out)["faults"]
    key = str(path.relative_to(dossier))
    told = [fault for fault in faults if key in fault["where"] or key in fault["got"]]
    assert told, faults
    assert any(word in told[0]["rule"] for word in rule.split("|"))


def test_a_sum_that_is_whole_but_not_of_its_children_is_found(dossier: Path) -> None:
    path = first(dossier, "tree/01/*.sum")
    key = str(path.relative_to(dossier))
    facts, arrays = artifacts.unpack(path.read_bytes(), "sum", key)
    arrays = {name: array.copy() for name, array in arrays.items()}
    arrays["energy"][0] *= 1 + 1e-15
    path.write_bytes(artifacts.pack("sum", facts, arrays))
    faults = [fault for fault in look(dossier).faults if fault.where == key]
    assert [(fault.rule, fault.got) for fault in faults] == [("the sum of its children, bit for bit", "another energy")]


def test_a_cell_under_another_cells_name_is_found(dossier: Path) -> None:
    one, other = sorted((dossier / "leaves" / "01").glob("*/*.cell"))[:2]
    one.write_bytes(other.read_bytes())
    rules = [fault.rule for fault in look(dossier).faults if str(one.relative_to(dossier)) in fault.where]
    assert any(rule.startswith("read 1, leaf ") for rule in rules)


def test_without_its_probe_a_read_cannot_go_on(tmp_path: Path) -> None:
    dossier = make(tmp_path, "probe")
    (dossier / layout.probe_key(2)).unlink()
    assert [fault.where for fault in look(dossier).faults] == [layout.probe_key(2)]


def test_no_dossier(tmp_path: Path) -> None:
    answer = shardfold("verify", tmp_path)
    assert answer.status == 2
    answer.says("there is no dossier")
