"""What a store promises and the few values that its adapters share.

Two contracts live here. `Adapter` is what one kind of storage does with one request, without a second try;
`Store` is what the rest of the package uses, made of an adapter, retries and counting. No adapter, no library of a
storage and no wait ever lives here.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from enum import Enum
from typing import Protocol, TypeAlias

import numpy as np

from shardfold.errors import RecordCorrupt, StorageFailed, VersionChanged
from shardfold.ids import ObjectInfo

CUT_BYTES = 8 * 2**20
"""Longest byte range of one request. Measured: above 4 MiB the rate no longer depends on it."""

PROBE_FOLDER = ".probe/"

Bytes: TypeAlias = bytes | bytearray | memoryview


class Created(Enum):
    """How a conditional create ended; a third way, not knowing, is the error `StorageFailed`."""

    LANDED = "landed"
    EXISTED = "existed"


class Transient(StorageFailed):
    """A request failed in a way that a second try may mend. Never leaves `store_retries.Retrying`."""


class Busy(Transient):
    """The service did answer, and said that it cannot just now: worth a longer wait."""


@dataclass(frozen=True)
class StoreSettings:
    """Where a store is and how it is reached: inert, comparable, hashable, picklable, and without secrets.

    Attributes
    ----------
    location : str
        ``s3://bucket/prefix``, a local path, ``file://`` or, read-only, any other URL that fsspec knows.
    endpoint : str, optional
        URL of the S3 service; ``None`` leaves it to the usual environment and profiles.
    region : str, optional
        Region of the S3 service.
    anonymous : bool
        Send unsigned requests.
    """

    location: str
    endpoint: str | None = None
    region: str | None = None
    anonymous: bool = False


class Adapter(Protocol):
    """One kind of storage. One call is one try; what a second try may mend raises `Transient`.

    Every other error is final. Keys are relative to the root, without a leading slash.
    """

    @property
    def name(self) -> str:
        """Return where the root is, for messages, free of secrets."""

    @property
    def writable(self) -> bool:
        """Return whether this kind of storage can be written."""

    def place(self, key: str) -> str:
        """Return the full name of an object for messages, free of secrets."""

    def page(self, prefix: str, bookmark: str | None) -> tuple[list[ObjectInfo], str | None]:
        """Return some of the objects below a prefix, and the bookmark of the next page or ``None``."""

    def head(self, key: str) -> ObjectInfo | None:
        """See `Store.head`."""

    def read(self, key: str, version: str | None, start: int, stop: int | None) -> memoryview:
        """See `Store.read`."""

    def create(self, key: str, data: Bytes, token: str) -> Created:
        """See `Store.create`. All tries of one call carry one token, by which its own work can be known again."""

    def put(self, key: str, data: Bytes) -> None:
        """See `Store.put`."""

    def delete(self, key: str) -> None:
        """See `Store.delete`."""

    def prepare(self) -> None:
        """Make a missing root where that is the store's business, else check that it is there. Idempotent."""


class Store(Protocol):
    """A folder of immutable or replaceable objects. Every call may be repeated; threads may share a store.

    Errors of every call: `AccessDenied` (no second try), `NothingToRead` for a missing bucket or root folder, and
    `StorageFailed` after the last try.
    """

    @property
    def name(self) -> str:
        """Where the store is, for messages; holds no secrets."""

    @property
    def writable(self) -> bool:
        """Whether this kind of store can be written at all; `check_writable` asks the storage itself."""

    def list(self, prefix: str = "") -> Iterator[ObjectInfo]:
        """Yield all objects whose key begins with a prefix, in any order, without the probe objects.

        An object that is there from before the listing begins until it ends is listed once.
        """

    def head(self, key: str) -> ObjectInfo | None:
        """Return an object's description, the same as `list` gives, or ``None`` where there is none."""

    def read(self, key: str, *, version: str | None = None, start: int = 0, stop: int | None = None) -> memoryview:
        """Return exactly the bytes ``start <= i < stop`` of one version of an object; ``stop=None`` is its end.

        Without a version, all bytes still come from one and the same version.

        Raises
        ------
        VersionChanged
            If the object is not, or is no longer, the version asked for.
        NothingToRead
            If no version is asked for and there is no object.
        RecordCorrupt
            If the object is shorter than the range.
        """

    def create(self, key: str, data: Bytes) -> Created:
        """Make an object unless its key is taken. Atomic: all of it or nothing, and only one caller lands.

        Returns
        -------
        Created
            ``LANDED``: this call made the object, also where the answer was lost and asked for again.
            ``EXISTED``: another call did, with these bytes or others; nothing was changed.
        """

    def put(self, key: str, data: Bytes) -> None:
        """Make or replace an object. Atomic: a reader sees the old bytes or the new ones."""

    def delete(self, key: str) -> None:
        """Remove an object; no error where there is none."""

    def check_writable(self) -> None:
        """Prove once per store that a conditional create is honoured, with a probe object that is removed again.

        Raises
        ------
        StorageFailed
            If a second create of the same key is not refused.
        """


def room(size: int) -> memoryview:
    """Return writable memory for ``size`` bytes that are all to be overwritten.

    NumPy asks for huge pages and does not clear them; a bytearray of 48 MiB took five times as long to fill (measured).
    """
    return np.empty(size, np.uint8).data


def cuts(start: int, stop: int) -> list[tuple[int, int]]:
    """Return the byte ranges of ``CUT_BYTES`` at most that a read is cut into, one request each."""
    return [(at, min(at + CUT_BYTES, stop)) for at in range(start, stop, CUT_BYTES)]


def check_range(place: str, size: int, start: int, stop: int | None) -> int:
    """Return the end of a range within an object of ``size`` bytes, or raise where it does not fit."""
    end = size if stop is None else stop
    if start < 0 or (stop is not None and start > stop):
        raise ValueError(f"range: 0 <= start <= stop, got start={start}, stop={stop}")
    if max(start, end) > size:
        rule, got = f"at least {max(start, end)} bytes", f"{size} bytes"
        raise RecordCorrupt("an object ends before the bytes asked for", where=place, rule=rule, got=got)
    return end


def check_key(key: str) -> None:
    """Refuse a key that would leave the root or be folded by some stores (``a//b``, ``./a``, ``../a``)."""
    if not key or any(part in ("", ".", "..") for part in key.split("/")):
        raise ValueError(f"key: parts other than '', '.' and '..' between single slashes, got {key!r}")


def version_changed(place: str, noted: str, found: str | None) -> VersionChanged:
    """Return the error for an object that is not the version noted; ``found`` is ``None`` where it is gone."""
    return VersionChanged(
        "the object was replaced after it was listed" if found else "the object was removed after it was listed",
        where=place,
        rule=f"version {noted}",
        got=f"version {found}" if found else "no object",
        remedy="repeat the run; it takes the campaign as it is then",
    )


def visible(infos: Iterable[ObjectInfo]) -> list[ObjectInfo]:
    """Return the objects that are neither folder marks nor probes of `Store.check_writable`."""
    return [info for info in infos if not info.key.endswith("/") and not info.key.startswith(PROBE_FOLDER)]
