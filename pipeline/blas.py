"""The linear algebra library underneath: which kernel it runs, and one thread per task.

The bits of a product depend on the kernel and on the number of threads, so both are facts that a dossier stores.
The only importer of threadpoolctl.
"""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager
from functools import cache

import numpy as np
import scipy.linalg
from threadpoolctl import ThreadpoolController

from shardfold.errors import ClusterFailed

CORE_VARIABLE = "OPENBLAS_CORETYPE"


LINKED = (np, scipy.linalg)
"""Whose libraries are meant: each comes with one of its own, and both are loaded once these are imported."""


@cache
def _libraries() -> ThreadpoolController:
    """Return the libraries of this process; looking for them takes milliseconds, so it is done once."""
    return ThreadpoolController()


@cache
def core_type() -> str:
    """Return the names of the BLAS kernels of this process, such as ``Haswell``; more than one is joined by ``+``."""
    found = _libraries().info()
    names = {str(i.get("architecture") or i["internal_api"]) for i in found if i["user_api"] == "blas"}
    return "+".join(sorted(names)) or "unknown"


@contextmanager
def one_thread() -> Iterator[None]:
    """Let BLAS use one thread within the context, so that sums have one order."""
    with _libraries().limit(limits=1, user_api="blas"):
        yield


def check_core(pinned: str) -> None:
    """Check that this process runs the kernel that the design pins.

    Raises
    ------
    ClusterFailed
        If it runs another one.
    """
    running = core_type()
    if pinned not in ("any", running):
        raise ClusterFailed(
            "this process runs another BLAS kernel than the design pins",
            where=f"process {os.getpid()}",
            rule=f"design.blas: {pinned}",
            got=running,
            remedy=f"start with {CORE_VARIABLE}={pinned} in the environment of every node",
        )
