"""The store against a plain in-memory one, its budget, its lock, and what a crash leaves."""

import asyncio
import contextlib
import json
import os
import signal
import sqlite3
import subprocess
import sys
import tempfile
import time
import zlib
from collections.abc import Callable, Coroutine, Iterator
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any, TypeVar

import pytest
from hypothesis import settings
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, invariant, rule

from app.database import NETWORK_FILE_SYSTEMS, file_system_of
from app.errors import StartError
from app.store import DATABASE, Store, StoredChunk
from tests.running import ROOT

T = TypeVar("T")
PLENTY = 1 << 30


@pytest.fixture
def opened() -> Iterator[Callable[[Path, int], Store]]:
    """Return a function that opens stores; they are closed after the test, come what may."""
    with contextlib.ExitStack() as stack:
        yield lambda directory, budget: stack.enter_context(contextlib.closing(Store(directory, budget)))


def run(work: Coroutine[Any, Any, T]) -> T:
    # in a thread of its own: browser tests of the same process keep a loop in the main one
    with ThreadPoolExecutor(1) as thread:
        return thread.submit(asyncio.run, work).result()


def chunk(first: int, size: int = 3, filling: str = "") -> StoredChunk:
    rows = [{"answer": {"energy": [0.1 * first, None], "note": filling}, "limit": None} for _ in range(size)]
    return StoredChunk(tuple(range(first, first + size)), rows, 0.125)


class MemoryStore:
    """The same promises, kept in dictionaries; large enough never to evict."""

    def __init__(self) -> None:
        self.chunks: dict[str, dict[int, StoredChunk]] = {}
        self.dates: dict[str, str | None] = {}
        self.links: dict[str, str] = {}

    def begin(self, name: str) -> None:
        self.chunks.setdefault(name, {})
        self.dates.setdefault(name, None)

    def keep(self, name: str, number: int, kept: StoredChunk) -> None:
        if name in self.chunks:
            self.chunks[name].setdefault(number, kept)

    def end(self, name: str, date: str | None) -> None:
        if name in self.dates:
            self.dates[name] = self.dates[name] or date

    def reopen(self) -> None:
        for name in [name for name, kept in self.chunks.items() if not kept]:
            del self.chunks[name], self.dates[name]


NAMES = st.sampled_from(["a" * 64, "b" * 64, "c" * 64])


class StoreAgainstMemory(RuleBasedStateMachine):
    def __init__(self) -> None:
        super().__init__()
        self.directory = tempfile.TemporaryDirectory()
        self.store = Store(Path(self.directory.name), PLENTY)
        self.memory = MemoryStore()

    @rule(name=NAMES)
    def begin(self, name: str) -> None:
        self.store.begin(name, "{}")
        self.memory.begin(name)

    @rule(name=NAMES, number=st.integers(0, 4), filling=st.text(max_size=5))
    def keep(self, name: str, number: int, filling: str) -> None:
        kept = chunk(number * 3, filling=filling)
        if name in self.memory.chunks:
            self.store.keep(name, number, kept)
            self.memory.keep(name, number, kept)

    @rule(name=NAMES, date=st.none() | st.sampled_from(["2026-01-01", "2026-01-02"]))
    def end(self, name: str, date: str | None) -> None:
        self.store.end(name, date)
        self.memory.end(name, date)

    @rule(name=NAMES, query=st.text(max_size=20))
    def link(self, name: str, query: str) -> None:
        run(self.store.keep_link(name[:32], query))
        self.memory.links.setdefault(name[:32], query)

    @rule()
    def reopen(self) -> None:
        self.store.close()
        self.store = Store(Path(self.directory.name), PLENTY)
        self.memory.reopen()

    @invariant()
    def same(self) -> None:
        async def look() -> None:
            await self.store.settled()
            for name in ("a" * 64, "b" * 64, "c" * 64):
                assert await self.store.load(name) == self.memory.chunks.get(name, {})
                assert await self.store.finished_at(name) == self.memory.dates.get(name)
                assert await self.store.link(name[:32]) == self.memory.links.get(name[:32])
            assert (await self.store.usage())["results"] == len(self.memory.chunks)

        run(look())

    def teardown(self) -> None:
        self.store.close()
        self.directory.cleanup()


StoreAgainstMemory.TestCase.settings = settings(max_examples=20, stateful_step_count=15, deadline=None)
TestStoreAgainstMemory = StoreAgainstMemory.TestCase


def noise(first: int) -> StoredChunk:
    """Return a chunk of about 3 kB that does not shrink."""
    return chunk(first, filling=os.urandom(2500).hex())


def test_least_recently_used_results_go_first(tmp_path: Path, opened: Callable[[Path, int], Store]) -> None:
    store = opened(tmp_path, 10_000)

    async def fill() -> None:
        for name in ("old", "used", "pinned"):
            store.begin(name, "{}")
            store.keep(name, 0, noise(0))
            if name != "pinned":
                store.end(name, "2026-01-01")
        await store.keep_link("l" * 32, "title=long")
        await store.settled()
        assert await store.load("old")
        assert await store.load("used")
        for name in ("new", "newer"):
            store.begin(name, "{}")
            store.keep(name, 0, noise(0))
            store.end(name, None)
            await store.settled()
            assert (await store.usage())["bytes"] <= 10_000
        assert not await store.load("old")
        assert not await store.load("used")
        assert await store.load("pinned")
        assert await store.load("newer")
        assert await store.link("l" * 32) == "title=long"

    run(fill())
    store.close()


def test_what_cannot_fit_is_named_and_not_kept(
    tmp_path: Path, opened: Callable[[Path, int], Store], caplog: pytest.LogCaptureFixture
) -> None:
    store = opened(tmp_path, 5_000)

    async def fill() -> None:
        store.begin("pinned", "{}")
        store.keep("pinned", 0, noise(0))
        store.keep("pinned", 1, noise(3))
        store.begin("large", "{}")
        store.keep("large", 0, chunk(0, filling=os.urandom(6000).hex()))
        await store.settled()
        assert list(await store.load("pinned")) == [0]
        assert not await store.load("large")

    run(fill())
    store.close()
    assert "larger than the whole store" in caplog.text
    assert "do not fit beside" in caplog.text


def test_a_failed_write_leaves_nothing_behind(
    tmp_path: Path, opened: Callable[[Path, int], Store], caplog: pytest.LogCaptureFixture
) -> None:
    store = opened(tmp_path, PLENTY)

    async def fill() -> None:
        store.begin("a", "{}")
        store.keep("a", 0, StoredChunk((0,), [{"answer": float("nan")}], 0.1))
        store.keep("never begun", 0, chunk(0))
        await store.settled()
        assert await store.load("a") == {}
        assert await store.load("never begun") == {}

    run(fill())
    store.close()
    assert caplog.text.count("not stored") == 2


def test_killed_while_writing(tmp_path: Path, opened: Callable[[Path, int], Store]) -> None:
    script = (
        "import sys, time; from pathlib import Path\n"
        "from app.store import Store, StoredChunk\n"
        "store = Store(Path(sys.argv[1]), 1 << 30)\n"
        "store.begin('a', '{}')\n"
        "print('ready', flush=True)\n"
        "number = 0\n"
        "while True:\n"
        "    store.keep('a', number, StoredChunk((number,), [{'answer': {'number': number}}], 0.5))\n"
        "    number += 1\n"
        "    time.sleep(0.0005)\n"
    )
    writer = subprocess.Popen([sys.executable, "-c", script, str(tmp_path)], cwd=ROOT, stdout=subprocess.PIPE)
    assert writer.stdout is not None
    writer.stdout.readline()
    database = tmp_path / DATABASE
    deadline = time.monotonic() + 20.0
    while _count(database) < 20 and time.monotonic() < deadline:
        time.sleep(0.01)
    writer.send_signal(signal.SIGKILL)
    writer.wait(10)
    writer.stdout.close()
    store = opened(tmp_path, PLENTY)

    async def look() -> None:
        found = await store.load("a")
        assert found
        assert sorted(found) == list(range(len(found)))
        assert all(kept.rows == [{"answer": {"number": number}}] for number, kept in found.items())

    run(look())
    store.close()
    connection = sqlite3.connect(database)
    assert connection.execute("PRAGMA integrity_check").fetchone() == ("ok",)
    assert connection.execute("SELECT sum(pinned) FROM results").fetchone() == (0,)
    connection.close()


def _count(database: Path) -> int:
    connection = sqlite3.connect(database, timeout=10.0)
    found: int = connection.execute("SELECT count(*) FROM chunks").fetchone()[0]
    connection.close()
    return found


def test_bodies_are_plain_data(tmp_path: Path) -> None:
    store = Store(tmp_path, PLENTY)
    store.begin("a", "{}")
    store.keep("a", 0, chunk(0))
    store.close()
    connection = sqlite3.connect(tmp_path / DATABASE)
    body = connection.execute("SELECT body FROM chunks").fetchone()[0]
    connection.close()
    assert json.loads(zlib.decompress(body)) == chunk(0).rows
    assert (tmp_path / DATABASE).stat().st_mode & 0o077 == 0


def test_one_server_for_a_directory(tmp_path: Path) -> None:
    store = Store(tmp_path, PLENTY)
    with pytest.raises(StartError, match="another server"):
        Store(tmp_path, PLENTY)
    store.close()
    Store(tmp_path, PLENTY).close()


def test_network_file_systems_are_recognised() -> None:
    mounts = (
        "/dev/sda1 / ext4 rw 0 0\n"
        "server:/home /home nfs4 rw 0 0\n"
        "//nas/lab /mnt/lab\\040data cifs rw 0 0\n"
        "me@host: /home/me/far fuse.sshfs rw 0 0\n"
        "tmpfs /home/me/near tmpfs rw 0 0\n"
    )
    assert file_system_of(Path("/home/me/softmode"), mounts) == "nfs4"
    assert file_system_of(Path("/home/me/far/x"), mounts) == "fuse.sshfs"
    assert file_system_of(Path("/mnt/lab data/x"), mounts) == "cifs"
    assert file_system_of(Path("/home/me/near"), mounts) == "tmpfs"
    assert file_system_of(Path("/homework"), mounts) == "ext4"
    assert {"nfs4", "fuse.sshfs", "cifs"} <= NETWORK_FILE_SYSTEMS


def test_a_newer_or_broken_store_is_refused(tmp_path: Path) -> None:
    (tmp_path / "broken").mkdir()
    (tmp_path / "broken" / DATABASE).write_bytes(b"not a database at all" * 100)
    with pytest.raises(StartError, match="cannot be opened"):
        Store(tmp_path / "broken", PLENTY)
    Store(tmp_path / "newer", PLENTY).close()
    connection = sqlite3.connect(tmp_path / "newer" / DATABASE)
    connection.execute("PRAGMA user_version = 99")
    connection.close()
    with pytest.raises(StartError, match="newer version"):
        Store(tmp_path / "newer", PLENTY)
