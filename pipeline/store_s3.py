"""An S3 bucket, or a folder of one, as a store: the only place that knows what S3 requests look like.

The client is made in `store_s3_client`, and what an error of it means is said in `store_s3_faults`. No request is
sent a second time here.
"""

from __future__ import annotations

import asyncio
from collections.abc import Callable, Coroutine
from datetime import datetime
from typing import Any, TypeVar

import fsspec.asyn
from botocore.exceptions import ClientError

from shardfold.errors import InputError, NothingToRead, ShardfoldError
from shardfold.ids import ObjectInfo
from shardfold.store_promises import (
    CUT_BYTES,
    Bytes,
    Created,
    StoreSettings,
    Transient,
    check_key,
    check_range,
    cuts,
    room,
    version_changed,
    visible,
)
from shardfold.store_s3_client import file_system, without_user
from shardfold.store_s3_faults import http_status, is_missing_object, translate

LANES = 4
"""Requests of one read that are under way at once."""

CHUNK_BYTES = 2**20
PAGE_KEYS = 1000
QUOTE = '"'
_TOKEN = "shardfold-create"
T = TypeVar("T")


class S3Adapter:
    """A bucket and a prefix in it. The client is made at the first request, in the process that makes it."""

    writable = True

    def __init__(self, settings: StoreSettings) -> None:
        self.bucket, _, path = settings.location.partition("://")[2].partition("/")
        self.prefix = f"{path.strip('/')}/" if path.strip("/") else ""
        self._endpoint = settings.endpoint or ""
        self._bucket_seen = False
        self._files = file_system(settings)

    @property
    def name(self) -> str:
        """Return bucket, prefix and, once it is known, the endpoint."""
        return self.place("")

    def place(self, key: str) -> str:
        """Return the URL of an object with the endpoint."""
        return f"s3://{self.bucket}/{self.prefix}{key}" + (f" at {self._endpoint}" if self._endpoint else "")

    def page(self, prefix: str, bookmark: str | None) -> tuple[list[ObjectInfo], str | None]:
        """Return up to ``PAGE_KEYS`` objects."""
        more: dict[str, Any] = {"ContinuationToken": bookmark} if bookmark else {}

        async def ask(client: Any) -> Any:
            return await client.list_objects_v2(
                Bucket=self.bucket, Prefix=self.prefix + prefix, MaxKeys=PAGE_KEYS, **more
            )

        answer = self._call("", ask)
        found = (
            _info(entry["Key"].removeprefix(self.prefix), entry["ETag"], entry["Size"], entry["LastModified"])
            for entry in answer.get("Contents", ())
        )
        return visible(found), answer.get("NextContinuationToken")

    def head(self, key: str) -> ObjectInfo | None:
        """Return an object's description or ``None``; a first miss also asks whether the bucket is there."""
        found = self._call(key, lambda client: self._head(client, key))
        return None if found is None else found[0]

    def read(self, key: str, version: str | None, start: int, stop: int | None) -> memoryview:
        """Return bytes of one version, in parallel requests that each name the version."""
        return self._call(key, lambda client: self._read(client, key, version, start, stop)).toreadonly()

    def create(self, key: str, data: Bytes, token: str) -> Created:
        """Make an object unless its key is taken; whose it is in that case, a token in its metadata says."""
        check_key(key)
        return self._call(key, lambda client: self._create(client, key, data, token))

    def put(self, key: str, data: Bytes) -> None:
        """Make or replace an object in one request."""
        check_key(key)
        self._call(key, lambda client: self._put(client, key, data))

    def delete(self, key: str) -> None:
        """Remove an object."""
        check_key(key)
        self._call(key, lambda client: client.delete_object(**self._at(key)))

    def prepare(self) -> None:
        """Check that the bucket is there: some servers make a bucket of any name at the first write into it."""
        self._call("", lambda client: client.head_bucket(Bucket=self.bucket))

    def _at(self, key: str) -> dict[str, str]:
        return {"Bucket": self.bucket, "Key": self.prefix + key}

    def _call(self, key: str, ask: Callable[[Any], Coroutine[Any, Any, T]]) -> T:
        """Run one exchange on the event loop of fsspec, with errors in the package's words."""
        answer: T = fsspec.asyn.sync(self._files.loop, self._exchange, key, ask)
        self._bucket_seen = True
        return answer

    async def _exchange(self, key: str, ask: Callable[[Any], Coroutine[Any, Any, T]]) -> T:
        try:
            client = await self._client()
            self._endpoint = without_user(client.meta.endpoint_url)
            return await ask(client)
        except ShardfoldError:
            raise
        except Exception as error:
            told = translate(error, self.place(key))
            if told is None:
                raise
            raise told from error

    async def _client(self) -> Any:
        try:
            return await self._files.set_session()
        except ValueError as error:
            raise InputError("endpoint or region is none", where=self.name, rule="http://HOST:PORT") from error

    async def _head(self, client: Any, key: str) -> tuple[ObjectInfo, str] | None:
        """Return the description and the token of the create that made the object."""
        try:
            answer = await client.head_object(**self._at(key))
        except ClientError as error:
            if not is_missing_object(error):
                raise
            if not self._bucket_seen:
                await client.head_bucket(Bucket=self.bucket)
            return None
        info = _info(key, answer["ETag"], answer["ContentLength"], answer["LastModified"])
        return info, answer.get("Metadata", {}).get(_TOKEN, "")

    async def _put(self, client: Any, key: str, data: Bytes, **conditions: Any) -> None:
        if not self._bucket_seen:
            await client.head_bucket(Bucket=self.bucket)
        body = bytes(data) if isinstance(data, memoryview) else data
        await client.put_object(**self._at(key), Body=body, **conditions)

    async def _create(self, client: Any, key: str, data: Bytes, token: str) -> Created:
        try:
            await self._put(client, key, data, IfNoneMatch="*", Metadata={_TOKEN: token})
        except ClientError as error:
            if http_status(error) != 412:
                raise
            # aiohttp sends a request again, unasked, where a kept connection broke: a first 412 may be our own work.
            found = await self._head(client, key)
            if found is None:
                raise Transient("an object came and went while it was created", where=self.place(key)) from error
            return Created.LANDED if found[1] == token else Created.EXISTED
        return Created.LANDED

    async def _read(self, client: Any, key: str, version: str | None, start: int, stop: int | None) -> memoryview:
        if version is None:
            return await self._read_any(client, key, start, stop)
        end = check_range(self.place(key), _size(version), start, stop)
        buffer = room(end - start)
        if start == end:
            await self._read_nothing(client, key, version)
        await self._fill(client, key, version, start, buffer)
        return buffer

    async def _read_any(self, client: Any, key: str, start: int, stop: int | None) -> memoryview:
        """Read an object of unknown version: the first answer names it, and the others must be of the same."""
        first = next(iter(cuts(start, start + CUT_BYTES if stop is None else stop)), None)
        answer = None if first is None else await self._ask_range(client, key, None, *first)
        if first is None or answer is None:
            # An empty range cannot be asked for, and an empty object has no other.
            check_range(self.place(key), (await self._described(client, key)).size, start, stop)
            return memoryview(b"")
        version = _version(answer["ETag"], _total(answer))
        end = check_range(self.place(key), _total(answer), start, stop)
        buffer = room(end - start)
        length = min(first[1], end) - start
        await self._receive(answer, key, version, start, buffer[:length])
        await self._fill(client, key, version, start + length, buffer[length:])
        return buffer

    async def _read_nothing(self, client: Any, key: str, version: str) -> None:
        found = await self._head(client, key)
        if found is None or found[0].version != version:
            raise version_changed(self.place(key), version, found[0].version if found else None)

    async def _described(self, client: Any, key: str) -> ObjectInfo:
        found = await self._head(client, key)
        if found is None:
            raise NothingToRead("there is no such object", where=self.place(key))
        return found[0]

    async def _fill(self, client: Any, key: str, version: str, start: int, buffer: memoryview) -> None:
        """Fill a buffer with the bytes from ``start`` on, a few requests at a time, each writing in its place."""
        ranges = iter(cuts(start, start + len(buffer)))

        async def lane() -> None:
            for low, high in ranges:
                answer = await self._ask_range(client, key, version, low, high)
                await self._receive(answer, key, version, low, buffer[low - start : high - start])

        try:
            async with asyncio.TaskGroup() as group:
                for _ in range(LANES):
                    group.create_task(lane())
        except ExceptionGroup as failures:
            raise failures.exceptions[0] from failures

    async def _ask_range(self, client: Any, key: str, version: str | None, low: int, high: int) -> Any:
        """Send one ranged request; without a version, ``None`` where the range begins behind the end."""
        pinned = {} if version is None else {"IfMatch": _etag(version)}
        try:
            return await client.get_object(**self._at(key), Range=f"bytes={low}-{high - 1}", **pinned)
        except ClientError as error:
            if version is not None and (http_status(error) in (412, 416) or is_missing_object(error)):
                found = None if is_missing_object(error) else "another"
                raise version_changed(self.place(key), version, found) from error
            if version is None and http_status(error) == 416:
                return None
            raise

    async def _receive(self, answer: Any, key: str, version: str, low: int, buffer: memoryview) -> None:
        """Write the body of an answer into its place, after checking that it is what was asked for."""
        async with answer["Body"] as body:
            found = _version(answer["ETag"], _total(answer))
            if found != version:
                raise version_changed(self.place(key), version, found)
            wanted = f"bytes {low}-{low + len(buffer) - 1}/"
            if not answer["ContentRange"].startswith(wanted) or answer["ContentLength"] != len(buffer):
                got = f"{answer['ContentRange']}, {answer['ContentLength']} bytes"
                raise Transient("an answer is not the range asked for", where=self.place(key), rule=wanted, got=got)
            done = 0
            while chunk := await body.read(CHUNK_BYTES):
                buffer[done : done + len(chunk)] = chunk
                done += len(chunk)
            if done != len(buffer):
                got = f"{done} bytes"
                raise Transient("an answer ended early", where=self.place(key), rule=f"{len(buffer)} bytes", got=got)


def _info(key: str, etag: str, size: int, modified: datetime) -> ObjectInfo:
    return ObjectInfo(key, _version(etag, size), size, modified.timestamp())


def _version(etag: str, size: int) -> str:
    return f"{etag.strip(QUOTE)}:{size}"


def _etag(version: str) -> str:
    return f"{QUOTE}{version.rpartition(':')[0]}{QUOTE}"


def _size(version: str) -> int:
    return int(version.rpartition(":")[2])


def _total(answer: Any) -> int:
    """Return the size of the whole object that a ranged answer names; 0 where the server ignored the range."""
    total = answer.get("ContentRange", "").rpartition("/")[2]
    return int(total) if total.isdecimal() else 0
