"""Computing on a Dask cluster: a real scheduler and real workers on loopback."""

import importlib.util
import os
import shutil
import signal
import subprocess
import sys
import textwrap
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from app.cluster import difference
from app.errors import StartError
from app.settings import Settings, check_cluster_address
from tests.cluster import Cluster
from tests.running import ROOT, RunningServer, ServerFactory

needs_dask = pytest.mark.skipif(
    importlib.util.find_spec("distributed") is None, reason="the extra 'cluster' is not installed"
)

SHEET = {"spins": 60, "points": 201, "to": 1.5}
LONG = {"spins": 40, "points": 2001, "to": 1.5}


@pytest.fixture
def cluster(tmp_path: Path) -> Iterator[Cluster]:
    running = Cluster(tmp_path)
    try:
        running.start_worker()
        running.start_worker()
        yield running
    finally:
        running.stop()


def start(server: RunningServer, sheet: dict[str, Any]) -> dict[str, Any]:
    answer = server.client.post("/api/jobs", json=sheet)
    assert answer.status_code in {200, 202}, answer.text[:500]
    facts: dict[str, Any] = answer.json()
    return facts


def facts_of(server: RunningServer, job: str) -> dict[str, Any]:
    facts: dict[str, Any] = server.client.get(f"/api/jobs/{job}").json()
    return facts


def finish(server: RunningServer, job: str) -> dict[str, Any]:
    server.wait_until(lambda: facts_of(server, job)["state"] not in {"queued", "running"}, 240.0)
    answer = server.client.get(f"/api/jobs/{job}/result")
    assert answer.status_code == 200, answer.text[:500]
    result: dict[str, Any] = answer.json()
    return result


def numbers(result: dict[str, Any]) -> dict[str, Any]:
    return {key: value for key, value in result.items() if key not in {"provenance", "sheet", "link"}}


def program(*arguments: str, **environment: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "app", *arguments],
        cwd=ROOT,
        capture_output=True,
        text=True,
        timeout=120,
        env=os.environ | environment,
        check=False,
    )


@pytest.mark.parametrize("address", ["tcp://127.0.0.1:8786", "tcp://localhost:1", "tcp://[::1]:8786"])
def test_a_scheduler_on_this_machine_is_taken(address: str) -> None:
    check_cluster_address(address)
    Settings(cluster=address).check()


@pytest.mark.parametrize("address", ["tls://cluster.example.org:8786", "tls://192.0.2.7:8786"])
def test_a_far_scheduler_is_taken_when_encrypted(address: str) -> None:
    check_cluster_address(address)


@pytest.mark.parametrize(
    ("address", "code"),
    [
        ("tcp://192.0.2.7:8786", "cluster-not-encrypted"),
        ("tcp://cluster.example.org:8786", "cluster-not-encrypted"),
        ("tcp://0.0.0.0:8786", "cluster-not-encrypted"),
        ("tcp://127.0.0.1.example.org:8786", "cluster-not-encrypted"),
        ("127.0.0.1:8786", "bad-cluster-address"),
        ("tcp://127.0.0.1", "bad-cluster-address"),
        ("tcp://127.0.0.1:99999", "bad-cluster-address"),
        ("ucx://127.0.0.1:8786", "bad-cluster-address"),
        ("inproc://here/1", "bad-cluster-address"),
        ("", "bad-cluster-address"),
    ],
)
def test_other_addresses_are_refused(address: str, code: str) -> None:
    with pytest.raises(StartError) as refused:
        Settings(cluster=address).check()
    assert refused.value.code == code
    assert refused.value.field == "cluster"
    assert "tls://" in refused.value.allowed


@pytest.mark.parametrize(
    ("address", "words"), [("tcp://192.0.2.7:8786", "in the clear"), ("tcp://127.0.0.1:9", "127.0.0.1:9")]
)
def test_refusals_on_the_command_line(address: str, words: str, tmp_path: Path) -> None:
    for arguments in (
        ("--cluster", address, "--data", str(tmp_path / "data"), "--port", "0", "--no-browser"),
        ("compute", "spins=2&points=3", "--cluster", address, "--out", str(tmp_path / "x.json")),
    ):
        ended = program(*arguments)
        assert ended.returncode == 2, ended.stdout
        assert words in ended.stderr
        assert "Traceback" not in ended.stderr


def test_differences_are_named() -> None:
    wanted = {"softmode": "1", "solver": "a" * 64, "numpy": "2.0"}
    assert difference(wanted, dict(wanted)) is None
    assert difference(wanted, wanted | {"numpy": "2.1"}) == "numpy 2.1 instead of 2.0"
    assert difference(wanted, wanted | {"solver": "b" * 64}) == f"solver {'b' * 12} instead of {'a' * 12}"
    assert "numpy none instead of 2.0" in (difference(wanted, {}) or "")


@pytest.mark.soak
@pytest.mark.slow
@needs_dask
def test_a_lost_worker_loses_nothing(start_server: ServerFactory, cluster: Cluster) -> None:
    calm = start_server("--workers", "2", data="calm")
    expected = finish(calm, start(calm, SHEET)["id"])
    calm.stop()
    server = start_server("--cluster", cluster.address)
    assert server.counts()["workers"] == 2
    assert server.worker_pids() == []
    job = start(server, SHEET)
    server.wait_until(lambda: facts_of(server, job["id"])["done"] >= 60)
    assert facts_of(server, job["id"])["state"] == "running"
    cluster.processes[-1].send(signal.SIGKILL)
    result = finish(server, job["id"])
    assert numbers(result) == numbers(expected)
    server.wait_until(lambda: server.counts()["workers"] == 1)
    assert server.counts()["workers_lost"] == 1


@pytest.mark.soak
@pytest.mark.slow
@needs_dask
def test_what_ends_two_workers_is_given_up(start_server: ServerFactory, tmp_path: Path) -> None:
    cluster = Cluster(tmp_path)
    try:
        cluster.start_worker()
        server = start_server("--cluster", cluster.address)
        # a scheduler's own limit would be four workers
        job = start(server, {"spins": 3000, "points": 5, "to": 1.5})
        server.wait_until(lambda: server.counts()["workers_busy"] == 1)
        cluster.processes[-1].stop()
        assert facts_of(server, job["id"])["state"] == "running"
        cluster.start_worker().stop()
        server.wait_until(lambda: facts_of(server, job["id"])["state"] == "failed")
        assert facts_of(server, job["id"])["error"]["code"] == "kills-workers"
        cluster.start_worker()
        assert server.client.get("/api/sweep?spins=3&points=5").status_code == 200
    finally:
        cluster.stop()


@pytest.mark.soak
@pytest.mark.slow
@needs_dask
def test_a_link_and_a_point_are_computed_on_the_cluster(
    start_server: ServerFactory, cluster: Cluster, tmp_path: Path
) -> None:
    link = "/sweep?spins=9&points=33"
    written = []
    for name, options in (("here", []), ("there", ["--cluster", cluster.address])):
        out = tmp_path / f"{name}.csv"
        ended = program("compute", link, *options, "--out", str(out))
        assert ended.returncode == 0, ended.stderr
        written.append([line for line in out.read_text().splitlines() if not line.startswith("#")])
    assert written[0] == written[1]
    server = start_server("--cluster", cluster.address)
    there = server.client.get("/api/point?spins=9&points=33&at=0.5").json()
    here = start_server("--workers", "1", data="here")
    assert numbers(here.client.get("/api/point?spins=9&points=33&at=0.5").json()) == numbers(there)


@pytest.mark.soak
@pytest.mark.slow
@needs_dask
def test_cancelling_frees_the_workers_soon(start_server: ServerFactory, cluster: Cluster) -> None:
    server = start_server("--cluster", cluster.address)
    job = start(server, LONG)
    server.wait_until(lambda: server.counts()["workers_busy"] == 2)
    server.client.delete(f"/api/jobs/{job['id']}?for=everyone")
    asked = time.monotonic()
    server.wait_until(lambda: server.counts()["workers_busy"] == 0, 5.0)
    assert time.monotonic() - asked < 1.0
    assert facts_of(server, job["id"])["state"] == "cancelled"
    assert server.counts()["workers_lost"] == 0
    assert server.client.get("/api/sweep?spins=3&points=5").status_code == 200
    # taken up again, it goes on where it was
    again = start(server, LONG)
    assert again["id"] == job["id"]
    assert again["state"] in {"queued", "running"}


@pytest.mark.soak
@pytest.mark.slow
@needs_dask
@pytest.mark.skipif(shutil.which("openssl") is None, reason="no openssl to make a certificate with")
def test_an_encrypted_cluster_is_used_with_its_certificate_only(
    start_server: ServerFactory, tmp_path: Path
) -> None:
    made, wrong = (tmp_path / f"{name}.pem" for name in ("made", "wrong"))
    for file in (made, wrong):
        request = f"openssl req -x509 -newkey rsa:2048 -nodes -subj /CN=test -keyout {file} -out {file}.cert"
        subprocess.run(request.split(), check=True, capture_output=True)
        file.write_text(file.read_text() + Path(f"{file}.cert").read_text())
    encrypted = Cluster(tmp_path, made)
    try:
        encrypted.start_worker()
        known = {
            name: {
                "DASK_DISTRIBUTED__COMM__TLS__CA_FILE": str(file),
                "DASK_DISTRIBUTED__COMM__TLS__CLIENT__CERT": str(file),
                "DASK_DISTRIBUTED__COMM__TLS__CLIENT__KEY": str(file),
            }
            for name, file in (("made", made), ("wrong", wrong))
        }
        server = start_server("--cluster", encrypted.address, environment=known["made"])
        assert server.client.get("/api/sweep?spins=3&points=5").status_code == 200
        for environment in (known["wrong"], {}):
            out = str(tmp_path / "x.json")
            ended = program(
                "compute", "spins=2&points=3", "--cluster", encrypted.address, "--out", out, **environment
            )
            assert ended.returncode == 2
            assert encrypted.address in ended.stderr
            assert "Traceback" not in ended.stderr
    finally:
        encrypted.stop()


OTHER_SCIPY = """
import scipy
scipy.__version__ = "0.0.1"
"""


@pytest.mark.soak
@pytest.mark.slow
@needs_dask
def test_a_worker_with_other_versions_is_refused(
    start_server: ServerFactory, cluster: Cluster, tmp_path: Path
) -> None:
    server = start_server("--cluster", cluster.address)
    assert server.client.get("/api/sweep?spins=3&points=5").status_code == 200
    odd = tmp_path / "odd"
    odd.mkdir()
    (odd / "sitecustomize.py").write_text(textwrap.dedent(OTHER_SCIPY))
    third = cluster.start_worker(environment={"PYTHONPATH": f"{odd}:{ROOT}"})
    refused = server.client.post("/api/jobs", json=SHEET)
    assert refused.status_code == 503
    assert refused.headers["retry-after"]
    error = refused.json()["error"]
    assert error["code"] == "workers-differ"
    assert "scipy 0.0.1 instead of" in error["message"]
    assert "tcp://127.0.0.1:" in error["value"]
    # what is there already needs no worker
    assert server.client.get("/api/sweep?spins=3&points=5").status_code == 200
    started = program(
        "--cluster", cluster.address, "--data", str(tmp_path / "x"), "--port", "0", "--no-browser"
    )
    assert started.returncode == 2
    assert "scipy 0.0.1" in started.stderr
    third.stop()
    server.wait_until(lambda: server.counts()["workers"] == 2)
    finish(server, start(server, {"spins": 4, "points": 7})["id"])


@pytest.mark.soak
@pytest.mark.slow
@needs_dask
def test_a_lost_scheduler_is_told_and_waited_for(start_server: ServerFactory, cluster: Cluster) -> None:
    calm = start_server("--workers", "2", data="calm")
    expected = finish(calm, start(calm, SHEET)["id"])
    calm.stop()
    server = start_server("--cluster", cluster.address)
    job = start(server, SHEET)
    server.wait_until(lambda: facts_of(server, job["id"])["done"] >= 40)
    for process in cluster.processes:
        process.stop()
    server.wait_until(lambda: "notice" in facts_of(server, job["id"]))
    facts = facts_of(server, job["id"])
    assert facts["state"] == "running"
    assert "lost" in facts["notice"]
    assert cluster.address in facts["notice"]
    assert server.counts()["workers_ready"] == 0
    refused = server.client.post("/api/jobs", json={"spins": 5, "points": 7})
    assert refused.status_code == 503
    assert refused.json()["error"]["code"] == "executor-lost"
    cluster.start_scheduler()
    server.wait_until(lambda: "no workers" in facts_of(server, job["id"]).get("notice", ""))
    cluster.start_worker()
    result = finish(server, job["id"])
    assert numbers(result) == numbers(expected)
    assert "notice" not in facts_of(server, job["id"])
    # nothing is computed twice that had arrived
    assert server.counts()["points_computed"] == SHEET["points"]


@pytest.mark.soak
@pytest.mark.slow
@needs_dask
def test_a_scheduler_that_stays_away_ends_the_job(start_server: ServerFactory, cluster: Cluster) -> None:
    server = start_server("--cluster", cluster.address, "--cluster-patience", "2")
    job = start(server, SHEET)
    server.wait_until(lambda: facts_of(server, job["id"])["done"] >= 40)
    for process in cluster.processes:
        process.stop()
    server.wait_until(lambda: facts_of(server, job["id"])["state"] == "failed")
    error = facts_of(server, job["id"])["error"]
    assert error["code"] == "executor-lost"
    assert "Finished parts are kept" in error["message"]
    cluster.start_scheduler()
    cluster.start_worker()
    server.wait_until(lambda: server.counts()["workers_ready"] == 1)
    result = finish(server, start(server, SHEET)["id"])
    assert result["complete"]
    assert server.counts()["points_computed"] == SHEET["points"]
