"""Retries and counting: thin objects around an adapter that together make a store.

`Retrying` is the one owner of retries; below it nothing tries twice. `Counting` tells what went through, for
reports and for tests that hold "each byte is read once" against it. Waiting is injected, never done here.
"""

from __future__ import annotations

import threading
from collections import Counter
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import partial
from typing import TypeVar
from uuid import uuid4

from shardfold.errors import StorageFailed
from shardfold.ids import ObjectInfo
from shardfold.store_promises import PROBE_FOLDER, Adapter, Busy, Bytes, Created, Store, Transient, cuts

FIRST_WAIT_SECONDS = 0.1
WAIT_GROWTH = 2.5
PATIENCE = 10.0
"""A service that never answered is given up after about a second, most likely a wrong address;
one that is known to run gets ten times as long."""

T = TypeVar("T")


class Retrying:
    """A `Store` over an adapter: repeats what a second try may mend, and passes all other errors on.

    Parameters
    ----------
    adapter : Adapter
        Does single requests.
    attempts : int
        Tries of one request in all.
    sleep : callable
        Waits for a number of seconds between tries: 0.1, 0.25, 0.625, ..., or ten times as long, see ``PATIENCE``.
    note : callable
        Called once before every further try.
    """

    def __init__(
        self, adapter: Adapter, attempts: int, sleep: Callable[[float], None], note: Callable[[], None]
    ) -> None:
        if attempts < 1:
            raise ValueError(f"attempts: at least 1, got {attempts}")
        self._adapter, self._attempts, self._sleep, self._note = adapter, attempts, sleep, note
        self._answered = self._proved = False

    @property
    def name(self) -> str:
        """See `Store.name`."""
        return self._adapter.name

    @property
    def writable(self) -> bool:
        """See `Store.writable`."""
        return self._adapter.writable

    def list(self, prefix: str = "") -> Iterator[ObjectInfo]:
        """See `Store.list`. A failed page is asked for again, not the pages before it."""
        bookmark: str | None = None
        while True:
            infos, bookmark = self._try(partial(self._adapter.page, prefix, bookmark))
            yield from infos
            if bookmark is None:
                return

    def head(self, key: str) -> ObjectInfo | None:
        """See `Store.head`."""
        return self._try(lambda: self._adapter.head(key))

    def read(self, key: str, *, version: str | None = None, start: int = 0, stop: int | None = None) -> memoryview:
        """See `Store.read`."""
        return self._try(lambda: self._adapter.read(key, version, start, stop))

    def create(self, key: str, data: Bytes) -> Created:
        """See `Store.create`. All tries carry one token, so that a try whose answer was lost is known again."""
        token = uuid4().hex
        return self._try(lambda: self._adapter.create(key, data, token))

    def put(self, key: str, data: Bytes) -> None:
        """See `Store.put`."""
        self._try(lambda: self._adapter.put(key, data))

    def delete(self, key: str) -> None:
        """See `Store.delete`."""
        self._try(lambda: self._adapter.delete(key))

    def check_writable(self) -> None:
        """See `Store.check_writable`."""
        if self._proved:
            return
        self._try(self._adapter.prepare)
        key = f"{PROBE_FOLDER}{uuid4().hex}"
        outcomes = [self.create(key, b"first")]
        try:
            outcomes.append(self.create(key, b"second"))
        finally:
            self.delete(key)
        if outcomes != [Created.LANDED, Created.EXISTED]:
            raise StorageFailed(
                "the storage replaces an object that it was told to leave",
                where=self.name,
                rule="a conditional create (If-None-Match: *) is honoured",
                remedy="keep the dossier on storage that honours it; without, two runs can destroy each other's work",
            )
        self._proved = True

    def _try(self, ask: Callable[[], T]) -> T:
        for count in range(self._attempts - 1):
            try:
                answer = ask()
            except Transient as error:
                self._note()
                self._sleep(self._wait_seconds(count, error))
            else:
                self._answered = True
                return answer
        try:
            return ask()
        except Transient as error:
            parts = {**error.as_record(), "got": f"{error.got}, the last of {self._attempts} tries"}
            raise StorageFailed(parts.pop("what"), **parts) from error

    def _wait_seconds(self, count: int, error: Transient) -> float:
        patience = PATIENCE if self._answered or isinstance(error, Busy) else 1.0
        return FIRST_WAIT_SECONDS * WAIT_GROWTH**count * patience


@dataclass(frozen=True)
class Counts:
    """What went through a store since it was opened.

    Attributes
    ----------
    reads, requests, bytes_read : int
        Calls of `Store.read` that succeeded, the ranged requests these take (further tries not counted), their bytes.
    creates, existed, puts, bytes_written : int
        Creates that landed, creates that found the key taken, puts, and the bytes of both that landed.
    heads, lists, deletes, retries : int
        The other calls, and all further tries.
    """

    reads: int = 0
    requests: int = 0
    bytes_read: int = 0
    creates: int = 0
    existed: int = 0
    puts: int = 0
    bytes_written: int = 0
    heads: int = 0
    lists: int = 0
    deletes: int = 0
    retries: int = 0

    def __sub__(self, before: Counts) -> Counts:
        """Return what was added since an earlier snapshot."""
        return Counts(**{name: getattr(self, name) - getattr(before, name) for name in self.__dataclass_fields__})


class Tally:
    """Adds up what happens, from any thread."""

    def __init__(self) -> None:
        self._lock = threading.Lock()
        self._counts: Counter[str] = Counter()

    def add(self, **amounts: int) -> None:
        """Add amounts by the field names of `Counts`."""
        with self._lock:
            self._counts.update(amounts)

    def snapshot(self) -> Counts:
        """Return the sums up to now."""
        with self._lock:
            return Counts(**self._counts)


class Counting:
    """A `Store` that counts the successful calls of the store below it."""

    def __init__(self, store: Store, tally: Tally) -> None:
        self._store, self._tally = store, tally

    def snapshot(self) -> Counts:
        """Return what went through up to now."""
        return self._tally.snapshot()

    @property
    def name(self) -> str:
        """See `Store.name`."""
        return self._store.name

    @property
    def writable(self) -> bool:
        """See `Store.writable`."""
        return self._store.writable

    def list(self, prefix: str = "") -> Iterator[ObjectInfo]:
        """See `Store.list`."""
        self._tally.add(lists=1)
        return self._store.list(prefix)

    def head(self, key: str) -> ObjectInfo | None:
        """See `Store.head`."""
        found = self._store.head(key)
        self._tally.add(heads=1)
        return found

    def read(self, key: str, *, version: str | None = None, start: int = 0, stop: int | None = None) -> memoryview:
        """See `Store.read`."""
        data = self._store.read(key, version=version, start=start, stop=stop)
        self._tally.add(reads=1, requests=len(cuts(0, len(data))), bytes_read=len(data))
        return data

    def create(self, key: str, data: Bytes) -> Created:
        """See `Store.create`."""
        outcome = self._store.create(key, data)
        if outcome is Created.LANDED:
            self._tally.add(creates=1, bytes_written=len(data))
        else:
            self._tally.add(existed=1)
        return outcome

    def put(self, key: str, data: Bytes) -> None:
        """See `Store.put`."""
        self._store.put(key, data)
        self._tally.add(puts=1, bytes_written=len(data))

    def delete(self, key: str) -> None:
        """See `Store.delete`."""
        self._store.delete(key)
        self._tally.add(deletes=1)

    def check_writable(self) -> None:
        """See `Store.check_writable`; the probe is not counted."""
        self._store.check_writable()
