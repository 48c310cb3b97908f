"""Small value types that every room shares, canonical JSON, and digests.

Plain frozen values only: no storage, no settings, no arrays.
"""

from __future__ import annotations

import hashlib
import json
from dataclasses import dataclass
from typing import Any

DIGEST_BYTES = 20


def canonical_json(value: Any) -> bytes:
    """Return the one JSON text of a value: sorted keys, no blanks, UTF-8, no NaN."""
    return json.dumps(value, sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False).encode()


def digest_bytes(data: bytes | bytearray | memoryview) -> str:
    """Return the hexadecimal BLAKE2b digest of some bytes."""
    return hashlib.blake2b(data, digest_size=DIGEST_BYTES).hexdigest()


def digest_value(value: Any) -> str:
    """Return the digest of a value's canonical JSON."""
    return digest_bytes(canonical_json(value))


@dataclass(frozen=True)
class ObjectInfo:
    """One object as a store lists it.

    ``version`` changes whenever the content does: ETag and size on S3, size and mtime on a file system.
    ``modified`` is seconds since the epoch on the store's clock.
    """

    key: str
    version: str
    size: int
    modified: float


@dataclass(frozen=True)
class RowGroup:
    """The smallest part of a shard that is read at once.

    ``first`` and ``last`` are the least and largest time in it (integer nanoseconds; ``None`` without times),
    ``stored_bytes`` what a read transfers, ``decoded_bytes`` what it becomes in memory.
    """

    rows: int
    stored_bytes: int
    decoded_bytes: int
    first: int | None
    last: int | None


@dataclass(frozen=True)
class Shard:
    """One shard as its footer describes it; no measured value is known yet."""

    info: ObjectInfo
    groups: tuple[RowGroup, ...]
    channels: tuple[str, ...]
    dtype: str
    zoned: bool = False

    @property
    def key(self) -> str:
        """Return the object's key within the campaign."""
        return self.info.key

    @property
    def rows(self) -> int:
        """Return the number of samples."""
        return sum(group.rows for group in self.groups)

    @property
    def first(self) -> int | None:
        """Return the least time, or ``None`` without times."""
        return min((group.first for group in self.groups if group.first is not None), default=None)

    @property
    def last(self) -> int | None:
        """Return the largest time, or ``None`` without times."""
        return max((group.last for group in self.groups if group.last is not None), default=None)
