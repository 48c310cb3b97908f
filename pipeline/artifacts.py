"""Records: named arrays and a header as one self-checking object, and back.

A record is ``magic, header length, header digest, header JSON, arrays``. The header gives kind, facts and, for each
array, type, shape, place and digest, so some arrays can be read by range and still be checked. Arrays start at
multiples of 64 bytes, and not before byte 4096: one request of fixed length brings most headers. Nothing is ever
unpickled. What the arrays mean is not known here.
"""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
import numpy.typing as npt
import xxhash

from shardfold.errors import RecordCorrupt
from shardfold.ids import canonical_json, digest_bytes

MAGIC = b"shardfold record 1\n"
ALIGNMENT = 64
FIRST_READ_BYTES = 4096

Array = npt.NDArray[Any]
Buffer = bytes | bytearray | memoryview


class Readable(Protocol):
    """What is needed of a store to read a record."""

    def read(self, key: str, *, version: str | None = None, start: int = 0, stop: int | None = None) -> Buffer:
        """Return exactly the bytes asked for."""
        ...


@dataclass(frozen=True)
class Header:
    """Where the arrays of a record are, and the facts that came with them."""

    kind: str
    facts: dict[str, Any]
    arrays: dict[str, dict[str, Any]]
    payload_start: int


def pack(kind: str, facts: dict[str, Any], arrays: dict[str, Array]) -> bytearray:
    """Return a record.

    Parameters
    ----------
    kind : str
        What the record is; checked when it is read.
    facts : dict
        JSON values.
    arrays : dict of name to ndarray
        Numeric arrays of any shape; their order in memory (C or Fortran) is kept.

    Returns
    -------
    bytearray
        The whole record, built once in place so that no array is held three times.
    """
    entries: dict[str, dict[str, Any]] = {}
    end = 0
    for name, array in arrays.items():
        start = -(-end // ALIGNMENT) * ALIGNMENT
        end = start + array.nbytes
        entries[name] = {
            "dtype": array.dtype.str,
            "shape": list(array.shape),
            "order": "F" if _fortran(array) else "C",
            "start": start,
            "bytes": array.nbytes,
            "digest": digest_array(array),
        }
    header = canonical_json({"kind": kind, "facts": facts, "arrays": entries})
    header += b" " * (FIRST_READ_BYTES - _prefix_bytes(len(header)))
    header += b" " * (-_prefix_bytes(len(header)) % ALIGNMENT)
    begin = _prefix_bytes(len(header))
    record = bytearray(begin + end)
    record[:begin] = MAGIC + len(header).to_bytes(8, "little") + digest_bytes(header).encode() + header
    for name, array in arrays.items():
        if array.nbytes:
            flat = array.T if _fortran(array) else array
            view = np.frombuffer(record, array.dtype, array.size, begin + entries[name]["start"])
            view.reshape(flat.shape)[...] = flat
    return record


def unpack(data: Buffer, kind: str, key: str) -> tuple[dict[str, Any], dict[str, Array]]:
    """Return the facts and the arrays of a whole record, every digest checked.

    The arrays are views of `data`, read-only if it is.

    Raises
    ------
    RecordCorrupt
        If the form, the kind, a length or a digest is not as written.
    """
    header = _parse(data, kind, key)
    end = max((entry["start"] + entry["bytes"] for entry in header.arrays.values()), default=0)
    if len(data) != header.payload_start + end:
        raise _corrupt(key, f"{header.payload_start + end} bytes", f"{len(data)} bytes")
    view = memoryview(data)
    arrays = {}
    for name, entry in header.arrays.items():
        start = header.payload_start + entry["start"]
        arrays[name] = _array(view[start : start + entry["bytes"]], entry, f"{key}, array {name}")
    return header.facts, arrays


def read_header(store: Readable, key: str, kind: str) -> Header:
    """Return the header of a stored record, reading no array.

    Raises
    ------
    RecordCorrupt
        If the header is not as written.
    """
    data = bytes(store.read(key, start=0, stop=FIRST_READ_BYTES))
    stop = _prefix_bytes(_header_bytes(data, key))
    if stop > len(data):
        data += bytes(store.read(key, start=len(data), stop=stop))
    return _parse(data, kind, key)


def read_arrays(store: Readable, key: str, header: Header, names: Sequence[str]) -> dict[str, Array]:
    """Return some arrays of a stored record by one ranged read from the first of them to the last, digests checked.

    Raises
    ------
    RecordCorrupt
        If an array is missing or its digest differs.
    """
    missing = [name for name in names if name not in header.arrays]
    if missing:
        raise _corrupt(key, f"an array {missing[0]!r}", f"{sorted(header.arrays)}")
    entries = {name: header.arrays[name] for name in names}
    first = min((entry["start"] for entry in entries.values()), default=0)
    stop = max((entry["start"] + entry["bytes"] for entry in entries.values()), default=0)
    begin = header.payload_start
    data = memoryview(store.read(key, start=begin + first, stop=begin + stop) if stop > first else b"")
    return {
        name: _array(data[entry["start"] - first :][: entry["bytes"]], entry, f"{key}, array {name}")
        for name, entry in entries.items()
    }


def digest_array(array: Array) -> str:
    """Return the XXH3-128 digest of an array's elements in memory order."""
    flat = array.T if _fortran(array) else np.ascontiguousarray(array)
    return xxhash.xxh3_128_hexdigest(memoryview(flat.data).cast("B") if flat.size else b"")


def _fortran(array: Array) -> bool:
    return array.flags.f_contiguous and not array.flags.c_contiguous


def _prefix_bytes(header_bytes: int) -> int:
    return len(MAGIC) + 8 + 40 + header_bytes


def _header_bytes(data: Buffer, key: str) -> int:
    if bytes(data[: len(MAGIC)]) != MAGIC:
        raise _corrupt(key, f"a record that begins with {MAGIC!r}", repr(bytes(data[: len(MAGIC)])))
    return int.from_bytes(data[len(MAGIC) : len(MAGIC) + 8], "little")


def _parse(data: Buffer, kind: str, key: str) -> Header:
    start = _prefix_bytes(0)
    text = bytes(data[start : start + _header_bytes(data, key)])
    stored = bytes(data[start - 40 : start]).decode("ascii", "replace")
    if digest_bytes(text) != stored:
        raise _corrupt(key, f"header digest {stored}", digest_bytes(text))
    header = json.loads(text)
    if header["kind"] != kind:
        raise _corrupt(key, f"a record of kind {kind!r}", repr(header["kind"]))
    return Header(kind, header["facts"], header["arrays"], start + len(text))


def _array(data: Buffer, entry: dict[str, Any], where: str) -> Array:
    dtype = np.dtype(entry["dtype"])
    if dtype.hasobject:
        raise _corrupt(where, "a numeric type", entry["dtype"])
    digest = xxhash.xxh3_128_hexdigest(data)
    if digest != entry["digest"]:
        raise _corrupt(where, f"digest {entry['digest']}", digest)
    return np.frombuffer(data, dtype).reshape(entry["shape"], order=entry["order"])


def _corrupt(where: str, rule: str, got: str) -> RecordCorrupt:
    return RecordCorrupt(
        "a stored record is not what was written",
        where=where,
        rule=rule,
        got=got,
        remedy="restore the object from a copy, or delete it and run again to have it made anew",
    )
