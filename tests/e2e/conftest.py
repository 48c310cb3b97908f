"""One Ray of two workers for all end-to-end tests; it takes seconds to start, so nobody starts another."""

from __future__ import annotations

import shutil
import tempfile
from collections.abc import Iterator
from typing import Any

import pytest

WORKERS = 2


@pytest.fixture(scope="session")
def ray_workers(s3: Any) -> Iterator[None]:
    """Run a local Ray whose workers know the S3 server of the session; an executor in this process joins it."""
    # Ray's sockets lie in this folder, and a path to a socket has at most 107 characters.
    folder = tempfile.mkdtemp(prefix="ray-", dir="/tmp")
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("RAY_USAGE_STATS_ENABLED", "0")
        patch.setenv("RAY_AUTH_MODE", "disabled")
        patch.delenv("RAY_ADDRESS", raising=False)
        import ray

        ray.init(
            address="local",
            num_cpus=WORKERS,
            include_dashboard=False,
            object_store_memory=128 * 2**20,
            logging_level="ERROR",
            log_to_driver=False,
            _temp_dir=folder,
        )
        try:
            yield
        finally:
            ray.shutdown()
            shutil.rmtree(folder, ignore_errors=True)
