"""Results on disk: one SQLite database in the data directory, one writer.

Only complete chunks are kept, each in a transaction of its own, as JSON text; what was half done at a crash
has left no trace. Results are found by content hash, so a new solver never reads old numbers. When the byte
budget is used up, the least recently used results go first, except those of jobs that run (pinned). Short
links are kept for ever.
"""

import asyncio
import contextlib
import fcntl
import json
import logging
import os
import queue
import sqlite3
import threading
import time
import zlib
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any, TypeVar

from app.errors import StartError, StoreError

logger = logging.getLogger(__name__)

T = TypeVar("T")

DATABASE = "softmode.sqlite3"
LOCK = "softmode.lock"
SCHEMA_VERSION = 1
IDLE_SECONDS = 3.0
LARGEST_WAL = 64 * 1024 * 1024
# zlib level 1: chunks shrink to a third at no noticeable price
COMPRESSION = 1

NETWORK_FILE_SYSTEMS = frozenset(
    [
        "nfs",
        "nfs4",
        "cifs",
        "smb3",
        "smbfs",
        "smb2",
        "afs",
        "ncpfs",
        "ceph",
        "glusterfs",
        "lustre",
        "beegfs",
        "gpfs",
        "fuse.sshfs",
        "fuse.rclone",
        "fuse.glusterfs",
        "fuse.s3fs",
        "fuse.ceph",
        "davfs",
        "fuse.davfs2",
        "webdav",
    ]
)

_SCHEMA = """
CREATE TABLE IF NOT EXISTS results (
    id TEXT PRIMARY KEY, computation TEXT NOT NULL, used REAL NOT NULL, bytes INTEGER NOT NULL DEFAULT 0,
    pinned INTEGER NOT NULL DEFAULT 0, finished_at TEXT
) STRICT;
CREATE TABLE IF NOT EXISTS chunks (
    id TEXT NOT NULL REFERENCES results (id) ON DELETE CASCADE, number INTEGER NOT NULL,
    points TEXT NOT NULL, body BLOB NOT NULL, seconds REAL NOT NULL, PRIMARY KEY (id, number)
) STRICT;
CREATE TABLE IF NOT EXISTS links (name TEXT PRIMARY KEY, query TEXT NOT NULL, made REAL NOT NULL) STRICT;
CREATE INDEX IF NOT EXISTS results_used ON results (pinned, used);
"""


class StoredChunk:
    """A finished chunk: the points it covers, one row for each, and the processor seconds it took."""

    __slots__ = ("points", "rows", "seconds")

    def __init__(self, points: Sequence[int], rows: list[dict[str, Any]], seconds: float) -> None:
        self.points = tuple(points)
        self.rows = rows
        self.seconds = seconds

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, StoredChunk):
            return NotImplemented
        return (self.points, self.rows, self.seconds) == (other.points, other.rows, other.seconds)

    __hash__ = None  # type: ignore[assignment]


def file_system_of(path: Path, mounts: str) -> str:
    """Return the type of the file system that holds `path`, from the text of /proc/mounts."""
    best, kind = "", ""
    for line in mounts.splitlines():
        fields = line.split(" ")
        if len(fields) < 3:
            continue
        place = fields[1].encode().decode("unicode_escape")
        if (str(path) + "/").startswith(place.rstrip("/") + "/") and len(place) >= len(best):
            best, kind = place, fields[2]
    return kind


def prepare_directory(directory: Path) -> Path:
    """Create the data directory and return its full path; raise StartError when it cannot hold a database."""
    try:
        directory.mkdir(parents=True, exist_ok=True, mode=0o700)
    except OSError as error:
        raise StartError(
            "bad-data-directory", f"the data directory cannot be made: {error}", "data", str(directory), None
        ) from error
    full = directory.resolve()
    mounts = Path("/proc/mounts")
    kind = file_system_of(full, mounts.read_text()) if mounts.exists() else ""
    if kind in NETWORK_FILE_SYSTEMS:
        raise StartError(
            "network-file-system",
            f"{full} is on a network file system ({kind}), on which the store would be damaged; choose a "
            "local directory with --data",
            "data",
            str(full),
            "a directory on a local disk",
        )
    return full


class Store:
    """The results of one data directory. All methods ending in an awaitable work outside the event loop."""

    def __init__(self, directory: Path, budget: int) -> None:
        self.directory = prepare_directory(directory)
        self.budget = budget
        self._lock_file = self._take_lock()
        self.path = self.directory / DATABASE
        self._commands: queue.SimpleQueue[tuple[Callable[[sqlite3.Connection], Any], Any] | None] = (
            queue.SimpleQueue()
        )
        self._reads: queue.SimpleQueue[tuple[Callable[[sqlite3.Connection], Any], Any] | None] = (
            queue.SimpleQueue()
        )
        self._dirty = False
        self._total = 0
        self._prepare()
        self._writer = threading.Thread(
            target=self._work, args=(self._commands, True), name="store-writer", daemon=True
        )
        self._reader = threading.Thread(
            target=self._work, args=(self._reads, False), name="store-reader", daemon=True
        )
        self._writer.start()
        self._reader.start()

    # -- what the engine asks -------------------------------------------------------------------

    async def load(self, name: str) -> dict[int, StoredChunk]:
        """Return the finished chunks of a result by number, and note that it was used."""

        def read(connection: sqlite3.Connection) -> list[tuple[int, str, bytes, float]]:
            return connection.execute(
                "SELECT number, points, body, seconds FROM chunks WHERE id = ? ORDER BY number", (name,)
            ).fetchall()

        found = await self._ask(self._reads, read)
        if found:
            self.touch(name)
        return await asyncio.to_thread(_decode, found)

    async def finished_at(self, name: str) -> str | None:
        """Return the date at which a result was completed."""

        def read(connection: sqlite3.Connection) -> str | None:
            row = connection.execute("SELECT finished_at FROM results WHERE id = ?", (name,)).fetchone()
            return row[0] if row else None

        return await self._ask(self._reads, read)

    def begin(self, name: str, computation: str) -> None:
        """Note that a result is being computed: it is pinned until `end`."""

        def write(connection: sqlite3.Connection) -> None:
            connection.execute(
                "INSERT INTO results (id, computation, used, pinned) VALUES (?, ?, ?, 1) "
                "ON CONFLICT (id) DO UPDATE SET used = excluded.used, pinned = 1",
                (name, computation, time.time()),
            )

        self._tell(write)

    def keep(self, name: str, number: int, chunk: StoredChunk) -> None:
        """Keep a finished chunk of a result that was begun."""

        def write(connection: sqlite3.Connection) -> None:
            body = zlib.compress(
                json.dumps(chunk.rows, separators=(",", ":"), allow_nan=False).encode(), COMPRESSION
            )
            if len(body) > self.budget:
                raise StoreError(
                    "too-large-for-store",
                    f"a chunk of {len(body)} bytes is larger than the whole store; it is not kept",
                    "store_bytes",
                    len(body),
                    self.budget,
                )
            self._make_room(connection, len(body), name)
            done = connection.execute(
                "INSERT OR IGNORE INTO chunks (id, number, points, body, seconds) VALUES (?, ?, ?, ?, ?)",
                (name, number, json.dumps(chunk.points), body, chunk.seconds),
            )
            if done.rowcount:
                connection.execute("UPDATE results SET bytes = bytes + ? WHERE id = ?", (len(body), name))
                self._total += len(body)

        self._tell(write)

    def end(self, name: str, finished_at: str | None) -> None:
        """Unpin a result; `finished_at` is the date when it is complete, None when it is not."""

        def write(connection: sqlite3.Connection) -> None:
            connection.execute(
                "UPDATE results SET pinned = 0, used = ?, finished_at = COALESCE(finished_at, ?) "
                "WHERE id = ?",
                (time.time(), finished_at, name),
            )
            self._make_room(connection, 0, "")

        self._tell(write)

    def touch(self, name: str) -> None:
        """Note that a result was used just now."""
        now = time.time()
        self._tell(
            lambda connection: connection.execute("UPDATE results SET used = ? WHERE id = ?", (now, name))
        )

    async def keep_link(self, name: str, query: str) -> None:
        """Keep a long query under a short name, for ever."""

        def write(connection: sqlite3.Connection) -> None:
            connection.execute(
                "INSERT OR IGNORE INTO links (name, query, made) VALUES (?, ?, ?)", (name, query, time.time())
            )

        await self._ask(self._commands, write)

    async def link(self, name: str) -> str | None:
        """Return the query kept under a short name."""

        def read(connection: sqlite3.Connection) -> str | None:
            row = connection.execute("SELECT query FROM links WHERE name = ?", (name,)).fetchone()
            return row[0] if row else None

        return await self._ask(self._reads, read)

    async def usage(self) -> dict[str, int]:
        """Return how much is stored."""

        def read(connection: sqlite3.Connection) -> dict[str, int]:
            results, size = connection.execute(
                "SELECT count(*), COALESCE(sum(bytes), 0) FROM results"
            ).fetchone()
            links = connection.execute("SELECT count(*) FROM links").fetchone()[0]
            return {"results": results, "bytes": size, "links": links, "budget": self.budget}

        return await self._ask(self._reads, read)

    async def settled(self) -> None:
        """Wait until everything told so far is on disk."""
        await self._ask(self._commands, lambda _: None)

    def close(self) -> None:
        """Finish writing, and let go of the directory."""
        self._commands.put(None)
        self._writer.join(30.0)
        self._reads.put(None)
        self._reader.join(5.0)
        self._lock_file.close()

    # -- how it is done -------------------------------------------------------------------------

    def _take_lock(self) -> Any:
        file = (self.directory / LOCK).open("a+")
        try:
            fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError:
            file.close()
            raise StartError(
                "data-in-use",
                f"another server uses {self.directory}; stop it, or give this one a directory of its own "
                "with --data",
                "data",
                str(self.directory),
                "a directory that no running server uses",
            ) from None
        return file

    def _connect(self) -> sqlite3.Connection:
        connection = sqlite3.connect(self.path, isolation_level=None, timeout=20.0, check_same_thread=False)
        connection.execute("PRAGMA foreign_keys = ON")
        connection.execute("PRAGMA synchronous = NORMAL")
        return connection

    def _prepare(self) -> None:
        """Create the tables, unpin what a crash has left pinned, count the bytes."""
        try:
            with contextlib.closing(self._connect()) as connection:
                connection.execute("PRAGMA journal_mode = WAL")
                version = connection.execute("PRAGMA user_version").fetchone()[0]
                if version > SCHEMA_VERSION:
                    raise StartError(
                        "newer-store",
                        "this data directory was written by a newer version",
                        "data",
                        str(self.path),
                        None,
                    )
                connection.executescript(_SCHEMA)
                connection.execute(f"PRAGMA user_version = {SCHEMA_VERSION}")
                connection.execute("UPDATE results SET pinned = 0")
                connection.execute("DELETE FROM results WHERE bytes = 0")
                self._total = connection.execute("SELECT COALESCE(sum(bytes), 0) FROM results").fetchone()[0]
        except sqlite3.Error as error:
            raise StartError(
                "bad-store", f"{self.path} cannot be opened: {error}", "data", str(self.path)
            ) from error
        self.path.chmod(0o600)

    def _work(self, commands: "queue.SimpleQueue[Any]", writes: bool) -> None:  # noqa: FBT001 - thread target
        """Run commands one by one on a connection of this thread's own; tidy up when there are none."""
        connection = self._connect()
        while True:
            try:
                command = commands.get(timeout=IDLE_SECONDS if writes and self._dirty else None)
            except queue.Empty:
                self._checkpoint(connection, "TRUNCATE")
                self._dirty = False
                continue
            if command is None:
                break
            work, answer = command
            try:
                value = self._in_transaction(connection, work) if writes else work(connection)
            except (sqlite3.Error, StoreError, ValueError) as error:
                answer(None, error)
            else:
                answer(value, None)
        if writes:
            self._checkpoint(connection, "TRUNCATE")
        connection.close()

    def _in_transaction(self, connection: sqlite3.Connection, work: Callable[[sqlite3.Connection], T]) -> T:
        self._dirty = True
        before = self._total
        connection.execute("BEGIN IMMEDIATE")
        try:
            value = work(connection)
            connection.execute("COMMIT")
        except BaseException:
            self._total = before
            with contextlib.suppress(sqlite3.Error):
                connection.execute("ROLLBACK")
            raise
        wal = self.path.with_name(DATABASE + "-wal")
        if wal.exists() and wal.stat().st_size > LARGEST_WAL:
            self._checkpoint(connection, "RESTART")
        return value

    @staticmethod
    def _checkpoint(connection: sqlite3.Connection, mode: str) -> None:
        with contextlib.suppress(sqlite3.OperationalError):
            connection.execute(f"PRAGMA wal_checkpoint({mode})")

    def _make_room(self, connection: sqlite3.Connection, wanted: int, keep: str) -> None:
        """Delete least recently used results that no job needs until `wanted` bytes fit."""
        while self._total + wanted > self.budget:
            row = connection.execute(
                "SELECT id, bytes FROM results WHERE pinned = 0 AND id <> ? AND bytes > 0 "
                "ORDER BY used LIMIT 1",
                (keep,),
            ).fetchone()
            if row is None:
                if not wanted:
                    return
                raise StoreError(
                    "store-full",
                    f"{wanted} bytes do not fit beside the results in use; they are not kept",
                    "store_bytes",
                    wanted,
                    self.budget,
                )
            connection.execute("DELETE FROM results WHERE id = ?", (row[0],))
            self._total -= row[1]

    def _tell(self, work: Callable[[sqlite3.Connection], Any]) -> None:
        """Queue a write that nobody waits for; a failure is logged, results stay in memory."""

        def answer(_value: Any, error: Exception | None) -> None:
            if error is not None:
                logger.error("not stored: %s", error)

        self._commands.put((work, answer))

    async def _ask(self, commands: "queue.SimpleQueue[Any]", work: Callable[[sqlite3.Connection], T]) -> T:
        loop = asyncio.get_running_loop()
        future: asyncio.Future[T] = loop.create_future()

        def settle(value: Any, error: Exception | None) -> None:
            if future.done():
                return
            if error is None:
                future.set_result(value)
            else:
                future.set_exception(StoreError("store-failed", f"the store cannot be read: {error}"))

        def answer(value: Any, error: Exception | None) -> None:
            with contextlib.suppress(RuntimeError):  # the loop may have ended meanwhile
                loop.call_soon_threadsafe(settle, value, error)

        commands.put((work, answer))
        return await future


def _decode(found: Sequence[tuple[int, str, bytes, float]]) -> dict[int, StoredChunk]:
    return {
        number: StoredChunk(json.loads(points), json.loads(zlib.decompress(body)), seconds)
        for number, points, body, seconds in found
    }


def free_bytes(directory: Path) -> int:
    """Return the free space of the disk that holds `directory`."""
    facts = os.statvfs(directory)
    return facts.f_bavail * facts.f_frsize


__all__ = ["Store", "StoredChunk", "file_system_of", "free_bytes", "prepare_directory"]
