"""What every store promises, held by one suite for the local file system and a real S3 server.

Read-only storages keep the reading half of it. Faults are in test_store_faults.py.
"""

from __future__ import annotations

import os
import pickle
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from pathlib import Path

import fsspec
import pytest
from conftest import Bucket
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from shardfold import store_promises, store_s3
from shardfold.errors import InputError, NothingToRead, RecordCorrupt, VersionChanged
from shardfold.store import Counting, Created, StoreSettings, connect, inside, open_store, same_place

ODD_KEYS = ["a b/c+d.bin", "per%20cent/50%.bin", "what?/is#this&.bin", "ünïcode/文.bin", ".hidden/x", "a~(b)!'*.bin"]


@pytest.fixture(params=["local", "s3"])
def place(request: pytest.FixtureRequest, tmp_path: Path) -> StoreSettings:
    """Settings of an empty place, local or S3, below a folder that holds something else."""
    if request.param == "local":
        (tmp_path / "root").mkdir()
        return StoreSettings(str(tmp_path / "root"))
    folder = request.getfixturevalue("folder")
    return StoreSettings(f"{folder.location}/root", folder.endpoint)


@pytest.fixture
def missing(place: StoreSettings) -> StoreSettings:
    """Settings of a folder or bucket that is not there."""
    return replace(place, location="s3://no-such-bucket/root" if place.endpoint else f"{place.location}/none")


@pytest.fixture
def store(place: StoreSettings) -> Counting:
    return open_store(place.location, place.endpoint)


@pytest.fixture
def small_cuts(monkeypatch: pytest.MonkeyPatch) -> int:
    """Cut reads into ranges so short that a small object takes many, in parallel."""
    monkeypatch.setattr(store_promises, "CUT_BYTES", 100)
    return 100


def test_what_is_put_is_listed_described_and_read(store: Counting) -> None:
    store.put("a/b.bin", b"first")
    (listed,) = store.list()
    assert (listed.key, listed.size) == ("a/b.bin", 5)
    assert store.head("a/b.bin") == listed
    assert bytes(store.read("a/b.bin")) == b"first"
    assert bytes(store.read("a/b.bin", version=listed.version)) == b"first"
    assert listed.modified > 1.5e9


@pytest.mark.parametrize("kind", [bytes, bytearray, memoryview])
def test_every_kind_of_bytes_is_taken(store: Counting, kind: Callable[[bytes], bytes]) -> None:
    store.put("put", kind(b"data"))
    assert store.create("created", kind(b"data")) is Created.LANDED
    assert bytes(store.read("put")) == bytes(store.read("created")) == b"data"


def test_a_read_is_immutable_and_flat(store: Counting) -> None:
    store.put("k", b"data")
    data = store.read("k")
    assert (data.readonly, data.format, data.ndim, data.nbytes) == (True, "B", 1, 4)


def test_nothing_there_is_said(store: Counting) -> None:
    assert list(store.list()) == []
    assert store.head("none") is None
    with pytest.raises(NothingToRead, match="none"):
        store.read("none")
    with pytest.raises(VersionChanged, match="removed"):
        store.read("none", version="abc:5")
    store.delete("none")


def test_an_empty_object_is_an_object(store: Counting) -> None:
    store.put("empty", b"")
    info = store.head("empty")
    assert info is not None
    assert info.size == 0
    assert bytes(store.read("empty")) == bytes(store.read("empty", version=info.version)) == b""
    assert bytes(store.read("empty", start=0, stop=0)) == b""


@pytest.mark.usefixtures("small_cuts")
@settings(deadline=None, max_examples=40, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.integers(0, 1234), st.integers(0, 1234) | st.none(), st.booleans())
def test_any_range_is_exactly_those_bytes(store: Counting, start: int, stop: int | None, pinned: bool) -> None:
    data = bytes(i * i % 251 for i in range(1234))
    info = store.head("ranged")
    if info is None:
        store.put("ranged", data)
        info = store.head("ranged")
    if stop is not None and stop < start:
        start, stop = stop, start
    version = info.version if pinned and info is not None else None
    assert bytes(store.read("ranged", version=version, start=start, stop=stop)) == data[start:stop]


@pytest.mark.parametrize("start", [0, 3, 6])
@pytest.mark.parametrize("pinned", [True, False])
def test_a_range_beyond_the_end_is_an_error_not_fewer_bytes(store: Counting, pinned: bool, start: int) -> None:
    store.put("k", b"12345")
    info = store.head("k")
    version = info.version if pinned and info is not None else None
    with pytest.raises(RecordCorrupt, match="at least"):
        store.read("k", version=version, start=start, stop=7)
    with pytest.raises(RecordCorrupt, match="at least 6 bytes"):
        store.read("k", version=version, start=6)
    with pytest.raises(ValueError, match="start"):
        store.read("k", version=version, start=-1)


def test_a_create_lands_once(store: Counting) -> None:
    assert store.create("k", b"mine") is Created.LANDED
    before = store.head("k")
    assert store.create("k", b"theirs") is Created.EXISTED
    assert store.create("k", b"mine") is Created.EXISTED
    assert bytes(store.read("k")) == b"mine"
    assert store.head("k") == before


def test_of_many_creates_one_lands(store: Counting) -> None:
    bodies = [bytes([i]) * 3000 for i in range(4)]
    with ThreadPoolExecutor(len(bodies)) as pool:
        outcomes = list(pool.map(lambda body: store.create("contended/k", body), bodies))
    assert sorted(outcome.value for outcome in outcomes) == ["existed"] * 3 + ["landed"]
    assert bytes(store.read("contended/k")) == bodies[outcomes.index(Created.LANDED)]


def test_a_reader_never_sees_half_a_replacement(store: Counting) -> None:
    bodies = [bytes([i]) * (50_000 + i) for i in range(6)]
    store.put("k", bodies[0])
    with ThreadPoolExecutor(2) as pool:
        writing = pool.submit(lambda: [store.put("k", body) for body in bodies])
        seen = []
        while not writing.done():
            try:
                seen.append(bytes(store.read("k")))
            except VersionChanged:
                continue
        writing.result()
    assert all(data in bodies for data in seen)


def test_a_replaced_object_is_another_version(store: Counting) -> None:
    store.put("k", b"one")
    old = store.head("k")
    assert old is not None
    store.put("k", b"three")
    new = store.head("k")
    assert new is not None
    assert new.version != old.version
    assert bytes(store.read("k", version=new.version)) == b"three"
    with pytest.raises(VersionChanged, match="replaced"):
        store.read("k", version=old.version)
    with pytest.raises(VersionChanged, match="replaced"):
        store.read("k", version=old.version, start=1, stop=1)
    store.delete("k")
    with pytest.raises(VersionChanged, match="removed"):
        store.read("k", version=new.version)
    assert store.head("k") is None


def test_a_listing_holds_what_begins_with_its_prefix_and_nothing_else(place: StoreSettings, store: Counting) -> None:
    keys = ["a", "ab", "a.d/e", "b/c", "b/c.d/e", "bc"] if place.endpoint is None else ["ab", "b/c.d/e", "bc"]
    for key in keys:
        store.put(key, b"x")
    if place.endpoint is not None:
        open_store(f"{place.location}-neighbour", place.endpoint).put("a", b"x")
    for prefix in ("", "a", "b/", "b/c", "b/c.d/", "none/"):
        assert sorted(info.key for info in store.list(prefix)) == sorted(k for k in keys if k.startswith(prefix))


def test_a_listing_of_many_pages_is_whole(store: Counting, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(store_s3, "PAGE_KEYS", 3)
    keys = [f"{folder}/{i:02d}" for folder in ("x", "y") for i in range(7)]
    for key in keys:
        store.put(key, b"x")
    assert sorted(info.key for info in store.list()) == keys


@pytest.mark.parametrize("key", ODD_KEYS)
def test_odd_keys_are_kept_as_they_are(store: Counting, key: str) -> None:
    store.put(key, b"odd")
    assert store.create(key, b"other") is Created.EXISTED
    (info,) = store.list()
    assert info == store.head(key)
    assert info.key == key
    assert bytes(store.read(key, version=info.version)) == b"odd"
    store.delete(key)
    assert list(store.list()) == []


@pytest.mark.parametrize("key", ["", "/a", "a/", "a//b", "../a", "a/./b"])
def test_keys_that_stores_take_for_others_are_never_written(store: Counting, key: str) -> None:
    for write in (lambda: store.put(key, b"x"), lambda: store.create(key, b"x"), lambda: store.delete(key)):
        with pytest.raises(ValueError, match="key"):
            write()
    assert list(store.list()) == []


def test_a_writable_store_proves_it_and_leaves_nothing(store: Counting) -> None:
    assert store.writable
    store.check_writable()
    assert list(store.list()) == []
    before = store.snapshot()
    store.check_writable()
    assert store.snapshot() == before


def test_a_missing_root_is_said(missing: StoreSettings) -> None:
    store = open_store(missing.location, missing.endpoint)
    with pytest.raises(NothingToRead, match="no such"):
        list(store.list())
    with pytest.raises(NothingToRead, match="no such"):
        store.read("k")


def test_a_missing_bucket_is_never_made(folder: Bucket) -> None:
    for write in ("put", "create", "check_writable"):
        store = open_store("s3://no-such-bucket/root", folder.endpoint)
        with pytest.raises(NothingToRead, match="no such bucket"):
            getattr(store, write)(*(() if write == "check_writable" else ("k", b"x")))
    with pytest.raises(NothingToRead, match="no such bucket"):
        store.head("k")


def test_a_missing_local_folder_is_made_by_the_first_object(tmp_path: Path) -> None:
    open_store(str(tmp_path / "new" / "root")).check_writable()
    assert list(open_store(str(tmp_path / "new" / "root")).list()) == []


def test_counts_are_what_went_through(store: Counting, small_cuts: int) -> None:
    store.put("k", bytes(250))
    store.create("c", b"123")
    store.create("c", b"1234")
    store.read("k")
    store.read("k", start=10, stop=20)
    list(store.list())
    store.head("k")
    counts = store.snapshot()
    assert (counts.reads, counts.requests, counts.bytes_read) == (2, 4, 260)
    assert (counts.puts, counts.creates, counts.existed, counts.bytes_written) == (1, 1, 1, 253)
    assert (counts.lists, counts.heads, counts.retries) == (1, 1, 0)
    assert (store.snapshot() - counts).reads == 0


def test_settings_travel_and_stores_are_opened_once_per_process(place: StoreSettings) -> None:
    copy = pickle.loads(pickle.dumps(place))  # noqa: S301
    assert copy == place
    assert connect(copy) is connect(place)
    connect(place).put("k", b"x")
    assert bytes(open_store(place.location + "/", place.endpoint).read("k")) == b"x"


def test_local_temporary_files_are_never_listed_and_never_left(tmp_path: Path) -> None:
    store = open_store(str(tmp_path))
    (tmp_path / ".shardfold-0123").write_bytes(b"half")
    store.create("k", b"x")
    store.create("k", b"y")
    store.put("k", b"z")
    assert [info.key for info in store.list()] == ["k"]
    assert sorted(path.name for path in tmp_path.iterdir()) == [".shardfold-0123", "k"]


def test_a_local_folder_linked_into_itself_is_listed_once(tmp_path: Path) -> None:
    (tmp_path / "d").mkdir()
    (tmp_path / "d" / "k").write_bytes(b"x")
    (tmp_path / "d" / "loop").symlink_to(tmp_path)
    (tmp_path / "linked").symlink_to(tmp_path / "d")
    (tmp_path / "dangling").symlink_to(tmp_path / "none")
    keys = [info.key for info in open_store(str(tmp_path)).list()]
    assert "d/k" in keys
    assert "linked/k" in keys
    assert len(keys) == len(set(keys)) <= 4


@pytest.mark.parametrize("scheme", ["file://", "FILE://", "file://localhost"])
def test_a_file_url_is_a_local_folder(tmp_path: Path, scheme: str) -> None:
    (tmp_path / "k").write_bytes(b"x")
    assert bytes(open_store(f"{scheme}{tmp_path}").read("k")) == b"x"


def test_other_storages_are_read_but_never_written() -> None:
    files = fsspec.filesystem("memory")
    files.pipe_file("/camp/a/k", b"12345")
    files.pipe_file("/camp-2/k", b"x")
    store = open_store("memory://camp/")
    (info,) = store.list()
    assert (info.key, info.size, store.head("a/k")) == ("a/k", 5, info)
    assert info.modified > 1.5e9
    assert bytes(store.read("a/k", version=info.version, start=1, stop=3)) == b"23"
    assert bytes(store.read("a/k")) == b"12345"
    files.pipe_file("/camp/a/k", b"54321")
    with pytest.raises(VersionChanged, match="replaced"):
        store.read("a/k", version=info.version)
    with pytest.raises(RecordCorrupt):
        store.read("a/k", stop=6)
    with pytest.raises(NothingToRead):
        list(open_store("memory://nowhere").list())
    assert not store.writable
    for write in (store.check_writable, lambda: store.put("k", b""), lambda: store.create("k", b"")):
        with pytest.raises(InputError, match="only read"):
            write()


@pytest.mark.parametrize(
    ("a", "b", "within", "same"),
    [
        ("s3://b/x", "s3://b/x/", True, True),
        ("s3://b/x/y", "s3://b/x", True, False),
        ("s3://b/xy", "s3://b/x", False, False),
        ("s3://b/x", "s3://c/x", False, False),
        ("s3://b/x", "s3://b", True, False),
        ("/data/x/../y", "file:///data/y", True, True),
        ("/data/y/z", "/data/y", True, False),
        ("/b/x", "s3://b/x", False, False),
        ("gs://b/x", "s3://b/x", False, False),
    ],
)
def test_places_are_compared_by_what_they_name(a: str, b: str, within: bool, same: bool) -> None:
    assert inside(StoreSettings(a), StoreSettings(b)) is within
    assert same_place(StoreSettings(a), StoreSettings(b)) is same
    assert not inside(
        StoreSettings("s3://b/x", endpoint="http://h:1"), StoreSettings("s3://b/x", endpoint="http://h:2")
    )


@pytest.mark.skipif(not hasattr(os, "fork"), reason="no fork here")
def test_a_forked_process_opens_its_own_store(place: StoreSettings) -> None:
    connect(place).put("k", b"from the parent")
    child = os.fork()
    if child == 0:
        os._exit(0 if bytes(connect(place).read("k")) == b"from the parent" else 1)
    assert os.waitstatus_to_exitcode(os.waitpid(child, 0)[1]) == 0
    assert bytes(connect(place).read("k")) == b"from the parent"
