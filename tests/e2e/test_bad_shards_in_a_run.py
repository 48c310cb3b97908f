"""A shard that cannot be trusted is refused by name, place, rule and value; all others are taken in; nothing is lost.

Each case goes through the command: the run that meets a bad shard exits 3, the next one 0 with the case counted as
standing, and once the shard is mended the result is that of the whole campaign. Singular values are NumPy's.
"""

from __future__ import annotations

import io
import os
import pickle
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pytest
from terminal import KEYS, ROWS, SHARDS, Desk, field, good, parquet, part, times, wide

from shardfold.store import open_store
from shardfold.store_local import LocalAdapter

BAD = 1
T, F = part(BAD)
REST = np.delete(field(), np.s_[BAD * ROWS : (BAD + 1) * ROWS], axis=0)


@pytest.fixture
def desk(tmp_path: Path) -> Desk:
    return Desk(tmp_path).write_all()


def with_value(values: np.ndarray, value: float) -> np.ndarray:
    """Return the values of a shard with one of them replaced."""
    values = values.copy()
    values[17, 7] = value
    return values


def npy(values: np.ndarray) -> bytes:
    """Return an array as a ``.npy`` file."""
    sink = io.BytesIO()
    np.save(sink, values)
    return sink.getvalue()


class Trap:
    """Makes a folder when it is unpickled."""

    def __init__(self, path: Path) -> None:
        self.path = path

    def __reduce__(self) -> Any:
        return os.mkdir, (str(self.path),)


def assert_refused_alone(desk: Desk, cases: dict[str, tuple[Any, Any, list[str]]]) -> None:
    """Run, run again, mend, run: the bad shards alone are left out, told once, and lost to nobody in the end."""
    sound = sorted(path.name for path in desk.campaign.iterdir())
    for key, (spoiled, _, _) in cases.items():
        desk.write(key, spoiled)
    answer = desk.run("--quiet")
    assert answer.status == 3
    for key, (_, _, words) in cases.items():
        answer.refuses(key, *words, "rule: ", "got: ")
    assert desk.shards_in() == sound
    desk.assert_holds(field())
    desk.assert_intact()
    again = desk.run("--json", "--quiet")
    assert (again.status, again.err) == (0, "")
    counts = {name: again.document[name] for name in ("newly_refused", "standing_refused", "cells_read", "new")}
    assert counts == {"newly_refused": 0, "standing_refused": len(cases), "cells_read": 0, "new": False}
    for key, (_, mended, _) in cases.items():
        desk.write(key, mended)
    assert desk.run("--quiet").status == 0
    assert desk.shards_in() == sorted([*sound, *cases])
    desk.assert_holds(field((SHARDS + len(cases)) * ROWS))
    desk.assert_intact()


def empty_time(moments: np.ndarray) -> pa.Array:
    """Return times of which the first is missing."""
    return pa.array([None, *moments[1:].tolist()], pa.timestamp("ns", tz="UTC"))


PARQUET_CASES: dict[str, tuple[Callable[[np.ndarray, np.ndarray], Any], list[str]]] = {
    "no-times": (lambda t, f: wide(t, f, t=None), ["no time column 't'", "columns G000, G001", "source.time"]),
    "text": (
        lambda t, f: wide(t, f, G007=pa.array(["on"] * ROWS)),
        ["not numeric", "'G007' of type string", "source.channels.exclude"],
    ),
    "missing": (lambda t, f: wide(t, f, G007=None), ["the same 40 channels", "39 channels; missing G007", "remedy: "]),
    "unexpected": (
        lambda t, f: wide(t, f, G099=pa.array(np.zeros(ROWS))),
        ["the same 40 channels", "41 channels; not expected G099", "remedy: "],
    ),
    "nan": (
        lambda t, f: wide(t, with_value(f, np.nan)),
        ["channel G007 is nan at 2031-03-23T02:48:17Z", "design.gaps: refuse", "remedy: "],
    ),
    "infinity": (
        lambda t, f: wide(t, with_value(f, -np.inf)),
        ["channel G007 is -inf at 2031-03-23T02:49:17Z", "design.gaps: refuse"],
    ),
    "null": (
        lambda t, f: wide(t, f, G007=pa.array([None if row == 17 else 0.5 for row in range(ROWS)])),
        ["channel G007 is nan at 2031-03-23T02:50:17Z"],
    ),
    "no-time": (lambda t, f: wide(t, f, t=empty_time(t)), ["column 't', row 0", "remedy: "]),
    "zero-bytes": (lambda t, f: b"", ["the shard is empty", "got: 0 bytes", "copy the shard again"]),
    "cut": (lambda t, f: parquet(wide(t, f))[:-300], ["cut short, or is not Parquet", "copy the shard again"]),
    "stump": (lambda t, f: parquet(wide(t, f))[:10], ["cut short, or is not Parquet"]),
    "hollow": (
        lambda t, f: b"PAR1" + bytes(3000) + parquet(wide(t, f))[3004:],
        ["row group 0", "cannot be decoded", "copy the shard again"],
    ),
    "no-rows": (lambda t, f: wide(t[:0], f[:0]), ["the shard holds no samples", "got: 0 rows"]),
}


def test_bad_parquet_shards_are_refused_alone(desk: Desk) -> None:
    cases = {
        f"z-{name}.parquet": (spoil(*part(number)), good(number), words)
        for number, (name, (spoil, words)) in enumerate(PARQUET_CASES.items(), SHARDS)
    }
    assert_refused_alone(desk, cases)


NPY_CASES: list[tuple[Callable[[np.ndarray, Trap], bytes], list[str]]] = [
    (lambda f, trap: b"", ["the shard is empty", "0 bytes"]),
    (lambda f, trap: npy(f)[:-100], ["the array is cut short", f"{128 + F.nbytes} bytes", f"{28 + F.nbytes} bytes"]),
    (lambda f, trap: npy(f)[:20], [".npy header cannot be read"]),
    (lambda f, trap: npy(f[None]), ["two dimensions", "shape (1, 60, 40)"]),
    (lambda f, trap: npy(f + 1j), ["integers or floats", "complex128"]),
    (lambda f, trap: npy(f[:, :39]), ["the same 40 channels", "39 channels; missing ch00039"]),
    (lambda f, trap: npy(with_value(f, np.nan)), ["channel ch00007 is nan at 2031-03-23T02:50:17Z"]),
    (lambda f, trap: npy(np.full(f.shape, trap)), ["pickled Python objects are never loaded", "remedy: "]),
    (lambda f, trap: pickle.dumps(trap), ["header cannot be read"]),
]


def test_bad_arrays_are_refused_alone_and_nothing_is_unpickled(tmp_path: Path) -> None:
    desk = Desk(tmp_path)
    desk.write_job(source={"layout": "array", "time": {"from_name": r"(\d{8}T\d{6})", "step": "1 s"}})
    keys = [f"run-20310323T02{40 + number}00.npy" for number in range(SHARDS + len(NPY_CASES))]
    for number in range(SHARDS):
        desk.write(keys[number], npy(part(number)[1]))
    trap = Trap(tmp_path / "sprung")
    cases = {
        keys[number]: (spoil(part(number)[1], trap), npy(part(number)[1]), words)
        for number, (spoil, words) in enumerate(NPY_CASES, SHARDS)
    }
    assert_refused_alone(desk, cases)
    assert not trap.path.exists()
    pickle.loads(pickle.dumps(trap))  # noqa: S301
    assert trap.path.exists(), "the payload must be one that would have gone off"


def test_a_campaign_of_bad_shards_only_ends_without_a_dossier(desk: Desk) -> None:
    for key in KEYS:
        desk.write(key, b"")
    answer = desk.run()
    assert answer.status == 2
    answer.says("no shard can be read", "4 refused", "part-0.parquet", "the shard is empty", "remedy: ")
    assert not desk.dossier.exists()
    desk.write_all()
    assert desk.run().status == 0


def test_values_that_are_bad_everywhere_end_the_run(desk: Desk) -> None:
    for number, key in enumerate(KEYS):
        desk.write(key, wide(times()[number * ROWS :][:ROWS], with_value(F, np.nan)))
    answer = desk.run()
    assert answer.status == 2
    answer.says("no shard can be taken in", "4 refused", "channel G007 is nan at 2031-03-23T02:40:17Z")
    desk.write_all()
    assert desk.run().status == 0
    desk.assert_holds(field())


def test_many_refusals_are_told_in_full_only_at_first(desk: Desk) -> None:
    for number in range(30):
        desk.write(f"z{number:02d}.parquet", b"")
    answer = desk.run()
    assert answer.status == 3
    assert answer.err.count("refused z") == 30
    assert answer.err.count("remedy: ") == 20


class Replacing:
    """Lets something happen to one key just before it is read for the n-th time."""

    def __init__(self, monkeypatch: pytest.MonkeyPatch, key: str, number: int, happen: Callable[[], Any]) -> None:
        real, left = LocalAdapter.read, [number]

        def read(adapter: LocalAdapter, asked: str, version: str | None, start: int, stop: int | None) -> memoryview:
            if asked == key:
                left[0] -= 1
                if left[0] == 0:
                    happen()
            return real(adapter, asked, version, start, stop)

        monkeypatch.setattr(LocalAdapter, "read", read)


@pytest.mark.parametrize("moment", [2, 3], ids=["before its footer is read again", "between footer and values"])
def test_a_shard_replaced_while_it_is_read(desk: Desk, monkeypatch: pytest.MonkeyPatch, moment: int) -> None:
    """The first read of its footer is the inventory's. The next run takes the version that is there then."""
    newer = field()
    newer[BAD * ROWS : (BAD + 1) * ROWS] *= 2
    Replacing(monkeypatch, KEYS[BAD], moment, lambda: desk.write(KEYS[BAD], wide(T, 2 * F)))
    answer = desk.run("--quiet")
    assert answer.status == 3
    answer.says(f"refused {KEYS[BAD]}: ", "replaced or removed while it was read", "remedy: run again")
    desk.assert_holds(REST)
    desk.assert_intact()
    again = desk.run("--quiet", "--json")
    assert again.status == 0
    assert (again.document["cells_read"], again.document["standing_refused"]) == (1, 0)
    desk.assert_holds(newer)


def test_a_shard_replaced_while_it_is_described_is_left_for_the_next_run(
    desk: Desk, monkeypatch: pytest.MonkeyPatch
) -> None:
    Replacing(monkeypatch, KEYS[BAD], 1, lambda: desk.write(KEYS[BAD], good(BAD)))
    answer = desk.run()
    assert answer.status == 0
    answer.says(f"1 shard ({KEYS[BAD]}) left for the next run", "replaced just now")
    desk.assert_holds(REST)
    assert desk.run().status == 0
    desk.assert_holds(field())


def test_a_shard_removed_while_it_is_read(desk: Desk, monkeypatch: pytest.MonkeyPatch) -> None:
    Replacing(monkeypatch, KEYS[BAD], 2, (desk.campaign / KEYS[BAD]).unlink)
    answer = desk.run("--quiet")
    assert answer.status == 3
    answer.says(f"refused {KEYS[BAD]}: ", "replaced or removed while it was read", "no object")
    desk.assert_holds(REST)
    assert desk.run().status == 0


FURTHER_READINGS = {"coefficients of a narrow campaign": {"width": None}, "a second read": {"width": 12}}


@pytest.mark.parametrize("what", FURTHER_READINGS)
def test_a_shard_replaced_before_a_further_reading(desk: Desk, monkeypatch: pytest.MonkeyPatch, what: str) -> None:
    """Nothing is published from two versions; the same command goes on with the new one."""
    desk.write_job(design=FURTHER_READINGS[what], modes={"reads": 2})
    newer = field()
    newer[BAD * ROWS : (BAD + 1) * ROWS] *= 2
    Replacing(monkeypatch, KEYS[BAD], 4, lambda: desk.write(KEYS[BAD], wide(T, 2 * F)))
    answer = desk.run("--quiet")
    assert answer.status == 4
    answer.says(f"{KEYS[BAD]}: a shard changed between", "nothing was published", "run again")
    desk.assert_intact()
    assert not list(desk.dossier.glob("results/*/manifest.json"))
    assert desk.run("--quiet").status == 0
    desk.assert_holds(newer)


@pytest.mark.parametrize("what", FURTHER_READINGS)
def test_a_shard_that_vanished_and_is_needed_again(desk: Desk, monkeypatch: pytest.MonkeyPatch, what: str) -> None:
    desk.write_job(design=FURTHER_READINGS[what], modes={"reads": 2})
    Replacing(monkeypatch, KEYS[BAD], 4, (desk.campaign / KEYS[BAD]).unlink)
    assert desk.run("--quiet").status == 4
    answer = desk.run("--quiet")
    assert answer.status == 2
    answer.says(f"{KEYS[BAD]}: a shard that is in has vanished", "put the shard back", "--prune N")
    desk.write(KEYS[BAD], good(BAD))
    assert desk.run("--quiet").status == 0
    desk.assert_holds(field())


def test_an_object_replaced_while_it_is_read_from_s3(desk: Desk, folder: Any, proxy: Any) -> None:
    direct = open_store(f"{folder.location}/campaign", folder.endpoint)
    for number, key in enumerate(KEYS):
        direct.put(key, parquet(good(number)))
    left = [2]

    def replace(method: str, path: str) -> None:
        if method == "GET" and path.endswith(f"/{KEYS[BAD]}"):
            left[0] -= 1
            if left[0] == 0:
                direct.put(KEYS[BAD], parquet(wide(T, 2 * F)))

    proxy.before = replace
    desk.write_job(source={"location": f"{folder.location}/campaign", "storage": {"endpoint": proxy.endpoint}})
    answer = desk.run("--quiet")
    assert answer.status == 3
    answer.says(f"refused {KEYS[BAD]}: ", "replaced or removed while it was read", "remedy: run again")
    desk.assert_holds(REST)
    assert desk.run("--quiet").status == 0
    assert desk.shards_in() == list(KEYS)


def test_a_shard_still_being_written_is_left_for_the_next_run(desk: Desk) -> None:
    """It is half there and young; not looked into, not refused."""
    desk.write_job(source={"settle": "10 min"})
    for key in KEYS:
        os.utime(desk.campaign / key, (1_600_000_000,) * 2)
    desk.write(KEYS[BAD], parquet(good(BAD))[:1000])
    answer = desk.run("--json")
    assert answer.status == 0
    answer.says("1 left for later", f"1 shard ({KEYS[BAD]}) left for the next run: younger than source.settle")
    assert (answer.document["newly_refused"], answer.document["standing_refused"]) == (0, 0)
    desk.assert_holds(REST)
    desk.write(KEYS[BAD], good(BAD))
    os.utime(desk.campaign / KEYS[BAD], (1_600_000_000,) * 2)
    assert desk.run().status == 0
    desk.assert_holds(field())


def test_nothing_but_young_shards(desk: Desk) -> None:
    desk.write_job(source={"settle": "10 min"})
    answer = desk.run()
    assert answer.status == 2
    answer.says("source.settle", "at least 10 min old", "run again later")
    assert not desk.dossier.exists()


def test_latest_follows_when_the_inputs_become_those_of_an_earlier_result(tmp_path: Path) -> None:
    """A sound shard comes, then is replaced by a bad one: what is in is what was in before it came."""
    desk = Desk(tmp_path)
    for number in range(SHARDS - 1):
        desk.write(KEYS[number], good(number))
    assert desk.run("--quiet").status == 0
    desk.write(KEYS[-1], good(SHARDS - 1))
    assert desk.run("--quiet").status == 0
    assert desk.shards_in() == list(KEYS)
    moments, values = part(SHARDS - 1)
    desk.write(KEYS[-1], wide(moments, with_value(values, np.nan)))
    assert desk.run("--quiet").status == 3
    assert desk.shards_in() == list(KEYS[:-1])
    desk.assert_holds(field((SHARDS - 1) * ROWS))
    desk.assert_intact()
