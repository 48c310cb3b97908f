"""Times that repeat are refused with both shards named, wherever they meet; times out of order are put in order.

Of two shards that contradict each other one stays: the one that is in already, else the first by name. A third that
only contradicts the refused one stays too. Singular values are NumPy's.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from terminal import KEYS, NAMES, ROWS, STEP_NS, Desk, field, good, part, times, wide

from shardfold import ingest, open_result

LARGE = 1400
"""Samples of a shard whose piece of a leaf is stored alone: 20 times the summary of 40 channels and 12 probe rows."""

REPEATED = "a time is given once in a campaign"


@pytest.fixture
def desk(tmp_path: Path) -> Desk:
    return Desk(tmp_path)


def test_a_time_twice_in_one_shard(desk: Desk) -> None:
    desk.write_all()
    moments, values = part(1)
    moments[5] = moments[9]
    desk.write(KEYS[1], wide(moments, values))
    answer = desk.run("--quiet")
    assert answer.status == 3
    answer.refuses(KEYS[1], "2031-03-23T02:41:09Z", f"twice in {KEYS[1]}", REPEATED, "remedy: mend the times")
    desk.assert_holds(np.delete(field(), np.s_[ROWS : 2 * ROWS], axis=0))
    desk.assert_intact()
    desk.write(KEYS[1], good(1))
    assert desk.run("--quiet").status == 0
    desk.assert_holds(field())


def test_a_shard_that_is_there_twice(desk: Desk) -> None:
    desk.write_all()
    desk.write("copy.parquet", good(1))
    answer = desk.run("--quiet")
    assert answer.status == 3
    answer.refuses(KEYS[1], f"in copy.parquet and in {KEYS[1]} (60 repeated in all)", "2031-03-23T02:41:00Z")
    desk.assert_holds(field())
    desk.assert_intact()
    assert desk.run("--quiet").status == 0


def test_one_time_of_a_neighbour(desk: Desk) -> None:
    desk.write_all()
    moments, values = part(2)
    moments[0] -= STEP_NS
    desk.write(KEYS[2], wide(moments, values))
    answer = desk.run("--quiet")
    assert answer.status == 3
    answer.refuses(KEYS[2], f"2031-03-23T02:41:59Z stands in {KEYS[1]} and in {KEYS[2]} (1 repeated in all)", REPEATED)
    assert desk.shards_in() == [KEYS[0], KEYS[1], KEYS[3]]
    desk.write(KEYS[2], good(2))
    assert desk.run("--quiet").status == 0
    desk.assert_holds(field())


def two_large(desk: Desk) -> tuple[np.ndarray, np.ndarray]:
    """Write two shards of one leaf, each a cell of its own, that share one time; return the whole field."""
    desk.write_job(design={"leaf": "1 h"})
    values, moments = field(2 * LARGE), times(2 * LARGE)
    wrong = moments[LARGE:].copy()
    wrong[3] = moments[77]
    desk.write("a.parquet", wide(moments[:LARGE], values[:LARGE]))
    desk.write("b.parquet", wide(wrong, values[LARGE:]))
    return values, moments


@pytest.mark.parametrize("leaves", [100, 1], ids=["one commit", "a commit after every cell"])
def test_one_time_in_two_cells_of_a_leaf(desk: Desk, monkeypatch: pytest.MonkeyPatch, leaves: int) -> None:
    """Neither cell can see it alone; a commit in the middle of the run must not take both in."""
    monkeypatch.setattr(ingest, "COMMIT_LEAVES", leaves)
    values, moments = two_large(desk)
    answer = desk.run("--quiet")
    assert answer.status == 3
    answer.refuses("b.parquet", "2031-03-23T02:41:17Z stands in a.parquet and in b.parquet (1 repeated", REPEATED)
    assert len({cell.parent for cell in desk.dossier.glob("leaves/01/*/*")}) == 2
    assert len(list(desk.dossier.glob("leaves/01/*/*"))) == 4
    desk.assert_holds(values[:LARGE])
    desk.assert_intact()
    again = desk.run("--json", "--quiet")
    assert (again.status, again.document["standing_refused"], again.document["cells_read"]) == (0, 1, 0)
    desk.write("b.parquet", wide(moments[LARGE:], values[LARGE:]))
    assert desk.run("--quiet").status == 0
    desk.assert_holds(values)
    desk.assert_intact()


@pytest.mark.parametrize("name", ["0.parquet", "z.parquet"], ids=["before it by name", "after it by name"])
@pytest.mark.parametrize("rows", [LARGE, 60], ids=["large", "small"])
def test_of_two_rivals_the_one_that_is_in_stays(desk: Desk, name: str, rows: int) -> None:
    values, _ = two_large(desk)
    (desk.campaign / "b.parquet").rename(desk.folder / "b.parquet")
    assert desk.run("--quiet").status == 0
    wrong = times(2 * LARGE)[LARGE : LARGE + rows].copy()
    wrong[3] = times()[77]
    desk.write(name, wide(wrong, values[LARGE : LARGE + rows]))
    answer = desk.run("--quiet")
    assert answer.status == 3
    answer.refuses(name, "2031-03-23T02:41:17Z", "a.parquet", name, REPEATED)
    assert desk.shards_in() == ["a.parquet"]
    desk.assert_holds(values[:LARGE])
    desk.assert_intact()


def test_a_shard_that_only_contradicts_a_refused_one_stays(desk: Desk) -> None:
    """The shard in the middle overlaps both of its neighbours, which are sound."""
    desk.write_all()
    middle = wide(times()[ROWS + 30 : 2 * ROWS + 30], field()[:ROWS])
    desk.write("part-1b.parquet", middle)
    answer = desk.run("--quiet")
    assert answer.status == 3
    assert answer.err.count("refused ") == 1
    answer.refuses("part-1b.parquet", KEYS[1], "(30 repeated in all)")
    assert desk.shards_in() == list(KEYS)
    desk.assert_holds(field())


def mend_a(desk: Desk) -> None:
    """Give the first of two rivals other times; the second becomes sound by that without being touched."""
    desk.write("part-0.parquet", good(0))


def remove_nothing(desk: Desk) -> None:
    """Change nothing."""


@pytest.mark.parametrize(("change", "standing"), [(mend_a, 0), (remove_nothing, 1)])
def test_a_refusal_for_a_rivals_sake_ends_with_the_rival(
    desk: Desk, change: Callable[[Desk], None], standing: int
) -> None:
    desk.write_all()
    desk.write(KEYS[0], good(1))  # wrong times, but first by name
    answer = desk.run("--quiet")
    assert answer.status == 3
    answer.refuses(KEYS[1], KEYS[0], KEYS[1], "mend the times in one of them, or remove part-1.parquet")
    change(desk)
    again = desk.run("--quiet", "--json")
    assert (again.status, again.document["standing_refused"]) == (0, standing)
    assert (desk.shards_in() == list(KEYS)) == (standing == 0)


def test_a_newcomer_beside_a_vanished_shard_waits_for_it(desk: Desk) -> None:
    """Small shards of a leaf are summed together, so the newcomer's leaf would have to be read again as a whole."""
    desk.write_job(design={"leaf": "1 h"})
    desk.write(KEYS[0], good(0))
    assert desk.run("--quiet").status == 0
    kept = (desk.campaign / KEYS[0]).rename(desk.folder / "kept")
    desk.write(KEYS[1], good(1))
    answer = desk.run("--quiet")
    assert answer.status == 3
    answer.refuses(KEYS[1], "vanished", f"{KEYS[0]} is not listed any more", f"put {KEYS[0]} back")
    assert desk.shards_in() == [KEYS[0]]
    assert desk.run("--quiet").status == 0
    kept.rename(desk.campaign / KEYS[0])
    assert desk.run("--quiet").status == 0
    assert desk.shards_in() == [KEYS[0], KEYS[1]]
    desk.assert_holds(field()[: 2 * ROWS])


def shuffled(desk: Desk) -> Desk:
    """Write the campaign with the samples of each shard in any order, across row groups."""
    rng = np.random.Generator(np.random.PCG64(3))
    for number, key in enumerate(KEYS):
        moments, values = part(number)
        order = rng.permutation(ROWS)
        desk.write(key, wide(moments[order], values[order]), row_group=25)
    return desk


@pytest.mark.parametrize("width", [12, None], ids=["probe", "few channels"])
def test_samples_out_of_order_give_the_result_of_the_sorted_campaign(tmp_path: Path, width: int | None) -> None:
    results = []
    for name in ("sorted", "shuffled"):
        (tmp_path / name).mkdir()
        desk = Desk(tmp_path / name)
        desk.write_job(design={"width": width})
        assert (desk.write_all() if name == "sorted" else shuffled(desk)).run("--quiet").status == 0
        desk.assert_holds(field())
        results.append(open_result(f"{desk.dossier}/latest"))
    tidy, untidy = (result.coefficients() for result in results)
    moments = untidy.column("time").to_numpy().astype(np.int64)
    np.testing.assert_array_equal(moments, times())
    for name in ("c_01", "c_02", "c_03"):
        scale = np.abs(tidy.column(name).to_numpy()).max()
        np.testing.assert_allclose(untidy.column(name), tidy.column(name), rtol=0, atol=1e-12 * scale)
    rebuilt = results[1].rebuild(list(NAMES)).drop_columns("time")
    centred = field() - field().mean(axis=0)
    modes = np.linalg.svd(centred, full_matrices=False)[2][:3]
    expected = field().mean(axis=0) + centred @ modes.T @ modes
    np.testing.assert_allclose(np.array(rebuilt.columns).T, expected, rtol=0, atol=1e-11 * np.abs(expected).max())
