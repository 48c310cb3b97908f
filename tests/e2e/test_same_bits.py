"""The same campaign gives the same Parquet bits, whoever does the work and in whatever order; re-cut shards nearly so.

Common practice, no source: the serial executor is the oracle for the distributed one.
"""

from __future__ import annotations

from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from shardfold.executor import SerialExecutor
from shardfold.job import parse_job
from shardfold.run import run
from shardfold.store import open_store
from shardfold.store_local import LocalAdapter

CHANNELS, SAMPLES, STEP_NS = 300, 6000, 125_000_000
FEW = 60  # channels of the campaign with a triangular factor
START_NS = 1_932_000_000_000_000_000


def matrix(kind: str) -> np.ndarray:
    """Return (m, n): ten decaying patterns, an offset per channel and a little noise."""
    rng = np.random.Generator(np.random.PCG64(7))
    patterns = rng.standard_normal((CHANNELS, 10)) * 2.0 ** -np.arange(10)
    noise = 0.05 * rng.standard_normal((CHANNELS, SAMPLES))
    offset = 50 * rng.standard_normal((CHANNELS, 1))
    values = patterns @ rng.standard_normal((10, SAMPLES)) + noise + offset
    return values[:FEW] if kind == "exact" else values.astype(kind)


def write(folder: Path, values: np.ndarray, edges: list[int], row_group: int, *, backwards: bool = False) -> None:
    """Write vector shards cut at some samples; ``backwards`` names the last shard first, which changes the order."""
    store = open_store(str(folder))
    times = START_NS + STEP_NS * np.arange(values.shape[1])
    for number, (start, stop) in enumerate(pairwise(edges)):
        block = np.ascontiguousarray(values[:, start:stop].T)
        deck = pa.FixedSizeListArray.from_arrays(pa.array(block.ravel()), len(values))
        table = pa.table({"t": pa.array(times[start:stop], pa.timestamp("ns", tz="UTC")), "v": deck})
        sink = pa.BufferOutputStream()
        pq.write_table(table, sink, row_group_size=row_group)
        name = 999 - number if backwards else number
        store.put(f"part-{name:03d}.parquet", bytes(sink.getvalue()))


def job(campaign: Path, dossier: Path, kind: str) -> Any:
    design = "summary: exact" if kind == "exact" else "width: 24"
    return parse_job(
        f"""
campaign: same-bits
source: {{location: {campaign}, layout: vector, time: t, values: v, settle: 0 s}}
dossier: {{location: {dossier}}}
design: {{{design}, leaf: 2 min}}
modes: {{rank: 6}}
""",
        "job.yaml",
    )


def tables(dossier: Path) -> dict[str, bytes]:
    """Return the Parquet files of the only result."""
    (folder,) = (dossier / "results").iterdir()
    return {str(path.relative_to(folder)): path.read_bytes() for path in sorted(folder.rglob("*.parquet"))}


@pytest.fixture(scope="module", params=["float32", "float64", "exact"])
def campaign(request: Any, tmp_path_factory: Any) -> tuple[Path, dict[str, bytes], str]:
    """A campaign whose shards cross leaf edges, and what a serial run makes of it; its kind is a type or a summary."""
    root = tmp_path_factory.mktemp(request.param)
    write(root / "campaign", matrix(request.param), [*range(0, SAMPLES, 700), SAMPLES], 350)
    run(job(root / "campaign", root / "serial", request.param), SerialExecutor, lambda event: None)
    return root / "campaign", tables(root / "serial"), request.param


@pytest.mark.parametrize("workers", [1, 2])
def test_ray_workers_make_the_bits_of_the_serial_run(
    campaign: Any, workers: int, tmp_path: Path, ray_workers: None
) -> None:
    from shardfold.executor_ray import RayExecutor

    location, serial, kind = campaign
    run(job(location, tmp_path / "d", kind), lambda: RayExecutor(workers, None), lambda event: None)
    assert tables(tmp_path / "d") == serial


def test_the_order_of_the_listing_leaves_no_trace(
    campaign: Any, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    location, serial, kind = campaign
    page = LocalAdapter.page

    def reversed_page(self: LocalAdapter, prefix: str, bookmark: str | None) -> Any:
        infos, more = page(self, prefix, bookmark)
        return infos[::-1], more

    monkeypatch.setattr(LocalAdapter, "page", reversed_page)
    run(job(location, tmp_path / "d", kind), SerialExecutor, lambda event: None)
    assert tables(tmp_path / "d") == serial


def test_row_groups_leave_no_trace(campaign: Any, tmp_path: Path) -> None:
    _, serial, kind = campaign
    write(tmp_path / "campaign", matrix(kind), [*range(0, SAMPLES, 700), SAMPLES], 113)
    run(job(tmp_path / "campaign", tmp_path / "d", kind), SerialExecutor, lambda event: None)
    assert tables(tmp_path / "d") == serial


def test_shards_cut_anew_agree_to_rounding(campaign: Any, tmp_path: Path) -> None:
    _, serial, kind = campaign
    write(tmp_path / "campaign", matrix(kind), [0, 41, 1000, 1001, 3500, 3960, SAMPLES], 500, backwards=True)
    run(job(tmp_path / "campaign", tmp_path / "d", kind), SerialExecutor, lambda event: None)
    again = tables(tmp_path / "d")
    assert sorted(again) == sorted(serial)
    values = _numbers(serial["mode_table.parquet"])[:, 0]
    floor = 1e-6 if kind == "float32" else 1e-12
    np.testing.assert_allclose(_numbers(again["mode_table.parquet"])[:, 0], values, rtol=floor)
    tolerance = _tolerances(values, floor)
    parts = sorted(name for name in serial if name.startswith("coefficients/"))
    for names in (["modes.parquet"], parts):
        old, new = (np.concatenate([_modal(t[name]) for name in names]) for t in (serial, again))
        # X is rounded relative to its largest values, so weak coefficients share the error of strong ones.
        assert (np.abs(new - old).max(axis=0) <= tolerance * np.abs(old).max()).all()


def _tolerances(values: np.ndarray, floor: float) -> np.ndarray:
    """Return what rounding may turn each mode by: 64 eps lambda_1 / gap, with the weakest mode's gap to zero."""
    squares = np.append(values**2, 0.0)
    below = squares[:-1] - squares[1:]
    gap = np.minimum(below, np.append(np.inf, below[:-1]))
    return np.maximum(floor, 64 * np.finfo(float).eps * squares[0] / gap)


def _numbers(data: bytes) -> np.ndarray:
    """Return the floating-point columns of a table as (rows, columns)."""
    table = pq.read_table(pa.BufferReader(data))
    names = [f.name for f in table.schema if pa.types.is_floating(f.type)]
    return np.array([table.column(name).to_numpy(zero_copy_only=False) for name in names]).T


def _modal(data: bytes) -> np.ndarray:
    """Return the columns of a table that belong to modes, (rows, r)."""
    table = pq.read_table(pa.BufferReader(data))
    names = [name for name in table.column_names if name.startswith(("mode_", "c_"))]
    return np.array([table.column(name).to_numpy() for name in names]).T
