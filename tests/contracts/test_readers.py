"""What every reader promises, held by one suite for all layouts; what only Parquet does follows below.

Expected values are the arrays that the shards were written from with pyarrow and NumPy.
"""

from __future__ import annotations

import io
import pickle
import subprocess
import sys
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from shardfold.channels import keep_names
from shardfold.errors import InputError
from shardfold.ids import ObjectInfo, Shard
from shardfold.job import TimeColumn, TimeFromName, TimeStart
from shardfold.readers import Batch, Reader, group_peak_bytes, reader_for, shard_peak_bytes
from shardfold.readers.footer import GAP_BYTES, TAIL_BYTES
from shardfold.store import StoreSettings, connect

START, STEP = 1_930_089_600_000_000_000, 125_000_000  # 2031-03-01T00:00:00Z and 125 ms
FROM_NAME = TimeFromName(from_name=r"(\d{8}T\d{6}Z)\.", step="125 ms")
T = TimeColumn(column="t")
KEY = "run/20310301T000000Z."


@dataclass(frozen=True)
class Channels:
    """Stands for ``source.channels``."""

    include: tuple[str, ...] | None = None
    exclude: tuple[str, ...] = ()


@dataclass(frozen=True)
class Source:
    """Stands for ``source``: the attributes that readers look at."""

    layout: str
    time: Any = T
    values: str | None = "strain"
    orient: str = "samples_by_channels"
    channels: Channels = field(default_factory=Channels)


@dataclass
class Shelf:
    """One object in memory that notes what is read of it."""

    data: bytes
    reads: list[tuple[str | None, int, int]] = field(default_factory=list)

    @property
    def info(self) -> ObjectInfo:
        return ObjectInfo(KEY + "bin", "v7", len(self.data), 0.0)

    def read(self, key: str, *, version: str | None = None, start: int = 0, stop: int | None = None) -> memoryview:
        assert (key, stop is not None) == (self.info.key, True)
        assert 0 <= start < stop <= len(self.data)
        self.reads.append((version, start, stop))
        return memoryview(self.data)[start:stop]


def times_of(n: int) -> np.ndarray:
    return START + STEP * np.arange(n, dtype=np.int64)


def parquet(columns: dict[str, Any], n: int, groups: int, **options: Any) -> bytes:
    sink = io.BytesIO()
    pq.write_table(pa.table(columns), sink, row_group_size=-(-n // groups), **options)
    return sink.getvalue()


def stamps(n: int) -> pa.Array:
    return pa.array(times_of(n), pa.timestamp("ns", "UTC"))


def names_of(m: int) -> list[str]:
    return [f"ch{i:05d}" for i in range(m)]


def wide(values: np.ndarray, groups: int, **options: Any) -> bytes:
    columns = dict(zip(names_of(len(values)), map(pa.array, values), strict=True))
    return parquet({"t": stamps(values.shape[1]), **columns}, values.shape[1], groups, **options)


def vector(kind: Callable[[pa.DataType, int], pa.DataType]) -> Callable[..., bytes]:
    def write(values: np.ndarray, groups: int, **options: Any) -> bytes:
        m, n = values.shape
        flat = pa.FixedSizeListArray.from_arrays(pa.array(np.ascontiguousarray(values.T).ravel()), m)
        column = flat.cast(kind(flat.type.value_type, m))
        return parquet({"note": pa.array(["x"] * n), "t": stamps(n), "strain": column}, n, groups, **options)

    return write


def npy(transposed: bool, fortran: bool, order: str = "=") -> Callable[..., bytes]:
    def write(values: np.ndarray, groups: int) -> bytes:
        array = (values if transposed else values.T).astype(values.dtype.newbyteorder(order))
        sink = io.BytesIO()
        np.save(sink, np.asfortranarray(array) if fortran else np.ascontiguousarray(array), allow_pickle=False)
        return sink.getvalue()

    return write


@dataclass(frozen=True)
class Case:
    """A layout, how its shards are written, and whether its batches hold whole channels."""

    source: Source
    write: Callable[..., bytes]
    channel_major: bool
    cut: bool = True


BY_CHANNELS = "channels_by_samples"
ARRAY = Source("array", FROM_NAME)
CASES = {
    "wide": Case(Source("wide"), wide, True),
    "fixed_size_list": Case(Source("vector"), vector(pa.list_), False),
    "list": Case(Source("vector"), vector(lambda kind, m: pa.list_(kind)), False),
    "large_list": Case(Source("vector"), vector(lambda kind, m: pa.large_list(kind)), False),
    "npy": Case(ARRAY, npy(False, False), False, cut=False),
    "npy_fortran": Case(ARRAY, npy(False, True), True, cut=False),
    "npy_big_endian": Case(ARRAY, npy(False, False, ">"), False, cut=False),
    "npy_channels": Case(Source("array", FROM_NAME, orient=BY_CHANNELS), npy(True, False), True, cut=False),
    "npy_channels_fortran": Case(Source("array", FROM_NAME, orient=BY_CHANNELS), npy(True, True), False, cut=False),
    "npy_channels_big_endian": Case(Source("array", FROM_NAME, orient=BY_CHANNELS), npy(True, False, ">"), True, False),
}
PARQUET = [name for name, case in CASES.items() if case.source.layout != "array"]


@pytest.fixture(params=CASES)
def case(request: pytest.FixtureRequest) -> Case:
    return CASES[request.param]


@pytest.fixture
def values() -> np.ndarray:
    return np.random.default_rng(3).standard_normal((5, 23)).astype(np.float32)


def read_all(reader: Reader, shelf: Shelf, shard: Shard, channels: Sequence[str] | None = None) -> list[Batch]:
    return list(reader.batches(shelf, shard, 0, len(shard.groups), tuple(channels or shard.channels)))


def joined(batches: list[Batch]) -> np.ndarray:
    return np.concatenate([batch.values for batch in batches], axis=1)


def test_a_shard_reads_as_what_was_written(case: Case, values: np.ndarray) -> None:
    shelf, reader = Shelf(case.write(values, groups=4)), reader_for(case.source)
    shard = reader.describe(shelf, shelf.info)
    batches = read_all(reader, shelf, shard)
    np.testing.assert_array_equal(joined(batches), values)
    np.testing.assert_array_equal(np.concatenate([batch.times for batch in batches]), times_of(23))
    assert shard.channels == tuple(names_of(5))
    assert shard.zoned
    assert [batch.first_row for batch in batches] == ([0, 6, 12, 18] if case.cut else [0])


def test_batches_keep_type_and_memory_order_of_the_source(case: Case, values: np.ndarray) -> None:
    shelf, reader = Shelf(case.write(values, groups=2)), reader_for(case.source)
    shard = reader.describe(shelf, shelf.info)
    for batch in read_all(reader, shelf, shard):
        assert shard.dtype == str(batch.values.dtype) == "float32"
        assert batch.values.dtype.isnative
        assert batch.values.flags.c_contiguous is case.channel_major
        assert batch.values.flags.f_contiguous is not case.channel_major


def test_the_description_promises_what_is_read(case: Case, values: np.ndarray) -> None:
    shelf, reader = Shelf(case.write(values, groups=3)), reader_for(case.source)
    shard = reader.describe(shelf, shelf.info)
    for number, group in enumerate(shard.groups):
        shelf.reads.clear()
        (batch,) = reader.batches(shelf, shard, number, number + 1, shard.channels)
        assert (group.rows, group.first, group.last) == (batch.values.shape[1], batch.times.min(), batch.times.max())
        assert group.decoded_bytes == batch.values.nbytes + batch.times.nbytes
        assert group.stored_bytes == sum(stop - start for _, start, stop in shelf.reads[1:])


def test_one_request_describes_and_one_more_reads_a_row_group(case: Case, values: np.ndarray) -> None:
    shelf, reader = Shelf(case.write(values, groups=4)), reader_for(case.source)
    shard = reader.describe(shelf, shelf.info)
    assert len(shelf.reads) == 1
    shelf.reads.clear()
    read_all(reader, shelf, shard)
    assert len(shelf.reads) == 1 + len(shard.groups)
    assert {version for version, _, _ in shelf.reads} == {"v7"}


def test_row_groups_can_be_read_apart(case: Case, values: np.ndarray) -> None:
    shelf, reader = Shelf(case.write(values, groups=4)), reader_for(case.source)
    shard = reader.describe(shelf, shelf.info)
    last = len(shard.groups) - 1
    (batch,) = reader.batches(shelf, shard, last, last + 1, shard.channels)
    np.testing.assert_array_equal(batch.values, values[:, batch.first_row :])
    assert list(reader.batches(shelf, shard, last, last, shard.channels)) == []


def test_channels_are_left_out_by_pattern_and_read_in_the_order_asked_for(case: Case, values: np.ndarray) -> None:
    source = Source(**{**vars(case.source), "channels": Channels(exclude=("ch00001", "*4"))})
    shelf, reader = Shelf(case.write(values, groups=2)), reader_for(source)
    shard = reader.describe(shelf, shelf.info)
    assert shard.channels == ("ch00000", "ch00002", "ch00003")
    batches = read_all(reader, shelf, shard, ("ch00003", "ch00000", "ch00002"))
    np.testing.assert_array_equal(joined(batches), values[[3, 0, 2]])
    assert all(batch.values.flags.c_contiguous is case.channel_major for batch in batches)
    assert sum(g.decoded_bytes for g in shard.groups) == sum(b.values.nbytes + b.times.nbytes for b in batches)


@pytest.mark.parametrize("name", [name for name in CASES if name != "wide"])
def test_the_channel_table_names_places(name: str, values: np.ndarray) -> None:
    case = CASES[name]
    source = Source(**{**vars(case.source), "channels": Channels(include=("tip", "root*"))})
    shelf, reader = Shelf(case.write(values, groups=2)), reader_for(source, ("root", "a", "b", "c", "tip"))
    shard = reader.describe(shelf, shelf.info)
    assert shard.channels == ("root", "tip")
    np.testing.assert_array_equal(joined(read_all(reader, shelf, shard)), values[[0, 4]])


def test_no_times_at_all(case: Case, values: np.ndarray) -> None:
    exclude = ("t",) if case.source.layout == "wide" else ()
    source = Source(**{**vars(case.source), "time": None, "channels": Channels(exclude=exclude)})
    shelf, reader = Shelf(case.write(values, groups=2)), reader_for(source)
    shard = reader.describe(shelf, shelf.info)
    assert (shard.first, shard.last, shard.zoned) == (None, None, False)
    batches = read_all(reader, shelf, shard)
    assert all(batch.times is None for batch in batches)
    np.testing.assert_array_equal(joined(batches), values)


@pytest.mark.parametrize("time", [FROM_NAME, TimeStart(start="2031-03-01T00:00:00Z", step="125 ms")])
def test_even_times_need_no_column(case: Case, values: np.ndarray, time: Any) -> None:
    exclude = ("t",) if case.source.layout == "wide" else ()
    source = Source(**{**vars(case.source), "time": time, "channels": Channels(exclude=exclude)})
    shelf, reader = Shelf(case.write(values, groups=3)), reader_for(source)
    shard = reader.describe(shelf, shelf.info)
    batches = read_all(reader, shelf, shard)
    np.testing.assert_array_equal(np.concatenate([batch.times for batch in batches]), times_of(23))
    assert [(g.first, g.last) for g in shard.groups] == [(b.times[0], b.times[-1]) for b in batches]


def test_readers_and_shards_survive_pickling(case: Case, values: np.ndarray) -> None:
    shelf, reader = Shelf(case.write(values, groups=2)), reader_for(case.source)
    reader, shard = pickle.loads(pickle.dumps((reader, reader.describe(shelf, shelf.info))))  # noqa: S301
    np.testing.assert_array_equal(joined(read_all(reader, shelf, shard)), values)


@pytest.mark.parametrize("dtype", ["int8", "uint8", "int16", "uint16", "int32", "int64", "float16", "float64"])
def test_numbers_of_every_type_stay_as_stored(case: Case, dtype: str) -> None:
    values = np.random.default_rng(5).integers(0, 100, (3, 9)).astype(dtype)
    shelf, reader = Shelf(case.write(values, groups=2)), reader_for(case.source)
    shard = reader.describe(shelf, shelf.info)
    batches = read_all(reader, shelf, shard)
    assert shard.dtype == dtype
    assert {str(batch.values.dtype) for batch in batches} == {dtype}
    np.testing.assert_array_equal(joined(batches), values)


@pytest.mark.parametrize("kind", ["local", "s3"])
def test_every_layout_reads_from_real_stores(
    kind: str, values: np.ndarray, tmp_path: Path, request: pytest.FixtureRequest
) -> None:
    place = StoreSettings(str(tmp_path))
    if kind == "s3":
        bucket = request.getfixturevalue("bucket")
        place = StoreSettings(bucket.location, bucket.endpoint)
    store = connect(place)
    for name, case in CASES.items():
        key = f"{name}/20310301T000000Z.bin"
        store.put(key, case.write(values, groups=3))
        reader, before = reader_for(case.source), store.snapshot()
        shard = reader.describe(store, store.head(key))
        batches = list(reader.batches(store, shard, 0, len(shard.groups), shard.channels))
        assert (store.snapshot() - before).reads == 2 + len(shard.groups)
        np.testing.assert_array_equal(joined(batches), values)


def test_a_layout_that_nobody_knows_is_an_input_error() -> None:
    with pytest.raises(InputError, match="no reader for this source"):
        reader_for(Source("cube"))


@settings(max_examples=25, deadline=None)
@given(name=st.sampled_from(PARQUET), m=st.integers(1, 9), n=st.integers(1, 40), groups=st.integers(1, 40))
def test_any_cut_into_row_groups_gives_the_same_samples(name: str, m: int, n: int, groups: int) -> None:
    values = np.random.default_rng([m, n]).standard_normal((m, n))
    shelf, reader = Shelf(CASES[name].write(values, groups)), reader_for(CASES[name].source)
    shard = reader.describe(shelf, shelf.info)
    np.testing.assert_array_equal(joined(read_all(reader, shelf, shard)), values)


@pytest.mark.parametrize("name", PARQUET)
@pytest.mark.parametrize("compression", ["none", "snappy", "gzip", "brotli", "zstd", "lz4"])
def test_every_compression_is_read(name: str, compression: str, values: np.ndarray) -> None:
    data = CASES[name].write(values, 2, compression=compression, write_page_checksum=True, data_page_version="2.0")
    shelf, reader = Shelf(data), reader_for(CASES[name].source)
    np.testing.assert_array_equal(joined(read_all(reader, shelf, reader.describe(shelf, shelf.info))), values)


@pytest.mark.parametrize("name", PARQUET)
@pytest.mark.parametrize(("stored", "held"), [("float32", "float32"), ("float16", "float16"), ("int16", "float32"),
                                              ("uint16", "float32"), ("int32", "float64")])  # fmt: skip
def test_missing_values_become_nan_in_one_type_for_the_shard(name: str, stored: str, held: str) -> None:
    values = np.arange(12).reshape(2, 6).astype(stored)
    table = pq.read_table(io.BytesIO(CASES[name].write(values, 1)))
    if name == "wide":
        holed = pa.array([None, *values[1, 1:]], pa.from_numpy_dtype(values.dtype))
        table = table.set_column(2, "ch00001", holed)
    else:
        lists = table.column("strain").to_pylist()
        lists[0][1] = None
        table = table.set_column(2, "strain", pa.array(lists, table.schema.field("strain").type))
    shelf, reader = Shelf(parquet(dict(zip(table.column_names, table.columns, strict=True)), 6, 3)), None
    reader = reader_for(CASES[name].source)
    shard = reader.describe(shelf, shelf.info)
    batches = read_all(reader, shelf, shard)
    assert {shard.dtype, *(str(batch.values.dtype) for batch in batches)} == {held}
    expected = values.astype(held)
    expected[1, 0] = np.nan
    np.testing.assert_array_equal(joined(batches), expected)
    assert [g.decoded_bytes for g in shard.groups] == [b.values.nbytes + b.times.nbytes for b in batches]


@pytest.mark.parametrize(
    ("types", "common"),
    [(("float32", "float64"), "float64"), (("int16", "float32"), "float32"), (("int32", "float32"), "float64"),
     (("int8", "uint8"), "int16"), (("float16", "float32"), "float32"), (("int64", "float32"), "float64")],
)  # fmt: skip
def test_columns_of_several_types_share_the_common_one(types: tuple[str, ...], common: str) -> None:
    columns = {kind: np.arange(5).astype(kind) for kind in types}
    shelf, reader = Shelf(parquet({"t": stamps(5), **columns}, 5, 1)), reader_for(Source("wide"))
    shard = reader.describe(shelf, shelf.info)
    (batch,) = read_all(reader, shelf, shard)
    assert shard.dtype == str(batch.values.dtype) == common
    np.testing.assert_array_equal(batch.values, np.tile(np.arange(5), (2, 1)))


SECONDS = START // 10**9
TIME_COLUMNS = {
    "ns": (pa.array(times_of(4), pa.timestamp("ns")), times_of(4), False),
    "us in a zone": (pa.array(times_of(4) // 1000, pa.timestamp("us", "Europe/Oslo")), times_of(4), True),
    "ms": (pa.array(times_of(4) // 10**6, pa.timestamp("ms")), times_of(4), False),
    "s": (pa.array(SECONDS + np.arange(4), pa.timestamp("s", "UTC")), START + 10**9 * np.arange(4), True),
    "date32": (pa.array([2, 0, 1, 3], pa.date32()), 86_400 * 10**9 * np.array([2, 0, 1, 3]), False),
    "date64": (pa.array([0, 86_400_000, 0, 1], pa.date64()), 86_400 * 10**9 * np.array([0, 1, 0, 0]), False),
    "integer seconds": (pa.array([SECONDS, -1, 7, 0]), 10**9 * np.array([SECONDS, -1, 7, 0]), False),
    "unsigned seconds": (
        pa.array([3_000_000_000, 1, 2, 3], pa.uint32()),
        10**9 * np.array([3 * 10**9, 1, 2, 3]),
        False,
    ),
    "floating seconds": (pa.array([0.125, -0.5, 1e-9, 2.5e-9]), np.array([125_000_000, -500_000_000, 1, 2]), False),
    "float32 seconds": (pa.array([0.5, 0.25, 1.0, 2.0], pa.float32()), 250_000_000 * np.array([2, 1, 4, 8]), False),
}


@pytest.mark.parametrize("statistics", [True, False])
@pytest.mark.parametrize("name", TIME_COLUMNS)
def test_times_of_every_form_are_nanoseconds_since_1970(name: str, statistics: bool) -> None:
    column, expected, zoned = TIME_COLUMNS[name]
    data = parquet({"t": column, "x": np.zeros(4)}, 4, 2, write_statistics=statistics)
    shelf, reader = Shelf(data), reader_for(Source("wide"))
    shard = reader.describe(shelf, shelf.info)
    assert shard.zoned is zoned
    spans = [(part.min(), part.max()) for part in (expected[:2], expected[2:])]
    assert [(group.first, group.last) for group in shard.groups] == spans
    np.testing.assert_array_equal(np.concatenate([b.times for b in read_all(reader, shelf, shard)]), expected)


def test_int96_times_of_old_writers_are_read() -> None:
    data = parquet({"t": pa.array(times_of(4), pa.timestamp("ns")), "x": np.zeros(4)}, 4, 2,
                   use_deprecated_int96_timestamps=True)  # fmt: skip
    shelf, reader = Shelf(data), reader_for(Source("wide"))
    shard = reader.describe(shelf, shelf.info)
    assert (shard.first, shard.last) == (START, START + 3 * STEP)
    np.testing.assert_array_equal(np.concatenate([b.times for b in read_all(reader, shelf, shard)]), times_of(4))


@pytest.mark.parametrize(
    ("pattern", "key", "expected"),
    [
        (r"_(\d{8}T\d{6})", "blade_20310301T123000.npy", "2031-03-01T12:30:00"),
        (r"(.{10}_.{8})", "2031-03-01_12-30-05.npy", "2031-03-01T12:30:05"),
        (r"(?P<time>\S+)\.npy", "2031-03-01T12:30:05.000000125+02:00.npy", "2031-03-01T10:30:05.000000125"),
        (r"d(?P<time>\d+)-(\d+)", "d20310301-17.npy", "2031-03-01"),
        (r"(?P<seconds>\d+\.\d+)", "1930089600.125.npy", "2031-03-01T00:00:00.125"),
        (r"(?P<nanoseconds>\d+)", "1930089600000000001.npy", "2031-03-01T00:00:00.000000001"),
    ],
)
def test_times_in_names(pattern: str, key: str, expected: str) -> None:
    source = Source("array", TimeFromName(from_name=pattern, step="1 s"))
    shelf = Shelf(npy(False, False)(np.zeros((2, 3)), 1))
    info = ObjectInfo(key, "v7", len(shelf.data), 0.0)
    shard = reader_for(source).describe(_Any(shelf), info)
    assert shard.first == np.datetime64(expected, "ns").astype(np.int64)
    assert shard.zoned is ("+" in key)


@dataclass
class _Any:
    """Reads one shelf under any key."""

    shelf: Shelf

    def read(self, key: str, **where: Any) -> memoryview:
        return self.shelf.read(self.shelf.info.key, **where)


def test_a_long_footer_takes_a_second_request() -> None:
    values = np.zeros((900, 4), np.float32)
    shelf, reader = Shelf(wide(values, 1)), reader_for(Source("wide"))
    shard = reader.describe(shelf, shelf.info)
    (_, first, _), (_, second, stop) = shelf.reads
    assert stop - first == TAIL_BYTES < stop - second
    np.testing.assert_array_equal(joined(read_all(reader, shelf, shard)), values)


def test_a_few_of_many_columns_are_fetched_alone() -> None:
    values = np.random.default_rng(1).standard_normal((30, 40_000))
    kept = ("ch00002", "ch00003", "ch00027")
    source = Source("wide", None, channels=Channels(include=kept))
    shelf, reader = Shelf(wide(values, 1, compression="none", use_dictionary=False)), reader_for(source)
    shard = reader.describe(shelf, shelf.info)
    shelf.reads.clear()
    np.testing.assert_array_equal(joined(read_all(reader, shelf, shard)), values[[2, 3, 27]])
    (_, start, stop), (_, start_2, stop_2) = shelf.reads[1:]
    assert start_2 - stop > GAP_BYTES
    assert shard.groups[0].stored_bytes == stop - start + stop_2 - start_2 < 1.1 * 3 * 40_000 * 8


def test_columns_are_told_apart_below_nested_ones_and_with_dots_in_names() -> None:
    n = 4
    nested = pa.StructArray.from_arrays([pa.array(range(n)), pa.array([[1], [], [2], []])], ["a", "b"])
    columns = {"pos": nested, "a.b": np.arange(n) * 1.0, "t": stamps(n), "a": np.arange(n) * 2.0}
    source = Source("wide", channels=Channels(exclude=("pos",)))
    shelf, reader = Shelf(parquet(columns, n, 1)), reader_for(source)
    shard = reader.describe(shelf, shelf.info)
    assert shard.channels == ("a.b", "a")
    (batch,) = read_all(reader, shelf, shard)
    np.testing.assert_array_equal(batch.values, [np.arange(n), 2 * np.arange(n)])


def test_unequal_parts_of_a_npy_file_are_fetched_where_channels_are_left_out(values: np.ndarray) -> None:
    source = Source("array", None, orient=BY_CHANNELS, channels=Channels(include=("ch00001", "ch00002")))
    shelf, reader = Shelf(npy(True, False)(values, 1)), reader_for(source)
    shard = reader.describe(shelf, shelf.info)
    assert shard.groups[0].stored_bytes == values[1:3].nbytes
    np.testing.assert_array_equal(joined(read_all(reader, shelf, shard)), values[1:3])


def test_patterns_choose_names_in_order() -> None:
    assert keep_names(("G2", "G1", "x"), ("G*",), ("G1",)) == ("G2",)
    assert keep_names(("a[1]", "b"), None, ()) == ("a[1]", "b")


PEAK = """
import sys
from pathlib import Path
from types import SimpleNamespace as Plain
from shardfold.ids import ObjectInfo
from shardfold.job import TimeColumn
from shardfold.readers import reader_for, shard_peak_bytes

class Files:
    def read(self, key, *, version=None, start=0, stop=None):
        data = bytearray(stop - start)
        with open(key, "rb", buffering=0) as file:
            file.seek(start)
            assert file.readinto(data) == len(data)
        return memoryview(data)

def kib(word):
    return next(int(line.split()[1]) for line in open("/proc/self/status") if line.startswith(word))

def read(path):
    shard = reader.describe(files, ObjectInfo(path, "", Path(path).stat().st_size, 0.0))
    ahead = reader.fetched(files, shard, 0, len(shard.groups), shard.channels)
    group = next(ahead, None)
    while group is not None:
        batches, group = group(), None
        for batch in batches:
            group = group or next(ahead, None)
            del batch
    return shard

layout, warm, path = sys.argv[1:]
time = None if layout == "array" else TimeColumn(column="t")
channels = Plain(include=None, exclude=("ch00001", "ch002*"))
reader, files = reader_for(Plain(layout=layout, time=time, values="strain", orient="x", channels=channels)), Files()
read(warm)
before = kib("VmRSS")
Path("/proc/self/clear_refs").write_text("5")
shard = read(path)
largest = max(max(group.stored_bytes, group.decoded_bytes) for group in shard.groups)
print((kib("VmHWM") - before) * 1024, shard_peak_bytes(shard, layout), largest)
"""


@pytest.mark.skipif(not Path("/proc/self/clear_refs").exists(), reason="peaks are read from Linux's /proc")
@pytest.mark.parametrize("name", ["wide", "fixed_size_list", "list", "npy_fortran"])
def test_the_peak_stays_below_its_formula(name: str, tmp_path: Path) -> None:
    """With the next row group fetched while one is decoded, as a worker does."""
    case = CASES[name]
    values = np.random.default_rng(2).standard_normal((600, 16_000)).astype(np.float32)
    options = {"compression": "zstd"} if case.cut else {}
    (tmp_path / "warm").write_bytes(case.write(values[:, :8], 1))
    (tmp_path / "shard").write_bytes(case.write(values, 2, **options))
    command = [sys.executable, "-c", PEAK, case.source.layout, str(tmp_path / "warm"), str(tmp_path / "shard")]
    done = subprocess.run(command, capture_output=True, text=True, check=True)
    peak, promised, largest = map(int, done.stdout.split())
    assert 0.9 * largest < peak < promised


def test_the_bound_of_a_shard_covers_each_of_its_row_groups_and_its_footer(case: Case, values: np.ndarray) -> None:
    shelf, reader = Shelf(case.write(values, groups=2)), reader_for(case.source)
    shard = reader.describe(shelf, shelf.info)
    layout = case.source.layout
    assert shard_peak_bytes(shard, layout) > max(map(group_peak_bytes, shard.groups))
    assert all(group.stored_bytes + group.decoded_bytes < group_peak_bytes(group) for group in shard.groups)
    twice = replace(shard, groups=shard.groups * 2)
    assert shard_peak_bytes(twice, layout) > shard_peak_bytes(shard, layout)
