"""A folder of the local file system as a store.

A version is modification time and size. Objects appear by linking a finished temporary file to its name, which
no two writers can both do; nothing half-written ever stands under a name. No retries and no remote file systems.
"""

from __future__ import annotations

import errno
import os
import stat
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import NoReturn
from uuid import uuid4

from shardfold.errors import AccessDenied, NothingToRead, StorageFailed
from shardfold.ids import ObjectInfo
from shardfold.store_promises import (
    Bytes,
    Created,
    Transient,
    check_key,
    check_range,
    cuts,
    room,
    version_changed,
    visible,
)

TEMPORARY = ".shardfold-"
"""Begins the name of every temporary file; listings leave them out."""


class LocalAdapter:
    """One folder. ``root`` need not exist before `prepare`."""

    writable = True

    def __init__(self, root: Path) -> None:
        self.root = root.absolute()
        self.name = str(self.root)

    def place(self, key: str) -> str:
        """Return the path of an object."""
        return str(self.root / key)

    def page(self, prefix: str, bookmark: str | None) -> tuple[list[ObjectInfo], str | None]:
        """Return all objects below a prefix at once."""
        if not self.root.is_dir():
            raise self._no_root()
        folder = prefix.rpartition("/")[0]
        with self._telling(prefix):
            keys = (path.relative_to(self.root).as_posix() for path in _files(self.root / folder))
            found = (self._stat(key) for key in keys if key.startswith(prefix))
            return visible(info for info in found if info is not None), None

    def head(self, key: str) -> ObjectInfo | None:
        """Return an object's description or ``None``."""
        check_key(key)
        with self._telling(key):
            return self._stat(key)

    def read(self, key: str, version: str | None, start: int, stop: int | None) -> memoryview:
        """Return bytes of one version, which is looked up before and after."""
        check_key(key)
        with self._telling(key):
            try:
                descriptor = os.open(self.root / key, os.O_RDONLY | os.O_CLOEXEC)
            except (FileNotFoundError, NotADirectoryError, IsADirectoryError) as error:
                raise self._gone(key, version) from error
            with os.fdopen(descriptor, "rb", buffering=0) as file:
                status = os.fstat(descriptor)
                noted = version or _version(status)
                if _version(status) != noted:
                    raise version_changed(self.place(key), noted, _version(status))
                end = check_range(self.place(key), status.st_size, start, stop)
                buffer = room(end - start)
                for low, high in cuts(start, end):
                    _read_all(file.fileno(), buffer[low - start : high - start], low)
                if _version(os.fstat(descriptor)) != noted:
                    raise version_changed(self.place(key), noted, _version(os.fstat(descriptor)))
                return buffer.toreadonly()

    def create(self, key: str, data: Bytes, token: str) -> Created:
        """Link a finished file to a free name. The token is not needed: a link tells its own file."""
        return self._write(key, data, _link)

    def put(self, key: str, data: Bytes) -> None:
        """Rename a finished file over a name."""
        self._write(key, data, _rename)

    def delete(self, key: str) -> None:
        """Remove a file."""
        check_key(key)
        with self._telling(key):
            (self.root / key).unlink(missing_ok=True)

    def prepare(self) -> None:
        """Make the root folder."""
        with self._telling(""):
            self.root.mkdir(parents=True, exist_ok=True)

    def _write(self, key: str, data: Bytes, finish: Callable[[Path, Path], Created]) -> Created:
        check_key(key)
        target = self.root / key
        temporary = target.with_name(f"{TEMPORARY}{uuid4().hex}")
        with self._telling(key):
            target.parent.mkdir(parents=True, exist_ok=True)
            try:
                _write_through(temporary, data)
                outcome = finish(temporary, target)
            finally:
                temporary.unlink(missing_ok=True)
            _sync_folder(target.parent)
        return outcome

    def _stat(self, key: str) -> ObjectInfo | None:
        try:
            status = os.stat(self.root / key)
        except (FileNotFoundError, NotADirectoryError):
            return None
        if not stat.S_ISREG(status.st_mode):
            return None
        return ObjectInfo(key, _version(status), status.st_size, status.st_mtime)

    def _gone(self, key: str, version: str | None) -> Exception:
        if version is not None:
            return version_changed(self.place(key), version, None)
        return NothingToRead("there is no such file", where=self.place(key))

    def _no_root(self) -> NothingToRead:
        return NothingToRead(
            "there is no such folder", where=self.name, remedy="correct the location, or mount what belongs there"
        )

    @contextmanager
    def _telling(self, key: str) -> Iterator[None]:
        """Turn errors of the operating system into the package's own."""
        try:
            yield
        except OSError as error:
            _tell(error, self.place(key))


_REMEDIES = {
    errno.ENOSPC: "free some space",
    errno.EDQUOT: "free some space",
    errno.EEXIST: "a file is where a folder should be: correct the location",
    errno.ENOTDIR: "a file is where a folder should be: correct the location",
}


def _tell(error: OSError, place: str) -> NoReturn:
    got = f"{errno.errorcode.get(error.errno or 0, type(error).__name__)}: {error.strerror}"
    if isinstance(error, PermissionError) or error.errno == errno.EROFS:
        raise AccessDenied("the file system refuses", where=place, got=got, remedy="mend the permissions") from error
    if error.errno in (errno.ESTALE, errno.ETIMEDOUT, errno.EAGAIN):
        raise Transient("the file system did not answer", where=place, got=got) from error
    remedy = _REMEDIES.get(error.errno or 0, "")
    raise StorageFailed("the file system failed", where=place, got=got, remedy=remedy) from error


def _version(status: os.stat_result) -> str:
    return f"{status.st_mtime_ns}:{status.st_size}"


def _files(folder: Path) -> Iterator[Path]:
    """Yield all files below a folder, in order; links are followed, but no folder is entered twice on one way down."""
    pending = [(str(folder), frozenset[tuple[int, int]]())]
    while pending:
        path, above = pending.pop()
        try:
            status, entries = os.stat(path), sorted(os.scandir(path), key=lambda entry: entry.name)
        except (FileNotFoundError, NotADirectoryError):
            continue
        me = (status.st_dev, status.st_ino)
        if me in above:
            continue
        pending += [(entry.path, above | {me}) for entry in reversed(entries) if entry.is_dir()]
        yield from (Path(e.path) for e in entries if e.is_file() and not e.name.startswith(TEMPORARY))


def _read_all(descriptor: int, buffer: memoryview, offset: int) -> None:
    done = 0
    while done < len(buffer):
        count = os.preadv(descriptor, [buffer[done:]], offset + done)
        if not count:
            raise OSError(errno.EAGAIN, "the file ended while it was read")
        done += count


def _write_through(path: Path, data: Bytes) -> None:
    with path.open("xb", buffering=0) as file:
        rest = memoryview(data).cast("B")
        while rest:
            rest = rest[file.write(rest) :]
        os.fsync(file.fileno())


def _link(temporary: Path, target: Path) -> Created:
    try:
        os.link(temporary, target)
    except FileExistsError:
        # A network file system may answer a repeated request with "exists" though it was ours that landed.
        same = target.is_file() and os.path.samestat(os.stat(temporary), os.stat(target))
        return Created.LANDED if same else Created.EXISTED
    return Created.LANDED


def _rename(temporary: Path, target: Path) -> Created:
    os.replace(temporary, target)
    return Created.LANDED


def _sync_folder(folder: Path) -> None:
    descriptor = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)
