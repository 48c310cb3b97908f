"""What ``ledger`` and ``results`` say of a dossier, on the terminal and as one document."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest
from terminal import KEYS, Desk, shardfold


@pytest.fixture
def desk(tmp_path: Path) -> Desk:
    """Return a dossier with a result, a refused and a withdrawn shard, and a second result without the latter."""
    desk = Desk(tmp_path).write_all()
    assert desk.run("--quiet").status == 0
    desk.write("z.parquet", b"")
    assert shardfold("withdraw", desk.job, KEYS[1], "--because", "the logger stood still").status == 0
    assert desk.run("--quiet", "--set", "modes.rank=2").status == 3
    return desk


def document(*arguments: Any) -> dict[str, Any]:
    answer = shardfold(*arguments, "--json")
    assert (answer.status, answer.err) == (0, "")
    found: dict[str, Any] = json.loads(answer.out)
    return found


def test_ledger_lists_what_is_not_in_and_why(desk: Desk) -> None:
    answer = shardfold("ledger", desk.job)
    heading, _, *rows = answer.out.splitlines()
    assert heading.endswith("3 in, 1 refused, 1 withdrawn")
    assert [row.split()[:2] for row in rows] == [[KEYS[1], "withdrawn"], ["z.parquet", "refused"]]
    assert "the logger stood still" in rows[0]
    assert "the shard is empty" in rows[1]
    everything = shardfold("ledger", desk.dossier, "--all").out.splitlines()
    assert len(everything) == 2 + len(KEYS) + 1


def test_ledger_as_json(desk: Desk) -> None:
    found = document("ledger", desk.dossier)
    states = {row["key"]: row["state"] for row in found["shards"]}
    assert states == {KEYS[0]: "in", KEYS[1]: "withdrawn", KEYS[2]: "in", KEYS[3]: "in", "z.parquet": "refused"}
    (withdrawn,) = (row for row in found["shards"] if row["state"] == "withdrawn")
    assert withdrawn["why"] == "the logger stood still"
    assert withdrawn["when"]
    assert (withdrawn["rows"], withdrawn["first"][:4]) == (60, "2031")


def test_results_list_what_was_published(desk: Desk) -> None:
    found = document("results", desk.job)["results"]
    assert [(row["shards"], row["modes"], row["overrides"]) for row in found] == [(4, 3, []), (3, 2, ["modes.rank=2"])]
    assert [sum(row["verdicts"].values()) for row in found] == [3, 2]
    heading, _, *rows = shardfold("results", desk.job).out.splitlines()
    assert heading == "2 results"
    assert [row.split()[0] for row in rows] == [row["folder"].rstrip("/") for row in found]
    assert "(--set modes.rank=2)" in rows[1]


@pytest.mark.parametrize("command", ["ledger", "results"])
def test_no_dossier(command: str, tmp_path: Path) -> None:
    answer = shardfold(command, tmp_path)
    assert answer.status == 2
    answer.says("there is no dossier", "shardfold run JOB")
