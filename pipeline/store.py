"""From a location to a store: the door to object storage for the rest of the package.

What a store promises is written in `store_promises`; here adapters, retries and counting are put together, and
locations are compared. The modules ``store_*`` are the only importers of fsspec, s3fs and botocore.
"""

from __future__ import annotations

import os
import re
import time
from collections.abc import Callable
from functools import lru_cache
from pathlib import Path

from shardfold.errors import InputError
from shardfold.store_local import LocalAdapter
from shardfold.store_promises import Adapter, Bytes, Created, Store, StoreSettings
from shardfold.store_retries import Counting, Counts, Retrying, Tally

__all__ = [
    "Bytes",
    "Counting",
    "Counts",
    "Created",
    "Store",
    "StoreSettings",
    "connect",
    "inside",
    "open_store",
    "same_place",
]

ATTEMPTS = 4

_SCHEME = re.compile(r"^([a-z][a-z0-9+.-]+)://", re.IGNORECASE)
# A secret may hold slashes, so a colon that begins no port counts up to any @.
_USER = re.compile(r"^[a-z][a-z0-9+.-]*://([^/]*|[^/@]*:(?!\d+(/|$)).*)@", re.IGNORECASE)
_NOWHERE = re.compile(r"^(s3:///.*|s3://|)$", re.IGNORECASE)
_ENDPOINT = re.compile(r"^https?://[^/@\s?#]+/?$", re.IGNORECASE)


def open_store(
    location: str,
    endpoint: str | None = None,
    region: str | None = None,
    anonymous: bool = False,
    *,
    attempts: int = ATTEMPTS,
    sleep: Callable[[float], None] = time.sleep,
) -> Counting:
    """Return a new store; nothing is asked of the storage yet.

    Parameters
    ----------
    location : str
        ``s3://bucket/prefix``, a local path, ``file://`` or, read-only, any other URL that fsspec knows.
    endpoint, region : str, optional
        Of the S3 service; the usual environment and profiles where ``None``.
    anonymous : bool
        Send unsigned requests.
    attempts : int
        Tries of one request in all.
    sleep : callable
        Waits between tries.

    Raises
    ------
    InputError
        If the location is of no known kind, or location or endpoint hold a password.
    """
    tally = Tally()
    adapter = _adapter(StoreSettings(location, endpoint, region, anonymous))
    return Counting(Retrying(adapter, attempts, sleep, note=lambda: tally.add(retries=1)), tally)


def connect(settings: StoreSettings) -> Counting:
    """Return this process's store for some settings, opened once. A forked process opens its own."""
    return _connect(settings, os.getpid())


def inside(inner: StoreSettings, outer: StoreSettings) -> bool:
    """Whether all of one location lies within, or is, another."""
    service, path = _address(inner)
    other_service, other_path = _address(outer)
    return service == other_service and path[: len(other_path)] == other_path


def same_place(a: StoreSettings, b: StoreSettings) -> bool:
    """Whether two settings name the same folder, however they are reached."""
    return _address(a) == _address(b)


@lru_cache(maxsize=32)
def _connect(settings: StoreSettings, process: int) -> Counting:
    return open_store(settings.location, settings.endpoint, settings.region, settings.anonymous)


def _adapter(settings: StoreSettings) -> Adapter:
    _check(settings)
    scheme = _scheme(settings.location)
    if scheme in ("", "file"):
        return LocalAdapter(_path(settings.location))
    # The adapters below cost half a second to import, which a local run does without.
    if scheme == "s3":
        from shardfold.store_s3 import S3Adapter

        return S3Adapter(settings)
    from shardfold.store_readonly import ReadOnlyAdapter

    return ReadOnlyAdapter(settings)


def _check(settings: StoreSettings) -> None:
    """Refuse what could never be reached, and secrets in the wrong place, without repeating them."""
    for what, url in (("location", settings.location), ("endpoint", settings.endpoint or "")):
        if _USER.match(url):
            raise InputError(
                f"the {what} holds a user or password",
                rule="secrets come from the usual environment and profiles alone",
                remedy="take out everything before the @",
            )
    if settings.endpoint is not None and not _ENDPOINT.match(settings.endpoint):
        rule, remedy = "http://HOST:PORT or https://HOST", "correct storage.endpoint"
        raise InputError("the endpoint is no address", where=settings.location, rule=rule, remedy=remedy)
    if _NOWHERE.match(settings.location):
        raise InputError(
            "the location names no bucket or folder", where=settings.location, rule="s3://BUCKET/PREFIX or a folder"
        )


def _scheme(location: str) -> str:
    found = _SCHEME.match(location)
    return found[1].lower() if found else ""


def _path(location: str) -> Path:
    return Path(re.sub(r"^file://(localhost)?", "", location, flags=re.IGNORECASE))


def _address(settings: StoreSettings) -> tuple[str, tuple[str, ...]]:
    """Return what tells one service from another, and the steps of the path within."""
    scheme = _scheme(settings.location)
    if scheme in ("", "file"):
        return "file", _path(settings.location).resolve().parts
    steps = tuple(step for step in settings.location.partition("://")[2].split("/") if step)
    return f"{scheme} {(settings.endpoint or '').rstrip('/').lower()}", steps
