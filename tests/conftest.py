"""Fixtures that more than one test folder needs: one real S3 server per session, one fresh bucket per test."""

from __future__ import annotations

import os
import re
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from uuid import uuid4

import pytest

# Tests are imported by path (--import-mode=importlib); the two helpers beside this file are modules of their own.
sys.path.insert(0, str(Path(__file__).parent))

from sniffing_proxy import SniffingProxy

from shardfold.local_s3 import Seaweed


@dataclass(frozen=True)
class Bucket:
    """A fresh, empty bucket, or an empty folder of a bucket, of the session's server."""

    location: str
    endpoint: str


@pytest.fixture(scope="session")
def s3() -> Iterator[Seaweed]:
    """Run one S3 server, its keys in this process's environment until the session ends."""
    with Seaweed() as server, pytest.MonkeyPatch.context() as patch:
        for name in [name for name in os.environ if name.startswith("AWS_")]:
            patch.delenv(name)
        for name, value in server.environment.items():
            patch.setenv(name, value)
        yield server


@pytest.fixture
def bucket(s3: Seaweed, request: pytest.FixtureRequest) -> Iterator[Bucket]:
    """Make a bucket whose name begins with the test's, and delete it afterwards; costs about a second."""
    stem = re.sub(r"[^a-z0-9]+", "-", request.node.name.lower()).strip("-")[:40]
    name = f"{stem}-{uuid4().hex[:12]}"
    s3.make_bucket(name)
    yield Bucket(f"s3://{name}", s3.endpoint)
    s3.delete_bucket(name)


@pytest.fixture(scope="session")
def shared_bucket(s3: Seaweed) -> str:
    """Make one bucket for all tests that need no more than a folder of it."""
    s3.make_bucket("shared")
    return "shared"


@pytest.fixture
def folder(s3: Seaweed, shared_bucket: str) -> Bucket:
    """Name an empty folder of the shared bucket, at no cost."""
    return Bucket(f"s3://{shared_bucket}/{uuid4().hex[:12]}", s3.endpoint)


@pytest.fixture
def proxy(s3: Seaweed) -> Iterator[SniffingProxy]:
    """Run a forwarder in front of the S3 server that counts requests and can spoil answers."""
    with SniffingProxy(s3.endpoint) as forwarder:
        yield forwarder
