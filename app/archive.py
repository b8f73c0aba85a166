"""The stored results seen from the command line, whether or not a server runs on them."""

import contextlib
import json
import re
import sqlite3
import time
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from app import identity, kinds, links
from app.cutoff_sheets import CutoffSheet
from app.database import bring_up_to_date, connect
from app.errors import ConflictError, NotFoundError, SoftmodeError, StartError
from app.map_sheets import MapSheet
from app.plan import Chunk
from app.questions import Question
from app.sheets import Sheet
from app.store import DATABASE, SCHEMA, StoredChunk, decode

_SELECT = (
    "SELECT id, computation, used, bytes, running, finished_at, pinned, solver, "
    "(SELECT count(*) FROM chunks WHERE chunks.id = results.id) FROM results "
)
_NAME = re.compile(r"[0-9a-f]{6,64}")


PAGES: dict[str, type[CutoffSheet] | type[MapSheet]] = {"cutoff": CutoffSheet, "map": MapSheet}


@dataclass(frozen=True)
class Entry:
    """One stored result; `used` is in seconds since 1970, `finished_at` None while parts are missing."""

    id: str
    computation: str
    used: float
    bytes: int
    running: bool
    finished_at: str | None
    pinned: bool
    solver: str | None
    chunks: int

    @property
    def question(self) -> Question | None:
        """What was asked, without title and note; None when this version cannot read it."""
        asked = json.loads(self.computation)
        try:
            page = asked.pop("page", "sweep")
            if page in PAGES:
                return PAGES[page].of(asked)
            return Sheet.model_validate(asked)
        except SoftmodeError:
            return None

    @property
    def is_current(self) -> bool:
        """Whether this solver would find it: a result of another one is never shown as new."""
        question = self.question
        return question is not None and identity.sheet_id(question) == self.id

    @property
    def link(self) -> str:
        """The link that asks the same, empty when this version cannot read the question."""
        question = self.question
        if question is None:
            return ""
        return links.whole(*reversed(links.addressed(question)))


class Archive:
    """The store of a data directory, opened for a moment.

    Raises StartError when there is none, or when it cannot be used.
    """

    def __init__(self, directory: Path) -> None:
        self.path = directory / DATABASE
        if not self.path.is_file():
            raise StartError(
                "no-store", f"there are no stored results in {directory}", "data", str(directory), None
            )

    def entries(self) -> list[Entry]:
        """Return everything stored, the most recently used first."""
        with self._opened() as connection:
            return [_entry(row) for row in connection.execute(f"{_SELECT} ORDER BY used DESC")]

    def find(self, word: str) -> tuple[Entry, Question | None]:
        """Return what a link, or the beginning of a name, stands for, and the question of a link.

        Raises NotFoundError or ConflictError when it is not exactly one, SheetError for a malformed link.
        """
        asked: Question | None = None
        start = word.strip().lower()
        if not _NAME.fullmatch(start):
            asked = links.parse_link(self._whole(word))
            start = identity.sheet_id(asked)
        with self._opened() as connection:
            found = [_entry(row) for row in connection.execute(f"{_SELECT} WHERE id GLOB ?", (f"{start}*",))]
        if not found:
            raise NotFoundError(
                "not-stored", "this is not stored here", "result", word, "softmode store list"
            )
        if len(found) > 1:
            names = ", ".join(entry.id[:16] for entry in found[:5])
            raise ConflictError("ambiguous", "several results begin like this", "result", word, names)
        return found[0], asked

    def pin(self, name: str, *, pinned: bool) -> None:
        """Keep a result for good, or no longer."""
        with self._opened() as connection:
            connection.execute("UPDATE results SET pinned = ? WHERE id = ?", (int(pinned), name))

    def result(self, entry: Entry, asked: Question | None) -> dict[str, Any]:
        """Return a complete result as its page gives it; raise ConflictError when that cannot be."""
        question = asked or entry.question
        if question is None or identity.sheet_id(question) != entry.id:
            raise ConflictError(
                "other-solver",
                "another version of the solver or of its libraries computed this; ask for its link again",
                "solver",
                entry.solver,
                identity.versions()["solver"],
            )
        with self._opened() as connection:
            found = connection.execute(
                "SELECT number, points, body, seconds FROM chunks WHERE id = ? ORDER BY number", (entry.id,)
            ).fetchall()
        chunks = decode(found)
        made = kinds.plan_of(question)
        rows: list[dict[str, Any] | None] = [None] * len(made.questions)
        read = 0
        while read < len(made.chunks):
            missing = _filled(rows, made.chunks[read:], chunks)
            if missing:
                raise ConflictError(
                    "incomplete",
                    f"{missing} of {len(rows)} points are not there; 'softmode compute' computes a link",
                    "points",
                    len(rows) - missing,
                    len(rows),
                )
            read = len(made.chunks)
            made = made.grown(rows)
        seconds = sum(chunks[chunk.number].seconds for chunk in made.chunks)
        provenance = identity.versions() | {"computed_at": entry.finished_at, "seconds": round(seconds, 4)}
        return kinds.result_of(question, made, rows, name=entry.id, provenance=provenance)

    def prune(self, most_bytes: int | None, *, rehearse: bool) -> list[Entry]:
        """Delete what this solver cannot find, then the least recently used beyond `most_bytes`.

        Nothing pinned and nothing under way is deleted. Returns what was deleted, or would be.
        """
        kept = self.entries()
        loose = [entry for entry in reversed(kept) if not (entry.pinned or entry.running)]
        doomed = [entry for entry in loose if not entry.is_current]
        size = sum(entry.bytes for entry in kept) - sum(entry.bytes for entry in doomed)
        for entry in loose:
            if most_bytes is None or size <= most_bytes:
                break
            if entry not in doomed:
                doomed.append(entry)
                size -= entry.bytes
        if rehearse:
            return doomed
        with self._opened() as connection:
            for entry in doomed:
                connection.execute(
                    "DELETE FROM results WHERE id = ? AND pinned = 0 AND running = 0", (entry.id,)
                )
            # a server at work on the same file may be in the way; SQLite uses the free pages anyway
            with contextlib.suppress(sqlite3.OperationalError):
                connection.execute("VACUUM")
                connection.execute("PRAGMA wal_checkpoint(TRUNCATE)")
        return doomed

    def _whole(self, link: str) -> str:
        """Return a link with the long query in the place of a short name."""
        address, mark, query = link.strip().partition("?")
        found = links.stored_name(query)
        if found is None:
            return link
        with self._opened() as connection:
            row = connection.execute("SELECT query FROM links WHERE name = ?", (found[0],)).fetchone()
        if row is None:
            raise NotFoundError("unknown-link", "no such short link was made here", "link", link, None)
        return f"{address}{mark}{row[0]}"

    @contextlib.contextmanager
    def _opened(self) -> Iterator[sqlite3.Connection]:
        try:
            with contextlib.closing(connect(self.path)) as connection:
                bring_up_to_date(connection, SCHEMA, self.path)
                yield connection
        except sqlite3.Error as error:
            raise StartError(
                "bad-store", f"{self.path} cannot be used: {error}", "data", str(self.path)
            ) from error


def _filled(
    rows: list[dict[str, Any] | None], chunks: Sequence[Chunk], stored: Mapping[int, StoredChunk]
) -> int:
    """Enter the rows of the chunks that are stored, and return how many points of the others are missing."""
    missing = 0
    for chunk in chunks:
        found = stored.get(chunk.number)
        if found is None or found.points != chunk.points:
            missing += len(chunk.points)
            continue
        for point, row in zip(found.points, found.rows, strict=True):
            rows[point] = row
    return missing


def _entry(row: tuple[Any, ...]) -> Entry:
    name, computation, used, size, running, finished_at, pinned, solver, chunks = row
    return Entry(name, computation, used, size, bool(running), finished_at, bool(pinned), solver, chunks)


def table(entries: list[Entry]) -> str:
    """Return stored results as a table for a terminal, with sizes and their sum."""
    heads = ("result", "size", "last used", "state", "asked by")
    rows = []
    for entry in entries:
        states = ["complete" if entry.finished_at else "in part"]
        states += ["pinned"] if entry.pinned else []
        states += [] if entry.is_current else ["other solver"]
        used = time.strftime("%Y-%m-%d %H:%M", time.localtime(entry.used))
        rows.append((entry.id[:12], size_text(entry.bytes), used, ", ".join(states), entry.link))
    widths = [max(len(row[column]) for row in [heads, *rows]) for column in range(4)]
    lines = [
        "  ".join([*(cell.ljust(width) for cell, width in zip(row, widths, strict=False)), row[4]]).rstrip()
        for row in [heads, *rows]
    ]
    lines.append(f"{len(rows)} results, {size_text(sum(entry.bytes for entry in entries))}")
    return "\n".join(lines)


def size_text(size: int) -> str:
    """Return a number of bytes in the largest unit that leaves at least one of it."""
    value, units = float(size), ("B", "kB", "MB", "GB", "TB")
    for unit in units:
        if value < 1000.0 or unit == units[-1]:
            return f"{value:.3g} {unit}" if unit != "B" else f"{size} B"
        value /= 1000.0
    return f"{size} B"
