"""Parquet bytes: the footer, the byte ranges of column chunks, and a row group served to pyarrow from memory.

One GET per footer (two if it is larger than its first read), one GET per run of needed column chunks. What the
columns mean is not known here.
"""

from __future__ import annotations

import contextlib
import io
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
# Measured: smaller slices cost time, larger ones memory (pyarrow holds several times a slice while it decodes one).
SLICE_BYTES = 2**19
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
        metadata = pq.read_metadata(pa.BufferReader(tail[-(footer_bytes + _TRAILER_BYTES) :]))
        _is_whole(info, metadata, footer_bytes)
        schema = metadata.schema.to_arrow_schema()
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


def open_group(store: ByteSource, footer: Footer, group: int, leaves: Sequence[int]) -> Any:
    """Fetch the needed column chunks of one row group; return pyarrow's low-level reader over them.

    It holds the stored bytes until it is dropped, reads with one thread and checks page checksums where written.
    """
    info, place = footer.info, f"row group {group}"
    parts = []
    for span in spans_to_read(footer, group, leaves):
        part = memoryview(store.read(info.key, version=info.version, start=span.start, stop=span.stop))
        if len(part) != span.stop - span.start:
            got = f"{len(part)} of {span.stop - span.start} bytes"
            raise refused(info, "the store returned fewer bytes than asked for", place=place, got=got)
        parts.append((span.start, part))
    with refusing(info, "the row group cannot be opened", place=place):
        file = pq.ParquetFile(
            MemoryParts(parts, info.size), metadata=footer.metadata, pre_buffer=False, page_checksum_verification=True
        )
        return file.reader


def slices(reader: Any, footer: Footer, group: int, leaves: Sequence[int], row_bytes: int) -> Iterator[Any]:
    """Yield a row group's columns as record batches of about `SLICE_BYTES`, all rows that the footer promises.

    Raises
    ------
    ShardRefused
        When the bytes cannot be decoded, or hold fewer rows than promised; a caller that was given all batches
        without an error has all rows.
    """
    place, rows, done = f"row group {group}", footer.rows[group], 0
    batches = reader.iter_batches(
        max(1, SLICE_BYTES // row_bytes), row_groups=[group], column_indices=list(leaves), use_threads=False
    )
    while True:
        with refusing(footer.info, "the row group cannot be decoded", place=place):
            batch = next(batches, None)
        if batch is None:
            break
        done += len(batch)
        if done > rows:
            break
        yield batch
    if done != rows:
        raise refused(footer.info, "the row group holds other rows", place=place, rule=f"{rows} rows", got=f"{done}")


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
    groups = range(len(footer.rows))
    if dtype.kind in "iu" and any(_may_have_nulls(footer, group, leaf) for group in groups for leaf in leaves):
        return np.dtype(np.result_type(dtype, np.float32))
    return dtype


class MemoryParts(io.RawIOBase):
    """A file of which only some parts are in memory; reading anything else is an error, never zeros."""

    def __init__(self, parts: Sequence[tuple[int, memoryview]], size: int) -> None:
        self._parts, self._size, self._position = tuple(parts), size, 0

    def readable(self) -> bool:
        """Return True."""
        return True

    def seekable(self) -> bool:
        """Return True."""
        return True

    def tell(self) -> int:
        """Return the position in the whole file."""
        return self._position

    def size(self) -> int:
        """Return the size of the whole file."""
        return self._size

    def seek(self, offset: int, whence: int = io.SEEK_SET) -> int:
        """Move to a position in the whole file."""
        self._position = {io.SEEK_SET: 0, io.SEEK_CUR: self._position, io.SEEK_END: self._size}[whence] + offset
        return self._position

    def read(self, size: int = -1) -> memoryview:
        """Return a view of the asked bytes, without a copy."""
        start, stop = self._position, self._size if size < 0 else self._position + size
        for part_start, part in self._parts:
            if part_start <= start and stop <= part_start + len(part):
                self._position = stop
                return part[start - part_start : stop - part_start]
        raise OSError(f"bytes {start} to {stop} are not among those that the footer names")


def _may_have_nulls(footer: Footer, group: int, leaf: int) -> bool:
    """Return whether a column chunk holds nulls, or does not say that it holds none."""
    if footer.metadata.schema.column(leaf).max_definition_level == 0:
        return False
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
