"""Results on disk, in one SQLite database in the data directory.

Only complete chunks are kept, each in a transaction of its own, as JSON text; what was half done at a crash
has left no trace. Results are found by content hash, so a new solver never reads old numbers. When the byte
budget is used up, the least recently used results go first, except those of jobs that run (pinned). Short
links are kept for ever.
"""

import asyncio
import json
import sqlite3
import time
import zlib
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from app import links
from app.database import Database, prepare_directory, take_lock
from app.errors import StartError, StoreError

DATABASE = "softmode.sqlite3"
LOCK = "softmode.lock"
SCHEMA_VERSION = 1
# zlib level 1: chunks shrink to a third at no noticeable price
COMPRESSION = 1

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
-- what a crash has left pinned or empty
UPDATE results SET pinned = 0;
DELETE FROM results WHERE bytes = 0;
"""


@dataclass(frozen=True)
class StoredChunk:
    """A finished chunk: the points it covers, one row for each, and the processor seconds it took."""

    points: tuple[int, ...]
    rows: list[dict[str, Any]]
    seconds: float


class Store:
    """The results of one data directory. Awaitables and plain methods alike leave the work to other threads.

    Raises StartError when the directory is on a network file system, in use, or not readable.
    """

    def __init__(self, directory: Path, budget: int) -> None:
        self.directory = prepare_directory(directory)
        self.budget = budget
        self._lock = take_lock(self.directory / LOCK)
        try:
            self._database = Database(self.directory / DATABASE, _SCHEMA, SCHEMA_VERSION)
        except StartError:
            self._lock.close()
            raise

    async def load(self, name: str) -> dict[int, StoredChunk]:
        """Return the finished chunks of a result by number, and note that it was used."""

        def read(connection: sqlite3.Connection) -> list[tuple[int, str, bytes, float]]:
            return connection.execute(
                "SELECT number, points, body, seconds FROM chunks WHERE id = ? ORDER BY number", (name,)
            ).fetchall()

        found = await self._database.read(read)
        if found:
            self.touch(name)
        return await asyncio.to_thread(_decode, found)

    async def finished_at(self, name: str) -> str | None:
        """Return the date at which a result was completed."""
        return await self._database.read(
            lambda connection: _first(connection, "SELECT finished_at FROM results WHERE id = ?", name)
        )

    def begin(self, name: str, computation: str) -> None:
        """Note that a result is being computed: it is pinned until `end`."""

        def write(connection: sqlite3.Connection) -> None:
            connection.execute(
                "INSERT INTO results (id, computation, used, pinned) VALUES (?, ?, ?, 1) "
                "ON CONFLICT (id) DO UPDATE SET used = excluded.used, pinned = 1",
                (name, computation, time.time()),
            )

        self._database.tell(write)

    def keep(self, name: str, number: int, chunk: StoredChunk) -> None:
        """Keep a finished chunk of a result that was begun."""

        def write(connection: sqlite3.Connection) -> None:
            body = zlib.compress(_encode(chunk.rows), COMPRESSION)
            self._make_room(connection, len(body), name)
            done = connection.execute(
                "INSERT OR IGNORE INTO chunks (id, number, points, body, seconds) VALUES (?, ?, ?, ?, ?)",
                (name, number, json.dumps(chunk.points), body, chunk.seconds),
            )
            if done.rowcount:
                connection.execute("UPDATE results SET bytes = bytes + ? WHERE id = ?", (len(body), name))

        self._database.tell(write)

    def end(self, name: str, finished_at: str | None) -> None:
        """Unpin a result; `finished_at` is the date when it is complete, None when it is not."""

        def write(connection: sqlite3.Connection) -> None:
            connection.execute(
                "UPDATE results SET pinned = 0, used = ?, finished_at = COALESCE(finished_at, ?) "
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
        """Return a query that can be passed around: itself, or the short name under which it is now kept."""
        if not links.needs_storing(query):
            return query
        short = links.stored_query(query)
        await self.keep_link(short.partition("=")[2], query)
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
                "SELECT id, bytes FROM results WHERE pinned = 0 AND id <> ? AND bytes > 0 "
                "ORDER BY used LIMIT 1",
                (keep,),
            ).fetchone()
            if row is None:
                raise StoreError(
                    "store-full",
                    f"{wanted} bytes do not fit beside the results in use; they are not kept",
                    "store_bytes",
                    wanted,
                    self.budget,
                )
            connection.execute("DELETE FROM results WHERE id = ?", (row[0],))
            used -= row[1]


def _used(connection: sqlite3.Connection) -> int:
    total: int = connection.execute("SELECT COALESCE(sum(bytes), 0) FROM results").fetchone()[0]
    return total


def _first(connection: sqlite3.Connection, question: str, name: str) -> str | None:
    row = connection.execute(question, (name,)).fetchone()
    return row[0] if row else None


def _encode(rows: Sequence[dict[str, Any]]) -> bytes:
    return json.dumps(rows, separators=(",", ":"), allow_nan=False).encode()


def _decode(found: Sequence[tuple[int, str, bytes, float]]) -> dict[int, StoredChunk]:
    return {
        number: StoredChunk(tuple(json.loads(points)), json.loads(zlib.decompress(body)), seconds)
        for number, points, body, seconds in found
    }
