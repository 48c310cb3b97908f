"""The command as a user meets it, and a campaign small enough to spoil: four wide shards of an exactly known field.

The field has rank 4 on top of an offset per channel, less than the probe's width, so one read must give the singular
values of NumPy's own decomposition of the samples that were taken in, and of no others.
"""

from __future__ import annotations

import contextlib
import io
import json
import re
import signal
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from shardfold import cli, layout, ledger
from shardfold.artifacts import unpack
from shardfold.ids import digest_bytes
from shardfold.store import open_store

CHANNELS, SHARDS, ROWS, PATTERNS = 40, 4, 60, 4
STEP_NS = 10**9
START_NS = 1_932_000_000 * 10**9
NAMES = tuple(f"G{number:03d}" for number in range(CHANNELS))
KEYS = tuple(f"part-{number}.parquet" for number in range(SHARDS))


@dataclass(frozen=True)
class Answer:
    """What a command left behind: exit status, standard output, standard error."""

    status: int
    out: str
    err: str

    @property
    def document(self) -> dict[str, Any]:
        """Return standard output as the one JSON document that it must be."""
        found: dict[str, Any] = json.loads(self.out)
        return found

    def says(self, *words: str) -> None:
        """Assert that standard error holds every one of some texts, and is no traceback."""
        missing = [word for word in words if word not in self.err]
        assert not missing, f"{missing} not in:\n{self.err}"
        assert "Traceback" not in self.err

    def refuses(self, shard: str, *words: str) -> None:
        """Assert that one shard is refused, once, in a message that holds every one of some texts."""
        _, *told = re.split(r"^refused ", self.err, flags=re.MULTILINE)
        (mine,) = (message for message in told if message.startswith(f"{shard}: "))
        lines = [line for at, line in enumerate(mine.splitlines()) if at == 0 or line.startswith("  ")]
        missing = [word for word in words if word not in "\n".join(lines)]
        assert not missing, f"{missing} not in:\n{mine}"


def shardfold(*arguments: Any) -> Answer:
    """Run the command in this process, its handler of SIGTERM taken back afterwards."""
    out, err = io.StringIO(), io.StringIO()
    before = signal.getsignal(signal.SIGTERM)
    try:
        with contextlib.redirect_stdout(out), contextlib.redirect_stderr(err):
            cli.main([str(argument) for argument in arguments])
    except SystemExit as end:
        return Answer(int(end.code or 0), out.getvalue(), err.getvalue())
    finally:
        signal.signal(signal.SIGTERM, before)
    raise AssertionError("cli.main must end by SystemExit")


def field(rows: int = SHARDS * ROWS) -> np.ndarray:
    """Return the first samples (rows, channels) of an endless field: rank 4 and an offset of some tens."""
    rng = np.random.Generator(np.random.PCG64(5))
    patterns = rng.standard_normal((PATTERNS, CHANNELS)) * 2.0 ** -np.arange(PATTERNS)[:, None]
    offset = 30 * rng.standard_normal(CHANNELS)
    values: np.ndarray = rng.standard_normal((rows, PATTERNS)) @ patterns + offset
    return values


def times(rows: int = SHARDS * ROWS) -> np.ndarray:
    """Return the times of the field, one a second, in nanoseconds."""
    return START_NS + STEP_NS * np.arange(rows)


def wide(moments: np.ndarray, values: np.ndarray, **others: Any) -> pa.Table:
    """Return samples as the table of a wide shard; ``others`` replace columns, ``None`` takes one away."""
    columns: dict[str, Any] = {"t": pa.array(moments, pa.timestamp("ns", tz="UTC"))}
    columns |= dict(zip(NAMES, np.ascontiguousarray(values.T), strict=False))
    columns |= others
    return pa.table({name: column for name, column in columns.items() if column is not None})


def parquet(table: pa.Table, row_group: int | None = None, **options: Any) -> bytes:
    """Return a table as the bytes of a Parquet file."""
    sink = pa.BufferOutputStream()
    pq.write_table(table, sink, row_group_size=row_group, **options)
    return bytes(sink.getvalue())


def part(number: int) -> tuple[np.ndarray, np.ndarray]:
    """Return times and samples of one shard; the campaign has four, and more may follow."""
    rows = slice(number * ROWS, (number + 1) * ROWS)
    return times((number + 1) * ROWS)[rows], field((number + 1) * ROWS)[rows]


def good(number: int) -> pa.Table:
    """Return one shard as it should be."""
    return wide(*part(number))


class Desk:
    """A campaign in a folder, a job beside it, and the dossier that the job makes."""

    def __init__(self, folder: Path) -> None:
        self.folder, self.campaign, self.dossier = folder, folder / "campaign", folder / "dossier"
        self.job = folder / "job.yaml"
        self.campaign.mkdir()
        self.write_job()

    def write(self, key: str, content: pa.Table | bytes, row_group: int | None = None) -> None:
        """Write, or replace, one shard."""
        (self.campaign / key).write_bytes(content if isinstance(content, bytes) else parquet(content, row_group))

    def write_all(self) -> Desk:
        """Write the four shards as they should be."""
        for number, key in enumerate(KEYS):
            self.write(key, good(number))
        return self

    def write_job(self, **blocks: Mapping[str, Any]) -> None:
        """Write the job; blocks are merged into the usual ones, key by key."""
        usual: dict[str, Any] = {
            "campaign": "desk",
            "source": {"location": "campaign", "layout": "wide", "time": "t", "settle": "0 s"},
            "dossier": {"location": "dossier"},
            "design": {"width": 12, "leaf": "1 min"},
            "modes": {"rank": 3},
            "engine": {"workers": "serial"},
        }
        for name, block in blocks.items():
            merged = {**usual[name], **block} if isinstance(block, Mapping) else block
            usual[name] = {k: v for k, v in merged.items() if v is not None} if isinstance(merged, dict) else merged
        self.job.write_text(json.dumps(usual, indent=1))

    def run(self, *arguments: Any) -> Answer:
        """Run the job."""
        return shardfold("run", self.job, *arguments)

    def manifest(self) -> dict[str, Any]:
        """Return the manifest of the latest result, through the command that shows it."""
        answer = shardfold("show", self.dossier / "latest", "--json")
        assert answer.status == 0, answer.err
        found: dict[str, Any] = answer.document["manifest"]
        return found

    def shards_in(self) -> list[str]:
        """Return the keys that the latest result was made from."""
        return [shard["key"] for shard in self.manifest()["shards"]]

    def assert_holds(self, samples: np.ndarray) -> None:
        """Assert that the latest result is that of some samples (n, channels), by NumPy's own decomposition."""
        quality = self.manifest()["quality"]
        exact = np.linalg.svd(samples - samples.mean(axis=0), compute_uv=False)
        assert quality["samples"] == len(samples)
        found = quality["singular_values"]
        np.testing.assert_allclose(found, exact[: len(found)], rtol=1e-10)

    def assert_intact(self) -> None:
        """Assert that every record can be read, the ledger is unbroken, and each result is what its manifest says."""
        store = open_store(str(self.dossier))
        named = {name for state in ledger.load(store).leaves.values() for name in state.cells}
        stored = set()
        for info in store.list():
            cell, node = layout.parse_cell(info.key), layout.parse_node(info.key)
            if cell or node:
                unpack(store.read(info.key), "cell" if cell else "sum", info.key)
            if cell:
                stored.add(cell[2])
            if layout.parse_manifest(info.key):
                _assert_as_promised(store, info.key)
        assert named <= stored


def _assert_as_promised(store: Any, key: str) -> None:
    folder = key.removesuffix(layout.MANIFEST)
    for name, digest in json.loads(bytes(store.read(key)))["files"].items():
        assert digest_bytes(store.read(folder + name)) == digest
