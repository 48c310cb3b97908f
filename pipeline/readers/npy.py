"""Layout ``array``: one ``.npy`` file of two dimensions per shard.

Sample-major files are cut into synthetic row groups of about 8 MiB, channel-major ones are one row group. Headers
are parsed by NumPy without evaluating anything; files of Python objects are never loaded.
"""

from __future__ import annotations

import io
import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.lib import format as npy_format
from numpy.typing import NDArray

from shardfold.channels import keep_names
from shardfold.ids import ObjectInfo, RowGroup, Shard
from shardfold.readers.batch import Batch, ByteSource, refused
from shardfold.readers.times import Grid, TimeRule, grid_of
from shardfold.readers.vector import channel_names, places

GROUP_BYTES = 8 * 2**20
HEAD_BYTES = 4096
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
        channels = keep_names(self._all_names(header), self.include, self.exclude)
        grid = grid_of(self.time, info, header.samples)
        step = header.group_rows
        groups = (
            _group(header, len(channels), row, min(step, header.samples - row), grid)
            for row in range(0, header.samples, step)
        )
        return Shard(info, tuple(groups), channels, str(header.native), bool(grid and grid.zoned))

    def batches(
        self, store: ByteSource, shard: Shard, first_group: int, stop_group: int, channels: Sequence[str]
    ) -> Iterator[Batch]:
        """Yield the batches of some row groups; see `Reader`."""
        header = read_header(store, shard.info, self.orient)
        names = self._all_names(header)
        picks = None if tuple(channels) == names else places(names, channels)
        grid = grid_of(self.time, shard.info, header.samples)
        for group in range(first_group, stop_group):
            first_row, rows = group * header.group_rows, shard.groups[group].rows
            read = _sample_major if header.sample_major else _channel_major
            values = read(store, header, first_row, rows, picks)
            yield Batch(first_row, grid.times(first_row, rows) if grid else None, values)

    def group_peak_bytes(self, group: RowGroup) -> int:
        """Return an upper bound of the private bytes held while one row group is read: its values and one part."""
        return max(group.stored_bytes, group.decoded_bytes) + GROUP_BYTES

    def _all_names(self, header: Header) -> tuple[str, ...]:
        return channel_names(header.info, header.channels, self.names)


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
    except (ValueError, KeyError) as error:
        got = str(error).splitlines()[0]
        raise refused(info, "the .npy header cannot be read", rule=_RULE, got=got) from error
    return shape, fortran, dtype, stream.tell()


def _group(header: Header, kept: int, first_row: int, rows: int, grid: Grid | None) -> RowGroup:
    item = header.dtype.itemsize
    first, last = grid.span(first_row, rows) if grid else (None, None)
    return RowGroup(rows, rows * header.channels * item, rows * kept * item, first, last)


def _sample_major(
    store: ByteSource, header: Header, first_row: int, rows: int, picks: NDArray[np.intp] | None
) -> NDArray[Any]:
    flat = _part(store, header, first_row * header.channels, (first_row + rows) * header.channels)
    block = flat.reshape(rows, header.channels)
    return _native(block if picks is None else block[:, picks], header).T


def _channel_major(
    store: ByteSource, header: Header, first_row: int, rows: int, picks: NDArray[np.intp] | None
) -> NDArray[Any]:
    if picks is None and header.dtype.isnative:
        return _part(store, header, 0, header.channels * rows).reshape(header.channels, rows)
    picks = np.arange(header.channels) if picks is None else picks
    values = np.empty((len(picks), rows), header.native)
    step = max(1, GROUP_BYTES // header.dtype.itemsize)
    for row, channel in enumerate(picks):
        for start in range(0, rows, step):
            stop = min(start + step, rows)
            values[row, start:stop] = _part(store, header, channel * rows + start, channel * rows + stop)
    return values


def _part(store: ByteSource, header: Header, start: int, stop: int) -> NDArray[Any]:
    info, item = header.info, header.dtype.itemsize
    first, last = header.offset + int(start) * item, header.offset + int(stop) * item
    data = store.read(info.key, version=info.version, start=first, stop=last)
    if len(data) != last - first:
        got = f"{len(data)} of {last - first} bytes"
        raise refused(info, "the store returned fewer bytes than asked for", got=got)
    return np.frombuffer(data, header.dtype)


def _native(block: NDArray[Any], header: Header) -> NDArray[Any]:
    return np.ascontiguousarray(block, dtype=header.native)
