"""The demo's stage: a folder or a local S3 server, the Tarnmoor campaign written on it, and its job file.

From there on the demo is a campaign like any other.
"""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from shardfold.errors import InputError
from shardfold.local_s3 import Seaweed
from shardfold.results import Result
from shardfold.store import open_store
from shardfold.tables import mode_names
from shardfold.tarnmoor import Closeness, channel_table, how_close, job_text, write_campaign

CAMPAIGN, DOSSIER = "campaign", "dossier"


@dataclass(frozen=True)
class Scene:
    """Where the demo plays: its job file, and the endpoint of the S3 server if there is one."""

    job: Path
    endpoint: str | None


@contextmanager
def stage(folder: Path, s3: bool) -> Iterator[Scene]:
    """Write the campaign and its job file; with ``s3`` a local server runs until the context ends.

    Raises
    ------
    InputError
        If the folder holds something already.
    """
    if folder.exists() and any(folder.iterdir()):
        raise InputError(
            "the demo's folder is not empty",
            where=str(folder),
            rule="a new or empty folder",
            remedy="name another folder, or remove this one",
        )
    folder.mkdir(parents=True, exist_ok=True)
    if not s3:
        yield _write(folder, str(folder.resolve() / CAMPAIGN), str(folder.resolve() / DOSSIER), None)
        return
    with Seaweed(folder.resolve() / "s3-server") as server:
        os.environ.update(server.environment)
        server.make_bucket("tarnmoor")
        yield _write(folder, f"s3://tarnmoor/{CAMPAIGN}", f"s3://tarnmoor/{DOSSIER}", server.endpoint)


def closeness(result: Result) -> tuple[Closeness, ...]:
    """Return how close the modes of the demo's result are to the beam it was made from."""
    names = mode_names(len(result.mode_table), "mode")
    modes = np.array([result.modes.column(name).to_numpy() for name in names]).T
    hertz = result.mode_table.column("dominant_hz").to_numpy(zero_copy_only=False)
    return how_close(modes, np.asarray(hertz, dtype=np.float64))


def _write(folder: Path, campaign: str, dossier: str, endpoint: str | None) -> Scene:
    write_campaign(open_store(campaign, endpoint))
    (folder / "channels.parquet").write_bytes(channel_table())
    job = folder / "job.yaml"
    job.write_text(job_text(campaign, dossier, endpoint, "channels.parquet"), encoding="utf-8")
    return Scene(job, endpoint)
