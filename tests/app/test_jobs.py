"""Jobs on a real server: shared, cancelled, killed, restarted, and fair."""

import json
import os
import signal
import threading
import time
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import httpx
import pytest

from tests.running import RunningServer, ServerFactory

LONG = {"spins": 40, "points": 2001, "to": 1.5}
LONG_QUERY = "spins=40&points=2001&to=1.5"


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
    """Return what must not depend on how often the work was interrupted."""
    return {key: value for key, value in result.items() if key not in {"provenance", "sheet", "link"}}


def events(server: RunningServer, job: str) -> list[tuple[str, dict[str, Any]]]:
    found = []
    with server.client.stream("GET", f"/api/jobs/{job}/events") as stream:
        assert stream.headers["content-type"].startswith("text/event-stream")
        assert stream.headers["x-accel-buffering"] == "no"
        name = ""
        for line in stream.iter_lines():
            if line.startswith("event: "):
                name = line.removeprefix("event: ")
            elif line.startswith("data: "):
                found.append((name, json.loads(line.removeprefix("data: "))))
    return found


def test_fifty_requests_are_one_computation(server: RunningServer) -> None:
    before = server.counts()
    query = "/api/sweep?spins=60&points=61&to=1.25"
    limits = httpx.Limits(max_connections=60)
    with (
        httpx.Client(base_url=server.address, timeout=120.0, limits=limits, trust_env=False) as client,
        ThreadPoolExecutor(50) as threads,
    ):
        answers = list(threads.map(lambda _: client.get(query), range(50)))
    assert {answer.status_code for answer in answers} == {200}
    assert len({answer.content for answer in answers}) == 1
    after = server.counts()
    assert after["jobs_started"] - before["jobs_started"] == 1
    assert after["points_computed"] - before["points_computed"] == 61
    assert len(answers[0].json()["series"]["energy"]) == 61


def test_opening_pages_computes_nothing(server: RunningServer) -> None:
    before = server.counts()
    for address in ("/", "/sweep", "/sweep?spins=33&points=50", "/api/sweep.py?spins=33", "/api/limits"):
        assert server.client.get(address, headers={"accept": "text/html"}).status_code == 200
    assert server.client.post("/api/link", json={"spins": "33"}).status_code == 200
    after = server.counts()
    assert (after["jobs_started"], after["points_computed"]) == (
        before["jobs_started"],
        before["points_computed"],
    )


def test_a_form_is_addressed_and_computed_at_once(server: RunningServer) -> None:
    answer = server.client.post("/api/jobs?first=5", json={"form": {"spins": "7", "points": "11"}}).json()
    address = server.client.post("/api/link", json={"spins": "7", "points": "11"}).json()
    assert answer["address"] == address
    assert address["id"] == answer["id"]
    assert answer["picture"]["figure"]["data"]
    assert finish(server, answer["id"])["link"] == address["link"]


def test_a_form_gives_up_what_was_shown_before(server: RunningServer) -> None:
    old = start(server, LONG | {"spins": 41})
    held = {"id": old["id"], "lease": old["lease"]}
    asked = {"form": {"spins": "41", "points": "2001", "to": "1.5", "title": "the same"}, "instead": held}
    again = server.client.post("/api/jobs", json=asked).json()
    assert again["id"] == old["id"]
    # the same computation under another title goes on: the new lease was there before the old one went
    assert facts_of(server, old["id"])["state"] in {"queued", "running"}
    held = {"id": again["id"], "lease": again["lease"]}
    other = server.client.post("/api/jobs", json={"form": {"spins": "6"}, "instead": held}).json()
    assert facts_of(server, old["id"])["state"] == "cancelled"
    # a lease that is no more, and a form that says nothing of one, give up nothing
    for more in ({"instead": held}, {"instead": {"id": "none"}}, {"instead": "x"}, {}):
        answer = server.client.post("/api/jobs", json={"form": {"spins": "6"}, **more})
        assert answer.json()["id"] == other["id"]


@pytest.mark.parametrize("form", [None, "spins=3", ["spins"], {"spins": "0"}, {"spins": 4, "nothing": 1}])
def test_a_bad_form_starts_nothing_and_leaves_nothing(server: RunningServer, form: Any) -> None:
    old = start(server, LONG | {"spins": 42})
    before = server.counts()["jobs_started"]
    held = {"id": old["id"], "lease": old["lease"]}
    answer = server.client.post("/api/jobs", json={"form": form, "instead": held})
    assert answer.status_code == 422
    assert answer.json()["error"]["field"] in {"form", "spins", "nothing"}
    assert server.counts()["jobs_started"] == before
    assert facts_of(server, old["id"])["state"] in {"queued", "running"}
    server.client.delete(f"/api/jobs/{old['id']}?for=everyone")


def test_progress_comes_as_events(server: RunningServer) -> None:
    job = start(server, {"spins": 30, "points": 200, "to": 1.0})
    seen = events(server, job["id"])
    names = [name for name, _ in seen]
    assert names[0] == "snapshot"
    assert names[-1] == "end"
    assert set(names[1:-1]) <= {"progress", "heartbeat"}
    done = [facts["done"] for _, facts in seen if "done" in facts]
    assert done == sorted(done)
    assert seen[-1][1]["state"] == "done"
    assert seen[-1][1]["done"] == seen[-1][1]["total"] == 200
    # a finished job answers with its end at once
    assert [name for name, _ in events(server, job["id"])] == ["snapshot", "end"]


def test_partial_results_have_gaps_not_guesses(start_server: ServerFactory) -> None:
    server = start_server("--workers", "1")
    job = start(server, LONG)
    server.wait_until(lambda: facts_of(server, job["id"])["done"] > 0)
    assert server.client.get(f"/api/jobs/{job['id']}/result").status_code == 202
    result = server.client.get(f"/api/jobs/{job['id']}/result?partial=1").json()
    assert result["complete"] is False
    gaps = [energy is None for energy in result["series"]["energy"]]
    assert any(gaps)
    assert not all(gaps)
    assert gaps == [value is None for value in result["limit"]["energy_per_spin"]]
    answer = server.client.get(f"/api/sweep?{LONG_QUERY}&wait=0")
    assert answer.status_code == 202
    assert answer.json()["job"] == f"api/jobs/{job['id']}"
    picture = server.client.get(f"/api/jobs/{job['id']}/picture?{LONG_QUERY}&title=x")
    assert picture.status_code == 200
    assert picture.json()["complete"] is False
    other = server.client.get(f"/api/jobs/{job['id']}/picture?spins=15")
    assert other.status_code == 409


@pytest.mark.parametrize("how", ["lease", "everyone"])
def test_cancelling_stops_the_workers_within_a_second(start_server: ServerFactory, how: str) -> None:
    server = start_server("--workers", "2")
    job = start(server, LONG)
    server.wait_until(lambda: server.counts()["workers_busy"] == 2)
    second = start(server, LONG)
    assert second["id"] == job["id"]
    if how == "lease":
        server.client.delete(f"/api/jobs/{job['id']}?lease={job['lease']}")
        assert facts_of(server, job["id"])["state"] in {"queued", "running"}, "another viewer still holds it"
        server.client.delete(f"/api/jobs/{job['id']}?lease={second['lease']}")
    else:
        server.client.delete(f"/api/jobs/{job['id']}?for=everyone")
    asked = time.monotonic()
    server.wait_until(lambda: server.counts()["workers_busy"] == 0, 5.0)
    assert time.monotonic() - asked < 1.0
    assert facts_of(server, job["id"])["state"] == "cancelled"
    assert server.counts()["workers_lost"] == 0
    assert server.client.get(f"/api/jobs/{job['id']}/result").status_code == 409
    # and the workers are there for the next one
    assert server.client.get("/api/sweep?spins=3&points=5").status_code == 200


def test_a_point_that_takes_long_is_cut_off(start_server: ServerFactory) -> None:
    server = start_server("--workers", "2")
    job = start(server, LONG)
    server.wait_until(lambda: server.counts()["workers_busy"] == 2)
    before = server.worker_pids()
    for pid in before:
        os.kill(pid, signal.SIGSTOP)  # as deaf as in the middle of a long point
    server.client.delete(f"/api/jobs/{job['id']}?for=everyone")
    asked = time.monotonic()
    server.wait_until(lambda: server.counts()["workers_busy"] == 0, 5.0)
    assert time.monotonic() - asked < 1.0
    server.wait_until(lambda: len(server.worker_pids()) == 2 and not set(before) & set(server.worker_pids()))
    assert server.counts()["workers_lost"] == 0
    assert server.client.get("/api/sweep?spins=3&points=5").status_code == 200


def test_cancelled_work_goes_on_where_it_was(start_server: ServerFactory) -> None:
    server = start_server()
    sheet = {"spins": 20, "points": 150, "to": 1.5}
    job = start(server, sheet)
    server.wait_until(lambda: facts_of(server, job["id"])["done"] >= 8)
    server.client.delete(f"/api/jobs/{job['id']}?for=everyone")
    start(server, sheet)
    result = finish(server, job["id"])
    assert result["complete"]
    assert server.counts()["points_computed"] == 150
    assert server.counts()["jobs_cancelled"] == 1


def test_jobs_nobody_holds_are_dropped(start_server: ServerFactory) -> None:
    server = start_server("--lease", "0.4", "--grace", "0.2", "--workers", "1")
    job = start(server, LONG)
    for _ in range(8):
        time.sleep(0.2)
        renewed = server.client.post(f"/api/jobs/{job['id']}/leases/{job['lease']}")
        assert renewed.status_code == 200
        assert renewed.json()["state"] == "running"
    server.wait_until(lambda: facts_of(server, job["id"])["state"] == "cancelled", 10.0)
    gone = server.client.post(f"/api/jobs/{job['id']}/leases/{job['lease']}")
    assert gone.status_code == 404
    assert gone.json()["error"]["code"] == "unknown-lease"


def test_killed_workers_lose_nothing(start_server: ServerFactory) -> None:
    sheet = {"spins": 20, "points": 120, "to": 1.2}
    calm = start_server(data="calm")
    expected = finish(calm, start(calm, sheet)["id"])
    server = start_server(data="stormy")
    job = start(server, sheet)
    server.wait_until(lambda: server.counts()["chunks_computed"] >= 1)
    for pid in server.worker_pids():
        os.kill(pid, signal.SIGKILL)
    result = finish(server, job["id"])
    assert numbers(result) == numbers(expected)
    assert server.counts()["workers_lost"] >= 1
    assert len(server.worker_pids()) == server.counts()["workers"]


def test_what_kills_workers_twice_is_refused(start_server: ServerFactory) -> None:
    server = start_server("--workers", "1")
    job = start(server, LONG)
    over = threading.Event()

    def kill() -> None:
        while not over.is_set():
            if server.counts()["workers_busy"]:
                for pid in server.worker_pids():
                    os.kill(pid, signal.SIGKILL)
            time.sleep(0.02)

    killer = threading.Thread(target=kill)
    killer.start()
    try:
        server.wait_until(lambda: facts_of(server, job["id"])["state"] == "failed")
    finally:
        over.set()
        killer.join()
    again = server.client.post("/api/jobs", json=LONG)
    assert again.status_code == 500
    assert again.json()["error"]["code"] == "kills-workers"
    assert "fewer spins" in again.json()["error"]["message"]
    # other sheets are computed as before
    assert server.client.get("/api/sweep?spins=3&points=5").status_code == 200


@pytest.mark.parametrize("sign", [signal.SIGKILL, signal.SIGTERM])
def test_a_restart_resumes_from_finished_chunks(start_server: ServerFactory, sign: int) -> None:
    sheet = {"spins": 20, "points": 150, "to": 1.2}
    first = start_server("--workers", "1")
    job = start(first, sheet)
    first.wait_until(lambda: first.counts()["chunks_computed"] >= 3)
    workers = first.worker_pids()
    ended: list[tuple[str, dict[str, Any]]] = []
    watcher = threading.Thread(target=lambda: ended.extend(events(first, job["id"])))
    if sign == signal.SIGTERM:
        watcher.start()
        time.sleep(0.3)
    first.process.send_signal(sign)
    first.process.wait(15)
    if sign == signal.SIGTERM:
        watcher.join(10)
        assert ended[-1] == ("end", ended[-1][1] | {"state": "restarting"})
    first.stop()
    first.wait_until(lambda: not any(os.path.exists(f"/proc/{pid}") for pid in workers), 5.0)  # noqa: PTH110
    second = start_server("--workers", "1")
    assert second.client.get(f"/api/jobs/{job['id']}").status_code == 404
    assert start(second, sheet)["id"] == job["id"]
    result = finish(second, job["id"])
    counts = second.counts()
    assert counts["chunks_found"] >= 2
    assert 0 < counts["points_computed"] < 150
    calm = start_server("--workers", "2", data="calm")
    assert numbers(result) == numbers(finish(calm, start(calm, sheet)["id"]))
    # a third time everything is there
    second.stop()
    third = start_server("--workers", "1")
    assert start(third, sheet)["state"] == "done"
    assert third.counts()["points_computed"] == 0
    assert finish(third, job["id"]) == result


def test_the_queue_is_bounded(start_server: ServerFactory) -> None:
    server = start_server("--workers", "1", "--queue", "3")
    for spins in (40, 41, 42):
        start(server, LONG | {"spins": spins})
    refused = server.client.post("/api/jobs", json=LONG | {"spins": 43})
    assert refused.status_code == 503
    assert refused.headers["retry-after"]
    assert refused.json()["error"]["code"] == "queue-full"
    # joining what runs already is no new work
    start(server, LONG | {"spins": 41})


def test_small_sheets_do_not_wait_for_large_ones(start_server: ServerFactory) -> None:
    server = start_server("--workers", "1")
    large = start(server, LONG)
    server.wait_until(lambda: server.counts()["workers_busy"] == 1)
    answer = server.client.get("/api/sweep?spins=4&points=11&wait=60")
    assert answer.status_code == 200
    assert facts_of(server, large["id"])["state"] == "running"


@pytest.mark.soak
def test_a_long_sheet_goes_on_while_small_ones_keep_coming(start_server: ServerFactory) -> None:
    server = start_server("--workers", "1")
    large = start(server, LONG | {"spins": 200})
    server.wait_until(lambda: server.counts()["workers_busy"] == 1)
    before = facts_of(server, large["id"])["done"]
    for k in range(12):
        # each is over before the long one has had much of a turn
        assert server.client.get(f"/api/sweep?spins=10&points=41&mode={1 + k / 100}").status_code == 200
        assert facts_of(server, large["id"])["state"] == "running"
    assert facts_of(server, large["id"])["done"] > before


@pytest.mark.soak
def test_clients_share_the_processors(start_server: ServerFactory) -> None:
    """Two clients by address: one with a single long sheet, one with three."""
    server = start_server("--workers", "1")
    other = httpx.Client(
        base_url=server.address,
        timeout=60.0,
        trust_env=False,
        transport=httpx.HTTPTransport(local_address="127.0.0.2"),
    )
    with other:
        single = start(server, LONG | {"spins": 100})
        many = [other.post("/api/jobs", json=LONG | {"spins": spins}).json() for spins in (101, 102, 103)]

        def done() -> list[int]:
            return [facts_of(server, job["id"])["done"] for job in (single, *many)]

        server.wait_until(lambda: min(done()) > 0)
        before = done()
        server.wait_until(lambda: sum(done()) - sum(before) >= 240, 240.0)
        gained = [after - one for after, one in zip(done(), before, strict=True)]
    # the sheets cost nearly the same for each point; a chunk more or less is no injustice
    assert 0.3 <= gained[0] / sum(gained) <= 0.7
    assert min(gained[1:]) > 0


def test_expensive_sheets_are_refused_before_they_run(start_server: ServerFactory) -> None:
    server = start_server("--ceiling", "0.5")
    for answer in (
        server.client.get("/api/sweep?spins=2000&points=500"),
        server.client.post("/api/jobs", json={"spins": 2000, "points": 500}),
    ):
        assert answer.status_code == 422
        error = answer.json()["error"]
        assert (error["code"], error["field"]) == ("too-expensive", "points")
        assert "fewer points" in error["message"]
    assert server.counts()["points_computed"] == 0
    assert server.client.get("/api/sweep?spins=2&points=5").status_code == 200


def test_a_wrong_forecast_cannot_hold_the_workers(start_server: ServerFactory) -> None:
    server = start_server("--ceiling", "1", "--workers", "1")
    job = start(server, {"spins": 10, "points": 60})
    stopped = server.worker_pids()
    for pid in stopped:
        os.kill(pid, signal.SIGSTOP)  # a point that takes for ever
    server.wait_until(lambda: facts_of(server, job["id"])["state"] in {"failed", "done"}, 30.0)
    facts = facts_of(server, job["id"])
    assert facts["state"] == "failed"
    assert facts["error"]["code"] == "took-too-long"
    # a new process takes the place of the one that was ended
    server.wait_until(lambda: server.counts()["workers_lost"] > 0 or server.worker_pids() != stopped, 30.0)
    server.wait_until(lambda: server.counts()["workers_ready"] == 1, 60.0)
    assert server.client.get("/api/sweep?spins=3&points=5").status_code == 200


def test_unknown_jobs(server: RunningServer) -> None:
    for answer in (
        server.client.get("/api/jobs/none"),
        server.client.get("/api/jobs/none/events"),
        server.client.get("/api/jobs/none/result"),
        server.client.get("/api/jobs/none/picture"),
        server.client.delete("/api/jobs/none?for=everyone"),
        server.client.post("/api/jobs/none/leases/x"),
    ):
        assert answer.status_code == 404
        assert answer.json()["error"]["code"] == "unknown-job"


def test_the_first_points_come_before_the_last(server: RunningServer) -> None:
    job = start(server, {"spins": 31, "points": 301})
    seen = [facts["done"] for name, facts in events(server, job["id"]) if name == "progress"]
    assert seen
    assert 0 < seen[0] < 301


def test_the_first_picture_comes_with_the_job(server: RunningServer) -> None:
    asked = server.client.post("/api/jobs?first=5", json={"link": "/sweep?spins=7&points=41"})
    assert asked.status_code == 202
    facts = asked.json()
    assert facts["done"] > 0
    apart = server.client.get(f"/api/jobs/{facts['id']}/picture").json()
    assert facts["picture"].keys() == apart.keys()
    assert facts["picture"]["figure"]["data"]
    refused = server.client.post("/api/jobs?first=soon", json={"link": "/sweep?spins=7&points=41"})
    assert refused.status_code == 422
    assert refused.json()["error"]["field"] == "first"
