"""Layout ``array``: one ``.npy`` file of two dimensions per shard.

Sample-major files are cut into synthetic row groups of about 8 MiB, channel-major ones are one row group. Headers
are parsed by NumPy without evaluating anything; files of Python objects are never loaded.
"""

from __future__ import annotations

import io
import math
import tokenize
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import partial
from typing import Any

import numpy as np
from numpy.lib import format as npy_format
from numpy.typing import NDArray

from shardfold.channels import keep_names
from shardfold.ids import ObjectInfo, RowGroup, Shard
from shardfold.readers.batch import Batch, ByteSource, Fetched, one_by_one, refused
from shardfold.readers.grids import Grid, TimeRule, grid_of
from shardfold.readers.vector import channel_names, places

GROUP_BYTES = 8 * 2**20
HEAD_BYTES = 4096
_COPY_BYTES = 2**20
_TIME_BYTES = 8
_SAMPLES_BY_CHANNELS = "samples_by_channels"
_RULE = "a .npy file of two dimensions of integers or floats of at most 64 bits"


@dataclass(frozen=True)
class Header:
    """What the header of one file says: ``samples`` x ``channels`` values from byte ``offset`` on."""

    info: ObjectInfo
    offset: int
    samples: int
    channels: int
    dtype: np.dtype[Any]
    sample_major: bool

    @property
    def native(self) -> np.dtype[Any]:
        """Return the type of the values in this machine's byte order."""
        return self.dtype.newbyteorder("=")

    @property
    def group_rows(self) -> int:
        """Return the samples of a full row group."""
        return max(1, GROUP_BYTES // (self.channels * self.dtype.itemsize)) if self.sample_major else self.samples


@dataclass(frozen=True)
class NpyReader:
    """Reads ``.npy`` shards; ``names`` are the channel table's, in the array's order, or empty."""

    orient: str
    time: TimeRule
    names: tuple[str, ...] = ()
    include: tuple[str, ...] | None = None
    exclude: tuple[str, ...] = ()

    def describe(self, store: ByteSource, info: ObjectInfo) -> Shard:
        """Describe a shard from its header; see `Reader`."""
        header = read_header(store, info, self.orient)
        names = self._all_names(header)
        channels = keep_names(names, self.include, self.exclude)
        wanted = places(names, channels)
        grid = grid_of(self.time, info, header.samples)
        step = header.group_rows
        groups = (
            _group(header, wanted, row, min(step, header.samples - row), grid) for row in range(0, header.samples, step)
        )
        return Shard(info, tuple(groups), channels, str(header.native), bool(grid and grid.zoned))

    def batches(
        self, store: ByteSource, shard: Shard, first_group: int, stop_group: int, channels: Sequence[str]
    ) -> Iterator[Batch]:
        """Yield the batches of some row groups; see `Reader`."""
        return one_by_one(self.fetched(store, shard, first_group, stop_group, channels))

    def fetched(
        self, store: ByteSource, shard: Shard, first_group: int, stop_group: int, channels: Sequence[str]
    ) -> Iterator[Fetched]:
        """Yield some row groups as they are fetched, which leaves nothing to decode; see `Reader`."""
        header = read_header(store, shard.info, self.orient)
        wanted = places(self._all_names(header), channels)
        grid = grid_of(self.time, shard.info, header.samples)
        for group in range(first_group, stop_group):
            first_row = group * header.group_rows
            rows = min(header.group_rows, header.samples - first_row)
            times = grid.times(first_row, rows) if grid else None
            # No name is given to the values here, lest they be held while the next are fetched.
            if header.sample_major:
                yield _decoded(Batch(first_row, times, _sample_major(store, header, first_row, rows, wanted)))
            else:
                yield _decoded(Batch(first_row, times, _channel_major(store, header, wanted)))

    def _all_names(self, header: Header) -> tuple[str, ...]:
        return channel_names(header.info, header.channels, self.names)


def _decoded(batch: Batch) -> Fetched:
    return partial(iter, (batch,))


def read_header(store: ByteSource, info: ObjectInfo, orient: str) -> Header:
    """Read and check the header of a ``.npy`` file.

    Raises
    ------
    ShardRefused
        When the object is empty or cut short, holds Python objects, or is not a plain array of two dimensions.
    """
    if info.size == 0:
        raise refused(info, "the shard is empty", rule=_RULE, got="0 bytes")
    head = bytes(store.read(info.key, version=info.version, start=0, stop=min(HEAD_BYTES, info.size)))
    shape, fortran, dtype, offset = _parse(info, head)
    if dtype.hasobject:
        remedy = "save plain numbers, numpy.save(..., allow_pickle=False)"
        raise refused(info, "pickled Python objects are never loaded", rule=_RULE, got=str(dtype), remedy=remedy)
    if len(shape) != 2 or min(shape) < 1 or dtype.kind not in "iuf" or dtype.itemsize > 8:
        raise refused(info, "the array has no place here", rule=_RULE, got=f"shape {shape}, type {dtype}")
    promised = offset + math.prod(shape) * dtype.itemsize
    if promised != info.size:
        what = "the array is cut short" if info.size < promised else "bytes follow the array"
        raise refused(info, what, rule=f"{promised} bytes, as its header promises", got=f"{info.size} bytes")
    by_samples = orient == _SAMPLES_BY_CHANNELS
    samples, channels = shape if by_samples else shape[::-1]
    return Header(info, offset, samples, channels, dtype, sample_major=by_samples != fortran)


def _parse(info: ObjectInfo, head: bytes) -> tuple[tuple[int, ...], bool, np.dtype[Any], int]:
    stream = io.BytesIO(head)
    try:
        version = npy_format.read_magic(stream)
        parse = {(1, 0): npy_format.read_array_header_1_0, (2, 0): npy_format.read_array_header_2_0}[version]
        shape, fortran, dtype = parse(stream, max_header_size=HEAD_BYTES)
    except (ValueError, KeyError, TypeError, SyntaxError, tokenize.TokenError) as error:
        got = (str(error) or type(error).__name__).splitlines()[0]
        raise refused(info, "the .npy header cannot be read", rule=_RULE, got=got) from error
    return shape, fortran, dtype, stream.tell()


def _group(header: Header, wanted: NDArray[np.intp], first_row: int, rows: int, grid: Grid | None) -> RowGroup:
    item = header.dtype.itemsize
    stored = rows * header.channels * item
    if not header.sample_major and len(wanted) < header.channels:
        stored = sum((strip.stop - strip.start) * item for strip in _strips(header, wanted))
    decoded = rows * (len(wanted) * item + (_TIME_BYTES if grid else 0))
    first, last = grid.span(first_row, rows) if grid else (None, None)
    return RowGroup(rows, stored, decoded, first, last)


def _sample_major(
    store: ByteSource, header: Header, first_row: int, rows: int, wanted: NDArray[np.intp]
) -> NDArray[Any]:
    m = header.channels
    block = _part(store, header, first_row * m, (first_row + rows) * m).reshape(rows, m)
    if _is_all(wanted, m):
        return block.astype(header.native, copy=False).T
    values = np.empty((rows, len(wanted)), header.native)
    step = max(1, _COPY_BYTES // (m * header.dtype.itemsize))
    for row in range(0, rows, step):
        values[row : row + step] = block[row : row + step, wanted]
    return values.T


def _channel_major(store: ByteSource, header: Header, wanted: NDArray[np.intp]) -> NDArray[Any]:
    m, n = header.channels, header.samples
    if _is_all(wanted, m) and header.dtype.isnative:
        return _part(store, header, 0, m * n).reshape(m, n)
    values = np.empty((len(wanted), n), header.native)
    row_of = {int(channel): row for row, channel in enumerate(wanted)}
    for strip in _strips(header, wanted):
        block = _part(store, header, strip.start, strip.stop)
        sample = strip.start % n
        for at in range(0, len(block), n - sample):
            row = row_of.get((strip.start + at) // n)
            if row is not None:
                part = block[at : at + n - sample]
                values[row, sample : sample + len(part)] = part
    return values


def _strips(header: Header, wanted: NDArray[np.intp]) -> Iterator[range]:
    """Yield the runs of elements of a channel-major file to fetch: some whole channels, or part of a long one."""
    n, item = header.samples, header.dtype.itemsize
    together = max(1, GROUP_BYTES // (n * item))
    for first in range(0, header.channels, together):
        inside = wanted[(wanted >= first) & (wanted < first + together)]
        if inside.size:
            start, stop = int(inside.min()) * n, (int(inside.max()) + 1) * n
            step = stop - start if together > 1 else max(1, GROUP_BYTES // item)
            yield from (range(at, min(at + step, stop)) for at in range(start, stop, step))


def _part(store: ByteSource, header: Header, start: int, stop: int) -> NDArray[Any]:
    """Return the elements ``start <= i < stop`` of the file, in its byte order, as a view of what was fetched."""
    info, item = header.info, header.dtype.itemsize
    first, last = header.offset + start * item, header.offset + stop * item
    data = store.read(info.key, version=info.version, start=first, stop=last)
    if len(data) != last - first:
        got = f"{len(data)} of {last - first} bytes"
        raise refused(info, "the store returned fewer bytes than asked for", got=got)
    return np.frombuffer(data, header.dtype)


def _is_all(wanted: NDArray[np.intp], channels: int) -> bool:
    return len(wanted) == channels and bool((wanted == np.arange(channels)).all())
