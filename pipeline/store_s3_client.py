"""How the S3 client is made: session, credential chain, time limits, and retries switched off.

Session, credentials and event loop are those of s3fs; requests go to its asynchronous client directly, since the
file-like calls of s3fs translate answers, try again on their own and drop arguments that they do not know. botocore
is told not to try again either: `store_retries.Retrying` alone decides on that.
"""

from __future__ import annotations

from functools import lru_cache
from typing import Any
from urllib.parse import urlsplit

import botocore.loaders
import s3fs.core

from shardfold.store_promises import StoreSettings

CONFIG = {
    "connect_timeout": 5,
    "read_timeout": 30,
    "max_pool_connections": 64,
    "retries": {"total_max_attempts": 1, "mode": "standard"},
}


def file_system(settings: StoreSettings) -> Any:
    """Return an s3fs file system of its own for some settings; it connects at the first request."""
    return s3fs.core.S3FileSystem(
        anon=settings.anonymous,
        endpoint_url=settings.endpoint,
        client_kwargs={"region_name": settings.region} if settings.region else {},
        config_kwargs=CONFIG,
        session=_session(),
        skip_instance_cache=True,
        use_listings_cache=False,
    )


def without_user(url: str) -> str:
    """Return an address without the user and password that it may hold, for messages."""
    parts = urlsplit(url)
    return parts._replace(netloc=parts.netloc.rpartition("@")[2]).geturl()


def _session() -> Any:
    """Return a session that looks for credentials afresh, but reads the description of S3 (0.3 s) once per process."""
    session = s3fs.core.aiobotocore.session.AioSession()
    session.register_component("data_loader", _loader())
    return session


@lru_cache(maxsize=1)
def _loader() -> Any:
    return botocore.loaders.create_loader()
