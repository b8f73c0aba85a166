"""What goes wrong on real machines: kills, full and read-only disks, damaged files, clocks that jump."""

import contextlib
import errno
import json
import os
import resource
import shutil
import signal
import sqlite3
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

from app.database import prepare_directory
from app.errors import StartError
from app.jobs import Job
from app.sheets import Sheet
from app.store import DATABASE, LOCK
from tests.running import ROOT, RunningServer, ServerFactory

PAGE = {"accept": "text/html"}
BANNER = 'class="message trouble"'
Mount = Callable[[Path, str], None]


def start(server: RunningServer, sheet: dict[str, Any]) -> dict[str, Any]:
    answer = server.client.post("/api/jobs", json=sheet)
    assert answer.status_code in {200, 202}, answer.text[:300]
    facts: dict[str, Any] = answer.json()
    return facts


def store_of(server: RunningServer) -> dict[str, Any]:
    found: dict[str, Any] = server.client.get("/health").json()["store"]
    return found


def wait_folded(server: RunningServer) -> None:
    """Wait until the write-ahead log is folded back: from then on every write needs new room."""
    log = server.data / f"{DATABASE}-wal"
    server.wait_until(lambda: log.stat().st_size == 0, 20.0)


def ended(*options: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "app", "--port", "0", "--no-browser", *options],
        cwd=ROOT,
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )


@pytest.fixture
def mount() -> Iterator[Mount]:
    """Return a function that mounts a small file system in memory; it is gone after the test."""
    mounted: list[Path] = []

    def put(place: Path, options: str) -> None:
        place.mkdir(exist_ok=True)
        if shutil.which("mount") is None or os.geteuid() != 0:
            pytest.skip("only root can mount a file system")
        done = subprocess.run(
            ["mount", "-t", "tmpfs", "-o", options, "none", str(place)], capture_output=True, check=False
        )
        if done.returncode:
            pytest.skip(f"a file system cannot be mounted here: {done.stderr.decode()}")
        mounted.append(place)

    yield put
    for place in mounted:
        subprocess.run(["umount", "-l", str(place)], check=True)


@pytest.mark.soak
@pytest.mark.slow
@pytest.mark.timeout(900)
def test_twenty_kills_while_writing_lose_nothing_that_was_stored(start_server: ServerFactory) -> None:
    sheet = {"spins": 3, "points": 2001, "levels": 2}
    stored = points = 0
    for turn in range(20):
        server = start_server("--workers", "1")
        job = start(server, sheet)
        found = server.counts()["chunks_found"]
        facts = server.client.get(f"/api/jobs/{job['id']}").json()
        # everything that was reported as stored before the kill is found again
        assert found >= stored, turn
        assert facts["done"] >= points, turn
        if facts["state"] != "done":
            server.wait_until(lambda: server.counts()["chunks_stored"] >= 1)  # noqa: B023 - called at once
        time.sleep(0.01 * (turn % 5))
        stored = found + server.counts()["chunks_stored"]
        points = facts["done"]
        server.process.send_signal(signal.SIGKILL)
        server.process.wait(10)
        with contextlib.closing(sqlite3.connect(server.data / DATABASE)) as connection:
            assert connection.execute("PRAGMA integrity_check").fetchone() == ("ok",), turn
    assert stored >= 20


def test_a_full_disk_at_work(start_server: ServerFactory, tmp_path: Path, mount: Mount) -> None:
    mount(tmp_path / "data", "size=2m")
    server = start_server("--workers", "2")
    assert server.client.get("/api/sweep?spins=3&points=5").status_code == 200
    server.wait_until(lambda: server.counts()["chunks_stored"] > 0)
    assert store_of(server) == {"state": "ok", "trouble": None}
    assert BANNER not in server.client.get("/sweep", headers=PAGE).text
    wait_folded(server)
    filler = tmp_path / "data" / "filler"
    with filler.open("wb", buffering=0) as file, contextlib.suppress(OSError):
        while True:
            file.write(b"x" * 1024)
    # results are still computed, whole and right, and it is said that they are not kept
    answer = server.client.get("/api/sweep?spins=5&points=15")
    assert answer.status_code == 200
    assert answer.json()["complete"]
    server.wait_until(lambda: store_of(server)["state"] == "failing", 10.0)
    assert "full" in store_of(server)["trouble"]
    assert BANNER in server.client.get("/sweep", headers=PAGE).text
    assert server.client.get("/api/limits").status_code == 200
    assert "Traceback" not in server.log.read_text()
    # what was stored before is there, and with room again all is well
    assert server.client.get("/api/sweep?spins=3&points=5").status_code == 200
    filler.unlink()
    assert server.client.get("/api/sweep?spins=4&points=5").status_code == 200
    server.wait_until(lambda: store_of(server)["state"] == "ok", 10.0)
    assert BANNER not in server.client.get("/sweep", headers=PAGE).text
    server.stop()


@pytest.mark.soak
@pytest.mark.slow
def test_files_that_may_not_grow(start_server: ServerFactory) -> None:
    """The same for those who cannot mount: a limit on the size of files, set while the server runs."""
    server = start_server("--workers", "1")
    assert server.client.get("/api/sweep?spins=3&points=5").status_code == 200
    server.wait_until(lambda: server.counts()["chunks_stored"] > 0)
    wait_folded(server)
    resource.prlimit(server.pid, resource.RLIMIT_FSIZE, (4096, resource.RLIM_INFINITY))
    assert server.client.get("/api/sweep?spins=5&points=15").json()["complete"]
    server.wait_until(lambda: store_of(server)["state"] == "failing", 10.0)
    resource.prlimit(server.pid, resource.RLIMIT_FSIZE, (resource.RLIM_INFINITY, resource.RLIM_INFINITY))
    assert server.client.get("/api/sweep?spins=4&points=5").status_code == 200
    server.wait_until(lambda: store_of(server)["state"] == "ok", 10.0)


def check_passing(server: RunningServer, words: str) -> None:
    """Check a server that goes on without its data directory, and says so everywhere."""
    answer = server.client.get("/api/sweep?spins=3&points=5")
    assert answer.status_code == 200
    assert answer.json()["complete"]
    found = store_of(server)
    assert found["state"] == "passing"
    assert words in found["trouble"]
    for page in ("/sweep?spins=3", "/point?spins=3&at=0.1", "/cutoff?spins=3", "/sweep?spins=0"):
        text = server.client.get(page, headers=PAGE).text
        assert BANNER in text
        assert "only until the server stops" in text
    assert words in server.log.read_text()
    assert "Traceback" not in server.log.read_text()
    # a long link is not promised to last
    long = server.client.post("/api/link", json={"note": "n" * 1990}).json()
    assert "stored=" not in long["link"]
    assert "softmode_store_usable 0.0" in server.client.get("/metrics").text


def test_a_read_only_data_directory(start_server: ServerFactory, tmp_path: Path, mount: Mount) -> None:
    mount(tmp_path / "data", "size=2m,ro")
    check_passing(start_server("--workers", "1"), "nothing can be written to")


@pytest.mark.soak
@pytest.mark.slow
def test_a_disk_that_is_full_from_the_start(
    start_server: ServerFactory, tmp_path: Path, mount: Mount
) -> None:
    mount(tmp_path / "data", "size=16k")
    with (tmp_path / "data" / "filler").open("wb", buffering=0) as file, contextlib.suppress(OSError):
        while True:
            file.write(b"x" * 4096)
    check_passing(start_server("--workers", "1"), "cannot be opened")


@pytest.mark.slow
def test_a_data_directory_that_is_a_file(start_server: ServerFactory, tmp_path: Path) -> None:
    (tmp_path / "data").write_text("a file")
    check_passing(start_server("--workers", "1"), "cannot be made")


def test_a_store_that_is_no_database(start_server: ServerFactory, tmp_path: Path) -> None:
    (tmp_path / "data").mkdir()
    spoilt = b"not a database at all" * 500
    (tmp_path / "data" / DATABASE).write_bytes(spoilt)
    server = start_server("--workers", "1")
    check_passing(server, "move it away")
    server.stop()
    # nobody's file is thrown away
    assert (tmp_path / "data" / DATABASE).read_bytes() == spoilt


@pytest.mark.soak
@pytest.mark.slow
def test_a_store_damaged_inside(start_server: ServerFactory) -> None:
    sheets = [f"/api/sweep?spins={spins}&points=41" for spins in (1, 2, 3)]
    first = start_server("--workers", "1")
    before = [first.client.get(sheet).json() for sheet in sheets]
    first.stop()
    database = first.data / DATABASE
    with contextlib.closing(sqlite3.connect(database)) as connection:
        # a body cut short
        connection.execute("UPDATE chunks SET body = substr(body, 1, 50) WHERE rowid = 1")
        connection.commit()
    content = bytearray(database.read_bytes())
    middle = len(content) // 2
    content[middle : middle + 6000] = os.urandom(6000)
    database.write_bytes(content)
    second = start_server("--workers", "1")
    for sheet, expected in zip(sheets, before, strict=True):
        answer = second.client.get(sheet)
        assert answer.status_code == 200
        assert answer.json()["series"] == expected["series"]
    assert second.counts()["chunks_computed"] > 0
    assert "Traceback" not in second.log.read_text()
    assert second.client.get("/health").status_code == 200


@pytest.mark.soak
def test_damaged_chunks_are_computed_and_kept_anew(start_server: ServerFactory) -> None:
    sheet = "/api/sweep?spins=2&points=21"
    first = start_server("--workers", "1")
    before = first.client.get(sheet).json()
    first.stop()
    with contextlib.closing(sqlite3.connect(first.data / DATABASE)) as connection:
        total = connection.execute("SELECT count(*) FROM chunks").fetchone()[0]
        connection.execute("UPDATE chunks SET body = x'00' WHERE number = 0")
        connection.commit()
    second = start_server("--workers", "1")
    assert second.client.get(sheet).json()["series"] == before["series"]
    assert second.counts()["chunks_found"] == total - 1
    assert "damaged" in second.log.read_text()
    second.wait_until(lambda: second.counts()["chunks_stored"] == 1)
    second.stop()
    third = start_server("--workers", "1")
    assert third.client.get(sheet).json()["series"] == before["series"]
    assert third.counts()["chunks_found"] == total


@pytest.mark.soak
def test_a_stop_in_the_middle_keeps_what_is_finished(start_server: ServerFactory) -> None:
    sheet = {"spins": 40, "points": 1001, "to": 1.5}
    server = start_server("--workers", "2")
    job = start(server, sheet)
    server.wait_until(lambda: server.counts()["chunks_computed"] >= 3)
    done = server.client.get(f"/api/jobs/{job['id']}").json()["done"]
    asked = threading.Thread(target=lambda: server.process.send_signal(signal.SIGTERM))
    asked.start()
    assert server.process.wait(15) in {0, -signal.SIGTERM}
    asked.join()
    assert "Traceback" not in server.log.read_text()
    again = start_server("--workers", "2")
    start(again, sheet)
    assert again.client.get(f"/api/jobs/{job['id']}").json()["done"] >= done
    assert again.counts()["chunks_found"] >= 3


def test_a_port_in_use(server: RunningServer, tmp_path: Path) -> None:
    port = server.address.rsplit(":", 1)[1]
    refused = ended("--port", port, "--data", str(tmp_path / "data"))
    assert refused.returncode == 2
    assert os.strerror(errno.EADDRINUSE) in refused.stderr
    assert "--port" in refused.stderr
    assert "Traceback" not in refused.stderr


def test_a_network_file_system_is_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    mounts = f"server:/home {tmp_path} nfs4 rw 0 0\n"
    monkeypatch.setattr(Path, "read_text", lambda _self: mounts)
    with pytest.raises(StartError, match="network file system") as refused:
        prepare_directory(tmp_path / "data")
    assert refused.value.code == "network-file-system"
    assert "--data" in refused.value.message


def test_leases_do_not_follow_the_clock_on_the_wall(monkeypatch: pytest.MonkeyPatch) -> None:
    job = Job("a" * 64, Sheet.model_validate({}), "here")
    lease = job.add_lease(60.0)
    for jump in (-1e9, 1e9):
        moved = time.time() + jump
        monkeypatch.setattr(time, "time", lambda moved=moved: moved)
        job.drop_lapsed()
        assert job.renew(lease, 60.0)
    later = time.monotonic() + 61.0
    monkeypatch.setattr(time, "monotonic", lambda: later)
    job.drop_lapsed()
    assert not job.renew(lease, 60.0)


@pytest.mark.soak
def test_the_lock_of_a_killed_server_is_free(start_server: ServerFactory) -> None:
    server = start_server("--workers", "1")
    refused = ended("--data", str(server.data))
    assert refused.returncode == 2
    assert "--data" in refused.stderr
    server.process.send_signal(signal.SIGKILL)
    server.process.wait(10)
    assert (server.data / LOCK).exists()
    again = start_server("--workers", "1")
    assert store_of(again)["state"] == "ok"
    assert json.loads(again.client.get("/health").text)["status"] == "ok"
