"""A run stopped by SIGTERM or SIGINT says so, ends with 143 or 130, leaves all in order, and the same command goes on.

The moment is a request: a forwarder in front of the S3 server sends the signal when a certain one comes in, so no
clock decides.
"""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import threading
from pathlib import Path
from typing import Any

import pytest
from terminal import KEYS, Answer, Desk, field, good, parquet

from shardfold.store import open_store


class SignalAt:
    """Sends a signal to a process when the first request of a kind comes in; what was asked is answered after that."""

    def __init__(self, proxy: Any, number: signal.Signals, method: str, path: str) -> None:
        self._number, self._method, self._path = number, method, path
        self._lock = threading.Lock()
        self.process: subprocess.Popen[str] | None = None
        self.sent = False
        proxy.before = self

    def __call__(self, method: str, path: str) -> None:
        with self._lock:
            if not self.sent and method == self._method and self._path in path and self.process is not None:
                os.kill(self.process.pid, self._number)
                self.sent = True


def start(desk: Desk, trap: SignalAt, *options: str) -> Answer:
    """Run the command in a process of its own, as a shell does, until the trap ends it."""
    command = [sys.executable, "-m", "shardfold", "run", str(desk.job), *options]
    environment = {**os.environ, "RAY_AUTH_MODE": "disabled"}
    trap.process = subprocess.Popen(
        command, env=environment, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )
    out, err = trap.process.communicate(timeout=120)
    assert trap.sent
    return Answer(trap.process.returncode, out, err)


def on_the_server(tmp_path: Path, folder: Any, proxy: Any, workers: str | int) -> Desk:
    """Write a campaign on the server; the dossier is there too, so that every step is a request."""
    store = open_store(f"{folder.location}/campaign", folder.endpoint)
    for number, key in enumerate(KEYS):
        store.put(key, parquet(good(number)))
    desk = Desk(tmp_path)
    desk.write_job(
        source={"location": f"{folder.location}/campaign", "storage": {"endpoint": proxy.endpoint}},
        dossier={"location": f"{folder.location}/dossier", "storage": {"endpoint": proxy.endpoint}},
        engine={"workers": workers},
    )
    return desk


MOMENTS = {"while reading": ("PUT", "/leaves/01/"), "while publishing": ("PUT", "/mode_table.parquet")}


@pytest.mark.parametrize("moment", MOMENTS)
@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT], ids=["SIGTERM", "SIGINT"])
def test_a_stopped_run_goes_on_with_the_same_command(
    tmp_path: Path, folder: Any, proxy: Any, number: signal.Signals, moment: str
) -> None:
    desk = on_the_server(tmp_path, folder, proxy, "serial")
    answer = start(desk, SignalAt(proxy, number, *MOMENTS[moment]), "--json")
    assert answer.status == 128 + number
    answer.says("shardfold: stopped", "run the same command again", "not read twice")
    assert answer.document["error"]["exit_status"] == 128 + number
    assert_goes_on(desk, folder, proxy)


def test_a_stopped_run_on_ray_ends_in_order_too(tmp_path: Path, folder: Any, proxy: Any) -> None:
    """Ray sets a handler of its own when it starts, and aborts where a task is cancelled that is just done."""
    desk = on_the_server(tmp_path, folder, proxy, 2)
    answer = start(desk, SignalAt(proxy, signal.SIGTERM, *MOMENTS["while reading"]))
    assert answer.status == 128 + signal.SIGTERM
    answer.says("shardfold: stopped", "run the same command again")
    assert "***" not in answer.err, "no dump of the native stack"
    desk.job.write_text(desk.job.read_text().replace('"workers": 2', '"workers": "serial"'))
    assert_goes_on(desk, folder, proxy)


def assert_goes_on(desk: Desk, folder: Any, proxy: Any) -> None:
    """Nothing is published yet and all that is stored is whole; the same command finishes."""
    proxy.before = None
    store = open_store(f"{folder.location}/dossier", folder.endpoint)
    cells = [info.key for info in store.list("leaves/")]
    assert not [info.key for info in store.list("results/") if info.key.endswith("manifest.json")]
    again = desk.run("--quiet", "--json")
    assert again.status == 0
    assert again.document["cells_read"] <= len(KEYS) - len(cells), "what is stored is not read twice"
    assert again.document["quality"]["samples"] == len(field())
    (manifest,) = [info.key for info in store.list("results/") if info.key.endswith("manifest.json")]
    assert again.document["location"].endswith(manifest.removesuffix("manifest.json"))
