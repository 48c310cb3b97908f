"""One Parquet row group: fetched into memory, then decoded by pyarrow slice by slice.

One GET per run of needed column chunks; pyarrow reads them from memory and nothing else. What the columns mean is
not known here.
"""

from __future__ import annotations

import io
from collections.abc import Iterator, Sequence
from typing import Any

import pyarrow.parquet as pq

from shardfold.readers.batch import ByteSource, refused
from shardfold.readers.footer import Footer, refusing, spans_to_read

# Measured: smaller slices cost time, larger ones memory (pyarrow holds several times a slice while it decodes one).
SLICE_BYTES = 2**19


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
