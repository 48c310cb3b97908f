"""Parquet footers: what a shard holds and where its bytes are.

One GET per footer, two if it is larger than its first read. What the columns mean is not known here, and no row
group is read. Known limit: pyarrow's metadata accessors throw outside any handler, so that about one damaged footer
in 500 (measured: one random byte changed) ends the process instead of being refused.
"""

from __future__ import annotations

import contextlib
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import accumulate
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from shardfold.errors import ShardRefused
from shardfold.ids import ObjectInfo
from shardfold.readers.batch import ByteSource, refused

TAIL_BYTES = 64 * 2**10
# A request costs about as long as a MiB of transfer, so a gap smaller than that is read over.
GAP_BYTES = 2**20
_TRAILER_BYTES, _SIGNATURE_BYTES = 8, 28
_REFETCH = "copy the shard again from where it was made"


@dataclass(frozen=True)
class Footer:
    """One Parquet footer: pyarrow's metadata and schema, and what is asked of them again and again.

    Attributes
    ----------
    leaves : tuple of range
        The leaf columns below each top-level field.
    rows, first_rows : tuple of int
        Rows of each row group, and the row number of its first row within the shard.
    body_stop : int
        Where the row groups end and the footer begins.
    """

    info: ObjectInfo
    metadata: Any
    schema: Any
    leaves: tuple[range, ...]
    rows: tuple[int, ...]
    first_rows: tuple[int, ...]
    body_stop: int


@dataclass(frozen=True)
class Span:
    """Half-open byte range of an object."""

    start: int
    stop: int


def read_footer(store: ByteSource, info: ObjectInfo) -> Footer:
    """Read and parse a shard's footer.

    Raises
    ------
    ShardRefused
        When the object is empty, cut short, encrypted, or not Parquet.
    """
    if info.size == 0:
        raise refused(info, "the shard is empty", rule="a Parquet file", got="0 bytes", remedy=_REFETCH)
    start = max(0, info.size - TAIL_BYTES)
    tail = memoryview(store.read(info.key, version=info.version, start=start, stop=info.size))
    footer_bytes = _footer_bytes(info, tail)
    if footer_bytes + _TRAILER_BYTES > len(tail):
        start = info.size - footer_bytes - _TRAILER_BYTES
        tail = memoryview(store.read(info.key, version=info.version, start=start, stop=info.size))
    with refusing(info, "the footer cannot be read"):
        file = pq.ParquetFile(pa.BufferReader(tail[-(footer_bytes + _TRAILER_BYTES) :]))
        # Never ask for ``metadata.schema``: the two hold each other, and megabytes of a wide footer then wait for
        # Python's cycle collector, which sees two small objects and takes its time.
        metadata, schema = file.metadata, file.schema_arrow
        _is_whole(info, metadata, footer_bytes)
        leaves = _leaves(info, schema, metadata)
        rows = tuple(metadata.row_group(group).num_rows for group in range(metadata.num_row_groups))
    first_rows = tuple(accumulate(rows, initial=0))[:-1]
    return Footer(info, metadata, schema, leaves, rows, first_rows, info.size - footer_bytes - _TRAILER_BYTES)


def chunk_span(footer: Footer, group: int, leaf: int) -> Span:
    """Return the bytes of one column chunk.

    Raises
    ------
    ShardRefused
        When the chunk does not lie between the file's header and its footer.
    """
    chunk = footer.metadata.row_group(group).column(leaf)
    start = chunk.data_page_offset
    if chunk.has_dictionary_page and 0 < chunk.dictionary_page_offset < start:
        start = chunk.dictionary_page_offset
    stop = start + chunk.total_compressed_size
    if not 4 <= start <= stop <= footer.body_stop:
        got = f"bytes {start} to {stop} of a body that ends at {footer.body_stop}"
        place = f"row group {group}, column {chunk.path_in_schema}"
        raise refused(footer.info, "the footer points outside the file", place=place, got=got, remedy=_REFETCH)
    if chunk.num_values < footer.rows[group]:
        place = f"row group {group}, column {chunk.path_in_schema}"
        rule, got = f"one value or more for each of {footer.rows[group]} rows", str(chunk.num_values)
        raise refused(footer.info, "the footer contradicts itself", place=place, rule=rule, got=got, remedy=_REFETCH)
    return Span(start, stop)


def spans_to_read(footer: Footer, group: int, leaves: Sequence[int]) -> tuple[Span, ...]:
    """Return the byte ranges, in order, whose GETs bring the needed column chunks of a row group.

    All of them in one range if they are most of it; else one range per run, gaps under `GAP_BYTES` read over.
    """
    chunks = sorted((chunk_span(footer, group, leaf) for leaf in leaves), key=lambda span: span.start)
    whole = Span(chunks[0].start, max(span.stop for span in chunks))
    needed = sum(span.stop - span.start for span in chunks)
    if 2 * needed >= whole.stop - whole.start:
        return (whole,)
    runs = [chunks[0]]
    for span in chunks[1:]:
        if span.start - runs[-1].stop <= GAP_BYTES:
            runs[-1] = Span(runs[-1].start, max(runs[-1].stop, span.stop))
        else:
            runs.append(span)
    return tuple(runs)


@contextlib.contextmanager
def refusing(info: ObjectInfo, what: str, *, place: str = "") -> Iterator[None]:
    """Turn what pyarrow raises on bad bytes into the refusal of one shard. No store is called inside."""
    try:
        yield
    except (pa.ArrowException, OSError, ValueError, NotImplementedError) as error:
        got = (str(error) or type(error).__name__).splitlines()[0]
        raise refused(info, what, place=place, rule="Parquet as pyarrow reads it", got=got, remedy=_REFETCH) from error


def gap_dtype(footer: Footer, leaves: Sequence[int], dtype: np.dtype[Any]) -> np.dtype[Any]:
    """Return the type that holds a shard's values and, where integers may be null, NaN in their place.

    One type for the whole shard, from the footer alone: integers become float32 if they have at most 16 bits, else
    float64.
    """
    if dtype.kind not in "iu":
        return dtype
    fields = zip(footer.leaves, footer.schema, strict=True)
    required = {leaf for below, field in fields if not (field.nullable or field.type.num_fields) for leaf in below}
    asked = [leaf for leaf in leaves if leaf not in required]
    if any(_may_have_nulls(footer, group, leaf) for group in range(len(footer.rows)) for leaf in asked):
        return np.dtype(np.result_type(dtype, np.float32))
    return dtype


def _may_have_nulls(footer: Footer, group: int, leaf: int) -> bool:
    """Return whether a column chunk holds nulls, or does not say that it holds none."""
    statistics = footer.metadata.row_group(group).column(leaf).statistics
    return statistics is None or not statistics.has_null_count or bool(statistics.null_count)


def _footer_bytes(info: ObjectInfo, tail: memoryview) -> int:
    magic = bytes(tail[-4:])
    if magic == b"PARE":
        raise _encrypted(info)
    if len(tail) < 12 or magic != b"PAR1":
        rule = "a Parquet file ends in PAR1"
        got = f"{info.size} bytes that end in {magic!r}"
        raise refused(info, "the shard is cut short, or is not Parquet", rule=rule, got=got, remedy=_REFETCH)
    length = int.from_bytes(tail[-8:-4], "little")
    if length + 12 > info.size:
        got = f"a footer of {length} bytes in {info.size}"
        raise refused(info, "the footer is longer than the file", got=got, remedy=_REFETCH)
    return length


def _is_whole(info: ObjectInfo, metadata: Any, footer_bytes: int) -> None:
    """A plain footer over encrypted columns is followed by a signature; pyarrow ends the process over such columns."""
    rest = footer_bytes - metadata.serialized_size
    if rest == _SIGNATURE_BYTES:
        raise _encrypted(info)
    if rest:
        got = f"{rest} bytes after it"
        raise refused(info, "the footer ends early", rule="a footer as long as it says", got=got, remedy=_REFETCH)


def _encrypted(info: ObjectInfo) -> ShardRefused:
    return refused(
        info,
        "the shard is encrypted",
        rule="Parquet without encryption",
        got="an encrypted or signed footer",
        remedy="write it again without encryption, or leave it out with source.match",
    )


def _leaves(info: ObjectInfo, schema: Any, metadata: Any) -> tuple[range, ...]:
    leaves, start = [], 0
    for field in schema:
        leaves.append(range(start, start := start + _leaf_count(field.type)))
    if start != metadata.num_columns:
        got = f"{start} from the schema, {metadata.num_columns} in the footer"
        raise refused(info, "the columns cannot be counted", rule="one leaf per column of the schema", got=got)
    if len(set(schema.names)) < len(schema.names):
        twice = next(name for name in schema.names if schema.names.count(name) > 1)
        raise refused(info, "two columns have one name", rule="column names are unique", got=twice)
    return tuple(leaves)


def _leaf_count(kind: Any) -> int:
    types = pa.types
    if isinstance(kind, pa.BaseExtensionType):
        return _leaf_count(kind.storage_type)
    if types.is_map(kind):
        return _leaf_count(kind.key_type) + _leaf_count(kind.item_type)
    if types.is_struct(kind):
        return sum(_leaf_count(kind.field(i).type) for i in range(kind.num_fields))
    if types.is_list(kind) or types.is_large_list(kind) or types.is_fixed_size_list(kind):
        return _leaf_count(kind.value_type)
    return 1
