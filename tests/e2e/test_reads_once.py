"""Each row group is fetched once per read, those that cross a leaf edge twice; a run with nothing new fetches nothing.

GETs are counted by a forwarder in front of the S3 server, independently of the package's own counting.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from shardfold.executor import SerialExecutor
from shardfold.job import parse_job
from shardfold.run import run
from shardfold.store import open_store

CHANNELS, ROWS, GROUP_ROWS = 200, 2000, 500
FOOTER_GETS = 1


def _campaign(location: str, endpoint: str) -> None:
    """Write two shards of four row groups (400 kB each) and 2,000 s; the second begins where the first ends."""
    store = open_store(location, endpoint)
    rng = np.random.Generator(np.random.PCG64(3))
    for number in range(2):
        times = (1_932_000_000 + number * ROWS + np.arange(ROWS)) * 10**9
        values = rng.standard_normal((ROWS, CHANNELS), np.float32)
        column = pa.FixedSizeListArray.from_arrays(pa.array(values.ravel()), CHANNELS)
        sink = pa.BufferOutputStream()
        table = pa.table({"t": pa.array(times, pa.timestamp("ns")), "v": column})
        pq.write_table(table, sink, row_group_size=GROUP_ROWS, compression="none")
        store.put(f"{number}.parquet", bytes(sink.getvalue()))


def _job(bucket: Any, endpoint: str, leaf: str, reads: int, design: str = "width: 20", rank: int = 2) -> Any:
    storage = f'storage: {{endpoint: "{endpoint}"}}'
    return parse_job(
        f"""
campaign: once
source: {{location: "{bucket.location}/c", layout: vector, time: t, values: v, settle: 0 s, {storage}}}
dossier: {{location: "{bucket.location}/d", {storage}}}
design: {{{design}, leaf: {leaf}}}
modes: {{rank: {rank}, reads: {reads}}}
""",
        "job.yaml",
    )


def _gets(proxy: Any) -> dict[str, int]:
    return {f"{number}.parquet": proxy.count("GET", f"/c/{number}.parquet") for number in range(2)}


def test_every_row_group_is_fetched_once_per_read(bucket: Any, proxy: Any, tmp_path: Path) -> None:
    _campaign(f"{bucket.location}/c", bucket.endpoint)
    # 1,932,000,000 s is a multiple of 1,000 s, so leaves of 1,000 s hold two row groups each: no edge is crossed.
    run(_job(bucket, proxy.endpoint, "1000 s", 1), SerialExecutor, lambda event: None)
    pieces, groups = 2, 4
    assert set(_gets(proxy).values()) == {FOOTER_GETS + pieces * FOOTER_GETS + groups}
    proxy.forget()
    run(_job(bucket, proxy.endpoint, "1000 s", 1), SerialExecutor, lambda event: None)
    assert set(_gets(proxy).values()) == {0}
    assert proxy.count("PUT") == 0


def test_a_second_read_fetches_each_once_more_and_no_footer_for_the_inventory(bucket: Any, proxy: Any) -> None:
    _campaign(f"{bucket.location}/c", bucket.endpoint)
    run(_job(bucket, proxy.endpoint, "1000 s", 2), SerialExecutor, lambda event: None)
    pieces, groups = 2, 4
    assert set(_gets(proxy).values()) == {FOOTER_GETS + 2 * (pieces * FOOTER_GETS + groups)}


def test_row_groups_that_cross_an_edge_are_fetched_twice(bucket: Any, proxy: Any) -> None:
    _campaign(f"{bucket.location}/c", bucket.endpoint)
    # 1,932,000,000 mod 1,600 is 0: edges after 1,600 and 3,200 s, the first in the fourth row group of the first
    # shard, the second in the third row group of the second.
    run(_job(bucket, proxy.endpoint, "1600 s", 1), SerialExecutor, lambda event: None)
    pieces, groups, crossing = 2, 4, 1
    assert set(_gets(proxy).values()) == {FOOTER_GETS + pieces * FOOTER_GETS + groups + crossing}


def test_a_triangular_factor_takes_one_read_and_its_coefficients_another(bucket: Any, proxy: Any) -> None:
    _campaign(f"{bucket.location}/c", bucket.endpoint)
    exact = _job(bucket, proxy.endpoint, "1000 s", 1, "summary: exact")
    run(exact, SerialExecutor, lambda event: None)
    pieces, groups = 2, 4
    once = pieces * FOOTER_GETS + groups
    assert set(_gets(proxy).values()) == {FOOTER_GETS + 2 * once}
    proxy.forget()
    run(exact, SerialExecutor, lambda event: None)
    assert set(_gets(proxy).values()) == {0}
    assert proxy.count("PUT") == 0
    # More modes come from the stored factor; only their coefficients are read.
    run(_job(bucket, proxy.endpoint, "1000 s", 1, "summary: exact", rank=3), SerialExecutor, lambda event: None)
    assert set(_gets(proxy).values()) == {once}
