"""Results on disk, in one SQLite database in the data directory.

Only complete chunks are kept, each in a transaction of its own, as JSON text; what was half done at a crash
has left no trace. Results are found by content hash, so a new solver never reads old numbers. When the byte
budget is used up, the least recently used results go first, except those of jobs that run and those that
somebody pinned. Short links are kept for ever.
"""

import asyncio
import contextlib
import json
import logging
import sqlite3
import tempfile
import time
import zlib
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Self

from app import links
from app.database import Database, Schema, prepare_directory, take_lock
from app.errors import StartError, StoreError
from app.identity import versions

logger = logging.getLogger(__name__)

DATABASE = "softmode.sqlite3"
LOCK = "softmode.lock"
SCHEMA_VERSION = 2
# zlib level 1: chunks shrink to a third at no noticeable price
COMPRESSION = 1

# `running` is set while a job computes a result, `pinned` by people; `solver` is the digest it came from
_TABLES = """
CREATE TABLE results (
    id TEXT PRIMARY KEY, computation TEXT NOT NULL, used REAL NOT NULL, bytes INTEGER NOT NULL DEFAULT 0,
    running INTEGER NOT NULL DEFAULT 0, finished_at TEXT, pinned INTEGER NOT NULL DEFAULT 0, solver TEXT
) STRICT;
CREATE TABLE chunks (
    id TEXT NOT NULL REFERENCES results (id) ON DELETE CASCADE, number INTEGER NOT NULL,
    points TEXT NOT NULL, body BLOB NOT NULL, seconds REAL NOT NULL, PRIMARY KEY (id, number)
) STRICT;
CREATE TABLE links (name TEXT PRIMARY KEY, query TEXT NOT NULL, made REAL NOT NULL) STRICT;
CREATE INDEX results_used ON results (pinned, running, used);
"""
_FROM_1 = """
DROP INDEX IF EXISTS results_used;
ALTER TABLE results RENAME COLUMN pinned TO running;
ALTER TABLE results ADD COLUMN pinned INTEGER NOT NULL DEFAULT 0;
ALTER TABLE results ADD COLUMN solver TEXT;
CREATE INDEX results_used ON results (pinned, running, used);
"""
SCHEMA = Schema(_TABLES, SCHEMA_VERSION, {1: _FROM_1})
# what a crash has left running or empty
_CLEAN = "UPDATE results SET running = 0; DELETE FROM results WHERE bytes = 0 AND pinned = 0;"

# a server computes without its data directory when these are why it cannot be used
BEARABLE = frozenset({"bad-store", "bad-data-directory"})


@dataclass(frozen=True)
class StoredChunk:
    """A finished chunk: the points it covers, one row for each, and the processor seconds it took."""

    points: tuple[int, ...]
    rows: list[dict[str, Any]]
    seconds: float


class Store:
    """The results of one data directory. Awaitables and plain methods alike leave the work to other threads.

    `stored` counts the chunks that went to disk. Raises StartError when the directory is on a network file
    system, in use, or cannot be written to.
    """

    def __init__(self, directory: Path, budget: int) -> None:
        self.directory = prepare_directory(directory)
        self.budget = budget
        self.stored = 0
        self._computations: dict[str, str] = {}
        # what went wrong with a result last, until one is kept again
        self._trouble: str | None = None
        self._lost: str | None = None
        self._passing: tempfile.TemporaryDirectory[str] | None = None
        self._lock = take_lock(self.directory / LOCK)
        try:
            self._database = Database(self.directory / DATABASE, SCHEMA, _CLEAN)
        except StartError:
            self._lock.close()
            raise

    @classmethod
    def passing(cls, budget: int, reason: str) -> Self:
        """Return a store that is thrown away when it is closed, in place of one that cannot be used."""
        directory = tempfile.TemporaryDirectory(prefix="softmode-", ignore_cleanup_errors=True)
        store = cls(Path(directory.name), budget)
        store._passing, store._lost = directory, reason
        return store

    @property
    def is_passing(self) -> bool:
        """Whether everything is forgotten when the server stops."""
        return self._passing is not None

    @property
    def trouble(self) -> str | None:
        """Say what is wrong with the store, None when nothing is."""
        if self._lost is not None:
            return f"Results are kept only until the server stops: {self._lost}"
        if self._trouble is not None:
            return f"New results are not being kept: {self._trouble}"
        return None

    async def load(self, name: str) -> dict[int, StoredChunk]:
        """Return the finished chunks of a result by number, and note that it was used.

        What cannot be read counts as never computed.
        """

        def read(connection: sqlite3.Connection) -> list[tuple[int, str, bytes, float]]:
            return connection.execute(
                "SELECT number, points, body, seconds FROM chunks WHERE id = ? ORDER BY number", (name,)
            ).fetchall()

        try:
            found = await self._database.read(read)
        except StoreError as error:
            logger.error("%s; computing again", error.message)  # noqa: TRY400 - the trace says nothing more
            self._trouble = error.message
            return {}
        if found:
            self.touch(name)
        chunks = await asyncio.to_thread(decode, found)
        for number, *_ in found:
            if number not in chunks:
                logger.warning("chunk %d of result %s is damaged; computing it again", number, name)
                self._forget(name, number)
        return chunks

    async def finished_at(self, name: str) -> str | None:
        """Return the date at which a result was completed, None when it is not known."""
        question = "SELECT finished_at FROM results WHERE id = ?"
        with contextlib.suppress(StoreError):
            return await self._database.read(lambda connection: _first(connection, question, name))
        return None

    def begin(self, name: str, computation: str) -> None:
        """Note that a result is being computed: it is not evicted until `end`."""
        self._computations[name] = computation
        self._database.tell(lambda connection: _enter(connection, name, computation))

    def keep(self, name: str, number: int, chunk: StoredChunk) -> None:
        """Keep a finished chunk of a result that was begun."""
        computation = self._computations.get(name)

        def write(connection: sqlite3.Connection) -> None:
            body = zlib.compress(_encode(chunk.rows), COMPRESSION)
            self._make_room(connection, len(body), name)
            if computation is not None:  # once more: the disk may have been full at the beginning
                _enter(connection, name, computation)
            done = connection.execute(
                "INSERT OR IGNORE INTO chunks (id, number, points, body, seconds) VALUES (?, ?, ?, ?, ?)",
                (name, number, json.dumps(chunk.points), body, chunk.seconds),
            )
            if done.rowcount:
                connection.execute("UPDATE results SET bytes = bytes + ? WHERE id = ?", (len(body), name))

        def told(error: Exception | None) -> None:
            self._trouble = None if error is None else str(error)
            self.stored += error is None

        self._database.tell(write, told)

    def _forget(self, name: str, number: int) -> None:
        """Delete a chunk that cannot be read, so that it is kept anew."""

        def write(connection: sqlite3.Connection) -> None:
            key = (name, number)
            row = connection.execute(
                "SELECT length(body) FROM chunks WHERE id = ? AND number = ?", key
            ).fetchone()
            if row is not None:
                connection.execute("DELETE FROM chunks WHERE id = ? AND number = ?", key)
                connection.execute("UPDATE results SET bytes = bytes - ? WHERE id = ?", (row[0], name))

        self._database.tell(write)

    def end(self, name: str, finished_at: str | None) -> None:
        """Note that a result is no longer computed; `finished_at` is None when it is not complete."""
        self._computations.pop(name, None)

        def write(connection: sqlite3.Connection) -> None:
            connection.execute(
                "UPDATE results SET running = 0, used = ?, finished_at = COALESCE(finished_at, ?) "
                "WHERE id = ?",
                (time.time(), finished_at, name),
            )

        self._database.tell(write)

    def touch(self, name: str) -> None:
        """Note that a result was used just now."""
        now = time.time()
        self._database.tell(
            lambda connection: connection.execute("UPDATE results SET used = ? WHERE id = ?", (now, name))
        )

    async def keep_link(self, name: str, query: str) -> None:
        """Keep a long query under a short name, for ever."""

        def write(connection: sqlite3.Connection) -> None:
            connection.execute(
                "INSERT OR IGNORE INTO links (name, query, made) VALUES (?, ?, ?)", (name, query, time.time())
            )

        await self._database.write(write)

    async def shortened(self, query: str) -> str:
        """Return a query that can be passed around: itself, or the short name under which it is now kept.

        A long one stays as it is while nothing can be kept, or not for long.
        """
        if not links.needs_storing(query) or self.is_passing:
            return query
        short = links.stored_query(query)
        try:
            await self.keep_link(short.partition("=")[2], query)
        except StoreError:
            return query
        return short

    async def link(self, name: str) -> str | None:
        """Return the query kept under a short name."""
        return await self._database.read(
            lambda connection: _first(connection, "SELECT query FROM links WHERE name = ?", name)
        )

    async def usage(self) -> dict[str, int]:
        """Return how much is stored."""

        def read(connection: sqlite3.Connection) -> dict[str, int]:
            results = connection.execute("SELECT count(*) FROM results").fetchone()[0]
            kept = connection.execute("SELECT count(*) FROM links").fetchone()[0]
            return {"results": results, "bytes": _used(connection), "links": kept, "budget": self.budget}

        return await self._database.read(read)

    async def settled(self) -> None:
        """Wait until everything told so far is on disk."""
        await self._database.write(lambda _: None)

    def close(self) -> None:
        """Finish writing, and let go of the directory."""
        self._database.close()
        self._lock.close()
        if self._passing is not None:
            self._passing.cleanup()

    def _make_room(self, connection: sqlite3.Connection, wanted: int, keep: str) -> None:
        """Delete least recently used results until `wanted` bytes fit; raise StoreError when they cannot."""
        if wanted > self.budget:
            raise StoreError(
                "too-large-for-store",
                f"a chunk of {wanted} bytes is larger than the whole store; it is not kept",
                "store_bytes",
                wanted,
                self.budget,
            )
        used = _used(connection)
        while used + wanted > self.budget:
            row = connection.execute(
                "SELECT id, bytes FROM results WHERE pinned = 0 AND running = 0 AND id <> ? AND bytes > 0 "
                "ORDER BY used LIMIT 1",
                (keep,),
            ).fetchone()
            if row is None:
                raise StoreError(
                    "store-full",
                    f"{wanted} bytes do not fit beside the results in use or pinned; they are not kept",
                    "store_bytes",
                    wanted,
                    self.budget,
                )
            connection.execute("DELETE FROM results WHERE id = ?", (row[0],))
            used -= row[1]


def _enter(connection: sqlite3.Connection, name: str, computation: str) -> None:
    """Enter a result that is being computed."""
    connection.execute(
        "INSERT INTO results (id, computation, used, running, solver) VALUES (?, ?, ?, 1, ?) "
        "ON CONFLICT (id) DO UPDATE SET used = excluded.used, running = 1, solver = excluded.solver",
        (name, computation, time.time(), versions()["solver"]),
    )


def _used(connection: sqlite3.Connection) -> int:
    total: int = connection.execute("SELECT COALESCE(sum(bytes), 0) FROM results").fetchone()[0]
    return total


def _first(connection: sqlite3.Connection, question: str, name: str) -> str | None:
    row = connection.execute(question, (name,)).fetchone()
    return row[0] if row else None


def _encode(rows: Sequence[dict[str, Any]]) -> bytes:
    return json.dumps(rows, separators=(",", ":"), allow_nan=False).encode()


def decode(found: Sequence[tuple[int, str, bytes, float]]) -> dict[int, StoredChunk]:
    """Return the chunks of rows of the database, without the damaged ones."""
    chunks = {}
    for number, points, body, seconds in found:
        with contextlib.suppress(zlib.error, ValueError, TypeError):
            chunk = StoredChunk(tuple(json.loads(points)), json.loads(zlib.decompress(body)), seconds)
            if len(chunk.points) == len(chunk.rows):
                chunks[number] = chunk
    return chunks


def open_store(directory: Path, budget: int) -> Store:
    """Return the store of a data directory, or a passing one when that cannot be read or written.

    Raises StartError when the directory is in use, on a network file system, or of a newer version: then
    another directory is wanted.
    """
    try:
        return Store(directory, budget)
    except StartError as error:
        if error.code not in BEARABLE:
            raise
        logger.warning("%s; results are kept only until the server stops", error.message)
        return Store.passing(budget, error.message)
