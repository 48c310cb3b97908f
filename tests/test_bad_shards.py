"""What a user reads when a shard is bad: which shard, where in it, which rule, what was there, what to do.

Each message is held as a whole, except where a decoder's own words are part of it.
"""

from __future__ import annotations

import base64
import io
from collections.abc import Callable
from pathlib import Path
from types import SimpleNamespace as Plain
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pyarrow.parquet.encryption as pe
import pytest

from shardfold.errors import NothingToRead, ShardRefused, VersionChanged
from shardfold.ids import Shard
from shardfold.inventory import agree, take_inventory
from shardfold.job import TimeColumn, TimeFromName
from shardfold.readers import Reader, reader_for
from shardfold.store import Counting, StoreSettings, connect

T = TimeColumn(column="t")
FROM_NAME = TimeFromName(from_name=r"(\d{8}T\d{6})\.npy", step="1 s")
COPY_AGAIN = "copy the shard again from where it was made"


@pytest.fixture
def store(tmp_path: Path) -> Counting:
    return connect(StoreSettings(str(tmp_path)))


def reader_of(layout: str, time: Any = T, names: tuple[str, ...] = (), **channels: Any) -> Reader:
    parts = Plain(**{"include": None, "exclude": (), **channels})
    orient = "samples_by_channels"
    return reader_for(Plain(layout=layout, time=time, values="strain", orient=orient, channels=parts), names)


def columns(n: int = 6) -> dict[str, Any]:
    return {"t": pa.array(np.arange(n), pa.timestamp("ms")), "G1": np.arange(n) * 1.0, "G2": np.arange(n) * 2.0}


def parquet(parts: dict[str, Any], groups: int = 2, **options: Any) -> bytes:
    sink, table = io.BytesIO(), pa.table(parts)
    pq.write_table(table, sink, row_group_size=max(1, -(-len(table) // groups)), **options)
    return sink.getvalue()


def npy(array: np.ndarray) -> bytes:
    sink = io.BytesIO()
    np.lib.format.write_array(sink, array)
    return sink.getvalue()


def described(store: Counting, reader: Reader, data: bytes, key: str = "day/a.parquet") -> Shard:
    store.put(key, data)
    info = store.head(key)
    assert info is not None
    return reader.describe(store, info)


def read(store: Counting, reader: Reader, shard: Shard) -> None:
    for _ in reader.batches(store, shard, 0, len(shard.groups), shard.channels):
        pass


def refusal(store: Counting, reader: Reader, data: bytes, key: str = "day/a.parquet") -> str:
    """Return the message of a shard that cannot even be described."""
    with pytest.raises(ShardRefused) as caught:
        described(store, reader, data, key)
    assert (caught.value.shard, caught.value.exit_status) == (key, 3)
    assert caught.value.version
    return str(caught.value)


def refusal_when_read(store: Counting, reader: Reader, data: bytes) -> str:
    """Return the message of a shard that looks well until it is read."""
    shard = described(store, reader, data)
    with pytest.raises(ShardRefused) as caught:
        read(store, reader, shard)
    return str(caught.value)


def complaint(store: Counting, reader: Reader, data: bytes) -> str:
    """Return the message of a shard that is refused sooner or later: statistics leave NaN out."""
    with pytest.raises(ShardRefused) as caught:
        read(store, reader, described(store, reader, data))
    return str(caught.value)


def test_an_empty_parquet_object(store: Counting) -> None:
    assert refusal(store, reader_of("wide"), b"") == (
        "day/a.parquet: the shard is empty\n"
        "  rule: a Parquet file\n"
        "  got: 0 bytes\n"
        f"  remedy: {COPY_AGAIN}"
    )  # fmt: skip


@pytest.mark.parametrize("kept", [1, 4, 11, 100, -9, -1])
def test_a_parquet_file_cut_short(store: Counting, kept: int) -> None:
    data = parquet(columns())[:kept]
    assert refusal(store, reader_of("wide"), data) == (
        "day/a.parquet: the shard is cut short, or is not Parquet\n"
        "  rule: a Parquet file ends in PAR1\n"
        f"  got: {len(data)} bytes that end in {data[-4:]!r}\n"
        f"  remedy: {COPY_AGAIN}"
    )


def test_a_parquet_file_that_lost_its_middle(store: Counting) -> None:
    data = parquet(columns())
    assert "the footer points outside the file" in refusal(store, reader_of("wide"), data[:4] + data[300:])
    assert refusal(store, reader_of("wide"), data[-20:]).startswith(
        "day/a.parquet: the footer is longer than the file\n"
    )


def test_a_footer_that_is_damaged(store: Counting) -> None:
    data = bytearray(parquet(columns()))
    footer = int.from_bytes(data[-8:-4], "little")
    data[-8 - footer : -8] = b"\x9f" * footer
    text = refusal(store, reader_of("wide"), bytes(data))
    assert text.startswith("day/a.parquet: the footer cannot be read\n  rule: Parquet as pyarrow reads it\n  got: ")
    assert text.endswith(f"\n  remedy: {COPY_AGAIN}")


@pytest.mark.parametrize(("checksums", "damaged"), [(True, 0.5), (False, 0.0)])
def test_a_row_group_that_is_damaged(store: Counting, checksums: bool, damaged: float) -> None:
    """Without checksums damage is found where it breaks the form of a page, here its header."""
    data = bytearray(parquet(columns(2000), compression="zstd", write_page_checksum=checksums))
    chunk = pq.read_metadata(io.BytesIO(data)).row_group(1).column(2)
    start = chunk.dictionary_page_offset + int(damaged * chunk.total_compressed_size)
    data[start : start + 40] = bytes(40)
    text = refusal_when_read(store, reader_of("wide"), bytes(data))
    assert text.startswith("day/a.parquet, row group 1: the row group cannot be decoded\n  rule: Parquet as pyarrow")
    assert text.endswith(f"\n  remedy: {COPY_AGAIN}")


def test_a_flipped_bit_is_found_where_the_writer_left_checksums(store: Counting) -> None:
    data = bytearray(parquet(columns(2000), compression="none", use_dictionary=False, write_page_checksum=True))
    data[pq.read_metadata(io.BytesIO(data)).row_group(0).column(1).data_page_offset + 3000] ^= 1
    assert "CRC checksum" in refusal_when_read(store, reader_of("wide"), bytes(data))


@pytest.mark.parametrize("plaintext_footer", [True, False])
def test_encrypted_shards(store: Counting, plaintext_footer: bool) -> None:
    """A plain footer over encrypted columns is the dangerous one: pyarrow ends the process when it looks closer."""
    assert refusal(store, reader_of("wide"), encrypted(plaintext_footer)) == (
        "day/a.parquet: the shard is encrypted\n"
        "  rule: Parquet without encryption\n"
        "  got: an encrypted or signed footer\n"
        "  remedy: write it again without encryption, or leave it out with source.match"
    )


class _Keys(pe.KmsClient):
    """Wraps keys in nothing but base64."""

    def wrap_key(self, key_bytes: bytes, master_key_identifier: str) -> bytes:
        return base64.b64encode(key_bytes)

    def unwrap_key(self, wrapped_key: bytes, master_key_identifier: str) -> bytes:
        return base64.b64decode(wrapped_key)


def encrypted(plaintext_footer: bool) -> bytes:
    config = pe.EncryptionConfiguration(footer_key="f", column_keys={"c": ["G1"]}, plaintext_footer=plaintext_footer)
    properties = pe.CryptoFactory(lambda _: _Keys()).file_encryption_properties(pe.KmsConnectionConfig(), config)
    sink, table = io.BytesIO(), pa.table(columns())
    with pq.ParquetWriter(sink, table.schema, encryption_properties=properties) as writer:
        writer.write_table(table)
    return sink.getvalue()


def test_no_time_column(store: Counting) -> None:
    data = parquet({"time": columns()["t"], "G1": np.zeros(6)})
    assert refusal(store, reader_of("wide"), data) == (
        "day/a.parquet: there is no time column 't'\n"
        "  rule: source.time names a column of every shard\n"
        "  got: columns time, G1\n"
        "  remedy: correct source.time, or set it to none"
    )


def test_a_time_column_without_times(store: Counting) -> None:
    data = parquet({**columns(), "t": pa.array(["2031-03-01"] * 6)})
    assert refusal(store, reader_of("wide"), data) == (
        "day/a.parquet: the time column 't' holds no times\n"
        "  rule: timestamps, dates, or seconds since the Unix epoch as numbers\n"
        "  got: type string"
    )


@pytest.mark.parametrize("statistics", [True, False])
def test_a_time_that_is_missing(store: Counting, statistics: bool) -> None:
    times = pa.array([0, 1, 2, 3, None, 5], pa.timestamp("ms"))
    assert refusal(store, reader_of("wide"), parquet({**columns(), "t": times}, write_statistics=statistics)) == (
        "day/a.parquet, column 't', row 4: a time is missing\n"
        "  rule: every sample has a time\n"
        "  got: null\n"
        "  remedy: mend the shard's time column, or leave the shard out with source.match"
    )


@pytest.mark.parametrize("bad", [float("nan"), float("inf"), 1e10, -1e305])
def test_floating_seconds_that_are_no_time(store: Counting, bad: float) -> None:
    data = parquet({**columns(), "t": np.array([0.0, 1.0, bad, 3.0, 4.0, 5.0])}, groups=1)
    assert complaint(store, reader_of("wide"), data) == (
        "day/a.parquet, column 't', row 2: a time is not usable\n"
        "  rule: a finite number of seconds; "
        "times between the years 1677 and 2262, which 64 bits of nanoseconds can hold\n"
        f"  got: {bad:g}\n"
        "  remedy: mend the shard's time column, or leave the shard out with source.match"
    )


def test_seconds_out_of_range(store: Counting) -> None:
    data = parquet({**columns(), "t": np.array([0, 1, 2, 10**12, 4, 5])})
    assert refusal(store, reader_of("wide"), data).startswith(
        "day/a.parquet, column 't', row 3: a time is out of range\n"
        "  rule: times between the years 1677 and 2262, which 64 bits of nanoseconds can hold\n"
        "  got: 1000000000000 times 1000000000 ns\n"
    )


def test_times_that_contradict_the_statistics(store: Counting) -> None:
    """Two files of one shape: the footer of one over the rows of the other."""
    early, late = columns(), {**columns(), "t": pa.array(np.arange(6) + 50, pa.timestamp("ms"))}
    plain = {"compression": "none", "use_dictionary": False, "groups": 1}
    first, second = parquet(early, **plain), parquet(late, **plain)
    body = len(first) - 8 - int.from_bytes(first[-8:-4], "little")
    assert refusal_when_read(store, reader_of("wide"), second[:body] + first[body:]) == (
        "day/a.parquet, row group 0: times contradict the footer\n"
        "  rule: times within the footer's statistics, 0 to 5000000 ns\n"
        "  got: 50000000 to 55000000 ns\n"
        "  remedy: write the shard again: its statistics are wrong"
    )


@pytest.mark.parametrize(
    ("column", "kind"),
    [(pa.array(["a"] * 6), "string"), (pa.array([True] * 6), "bool"), (pa.array([None] * 6), "null"),
     (pa.array(np.arange(6), pa.timestamp("s")), "timestamp[ms]"), (pa.array([[1.0]] * 6), "list<element: double>")],
)  # fmt: skip
def test_a_channel_that_is_not_numeric(store: Counting, column: pa.Array, kind: str) -> None:
    assert refusal(store, reader_of("wide"), parquet({**columns(), "note": column}, store_schema=False)) == (
        "day/a.parquet: a channel is not numeric\n"
        "  rule: integers or floats\n"
        f"  got: 'note' of type {kind}\n"
        "  remedy: leave it out with source.channels.exclude: ['note'], or make it source.time"
    )
    left_out = reader_of("wide", exclude=("note",))
    assert described(store, left_out, parquet({**columns(), "note": column})).channels == ("G1", "G2")


def test_a_shard_without_rows_or_channels(store: Counting) -> None:
    assert refusal(store, reader_of("wide"), parquet(columns(0))) == (
        "day/a.parquet: the shard holds no samples\n  rule: at least one row\n  got: 0 rows"
    )
    assert refusal(store, reader_of("wide", include=("X*",)), parquet(columns())) == (
        "day/a.parquet: the shard has no channels\n"
        "  rule: at least one column besides time\n"
        "  got: 3 columns, none of them left"
    )


def test_two_columns_of_one_name(store: Counting) -> None:
    table = pa.table([columns()["t"], pa.array([0.0] * 6), pa.array([1.0] * 6)], names=["t", "G1", "G1"])
    sink = io.BytesIO()
    pq.write_table(table, sink)
    assert refusal(store, reader_of("wide"), sink.getvalue()) == (
        "day/a.parquet: two columns have one name\n  rule: column names are unique\n  got: G1"
    )


def vectors(lists: list[Any], kind: pa.DataType | None = None, groups: int = 2) -> bytes:
    times = pa.array(np.arange(len(lists)), pa.timestamp("ms"))
    return parquet({"t": times, "strain": pa.array(lists, kind or pa.list_(pa.float32()))}, groups)


def test_there_are_no_vectors(store: Counting) -> None:
    text = refusal(store, reader_of("vector"), parquet({**columns(), "strain": np.zeros(6)}))
    assert text == (
        "day/a.parquet: there are no vectors in 'strain'\n"
        "  rule: source.values names a column of lists of numbers\n"
        "  got: type double"
    )
    assert "got: columns t, G1, G2" in refusal(store, reader_of("vector"), parquet(columns()))


def test_vector_lengths_that_differ(store: Counting) -> None:
    text = refusal(store, reader_of("vector"), vectors([[1, 2], [1, 2], [1, 2, 3], [1, 2]]))
    assert text.startswith(
        "day/a.parquet: vector lengths differ\n  rule: every row holds one list, all of one length\n  got: "
    )
    # The numbers add up here: three rows of six values. It only shows row by row.
    text = refusal_when_read(store, reader_of("vector"), vectors([[1, 2], [1, 2, 3], [1]], groups=1))
    assert text == (
        "day/a.parquet, row 1: vector lengths differ\n"
        "  rule: every row holds one list, all of one length\n"
        "  got: 3 values, not 2"
    )


@pytest.mark.parametrize("kind", [pa.list_(pa.float32()), pa.list_(pa.float32(), 2)])
def test_a_vector_that_is_missing(store: Counting, kind: pa.DataType) -> None:
    """Where it shows depends on pyarrow's version and on whether the numbers add up."""
    text = complaint(store, reader_of("vector"), vectors([[1, 2], [1, 2], [1, 2], None], kind))
    assert text.startswith("day/a.parquet")
    assert "lengths differ" in text or "cannot be decoded" in text


def test_vectors_that_do_not_fit_the_channel_table(store: Counting) -> None:
    reader = reader_of("vector", names=("root", "mid", "tip"))
    assert refusal(store, reader, vectors([[1, 2]] * 4)) == (
        "day/a.parquet: the samples do not fit the channel table\n"
        "  rule: the channel table names every value of a sample, in order\n"
        "  got: 2 values in a sample, 3 names"
    )


def test_channels_that_differ_between_shards(store: Counting) -> None:
    shard = described(store, reader_of("wide"), parquet(columns()))
    agree(shard, ("G2", "G1"))
    with pytest.raises(ShardRefused) as caught:
        agree(shard, ("G2", "G3", "G4", "G5", "G6"))
    assert str(caught.value) == (
        "day/a.parquet: the shard's channels differ from the campaign's\n"
        "  rule: the same 5 channels in every shard\n"
        "  got: 2 channels; missing G3, G4, G5 and 1 more; not expected G1\n"
        "  remedy: leave channels out with source.channels.exclude, or the shard with source.match"
    )


NPY_RULE = "  rule: a .npy file of two dimensions of integers or floats of at most 64 bits\n"


@pytest.mark.parametrize(
    ("make", "what", "got"),
    [
        (lambda: b"", "the shard is empty", "0 bytes"),
        (lambda: npy(np.zeros((3, 2)))[:40], "the .npy header cannot be read", "EOF"),
        (lambda: b"PAR1" * 30, "the .npy header cannot be read", "the magic string is not correct"),
        (lambda: npy(np.zeros(6)), "the array has no place here", "shape (6,), type float64"),
        (lambda: npy(np.zeros((0, 2))), "the array has no place here", "shape (0, 2), type float64"),
        (lambda: npy(np.zeros((2, 2), complex)), "the array has no place here", "shape (2, 2), type complex128"),
        (lambda: npy(np.zeros((2, 2), "datetime64[s]")), "the array has no place here", "type datetime64[s]"),
    ],
)
def test_npy_files_that_cannot_be_used(store: Counting, make: Callable[[], bytes], what: str, got: str) -> None:
    text = refusal(store, reader_of("array", None), make(), "a.npy")
    assert text.startswith(f"a.npy: {what}\n{NPY_RULE}  got: ")
    assert got in text


@pytest.mark.parametrize(("change", "what"), [(-1, "the array is cut short"), (1, "bytes follow the array")])
def test_npy_files_of_another_length_than_promised(store: Counting, change: int, what: str) -> None:
    data = npy(np.zeros((3, 2)))
    data = data[:change] if change < 0 else data + b"\0"
    assert refusal(store, reader_of("array", None), data, "a.npy") == (
        f"a.npy: {what}\n  rule: 176 bytes, as its header promises\n  got: {176 + change} bytes"
    )


class _Trap:
    """Marks the session if it is ever unpickled."""

    sprung = False

    def __reduce__(self) -> tuple[Any, ...]:
        return setattr, (_Trap, "sprung", True)


def test_pickled_objects_are_never_loaded(store: Counting) -> None:
    data = npy(np.array([[_Trap(), _Trap()]], dtype=object))
    assert refusal(store, reader_of("array", None), data, "a.npy") == (
        f"a.npy: pickled Python objects are never loaded\n{NPY_RULE}"
        "  got: object\n"
        "  remedy: save plain numbers, numpy.save(..., allow_pickle=False)"
    )
    assert not _Trap.sprung


def test_a_name_without_its_time(store: Counting) -> None:
    assert refusal(store, reader_of("array", FROM_NAME), npy(np.zeros((3, 2))), "blade.npy") == (
        "blade.npy: the name holds no time\n"
        r"  rule: a name that matches source.time.from_name '(\\d{8}T\\d{6})\\.npy'" "\n"
        "  got: blade.npy\n"
        "  remedy: mend the pattern, or narrow source.match"
    )  # fmt: skip
    text = refusal(store, reader_of("array", FROM_NAME), npy(np.zeros((3, 2))), "20311301T000000.npy")
    assert text == (
        "20311301T000000.npy: the time in the name cannot be read\n"
        "  rule: a calendar time such as 20310301T120000Z, or whole units since the Unix epoch\n"
        "  got: 20311301T000000\n"
        "  remedy: for a count, name the group: (?P<seconds>...), milliseconds, microseconds or nanoseconds"
    )


def test_a_shard_replaced_between_description_and_reading(store: Counting) -> None:
    reader = reader_of("wide")
    shard = described(store, reader, parquet(columns()))
    store.put("day/a.parquet", parquet(columns(8)))
    with pytest.raises(VersionChanged, match="the object was replaced after it was listed"):
        read(store, reader, shard)


def test_an_empty_match(store: Counting, tmp_path: Path) -> None:
    with pytest.raises(NothingToRead) as caught:
        take_inventory(store, reader_of("wide"), "**/*.parquet", 0, 1e12)
    assert str(caught.value) == (
        f"{tmp_path}: nothing matches\n"
        "  rule: source.match '**/*.parquet'\n"
        "  got: an empty location\n"
        "  remedy: correct source.location or source.match"
    )
    store.put("day/a.pq", b"x")
    with pytest.raises(NothingToRead, match=r"got: keys such as day/a\.pq\n"):
        take_inventory(store, reader_of("wide"), "day/*.parquet", 0, 1e12)


def test_bad_shards_do_not_stop_the_others(store: Counting) -> None:
    for key, data in {"a": b"", "b": parquet(columns()), "c": b"PAR1", "d": parquet(columns())}.items():
        store.put(f"{key}.parquet", data)
    inventory = take_inventory(store, reader_of("wide"), "*.parquet", 0, 1e12)
    assert [shard.key for shard in inventory.shards] == ["b.parquet", "d.parquet"]
    assert [(refusal.key, refusal.error_record["what"]) for refusal in inventory.refused] == [
        ("a.parquet", "the shard is empty"),
        ("c.parquet", "the shard is cut short, or is not Parquet"),
    ]
