"""The store from the command line, older stores, and results of older solvers."""

import contextlib
import json
import re
import shutil
import sqlite3
import subprocess
import sys
import time
import zlib
from pathlib import Path
from typing import Any

import pytest

from app import identity, links
from app.archive import Archive, size_text
from app.errors import StartError
from app.store import DATABASE, SCHEMA_VERSION, Store
from tests.running import ROOT, RunningServer, ServerFactory

SWEEP = "spins=2&points=9&each=ratio:0.5,1"
DESK = "spins=2&points=3&asked=energies,tail&stated=30"

# the tables as version 1 made them
VERSION_1 = """
CREATE TABLE results (
    id TEXT PRIMARY KEY, computation TEXT NOT NULL, used REAL NOT NULL, bytes INTEGER NOT NULL DEFAULT 0,
    pinned INTEGER NOT NULL DEFAULT 0, finished_at TEXT
) STRICT;
CREATE TABLE chunks (
    id TEXT NOT NULL REFERENCES results (id) ON DELETE CASCADE, number INTEGER NOT NULL,
    points TEXT NOT NULL, body BLOB NOT NULL, seconds REAL NOT NULL, PRIMARY KEY (id, number)
) STRICT;
CREATE TABLE links (name TEXT PRIMARY KEY, query TEXT NOT NULL, made REAL NOT NULL) STRICT;
CREATE INDEX results_used ON results (pinned, used);
PRAGMA user_version = 1;
"""


def store(data: Path, *words: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-W", "error", "-m", "app", "store", *words, "--data", str(data)],
        cwd=ROOT,
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )


def done(data: Path, *words: str) -> str:
    ended = store(data, *words)
    assert ended.returncode == 0, ended.stderr
    return ended.stdout


def refused(data: Path, *words: str) -> str:
    ended = store(data, *words)
    assert ended.returncode == 2
    assert "Traceback" not in ended.stderr
    return ended.stderr


def query(data: Path, question: str) -> list[Any]:
    with contextlib.closing(sqlite3.connect(data / DATABASE)) as connection:
        return connection.execute(question).fetchall()


@pytest.fixture(scope="module")
def filled(tmp_path_factory: pytest.TempPathFactory) -> Any:
    """Return a running server with two results, and what its pages say of them."""
    running = RunningServer(tmp_path_factory.mktemp("filled") / "data", "--workers", "1")
    try:
        sweep = running.client.get(f"/api/sweep?{SWEEP}").json()
        desk = running.client.get(f"/api/cutoff?{DESK}").json()
        running.wait_until(
            lambda: len(query(running.data, "SELECT 1 FROM results WHERE finished_at > ''")) == 2
        )
        yield running, sweep, desk
    finally:
        running.stop()


def test_results_are_listed_beside_a_running_server(filled: Any) -> None:
    server, sweep, desk = filled
    lines = done(server.data, "list").splitlines()
    assert len(lines) == 4
    for line, result in zip(lines[1:3], (desk, sweep), strict=True):
        assert line.startswith(result["id"][:12])
        assert "complete" in line
        assert re.search(r"\d B|\d kB", line)
        # the link that is shown asks the same
        asked = links.parse_link(line.rpartition("  ")[2])
        assert identity.sheet_id(asked) == result["id"]
    assert lines[3].startswith("2 results")


def test_exports_are_what_the_page_gives(filled: Any, tmp_path: Path) -> None:
    server, sweep, desk = filled
    titled = f"/sweep?{SWEEP}&title=a+title"
    for word, expected in (
        (sweep["id"][:10], sweep),
        (f"/cutoff?{DESK}", desk),
        (titled, server.client.get(f"/api{titled}").json()),
    ):
        done(server.data, "export", word, "--out", str(tmp_path / "x.json"))
        assert json.loads((tmp_path / "x.json").read_text()) == expected
    done(server.data, "export", f"/sweep?{SWEEP}", "--out", str(tmp_path / "x.csv"))
    # as read from the file: line ends are part of the table
    with (tmp_path / "x.csv").open(newline="", encoding="utf-8") as file:
        assert file.read() == server.client.get(f"/api/sweep.csv?{SWEEP}").text


def test_what_cannot_be_exported_is_said(filled: Any, tmp_path: Path) -> None:
    server, sweep, _ = filled
    out = str(tmp_path / "x.json")
    assert "not stored" in refused(server.data, "export", "/sweep?spins=3", "--out", out)
    assert "not stored" in refused(server.data, "export", "0" * 20, "--out", out)
    assert "did you mean" in refused(server.data, "export", "/sweep?spin=3", "--out", out)
    assert ".csv, .json" in refused(server.data, "export", sweep["id"], "--out", str(tmp_path / "x.txt"))
    assert "no stored results" in refused(tmp_path / "nowhere", "list")
    assert not (tmp_path / "nowhere").exists()
    assert not (tmp_path / "x.json").exists()


def test_pins_hold_against_pruning(filled: Any) -> None:
    server, sweep, desk = filled
    assert "pinned" in done(server.data, "pin", sweep["id"][:12])
    assert ", pinned" in done(server.data, "list")
    rehearsed = done(server.data, "prune", "--to", "0", "--dry-run")
    assert desk["id"][:12] in rehearsed
    assert sweep["id"][:12] not in rehearsed
    assert len(query(server.data, "SELECT 1 FROM results")) == 2
    done(server.data, "prune", "--to", "0")
    assert query(server.data, "SELECT id FROM results") == [(sweep["id"],)]
    assert "no longer" in done(server.data, "unpin", f"/sweep?{SWEEP}")
    assert query(server.data, "SELECT pinned FROM results") == [(0,)]
    # the server goes on, and keeps again what it is asked
    server.client.delete(f"/api/jobs/{desk['id']}?for=everyone")
    assert server.client.get(f"/api/sweep?{SWEEP}").json() == sweep
    assert server.client.get("/api/sweep?spins=3&points=5").status_code == 200
    server.wait_until(lambda: len(query(server.data, "SELECT 1 FROM results")) == 2)


def test_nothing_pinned_is_evicted(tmp_path: Path) -> None:
    kept = Store(tmp_path, 4000)
    kept.begin("pinned", "{}")
    row = {"answer": zlib.compress(str(time.time_ns()).encode() * 9).hex() * 40}
    from app.store import StoredChunk  # noqa: PLC0415 - beside its one use

    kept.keep("pinned", 0, StoredChunk((0,), [row], 0.1))
    kept.end("pinned", "2026-01-01")
    kept.close()
    Archive(tmp_path).pin("pinned", pinned=True)
    again = Store(tmp_path, 100)
    again.begin("new", "{}")
    again.keep("new", 0, StoredChunk((0,), [row], 0.1))
    again.close()
    assert query(tmp_path, "SELECT id, number FROM chunks") == [("pinned", 0)]


def test_a_store_of_the_version_before_is_taken_over(start_server: ServerFactory, tmp_path: Path) -> None:
    calm = start_server("--workers", "1", data="new")
    expected = calm.client.get(f"/api/sweep?{SWEEP}").json()
    long = "note=" + "n" * 1990
    calm.client.post("/api/link", json={"note": "n" * 1990})
    calm.stop()
    (tmp_path / "old").mkdir()
    with contextlib.closing(sqlite3.connect(tmp_path / "old" / DATABASE)) as old:
        old.executescript(VERSION_1)
        for name in query(
            tmp_path / "new", "SELECT id, computation, used, bytes, 1, finished_at FROM results"
        ):
            old.execute("INSERT INTO results VALUES (?, ?, ?, ?, ?, ?)", name)
        for one in query(tmp_path / "new", "SELECT id, number, points, body, seconds FROM chunks"):
            old.execute("INSERT INTO chunks VALUES (?, ?, ?, ?, ?)", one)
        short = links.stored_query(long).partition("=")[2]
        old.execute("INSERT INTO links VALUES (?, ?, ?)", (short, long, 0.0))
        old.commit()
    shutil.copytree(tmp_path / "old", tmp_path / "older")
    server = start_server("--workers", "1", data="old")
    assert server.client.get(f"/api/sweep?{SWEEP}").json() == expected
    assert server.counts()["points_computed"] == 0
    assert server.client.get(f"/sweep?stored={short}", headers={"accept": "text/html"}).status_code == 200
    server.stop()
    # what version 1 called pinned was a job under way, which is over
    assert query(tmp_path / "old", "SELECT pinned, running FROM results") == [(0, 0)]
    assert query(tmp_path / "old", "PRAGMA user_version") == [(SCHEMA_VERSION,)]
    # the command line leads an old store on as well
    assert expected["id"][:12] in done(tmp_path / "older", "list")
    done(tmp_path / "older", "pin", expected["id"])
    assert query(tmp_path / "older", "SELECT pinned FROM results") == [(1,)]


def test_a_step_that_fails_changes_nothing(tmp_path: Path) -> None:
    with contextlib.closing(sqlite3.connect(tmp_path / DATABASE)) as old:
        # a table that version 1 cannot have made
        old.executescript(VERSION_1 + "ALTER TABLE results ADD COLUMN running INTEGER;")
    with pytest.raises(StartError, match="cannot be opened"):
        Store(tmp_path, 1 << 30)
    assert query(tmp_path, "PRAGMA user_version") == [(1,)]
    assert query(tmp_path, "SELECT count(*) FROM sqlite_master WHERE name = 'results_used'") == [(1,)]


@pytest.mark.soak
def test_a_result_of_an_older_solver_is_never_shown_as_new(tmp_path: Path) -> None:
    """Two programs that differ in one comment of the solver, one after the other on the same data."""
    older = tmp_path / "older"
    for part in ("app", "solver", "static", "templates"):
        shutil.copytree(ROOT / part, older / part, ignore=shutil.ignore_patterns("__pycache__"))
    with (older / "solver" / "model.py").open("a") as file:
        file.write("# another solver\n")
    data = tmp_path / "data"
    first = RunningServer(data, "--workers", "1", root=older)
    try:
        old = first.client.get(f"/api/sweep?{SWEEP}").json()
    finally:
        first.stop()
    second = RunningServer(data, "--workers", "1")
    try:
        assert query(data, "SELECT finished_at IS NULL FROM results") == [(0,)]
        new = second.client.get(f"/api/sweep?{SWEEP}").json()
        counts = second.counts()
        assert (counts["chunks_found"], counts["points_computed"]) == (0, 18)
    finally:
        second.stop()
    assert new["id"] != old["id"]
    assert new["provenance"]["solver"] == identity.versions()["solver"] != old["provenance"]["solver"]
    assert done(data, "list").count("other solver") == 1
    error = refused(data, "export", old["id"], "--out", str(tmp_path / "x.json"))
    assert "another version of the solver" in error
    assert old["provenance"]["solver"] in error
    assert old["id"][:12] in done(data, "prune")
    assert query(data, "SELECT id FROM results") == [(new["id"],)]


@pytest.mark.parametrize(
    ("size", "text"), [(0, "0 B"), (999, "999 B"), (1000, "1 kB"), (1234567, "1.23 MB"), (2**40, "1.1 TB")]
)
def test_sizes_are_readable(size: int, text: str) -> None:
    assert size_text(size) == text
