"""The same campaign gives the same Parquet bits, whoever does the work and in whatever order; re-cut shards nearly so.

Common practice, no source: the serial executor is the oracle for the distributed one.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pyarrow.parquet as pq
import pytest

from shardfold.executor import SerialExecutor
from shardfold.job import parse_job
from shardfold.run import run
from shardfold.store import open_store
from shardfold.store_local import LocalAdapter

CHANNELS, SAMPLES, STEP_NS = 300, 6000, 125_000_000
START_NS = 1_932_000_000_000_000_000


def matrix(dtype: Any) -> np.ndarray:
    """Return (m, n): ten decaying patterns, an offset per channel and a little noise."""
    rng = np.random.Generator(np.random.PCG64(7))
    patterns = rng.standard_normal((CHANNELS, 10)) * 2.0 ** -np.arange(10)
    noise = 1e-3 * rng.standard_normal((CHANNELS, SAMPLES))
    offset = 50 * rng.standard_normal((CHANNELS, 1))
    return (patterns @ rng.standard_normal((10, SAMPLES)) + noise + offset).astype(dtype)


def write(folder: Path, values: np.ndarray, edges: list[int], row_group: int, *, backwards: bool = False) -> None:
    """Write vector shards cut at some samples; ``backwards`` names the last shard first, which changes the order."""
    import pyarrow as pa

    store = open_store(str(folder))
    times = START_NS + STEP_NS * np.arange(values.shape[1])
    for number, (start, stop) in enumerate(zip(edges, edges[1:], strict=False)):
        block = np.ascontiguousarray(values[:, start:stop].T)
        deck = pa.FixedSizeListArray.from_arrays(pa.array(block.ravel()), len(values))
        table = pa.table({"t": pa.array(times[start:stop], pa.timestamp("ns", tz="UTC")), "v": deck})
        sink = pa.BufferOutputStream()
        pq.write_table(table, sink, row_group_size=row_group)
        name = 999 - number if backwards else number
        store.put(f"part-{name:03d}.parquet", bytes(sink.getvalue()))


def job(campaign: Path, dossier: Path, width: int = 24) -> Any:
    return parse_job(
        f"""
campaign: same-bits
source: {{location: {campaign}, layout: vector, time: t, values: v, settle: 0 s}}
dossier: {{location: {dossier}}}
design: {{width: {width}, leaf: 2 min}}
modes: {{rank: 6}}
""",
        "job.yaml",
    )


def tables(dossier: Path) -> dict[str, bytes]:
    """Return the Parquet files of the only result."""
    (folder,) = (dossier / "results").iterdir()
    return {str(path.relative_to(folder)): path.read_bytes() for path in sorted(folder.rglob("*.parquet"))}


@pytest.fixture(scope="module", params=["float32", "float64"])
def campaign(request: Any, tmp_path_factory: Any) -> tuple[Path, dict[str, bytes], str]:
    """A campaign whose shards cross leaf edges, and what a serial run makes of it."""
    root = tmp_path_factory.mktemp(request.param)
    write(root / "campaign", matrix(request.param), [*range(0, SAMPLES, 700), SAMPLES], 350)
    run(job(root / "campaign", root / "serial"), SerialExecutor, lambda event: None)
    return root / "campaign", tables(root / "serial"), request.param


@pytest.mark.parametrize("workers", [1, 2])
def test_ray_workers_make_the_bits_of_the_serial_run(
    campaign: Any, workers: int, tmp_path: Path, ray_workers: None
) -> None:
    from shardfold.executor_ray import RayExecutor

    location, serial, _ = campaign
    run(job(location, tmp_path / "d"), lambda: RayExecutor(workers, None), lambda event: None)
    assert tables(tmp_path / "d") == serial


def test_the_order_of_the_listing_leaves_no_trace(
    campaign: Any, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    location, serial, _ = campaign
    page = LocalAdapter.page

    def reversed_page(self: LocalAdapter, prefix: str, bookmark: str | None) -> Any:
        infos, more = page(self, prefix, bookmark)
        return infos[::-1], more

    monkeypatch.setattr(LocalAdapter, "page", reversed_page)
    run(job(location, tmp_path / "d"), SerialExecutor, lambda event: None)
    assert tables(tmp_path / "d") == serial


def test_row_groups_leave_no_trace(campaign: Any, tmp_path: Path) -> None:
    _, serial, dtype = campaign
    write(tmp_path / "campaign", matrix(dtype), [*range(0, SAMPLES, 700), SAMPLES], 113)
    run(job(tmp_path / "campaign", tmp_path / "d"), SerialExecutor, lambda event: None)
    assert tables(tmp_path / "d") == serial


def test_shards_cut_anew_agree_to_rounding(campaign: Any, tmp_path: Path) -> None:
    _, serial, dtype = campaign
    write(tmp_path / "campaign", matrix(dtype), [0, 41, 1000, 1001, 3500, 3960, SAMPLES], 500, backwards=True)
    run(job(tmp_path / "campaign", tmp_path / "d"), SerialExecutor, lambda event: None)
    tolerance = 1e-12 if dtype == "float64" else 1e-6
    again = tables(tmp_path / "d")
    assert sorted(again) == sorted(serial)
    for name in ("modes.parquet", "mode_table.parquet"):
        _assert_close(_numbers(again[name]), _numbers(serial[name]), tolerance)
    parts = sorted(name for name in serial if name.startswith("coefficients/"))
    _assert_close(
        np.concatenate([_numbers(again[name]) for name in parts]),
        np.concatenate([_numbers(serial[name]) for name in parts]),
        tolerance,
    )


def _numbers(data: bytes) -> np.ndarray:
    import pyarrow as pa

    table = pq.read_table(pa.BufferReader(data))
    names = [f.name for f in table.schema if pa.types.is_floating(f.type)]
    return np.array([table.column(name).to_numpy(zero_copy_only=False) for name in names]).T


def _assert_close(a: np.ndarray, b: np.ndarray, tolerance: float) -> None:
    assert a.shape == b.shape
    finite = np.isfinite(b)
    assert (np.isfinite(a) == finite).all()
    scale = np.abs(np.where(finite, b, 0)).max(axis=0)
    assert (np.abs(np.where(finite, a - b, 0)) <= tolerance * np.maximum(scale, 1e-300)).all()
