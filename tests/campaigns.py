"""Campaigns for tests: a matrix cut into shards of any layout, a job's text, and what a run made of it.

Every writer takes channels x samples and cuts the samples evenly; names of shards sort as their samples do. No checks
live here, and everything is a function of its arguments.
"""

from __future__ import annotations

import io
import json
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import scipy.fft

from shardfold.executor import Executor, SerialExecutor
from shardfold.job import parse_job
from shardfold.results import Result, open_result
from shardfold.run import run
from shardfold.store import Store
from shardfold.tables import mode_names

Array = np.ndarray[Any, Any]

START_NS = 1_932_000_000_000_000_000  # 2031-03-22T02:40:00Z
STEP_NS = 125_000_000
FROM_NAME = {"from_name": r"-(?P<nanoseconds>\d+)\.npy$", "step": f"{STEP_NS} ns"}
"""The ``time`` of a campaign that `write_array` wrote with times."""


def even_times(samples: int, step_ns: int = STEP_NS) -> Array:
    """Return int64 (samples,) nanoseconds since the Unix epoch, evenly spaced."""
    return START_NS + step_ns * np.arange(samples, dtype=np.int64)


def with_spectrum(channels: int, samples: int, values: Array, seed: int = 0) -> Array:
    """Return float64 (channels, samples) with these singular values, whose rows have mean zero.

    Left vectors are cosines over the channels with random signs, right ones the slowest cosines over the samples, so
    that blocks and leaves differ most in their means; two fast transforms cost a hundredth of a QR.
    """
    matrix = np.zeros((channels, samples))
    places = np.arange(len(values))
    matrix[places, places + 1] = values
    for axis in (0, 1):
        matrix = scipy.fft.idct(matrix, axis=axis, norm="ortho", overwrite_x=True)
    matrix *= np.random.Generator(np.random.PCG64(seed)).choice([-1.0, 1.0], (channels, 1))
    return matrix


def put_table(store: Store, key: str, columns: dict[str, Any], row_group: int | None = None) -> None:
    """Write one Parquet object, plainly encoded: random numbers do not compress, and trying takes time."""
    sink = pa.BufferOutputStream()
    pq.write_table(pa.table(columns), sink, row_group_size=row_group, compression="none", use_dictionary=False)
    store.put(key, bytes(sink.getvalue()))


def write_wide(
    store: Store,
    matrix: Array,
    times_ns: Array | None = None,
    *,
    shards: int = 3,
    row_group: int | None = None,
    names: Sequence[str] | None = None,
    prefix: str = "",
) -> None:
    """Write one column per channel, and ``t`` if there are times."""
    names = names or [f"c{number:03d}" for number in range(len(matrix))]
    for number, part in _parts(matrix.shape[1], shards):
        columns = _time_column(times_ns, part) | dict(zip(names, matrix[:, part], strict=True))
        put_table(store, f"{prefix}part-{number:03d}.parquet", columns, row_group)


def write_vector(
    store: Store,
    matrix: Array,
    times_ns: Array | None = None,
    *,
    shards: int = 3,
    row_group: int | None = None,
    prefix: str = "",
) -> None:
    """Write a list ``v`` of all channels per sample, and ``t`` if there are times."""
    for number, part in _parts(matrix.shape[1], shards):
        flat = pa.array(np.ascontiguousarray(matrix[:, part].T).ravel())
        columns = _time_column(times_ns, part) | {"v": pa.FixedSizeListArray.from_arrays(flat, len(matrix))}
        put_table(store, f"{prefix}part-{number:03d}.parquet", columns, row_group)


def write_array(
    store: Store,
    matrix: Array,
    times_ns: Array | None = None,
    *,
    orient: str = "samples_by_channels",
    shards: int = 3,
    prefix: str = "",
) -> None:
    """Write ``.npy`` files in C order; the first time in nanoseconds is part of the name if there are times."""
    for number, part in _parts(matrix.shape[1], shards):
        block = matrix[:, part] if orient == "channels_by_samples" else matrix[:, part].T
        sink = io.BytesIO()
        np.save(sink, np.ascontiguousarray(block), allow_pickle=False)
        first = "" if times_ns is None else f"-{times_ns[part.start]}"
        store.put(f"{prefix}part-{number:03d}{first}.npy", sink.getvalue())


def job_text(campaign: str, dossier: str, layout: str, endpoint: str | None = None, **blocks: Any) -> str:
    """Return a job as YAML (which JSON is).

    Parameters
    ----------
    campaign, dossier : str
        Locations.
    layout : str
        ``wide``, ``vector`` or ``array`` as written by the functions above; ``time`` is ``t``, or from the name for
        arrays, unless ``source`` says otherwise.
    endpoint : str, optional
        Of the S3 service.
    **blocks : dict
        Keys of ``source``, ``design``, ``modes`` and so on, besides those above.
    """
    storage = {} if endpoint is None else {"storage": {"endpoint": endpoint, "region": "us-east-1"}}
    source: dict[str, Any] = {"location": campaign, "layout": layout, "settle": "0 s", **storage}
    source["time"] = FROM_NAME if layout == "array" else "t"
    if layout == "vector":
        source["values"] = "v"
    if layout == "array":
        source["match"] = "**/*.npy"
    source |= blocks.pop("source", {})
    return json.dumps({"campaign": "test", "source": source, "dossier": {"location": dossier, **storage}, **blocks})


@dataclass(frozen=True)
class Found:
    """A published result as arrays; what is blank in its tables is NaN here."""

    result: Result

    @cached_property
    def values(self) -> Array:
        """Singular values (r,)."""
        return self.column("singular_value")

    @cached_property
    def modes(self) -> Array:
        """Modes in channel units (m, r)."""
        return _matrix(self.result.modes, "mode", len(self.values)).T

    @cached_property
    def coefficients(self) -> Array:
        """Coefficients (r, n) in the order of the written matrix."""
        table = self.result.coefficients()
        values = _matrix(table, "c", len(self.values))
        if "shard" not in table.column_names:
            return values
        # Without times, parts go by the hash of the shard's name.
        order = np.lexsort((table.column("row").to_numpy(), np.array(table.column("shard").to_pylist())))
        return values[:, order]

    @cached_property
    def mean(self) -> Array:
        """Removed mean (m, 1), zero if it was kept."""
        background = self.result.background
        if "mean" not in background.column_names:
            return np.zeros((len(background), 1))
        return _numbers(background.column("mean"))[:, np.newaxis]

    def column(self, name: str) -> Array:
        """A column of the mode table as float64 (r,)."""
        return _numbers(self.result.mode_table.column(name))


def run_job(text: str, make_executor: Callable[[], Executor] = SerialExecutor) -> Found:
    """Run a job and open the result that it published."""
    job = parse_job(text, "job.yaml")
    report = run(job, make_executor, lambda event: None)
    assert report.newly_refused == report.standing_refused == 0
    return Found(open_result(report.location, job.dossier.storage.endpoint))


def _parts(samples: int, shards: int) -> Iterator[tuple[int, slice]]:
    edges = np.linspace(0, samples, shards + 1).astype(int).tolist()
    return ((number, slice(edges[number], edges[number + 1])) for number in range(shards))


def _time_column(times_ns: Array | None, part: slice) -> dict[str, Any]:
    return {} if times_ns is None else {"t": pa.array(times_ns[part], pa.timestamp("ns", tz="UTC"))}


def _matrix(table: Any, stem: str, rank: int) -> Array:
    return np.array([_numbers(table.column(name)) for name in mode_names(rank, stem)])


def _numbers(column: Any) -> Array:
    return np.asarray(column.to_numpy(), dtype=np.float64)
