"""The channel table: read from CSV or Parquet with every fault at once, selected, stored and read back."""

from __future__ import annotations

import io
import pickle
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from shardfold.channels import ChannelTable, default_table, from_arrow, read_table, to_arrow, units_conflict
from shardfold.errors import JobInvalid

CSV = b"""channel,unit,gain,shift,scale,weight,x,note
root,mm,2.0,-1,0.5,1,0.0,new
tip,mm,2.5,0,0.25,4,12.5,
007,um,1,0,1,1,,spare
"""


def faults_of(data: bytes, name: str = "gauges.csv") -> tuple[str, ...]:
    with pytest.raises(JobInvalid) as caught:
        read_table(data, name)
    assert caught.value.exit_status == 2
    return caught.value.faults


def same(a: ChannelTable, b: ChannelTable) -> bool:
    return to_arrow(a).equals(to_arrow(b), check_metadata=True)


def test_csv() -> None:
    table = read_table(CSV, "gauges.csv")
    assert table.names == ("root", "tip", "007")
    assert table.unit == ("mm", "mm", "um")
    np.testing.assert_array_equal(table.gain, [2.0, 2.5, 1.0])
    np.testing.assert_array_equal(table.shift, [-1, 0, 0])
    np.testing.assert_array_equal(table.scale, [0.5, 0.25, 1])
    np.testing.assert_array_equal(table.weight, [1, 4, 1])
    assert list(table.positions) == ["x"]
    np.testing.assert_array_equal(table.positions["x"], [0.0, 12.5, np.nan])


def test_parquet_is_told_by_its_content_and_a_path_names_itself(tmp_path: Path) -> None:
    sink = io.BytesIO()
    pq.write_table(pa.table({"channel": ["b", "a"], "weight": pa.array([1, 2], pa.int16())}), sink)
    (tmp_path / "gauges.any").write_bytes(sink.getvalue())
    table = read_table(tmp_path / "gauges.any")
    assert table.names == ("b", "a")
    np.testing.assert_array_equal(table.weight, [1.0, 2.0])
    assert same(table.select(("a",)), read_table(b"channel,weight\na,2\n"))


def test_what_is_not_given_is_plain() -> None:
    assert same(read_table(b"channel\na\nb\n"), default_table(("a", "b")))


def test_stored_tables_read_back_with_units_and_descriptions() -> None:
    table = read_table(CSV, "gauges.csv")
    stored, sink = to_arrow(table), io.BytesIO()
    pq.write_table(stored, sink)
    assert same(read_table(sink.getvalue(), "channels/0001.parquet"), table)
    assert same(from_arrow(stored, "here"), table)
    assert all(field.metadata[b"description"] for field in stored.schema)


def test_tables_are_selected_in_the_order_asked_for() -> None:
    table = read_table(CSV, "gauges.csv").select(("007", "root"))
    assert (table.names, table.unit) == (("007", "root"), ("um", "mm"))
    np.testing.assert_array_equal(table.scale, [1, 0.5])
    np.testing.assert_array_equal(table.positions["x"], [np.nan, 0.0])
    with pytest.raises(KeyError, match="mid"):
        table.select(("mid",))


def test_tables_are_read_only_and_survive_pickling() -> None:
    table = pickle.loads(pickle.dumps(read_table(CSV, "gauges.csv")))  # noqa: S301
    assert same(table, read_table(CSV))
    with pytest.raises(ValueError, match="read-only"):
        default_table(("a",)).gain[0] = 2.0


def test_two_units_conflict_and_unknown_ones_do_not() -> None:
    assert units_conflict(read_table(CSV)) == ("mm", "um")
    assert units_conflict(read_table(b"channel,unit\na,mm\nb,\nc,mm\n")) is None
    assert units_conflict(default_table(("a", "b"))) is None


def test_all_faults_are_told_at_once() -> None:
    data = b"channel,gain,shift,scale,weight\na,0,0,1,1\na,1,inf,0,1\n,1,0,-1,0\nb,1,0,1,nan\n"
    assert faults_of(data) == (
        "gauges.csv: row 2: channel: must be unique (got 'a' again, first in row 1)",
        "gauges.csv: row 3: channel: must not be empty",
        "gauges.csv: row 1: gain of 'a': must be finite and not zero (got 0); leave the channel out instead",
        "gauges.csv: row 2: shift of 'a': must be finite (got inf)",
        "gauges.csv: row 2: scale of 'a': must be finite and above zero (got 0); leave the channel out instead",
        "gauges.csv: row 3: scale of '': must be finite and above zero (got -1)",
        "gauges.csv: row 3: weight of '': must be finite and above zero (got 0); leave the channel out instead",
        "gauges.csv: row 4: weight of 'b': must be finite and above zero (got nan)",
    )


@pytest.mark.parametrize(
    ("data", "fault"),
    [
        (b"channel,scale\na,wide\n", "scale: must be numbers (got string)"),
        (b"channel,scale\na,\n", "scale: must be numbers (got null)"),
        (b"channel,scale\na,1\nb,\n", "row 2: scale of 'b': must be finite and above zero (got nan)"),
        (b"channel,scale\n", "must hold at least one channel"),
    ],
)
def test_faults(data: bytes, fault: str) -> None:
    assert f"gauges.csv: {fault}" in faults_of(data)


def test_no_column_of_names() -> None:
    with pytest.raises(JobInvalid) as caught:
        read_table(b"name,unit\na,mm\n", "gauges.csv")
    assert str(caught.value) == (
        "gauges.csv: the channel table has no column of names\n"
        "  rule: a column 'channel' with the channels' names as in the shards\n"
        "  got: name, unit"
    )


@pytest.mark.parametrize("data", [b"", b"channel,unit\na\n", b"PAR1 and nothing else", b"\xff\xfe\x00"])
def test_files_that_are_no_table(data: bytes) -> None:
    with pytest.raises(JobInvalid) as caught:
        read_table(data, "gauges.csv")
    assert str(caught.value).startswith("gauges.csv: the channel table ")


def test_long_lists_of_faults_are_cut_but_counted() -> None:
    data = b"channel,scale\n" + b"".join(b"c%d,0\n" % i for i in range(50))
    with pytest.raises(JobInvalid, match="faults in the channel table: 50") as caught:
        read_table(data, "gauges.csv")
    assert len(caught.value.faults) == 20
