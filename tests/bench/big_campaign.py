"""Campaigns of any size for the benchmarks, written shard by shard from a small pool of generated blocks.

Ten decaying patterns, an offset per channel and noise, rounded to steps of 1/256 as a converter does, so that a
compressor finds what it finds in measured data. Times go on evenly from shard to shard; only they differ between
shards made of the same block.
"""

from __future__ import annotations

import io
from argparse import ArgumentParser, Namespace
from collections.abc import Iterator
from concurrent.futures import ProcessPoolExecutor, ThreadPoolExecutor
from dataclasses import dataclass
from multiprocessing import get_context

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from shardfold.store import open_store

START_NS = 1_932_000_000_000_000_000
STEP_NS = 10_000_000
POOL = 4
WRITERS = 2
ORIENT = "samples_by_channels"


@dataclass(frozen=True)
class Campaign:
    """What to write: shards of whole row groups, about so many bytes of values in all.

    Ten milliseconds apart, shards of 6,000 or 12,000 samples are whole minutes, and no row group crosses a leaf's edge.
    """

    layout: str
    channels: int
    total_bytes: float
    shard_rows: int
    group_rows: int
    dtype: str = "float32"
    compression: str = "none"
    orient: str = "samples_by_channels"

    @property
    def shard_bytes(self) -> int:
        """Return the bytes of the values of a shard."""
        return self.shard_rows * self.channels * np.dtype(self.dtype).itemsize

    @property
    def shards(self) -> int:
        """Return the number of shards."""
        return max(1, round(self.total_bytes / self.shard_bytes))

    @property
    def values_bytes(self) -> int:
        """Return the bytes of all values."""
        return self.shards * self.shard_bytes

    def __str__(self) -> str:
        """Say what is written."""
        return (
            f"{self.layout} {self.dtype}, compression {self.compression}: {self.shards} shards of {self.shard_rows} "
            f"samples x {self.channels} channels, row groups of {self.group_rows}; {self.values_bytes / 1e9:.2f} GB"
        )

    def source(self, location: str, endpoint: str) -> str:
        """Return the ``source`` block of a job."""
        keys = f"location: {location}, storage: {{endpoint: '{endpoint}', region: us-east-1}}, settle: 0 s"
        if self.layout == "array":
            time = rf"{{from_name: 'at-(?P<nanoseconds>\d+)', step: {STEP_NS // 1000} us}}"
            return f"{{{keys}, layout: array, match: '**/*.npy', orient: {self.orient}, time: {time}}}"
        return f"{{{keys}, layout: {self.layout}, time: t{', values: v' if self.layout == 'vector' else ''}}}"


def options(parser: ArgumentParser, gigabytes: float) -> None:
    """Add the options that say what is written."""
    parser.add_argument("--layout", choices=("vector", "wide", "array"), default="vector")
    parser.add_argument("--orient", choices=("samples_by_channels", "channels_by_samples"), default=ORIENT)
    parser.add_argument("--gb", type=float, default=gigabytes, help="bytes of all values, in 1e9")
    parser.add_argument("--channels", type=int, default=3000)
    parser.add_argument("--shard-rows", type=int, default=12_000)
    parser.add_argument("--group-rows", type=int, default=4_000)
    parser.add_argument("--dtype", default="float32")
    parser.add_argument("--compression", default="none")


def chosen(given: Namespace, compression: str = "") -> Campaign:
    """Return the campaign that the options describe."""
    return Campaign(
        given.layout,
        given.channels,
        given.gb * 1e9,
        given.shard_rows,
        given.group_rows,
        given.dtype,
        compression or given.compression,
        given.orient,
    )


def write_apart(location: str, endpoint: str, campaign: Campaign) -> int:
    """Write the shards from another process, which takes its memory with it; return their bytes."""
    with ProcessPoolExecutor(1, mp_context=get_context("spawn")) as pool:
        return pool.submit(write, location, endpoint, campaign).result()


def write(location: str, endpoint: str, campaign: Campaign) -> int:
    """Write the shards, two at a time, and return their bytes."""
    store = open_store(location, endpoint, "us-east-1")
    pool = list(_blocks(campaign))
    make = _npy if campaign.layout == "array" else _parquet

    def one(number: int) -> int:
        first = number * campaign.shard_rows
        times = START_NS + STEP_NS * np.arange(first, first + campaign.shard_rows)
        blocks = [pool[(number + i) % len(pool)] for i in range(campaign.shard_rows // campaign.group_rows)]
        key, data = make(campaign, times, blocks)
        store.put(key, data)
        return len(data)

    with ThreadPoolExecutor(WRITERS) as threads:
        return sum(threads.map(one, range(campaign.shards)))


def _blocks(campaign: Campaign) -> Iterator[np.ndarray]:
    """Yield sample-major blocks of one row group."""
    m, n = campaign.channels, campaign.group_rows
    rng = np.random.Generator(np.random.PCG64(7))
    patterns = (rng.standard_normal((10, m)) * 20 * 2.0 ** -np.arange(10)[:, None]).astype(np.float32)
    offset = 50 * rng.standard_normal(m, dtype=np.float32)
    for _ in range(POOL):
        values = rng.standard_normal((n, 10), dtype=np.float32) @ patterns
        values += offset
        values += 0.05 * rng.standard_normal((n, m), dtype=np.float32)
        yield (np.round(values * 256) / 256).astype(campaign.dtype)


def _parquet(campaign: Campaign, times: np.ndarray, blocks: list[np.ndarray]) -> tuple[str, memoryview]:
    tables = _wide if campaign.layout == "wide" else _vector
    sink = pa.BufferOutputStream()
    groups = tables(campaign, times, blocks)
    first = next(groups)
    options = {"compression": campaign.compression, "use_dictionary": False, "write_statistics": ["t"]}
    with pq.ParquetWriter(sink, first.schema, **options) as writer:
        writer.write_table(first, row_group_size=campaign.group_rows)
        for group in groups:
            writer.write_table(group, row_group_size=campaign.group_rows)
    number = (int(times[0]) - START_NS) // (STEP_NS * campaign.shard_rows)
    return f"part-{number:05d}.parquet", memoryview(sink.getvalue())


def _wide(campaign: Campaign, times: np.ndarray, blocks: list[np.ndarray]) -> Iterator[pa.Table]:
    names = [f"G{i:05d}" for i in range(campaign.channels)]
    for number, block in enumerate(blocks):
        columns = np.ascontiguousarray(block.T)
        yield pa.table([_times(campaign, times, number), *map(pa.array, columns)], names=["t", *names])


def _vector(campaign: Campaign, times: np.ndarray, blocks: list[np.ndarray]) -> Iterator[pa.Table]:
    for number, block in enumerate(blocks):
        edges = np.arange(len(block) + 1, dtype=np.int32) * campaign.channels
        lists = pa.ListArray.from_arrays(edges, pa.array(block.reshape(-1)))
        yield pa.table([_times(campaign, times, number), lists], names=["t", "v"])


def _times(campaign: Campaign, times: np.ndarray, number: int) -> pa.Array:
    rows = slice(number * campaign.group_rows, (number + 1) * campaign.group_rows)
    return pa.array(times[rows], pa.timestamp("ns", tz="UTC"))


def _npy(campaign: Campaign, times: np.ndarray, blocks: list[np.ndarray]) -> tuple[str, memoryview]:
    values = np.concatenate(blocks)
    sink = io.BytesIO()
    np.save(sink, values if campaign.orient == "samples_by_channels" else np.ascontiguousarray(values.T))
    return f"at-{times[0]}.npy", sink.getbuffer()
