"""What visitors meet while many others look on: python -m tests.benchmarks.measure_load [SECONDS].

A long sweep runs; a hundred event streams watch it; requests come at a steady rate, most for what is there,
some for something new; in between somebody turns a knob. All on loopback, and over when the time is.
"""

import json
import os
import statistics
import sys
import tempfile
import threading
import time
from collections import Counter
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import httpx

from tests.running import RunningServer

STREAMS = 100
REQUESTS = 500
LONG = {"spins": 40, "points": 2001, "to": 1.5, "levels": 12}
CACHED = ("/sweep?spins=5&points=21", "/api/sweep?spins=5&points=21", "/api/sweep.csv?spins=5&points=21", "/")
KNOB_EVERY = 2.0
MEMORY_EVERY = 1.0


@dataclass
class Load:
    """What a run has shown: status codes, seconds of answers by kind, memory of the server in bytes."""

    statuses: Counter[int] = field(default_factory=Counter)
    seconds: dict[str, list[float]] = field(default_factory=lambda: {"cached": [], "new": [], "knob": []})
    memory: list[tuple[float, int]] = field(default_factory=list)
    streams_ended: int = 0
    events: int = 0

    def quantile(self, kind: str, share: float) -> float:
        """Return the time within which a share of the answers of a kind came, in seconds."""
        ordered = sorted(self.seconds[kind])
        return ordered[min(len(ordered) - 1, int(share * len(ordered)))]


def resident(pid: int) -> int:
    """Return the resident memory of a process in bytes."""
    return int(Path(f"/proc/{pid}/statm").read_text().split()[1]) * os.sysconf("SC_PAGE_SIZE")


def run(server: RunningServer, seconds: float, streams: int, requests: int) -> Load:
    """Put a server under load for some seconds."""
    load = Load()
    for address in CACHED:
        server.client.get(address, headers={"accept": "text/html"}).raise_for_status()
    job = server.client.post("/api/jobs", json=LONG).json()
    began = time.monotonic()
    over = threading.Event()
    limits = httpx.Limits(max_connections=streams + 50)
    with (
        httpx.Client(base_url=server.address, timeout=60.0, trust_env=False, limits=limits) as client,
        ThreadPoolExecutor(streams + 40) as threads,
    ):
        for _ in range(streams):
            threads.submit(_watch, client, job["id"], over, load)
        threads.submit(_hold, client, job, over)
        threads.submit(_note_memory, server.pid, began, over, load)
        threads.submit(_turn_knob, client, over, load)
        for number in range(requests):
            time.sleep(max(0.0, began + seconds * number / requests - time.monotonic()))
            threads.submit(_ask, client, number, load)
        time.sleep(max(0.0, began + seconds - time.monotonic()))
        over.set()
        server.client.delete(f"/api/jobs/{job['id']}?for=everyone")
    return load


def _timed(load: Load, kind: str, ask: Callable[[], httpx.Response]) -> None:
    start = time.perf_counter()
    answer = ask()
    load.seconds[kind].append(time.perf_counter() - start)
    load.statuses[answer.status_code] += 1


def _ask(client: httpx.Client, number: int, load: Load) -> None:
    if number % 10 == 0:
        query = f"spins=3&points=11&mode={1.0 + number / 1000.0}&wait=20"
        _timed(load, "new", lambda: client.get(f"/api/sweep?{query}"))
    else:
        address = CACHED[number % len(CACHED)]
        _timed(load, "cached", lambda: client.get(address, headers={"accept": "text/html"}))


def _turn_knob(client: httpx.Client, over: threading.Event, load: Load) -> None:
    turn = 0
    held: dict[str, Any] = {}
    while not over.wait(KNOB_EVERY):
        turn += 1
        body = {"form": {"spins": "10", "splitting": str(1.0 + turn / 500.0)}, "instead": held}

        def ask(body: dict[str, Any] = body) -> httpx.Response:
            nonlocal held
            answer = client.post("/api/jobs?first=5", json=body)
            facts = answer.json()
            held = {"id": facts.get("id"), "lease": facts.get("lease")}
            return answer

        _timed(load, "knob", ask)


def _watch(client: httpx.Client, job: str, over: threading.Event, load: Load) -> None:
    with client.stream("GET", f"/api/jobs/{job}/events") as stream:
        load.statuses[stream.status_code] += 1
        for line in stream.iter_lines():
            load.events += line.startswith("event: ")
            if over.is_set():
                return
    load.streams_ended += 1


def _hold(client: httpx.Client, job: dict[str, Any], over: threading.Event) -> None:
    while not over.wait(10.0):
        client.post(f"/api/jobs/{job['id']}/leases/{job['lease']}")


def _note_memory(pid: int, began: float, over: threading.Event, load: Load) -> None:
    while not over.wait(MEMORY_EVERY):
        load.memory.append((time.monotonic() - began, resident(pid)))


def main() -> None:
    """Print what a run of some seconds shows, on this machine."""
    seconds = float(sys.argv[1]) if len(sys.argv) > 1 else 60.0
    with tempfile.TemporaryDirectory() as place:
        server = RunningServer(Path(place) / "data", "--workers", "2")
        try:
            load = run(server, seconds, STREAMS, REQUESTS)
        finally:
            server.stop()
    print(f"{STREAMS} event streams, {REQUESTS} requests in {seconds:g} s; load {os.getloadavg()[0]:.1f}")
    print("status codes:", json.dumps(load.statuses))
    print(f"events received: {load.events}; streams that ended before the time: {load.streams_ended}")
    for kind, times in load.seconds.items():
        median, late = statistics.median(times), load.quantile(kind, 0.95)
        print(f"{kind}: {len(times)} answers, median {1e3 * median:.0f} ms, 95 % within {1e3 * late:.0f} ms")
    shown = load.memory[:: max(1, len(load.memory) // 12)]
    print("memory of the server, MB:", " ".join(f"{at:.0f}s:{size / 1e6:.0f}" for at, size in shown))


if __name__ == "__main__":
    main()
