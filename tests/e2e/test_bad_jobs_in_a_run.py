"""Jobs that ask for what cannot be: refused before a measured value is read and before a dossier is made.

The refusal names both numbers and what to do; a corrected job then works in the same place.
Singular values are NumPy's.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from terminal import CHANNELS, KEYS, NAMES, ROWS, SHARDS, Answer, Desk, field, good, parquet, shardfold, times, wide

from shardfold.store_local import LocalAdapter

TAIL_BYTES = 64 * 1024


@pytest.fixture
def desk(tmp_path: Path) -> Desk:
    return Desk(tmp_path)


def small(desk: Desk, samples: int, channels: int = CHANNELS, *, constant: bool = False) -> Desk:
    """Write a campaign of one shard."""
    values = field()[:samples, :channels]
    desk.write(KEYS[0], wide(times()[:samples], np.full_like(values, 3.7) if constant else values))
    return desk


def assert_refused(answer: Answer, *words: str) -> None:
    """Assert exit 2 and a message that holds some words and a remedy."""
    assert answer.status == 2
    answer.says(*words, "remedy: ")
    assert answer.out == ""


def both(desk: Desk, *words: str) -> None:
    """Assert that ``check`` says what ``run`` says, that neither makes a dossier."""
    for command in ("check", "run"):
        answer = shardfold(command, desk.job, "--quiet")
        assert answer.status == 2, command
        answer.says(*words)
    assert not desk.dossier.exists()


def test_more_modes_than_channels(desk: Desk) -> None:
    desk.write_all().write_job(modes={"rank": 41})
    both(desk, "modes.rank: more modes are asked for than there are channels", "channels, 40", "got: 41", "remedy: ")
    desk.write_job(modes={"rank": 4})
    assert desk.run().status == 0
    desk.assert_holds(field())
    answer = desk.run("--quiet", "--set", "modes.rank=41")
    assert_refused(answer, "modes.rank", "at most the number of channels, 40", "got: 41")
    desk.assert_intact()


def test_more_modes_than_the_probe_of_a_dossier_can_carry(desk: Desk) -> None:
    desk.write_all()
    assert desk.run().status == 0
    answer = desk.run("--quiet", "--set", "modes.rank=12")
    assert_refused(answer, "modes.rank", "less than the dossier's design.width, 12", "got: 12")
    desk.assert_holds(field())


def test_more_modes_than_samples(desk: Desk) -> None:
    small(desk, 5).write_job(modes={"rank": 6})
    both(desk, "modes.rank: more modes are asked for than there are samples", "samples, 5", "got: 6", "modes.rank=4")
    desk.write_job(modes={"rank": 4})
    assert desk.run().status == 0
    desk.assert_holds(field()[:5])


def test_more_modes_than_samples_that_are_left(desk: Desk) -> None:
    """One of two shards is refused when it is read; of the other there are too few samples."""
    small(desk, 2).write(KEYS[1], wide(times()[60:120], np.full((ROWS, CHANNELS), np.nan)))
    answer = desk.run("--quiet")
    assert_refused(answer, "at most the number of samples, 2", "got: 3")
    answer.refuses(KEYS[1], "channel G000 is nan at 2031-03-23T02:41:00Z")
    desk.write(KEYS[1], good(1))
    assert desk.run("--quiet").status == 0


@pytest.mark.parametrize("channels", [CHANNELS, 3, 1])
def test_constant_data(desk: Desk, channels: int) -> None:
    small(desk, ROWS, channels, constant=True).write_job(modes={"rank": 1})
    answer = desk.run("--quiet")
    words = "60 samples; every channel is constant", "'modes.remove: []' keeps the mean"
    assert_refused(answer, "there is nothing to decompose", "vary about the mean", *words)
    desk.assert_intact()
    desk.write_job(modes={"rank": 1, "remove": []})
    assert desk.run().status == 0
    (value,) = desk.manifest()["quality"]["singular_values"]
    assert value == pytest.approx(3.7 * np.sqrt(ROWS * channels), rel=1e-12)  # of a matrix of one value


def test_one_sample(desk: Desk) -> None:
    small(desk, 1).write_job(modes={"rank": 1})
    assert_refused(desk.run("--quiet"), "there is nothing to decompose", "got: one sample only", "modes.remove: []")
    desk.write_job(modes={"rank": 1, "remove": []})
    assert desk.run().status == 0
    (value,) = desk.manifest()["quality"]["singular_values"]
    assert value == pytest.approx(np.linalg.norm(field()[0]), rel=1e-12)


def test_one_channel_is_decomposed(desk: Desk) -> None:
    small(desk, ROWS, 1).write_job(modes={"rank": 1})
    assert desk.run("--quiet").status == 0
    desk.assert_holds(field()[:ROWS, :1])
    desk.write_job(modes={"rank": 2})
    assert_refused(desk.run("--quiet"), "modes.rank", "at most the number of channels, 1", "got: 2")


def test_two_units_without_a_scale(desk: Desk) -> None:
    desk.write_all()
    rows = [f"{name},{'bar' if number < 20 else 'mm'},{1 + number}" for number, name in enumerate(NAMES)]
    (desk.folder / "gauges.csv").write_text("\n".join(["channel,unit,scale", *rows]))
    table = {"channels": {"table": "gauges.csv"}}
    desk.write_job(source=table)
    both(desk, "gauges.csv", "more than one unit", "'bar' and 'mm'", "design.scale: table", "design.mixed_units: true")
    desk.write_job(source=table, design={"mixed_units": True})
    assert desk.run("--quiet").status == 0
    desk.assert_holds(field())
    desk.write_job(source=table, design={"scale": "table"}, dossier={"location": "scaled"})
    assert desk.run("--quiet").status == 0
    desk.dossier = desk.folder / "scaled"
    desk.assert_holds(field() / (1 + np.arange(CHANNELS)))


OTHER_DESIGNS = {
    "design.leaf=2 min": ["design.leaf: stored (1 min), asked (2 min)"],
    "design.width=16": ["design.width: stored (12), asked (16)"],
    "design.seed=7": ["design.seed: stored (20310301), asked (7)"],
    "campaign=other": ["campaign: stored (desk), asked (other)"],
    "source.channels.exclude=[G007]": ["stored (include all, exclude [], no table)", 'exclude ["G007"]'],
}


def test_another_design_than_the_dossiers(desk: Desk) -> None:
    desk.write_all()
    assert desk.run().status == 0
    size = f"{sum(path.stat().st_size for path in desk.campaign.iterdir()):,} bytes"
    before = {path: path.read_bytes() for path in desk.dossier.rglob("*") if path.is_file()}
    for setting, words in OTHER_DESIGNS.items():
        for command in ("run", "check"):
            answer = shardfold(command, desk.job, "--quiet", "--set", setting)
            assert_refused(answer, *words, "new dossier.location", f"reads {size}")
    everything = [part for setting in OTHER_DESIGNS for part in ("--set", setting)]
    assert_refused(desk.run("--quiet", *everything), *(word for words in OTHER_DESIGNS.values() for word in words))
    assert {path: path.read_bytes() for path in desk.dossier.rglob("*") if path.is_file()} == before
    again = desk.run("--json", "--quiet")
    assert (again.status, again.document["new"], again.document["cells_read"]) == (0, False, 0)


class Reads:
    """The byte ranges that are read of the campaign."""

    def __init__(self, monkeypatch: pytest.MonkeyPatch, campaign: Path) -> None:
        self.starts: list[tuple[str, int]] = []
        real = LocalAdapter.read

        def read(adapter: LocalAdapter, key: str, version: str | None, start: int, stop: int | None) -> memoryview:
            if adapter.root == campaign:
                self.starts.append((key, start))
            return real(adapter, key, version, start, stop)

        monkeypatch.setattr(LocalAdapter, "read", read)


def heavy(samples: int, row_group: int) -> bytes:
    """Return a shard of 320 bytes a sample, nothing packed."""
    values = np.zeros((samples, CHANNELS))
    values[::2] = 1
    return parquet(wide(times(samples), values), row_group, compression="none", use_dictionary=False)


def test_a_row_group_too_large_for_the_memory_limit(desk: Desk, monkeypatch: pytest.MonkeyPatch) -> None:
    """Values are destroyed and the places of all reads are noted: nothing but the end of the file was looked at."""
    samples, limit = 100_000, "346 MiB"
    data = bytearray(heavy(samples, samples))
    data[4 : len(data) - TAIL_BYTES] = b"\xff" * (len(data) - TAIL_BYTES - 4)
    desk.write("heavy.parquet", bytes(data))
    desk.write("light.parquet", wide(times(2 * samples)[samples : samples + ROWS], field()[:ROWS]))
    desk.write_job(design={"leaf": "30 h"}, engine={"memory": limit})
    reads = Reads(monkeypatch, desk.campaign)
    both(desk, "engine.memory: a worker would need more memory", f"at most {limit}", "'row group'", "heavy.parquet")
    assert reads.starts
    assert {start for key, start in reads.starts if key == "heavy.parquet"} == {len(data) - TAIL_BYTES}
    answer = desk.run("--quiet")
    planned = int(answer.err.partition("got: ")[2].split(" MiB planned")[0])
    assert 346 < planned < 440
    assert "engine.memory: " in answer.err.partition("remedy: ")[2]
    assert "smaller row groups" in answer.err
    desk.write("heavy.parquet", heavy(samples, 2000))
    assert shardfold("check", desk.job).status == 0


def test_a_leaf_shorter_than_all_row_groups(desk: Desk) -> None:
    desk.write_all().write_job(design={"leaf": "10 s"})
    both(desk, "no shard can be taken in", "4 refused", "not longer than design.leaf, 10 s", "59 s")
    assert "design.leaf of at least 59 s" in desk.run("--quiet").err
    desk.write_job(design={"leaf": "1 min"})
    assert desk.run().status == 0
    desk.assert_holds(field())


def test_a_leaf_shorter_than_some_row_groups(desk: Desk) -> None:
    for number in range(1, SHARDS):
        desk.write(KEYS[number], good(number), row_group=10)
    desk.write(KEYS[0], good(0))
    desk.write_job(design={"leaf": "10 s"})
    checked = shardfold("check", desk.job, "--json", "--quiet")
    assert checked.status == 0
    assert list(checked.document["shards"]["refused"]) == [KEYS[0]]
    assert (checked.document["shards"]["to_take_in"], checked.document["samples"]) == (SHARDS - 1, 180)
    answer = desk.run("--quiet")
    assert answer.status == 3
    answer.refuses(KEYS[0], "crosses more than one leaf edge", "design.leaf, 10 s", "a row group of 59 s", "remedy: ")
    desk.assert_holds(field()[ROWS:])
    desk.assert_intact()
    desk.write(KEYS[0], good(0), row_group=10)
    assert desk.run("--quiet").status == 0
    desk.assert_holds(field())


def test_a_job_with_many_faults_tells_them_all_and_reads_nothing(desk: Desk, monkeypatch: pytest.MonkeyPatch) -> None:
    desk.write_all().write_job(modes={"rnak": 3, "reads": 9}, source={"layout": "tall"})
    reads = Reads(monkeypatch, desk.campaign)
    answer = desk.run("--set", "engine.memory=1 MiB")
    assert answer.status == 2
    answer.says("rnak", "did you mean modes.rank?", "modes.reads", "source.layout", "--set: engine.memory", "256 MiB")
    assert (reads.starts, desk.dossier.exists()) == ([], False)


def test_no_time_in_the_job_and_a_time_column_in_the_shards(desk: Desk) -> None:
    """Without source.time the times would be taken for a channel; they are no numbers, so that is told."""
    desk.write_all().write_job(source={"time": "none"}, design={"leaf": None})
    answer = desk.run("--quiet")
    assert_refused(answer, "'t' of type timestamp", "or make it source.time")
