"""Any other storage that fsspec knows (gs://, memory://, https://, ...), read-only.

fsspec has no conditional create across storages, so nothing is ever written here. The version of an object is
made of whatever its description offers: ETag, else time of change, and size.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from datetime import datetime
from typing import Any, TypeVar

import fsspec

from shardfold.errors import AccessDenied, InputError, NothingToRead
from shardfold.ids import ObjectInfo
from shardfold.store_promises import (
    Bytes,
    Created,
    StoreSettings,
    Transient,
    check_range,
    version_changed,
    visible,
)

_CHANGED = ("mtime", "LastModified", "last_modified", "updated", "modified", "created")

T = TypeVar("T")


class ReadOnlyAdapter:
    """A folder of a storage, seen through fsspec."""

    writable = False

    def __init__(self, settings: StoreSettings) -> None:
        self._url = settings.location.rstrip("/")
        self.name = self._url.partition("?")[0]
        if settings.endpoint or settings.region:
            raise InputError("endpoint and region are for s3:// only", where=self.name, remedy="leave them out")
        options = {"token": "anon"} if settings.anonymous and self._url.startswith(("gs:", "gcs:")) else {}
        try:
            self._files, self._root = fsspec.core.url_to_fs(
                self._url, skip_instance_cache=True, use_listings_cache=False, **options
            )
        except (ImportError, ValueError) as error:
            raise InputError(
                "no way to read this kind of location",
                where=self.name,
                rule="s3://, a local path, or a URL that fsspec and an installed package of its can read",
                remedy="install the package that fsspec names for it, or correct the location",
            ) from error

    def place(self, key: str) -> str:
        """Return the URL of an object."""
        return f"{self.name}/{key}"

    def page(self, prefix: str, bookmark: str | None) -> tuple[list[ObjectInfo], str | None]:
        """Return all objects below a prefix at once."""
        entries: Mapping[str, Any] = self._call("", lambda: self._files.find(self._root, detail=True))
        if not entries and not self._call("", lambda: self._files.exists(self._root)):
            raise NothingToRead("there is no such folder", where=self.name, remedy="correct the location")
        root = self._root.rstrip("/") + "/"
        found = (_info(path.removeprefix(root), entry) for path, entry in sorted(entries.items()))
        return visible(info for info in found if info.key.startswith(prefix)), None

    def head(self, key: str) -> ObjectInfo | None:
        """Return an object's description or ``None``."""
        try:
            entry = self._call(key, lambda: self._files.info(self._path(key)))
        except NothingToRead:
            return None
        return _info(key, entry) if entry.get("type", "file") == "file" else None

    def read(self, key: str, version: str | None, start: int, stop: int | None) -> memoryview:
        """Return bytes of one version, which is looked up before and after, as a request cannot name it."""
        before = self._noted(key, version)
        end = check_range(self.place(key), before.size, start, stop)
        data = self._fetch(key, start, end) if end > start else b""
        self._noted(key, before.version)
        if len(data) != end - start:
            got = f"{len(data)} bytes"
            raise Transient("an answer ended early", where=self.place(key), rule=f"{end - start} bytes", got=got)
        return memoryview(data)

    def create(self, key: str, data: Bytes, token: str) -> Created:
        """Refuse."""
        raise self._refusal()

    def put(self, key: str, data: Bytes) -> None:
        """Refuse."""
        raise self._refusal()

    def delete(self, key: str) -> None:
        """Refuse."""
        raise self._refusal()

    def prepare(self) -> None:
        """Refuse."""
        raise self._refusal()

    def _fetch(self, key: str, start: int, end: int) -> Bytes:
        data: Bytes = self._call(key, lambda: self._files.cat_file(self._path(key), start=start, end=end))
        return data

    def _path(self, key: str) -> str:
        return f"{self._root.rstrip('/')}/{key}"

    def _noted(self, key: str, version: str | None) -> ObjectInfo:
        found = self.head(key)
        if version is not None and (found is None or found.version != version):
            raise version_changed(self.place(key), version, found.version if found else None)
        if found is None:
            raise NothingToRead("there is no such object", where=self.place(key))
        return found

    def _refusal(self) -> InputError:
        return InputError("this kind of storage is only read", where=self.name, remedy="name S3 or a local folder")

    def _call(self, key: str, ask: Callable[[], T]) -> T:
        try:
            return ask()
        except FileNotFoundError as error:
            raise NothingToRead("there is no such object", where=self.place(key)) from error
        except PermissionError as error:
            raise AccessDenied("the storage denies access", where=self.place(key)) from error
        except Exception as error:
            # Each fsspec package has its own tree of errors; what is neither missing nor forbidden may pass.
            got = type(error).__name__
            raise Transient("the storage did not answer, or broke off", where=self.place(key), got=got) from error


def _info(key: str, entry: Mapping[str, Any]) -> ObjectInfo:
    etag = next((value for name, value in entry.items() if name.lower() == "etag" and value), None)
    changed = next((entry[name] for name in _CHANGED if entry.get(name) is not None), None)
    size, seconds = int(entry["size"] or 0), _seconds(changed)
    # One storage may give the same time as a number in one answer and as a date in the next.
    mark = str(etag).strip('"') if etag else str(seconds or changed or "")
    return ObjectInfo(key, f"{mark}:{size}", size, seconds)


def _seconds(changed: Any) -> float:
    """Return seconds since the epoch; an unknown time is long ago, so that the object counts as settled."""
    if isinstance(changed, str):
        try:
            changed = datetime.fromisoformat(changed)
        except ValueError:
            return 0.0
    if isinstance(changed, datetime):
        return changed.timestamp()
    return float(changed or 0.0)
