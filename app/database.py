"""A SQLite database with one writer: two threads, one that writes and one that reads, fed by queues.

Nothing here runs on the event loop. Writes are whole transactions; the write-ahead log is folded back when
there is nothing to do, and when it has grown large.
"""

import asyncio
import contextlib
import fcntl
import logging
import queue
import sqlite3
import threading
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, TextIO, TypeVar

from app.errors import StartError, StoreError

logger = logging.getLogger(__name__)

T = TypeVar("T")
Work = Callable[[sqlite3.Connection], T]
Answer = Callable[[Any, Exception | None], None]
Commands = queue.SimpleQueue[tuple[Work[Any], Answer] | None]

IDLE_SECONDS = 3.0
LARGEST_WAL = 64 * 1024 * 1024

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


def take_lock(path: Path) -> TextIO:
    """Return an open file that locks a data directory; raise StartError when another server holds it."""
    try:
        file = path.open("a+")
    except OSError as error:
        raise StartError(
            "bad-data-directory",
            f"nothing can be written to {path.parent}: {error.strerror or error}",
            "data",
            str(path.parent),
            "a directory that can be written to",
        ) from error
    try:
        fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError:
        file.close()
        raise StartError(
            "data-in-use",
            f"another server uses {path.parent}; stop it, or give this one a directory of its own with "
            "--data",
            "data",
            str(path.parent),
            "a directory that no running server uses",
        ) from None
    return file


@dataclass(frozen=True)
class Schema:
    """The tables of a database.

    Attributes
    ----------
    tables : str
        Statements that make them where there are none.
    version : int
        Number of this form of the tables.
    steps : mapping of int to str
        What leads from the version that is the key to the next one.
    """

    tables: str
    version: int
    steps: Mapping[int, str]


def connect(path: Path) -> sqlite3.Connection:
    """Return a connection on which transactions are begun and ended by hand."""
    connection = sqlite3.connect(path, isolation_level=None, timeout=20.0)
    connection.execute("PRAGMA foreign_keys = ON")
    connection.execute("PRAGMA synchronous = NORMAL")
    return connection


def bring_up_to_date(connection: sqlite3.Connection, schema: Schema, path: Path) -> None:
    """Make the tables, or lead those of an older version to this one, in one transaction.

    Raises StartError when a newer version has written them.
    """
    found = connection.execute("PRAGMA user_version").fetchone()[0]
    if found > schema.version:
        raise StartError(
            "newer-store",
            "this data directory was written by a newer version; choose another one with --data",
            "data",
            str(path),
        )
    if found == schema.version:
        return
    made = connection.execute("SELECT count(*) FROM sqlite_master").fetchone()[0]
    steps = [schema.steps[version] for version in range(found, schema.version)] if found and made else []
    steps = steps or [schema.tables]
    connection.executescript(
        f"BEGIN IMMEDIATE;\n{''.join(steps)}\nPRAGMA user_version = {schema.version};\nCOMMIT;"
    )


class Database:
    """One database file and its two threads.

    `clean` is run once at the start, when nobody else writes.
    """

    def __init__(self, path: Path, schema: Schema, clean: str = "") -> None:
        self.path = path
        self._dirty = False
        self._writes: Commands = queue.SimpleQueue()
        self._reads: Commands = queue.SimpleQueue()
        try:
            with contextlib.closing(connect(path)) as connection:
                connection.execute("PRAGMA journal_mode = WAL")
                bring_up_to_date(connection, schema, path)
                connection.executescript(clean)
            path.chmod(0o600)
        except (sqlite3.Error, OSError) as error:
            raise StartError(
                "bad-store",
                f"{path} cannot be opened: {error}; move it away to begin a new one",
                "data",
                str(path),
            ) from error
        self._writer = threading.Thread(target=self._write_all, name="store-writer", daemon=True)
        self._reader = threading.Thread(target=self._read_all, name="store-reader", daemon=True)
        self._writer.start()
        self._reader.start()

    def tell(self, work: Work[Any], told: Callable[[Exception | None], None] = lambda _: None) -> None:
        """Queue a write that nobody waits for; `told` is called with what went wrong, None when nothing did.

        When it fails, the log says so too.
        """

        def answer(_value: Any, error: Exception | None) -> None:
            if error is not None:
                logger.error("not stored: %s", error)
            told(error)

        self._writes.put((work, answer))

    async def write(self, work: Work[T]) -> T:
        """Return what `work` returns from its transaction; raise StoreError when it fails."""
        return await _ask(self._writes, work)

    async def read(self, work: Work[T]) -> T:
        """Return what `work` reads; raise StoreError when it fails."""
        return await _ask(self._reads, work)

    def close(self) -> None:
        """Finish all writes, and end both threads."""
        self._writes.put(None)
        self._writer.join(30.0)
        self._reads.put(None)
        self._reader.join(5.0)

    def _write_all(self) -> None:
        """Run the queued writes one by one; fold the log back when there are none."""
        with contextlib.closing(connect(self.path)) as connection:
            while True:
                try:
                    command = self._writes.get(timeout=IDLE_SECONDS if self._dirty else None)
                except queue.Empty:
                    _checkpoint(connection, "TRUNCATE")
                    self._dirty = False
                    continue
                if command is None:
                    break
                work, answer = command
                self._run(lambda: self._in_transaction(connection, work), answer)  # noqa: B023 - run at once
            _checkpoint(connection, "TRUNCATE")

    def _read_all(self) -> None:
        with contextlib.closing(connect(self.path)) as connection:
            while (command := self._reads.get()) is not None:
                work, answer = command
                self._run(lambda: work(connection), answer)  # noqa: B023 - run at once

    def _in_transaction(self, connection: sqlite3.Connection, work: Work[T]) -> T:
        self._dirty = True
        connection.execute("BEGIN IMMEDIATE")
        try:
            value = work(connection)
            connection.execute("COMMIT")
        except BaseException:
            with contextlib.suppress(sqlite3.Error):
                connection.execute("ROLLBACK")
            raise
        log = self.path.with_name(self.path.name + "-wal")
        if log.exists() and log.stat().st_size > LARGEST_WAL:
            _checkpoint(connection, "RESTART")
        return value

    @staticmethod
    def _run(work: Callable[[], Any], answer: Answer) -> None:
        try:
            value = work()
        except (sqlite3.Error, StoreError, ValueError) as error:
            answer(None, error)
        else:
            answer(value, None)


def _checkpoint(connection: sqlite3.Connection, mode: str) -> None:
    with contextlib.suppress(sqlite3.OperationalError):
        connection.execute(f"PRAGMA wal_checkpoint({mode})")


async def _ask(commands: Commands, work: Work[T]) -> T:
    """Queue a command and wait for its answer without holding up the event loop."""
    loop = asyncio.get_running_loop()
    future: asyncio.Future[T] = loop.create_future()

    def settle(value: Any, error: Exception | None) -> None:
        if future.done():
            return
        if error is None:
            future.set_result(value)
        elif isinstance(error, StoreError):
            future.set_exception(error)
        else:
            future.set_exception(StoreError("store-failed", f"the store cannot be used: {error}"))

    def answer(value: Any, error: Exception | None) -> None:
        with contextlib.suppress(RuntimeError):  # the loop may have ended meanwhile
            loop.call_soon_threadsafe(settle, value, error)

    commands.put((work, answer))
    return await future
