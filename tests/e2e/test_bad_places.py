"""Places that are missing, empty, closed or silent: one clear message each, the right exit status, quickly.

The S3 server is real. Requests are counted by a forwarder in front of it, so "no second try" is seen from outside.
"""

from __future__ import annotations

import errno
import os
import socket
from pathlib import Path
from typing import Any

import pytest
from terminal import KEYS, Answer, Desk, field, good, parquet

from shardfold import store_local
from shardfold.store import open_store

WRONG_SECRET = "a-secret-that-is-wrong"


@pytest.fixture
def desk(tmp_path: Path) -> Desk:
    return Desk(tmp_path)


def on_s3(desk: Desk, campaign: str, dossier: str, endpoint: str, dossier_endpoint: str | None = None) -> Desk:
    """Write a job whose places are on S3."""
    desk.write_job(
        source={"location": campaign, "storage": {"endpoint": endpoint}},
        dossier={"location": dossier, "storage": {"endpoint": dossier_endpoint or endpoint}},
    )
    return desk


def upload(folder: Any) -> None:
    """Put the four shards into a folder of the server."""
    store = open_store(folder.location, folder.endpoint)
    for number, key in enumerate(KEYS):
        store.put(f"campaign/{key}", parquet(good(number)))


def free_port() -> int:
    """Return a port on which nobody listens."""
    with socket.create_server(("127.0.0.1", 0)) as probe:
        port: int = probe.getsockname()[1]
    return port


def assert_ends(answer: Answer, status: int, *words: str) -> None:
    assert answer.status == status
    answer.says(*words)
    assert answer.out == ""


def test_a_missing_bucket_of_the_campaign(desk: Desk, folder: Any) -> None:
    on_s3(desk, "s3://no-such-bucket/a", f"{folder.location}/dossier", folder.endpoint)
    assert_ends(desk.run(), 2, "s3://no-such-bucket/a", folder.endpoint, "there is no such bucket", "remedy: ")
    assert not list(open_store(folder.location, folder.endpoint).list())


def test_a_missing_bucket_for_the_dossier_is_not_made(desk: Desk, folder: Any) -> None:
    """Some servers, this one too, would make a bucket of any name at the first write into it."""
    upload(folder)
    on_s3(desk, f"{folder.location}/campaign", "s3://no-such-bucket/d", folder.endpoint)
    for _ in range(2):
        assert_ends(desk.run(), 2, "s3://no-such-bucket/d", "there is no such bucket", "remedy: ")


def test_a_missing_folder_of_the_campaign(desk: Desk) -> None:
    desk.campaign.rmdir()
    assert_ends(desk.run(), 2, str(desk.campaign), "there is no such folder", "remedy: ")
    assert not desk.dossier.exists()


@pytest.mark.parametrize("others", [(), ("notes.txt", "old/part.csv")], ids=["empty", "other names"])
def test_an_empty_match(desk: Desk, others: tuple[str, ...]) -> None:
    for name in others:
        (desk.campaign / name).parent.mkdir(exist_ok=True)
        desk.write(name, b"x")
    there = ", ".join(others) if others else "an empty location"
    assert_ends(desk.run(), 2, str(desk.campaign), "nothing matches", "**/*.parquet", there, "source.match")
    assert not desk.dossier.exists()


def test_an_empty_match_on_s3(desk: Desk, folder: Any) -> None:
    on_s3(desk, f"{folder.location}/nothing", f"{folder.location}/dossier", folder.endpoint)
    assert_ends(desk.run(), 2, f"{folder.location}/nothing/ at {folder.endpoint}", "nothing matches")


@pytest.mark.parametrize("name", ["AWS_SECRET_ACCESS_KEY", "AWS_ACCESS_KEY_ID"])
def test_wrong_credentials_are_told_at_once(
    desk: Desk, folder: Any, proxy: Any, monkeypatch: pytest.MonkeyPatch, name: str
) -> None:
    upload(folder)
    secrets = os.environ["AWS_SECRET_ACCESS_KEY"], os.environ["AWS_ACCESS_KEY_ID"]
    monkeypatch.setenv(name, WRONG_SECRET)
    on_s3(desk, f"{folder.location}/campaign", f"{folder.location}/dossier", proxy.endpoint)
    answer = desk.run()
    assert_ends(answer, 4, "the service denies access", proxy.endpoint, "AWS_ACCESS_KEY_ID", "AWS_PROFILE")
    assert sum(proxy.counts().values()) == 1, "denied once is denied"
    assert not [word for word in (*secrets, WRONG_SECRET) if word in answer.err]
    monkeypatch.undo()
    on_s3(desk, f"{folder.location}/campaign", f"{folder.location}/dossier", folder.endpoint)
    assert desk.run().status == 0


def test_no_credentials_at_all(desk: Desk, folder: Any, proxy: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.delenv("AWS_SECRET_ACCESS_KEY")
    monkeypatch.delenv("AWS_ACCESS_KEY_ID")
    on_s3(desk, f"{folder.location}/campaign", f"{folder.location}/dossier", proxy.endpoint)
    assert_ends(desk.run(), 4, "no usable credentials", "AWS_ACCESS_KEY_ID", "storage.anonymous")
    assert proxy.counts() == {}


@pytest.mark.parametrize("who", ["campaign", "dossier"])
def test_no_endpoint_answers(desk: Desk, folder: Any, who: str) -> None:
    dead = f"http://127.0.0.1:{free_port()}"
    ends = (dead, folder.endpoint) if who == "campaign" else (folder.endpoint, dead)
    on_s3(desk, f"{folder.location}/campaign", f"{folder.location}/dossier", *ends)
    assert_ends(desk.run(), 4, f"{folder.location}/", f"at {dead}", "did not answer", "4 tries", "remedy: check")


def test_a_service_that_fails_in_the_middle_loses_nothing(desk: Desk, folder: Any, proxy: Any) -> None:
    """It answers again later; what was stored before is not read twice."""
    upload(folder)
    dossier = f"{folder.location}/dossier"
    on_s3(desk, f"{folder.location}/campaign", dossier, folder.endpoint, proxy.endpoint)
    proxy.fail("PUT", "/ledger/", "status", times=50, status=400, code="InvalidRequest")
    answer = desk.run("--quiet")
    assert_ends(answer, 4, f"{dossier}/ledger/000000000001.json", "HTTP 400 InvalidRequest")
    proxy.forget()
    again = desk.run("--quiet", "--json")
    assert (again.status, again.document["cells_read"]) == (0, 0)
    assert again.document["quality"]["samples"] == len(field())


def test_a_dossier_that_cannot_be_written(desk: Desk, monkeypatch: pytest.MonkeyPatch) -> None:
    """Root may write everywhere, so the refusal is the operating system's word and not its deed."""

    def refuse(path: Path, data: Any) -> None:
        raise PermissionError(errno.EACCES, os.strerror(errno.EACCES), str(path))

    desk.write_all()
    with monkeypatch.context() as patch:
        patch.setattr(store_local, "_write_through", refuse)
        answer = desk.run("--quiet")
    assert_ends(answer, 4, str(desk.dossier), "the file system refuses", "EACCES", "mend the permissions")
    assert desk.run().status == 0


def test_a_dossier_below_a_file(desk: Desk) -> None:
    desk.write_all()
    desk.dossier.write_text("a file, not a folder")
    assert_ends(desk.run("--quiet"), 4, str(desk.dossier), "EEXIST", "a file is where a folder should be")
