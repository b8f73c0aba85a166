"""Measure a running service, nothing passes or fails: python -m tests.benchmarks.measure_service."""

from __future__ import annotations

import json
import os
import statistics
import tempfile
import time
from pathlib import Path

from playwright.sync_api import Page, sync_playwright

from tests.browser.conftest import CHROMIUM, DRAWN, FLAGS
from tests.running import RunningServer

LARGE = "/sweep?spins=1000&to=1.5&points=201"
LONG = "/sweep?spins=200&to=1.5&points=2001"
WARM = "/sweep?spins=8&points=11"
# the page sets aria-busy while it asks, and Plotly adds its svg with the first curve
WATCH = """
() => {
  window.firstCurve = null;
  const stage = document.querySelector("#stage");
  const plot = stage.querySelector(".js-plotly-plot");
  plot.on("plotly_afterplot", () => { window.firstCurve ??= performance.now(); });
  const box = document.querySelector("#box-spins");
  window.changed = null;
  box.addEventListener("change", () => { window.changed = performance.now(); }, { capture: true });
}
"""


def _first_curve(page: Page, spins: int) -> float:
    """Milliseconds from the committed change of N to the first drawn curve of the new sweep."""
    page.evaluate(WATCH)
    box = page.locator("#box-spins")
    box.fill(str(spins))
    box.press("Enter")
    page.wait_for_function("() => window.firstCurve !== null && window.changed !== null")
    taken = page.evaluate("() => window.firstCurve - window.changed")
    page.wait_for_selector(DRAWN, state="attached")
    page.wait_for_timeout(1500)
    return float(taken)


def _complete(server: RunningServer, link: str) -> tuple[float, int]:
    """Seconds until the whole sweep is there, and how many progress reports came on the way."""
    began = time.perf_counter()
    job = server.client.post("/api/jobs", json={"link": link}).json()
    reports = 0
    with server.client.stream("GET", f"/api/jobs/{job['id']}/events") as stream:
        for line in stream.iter_lines():
            reports += line.startswith("event: progress")
            if line.startswith("event: end"):
                break
    return time.perf_counter() - began, reports


def _knob_moves(server: RunningServer, moves: int = 20) -> list[float]:
    """Seconds until the first picture of each of some new sweeps, while a long one is under way."""
    long = server.client.post("/api/jobs", json={"link": LONG}).json()
    server.wait_until(lambda: server.client.get(f"/api/jobs/{long['id']}").json()["done"] > 0)
    taken = []
    held = None
    for k in range(moves):
        time.sleep(0.3)
        form = {"spins": "20", "points": "101", "coupling": "0.5", "mode": str(1.0 + (k + 1) / 500)}
        began = time.perf_counter()
        asked = server.client.post("/api/jobs?first=5", json={"form": form, "instead": held}).json()
        taken.append(time.perf_counter() - began)
        assert asked["picture"]["figure"]["data"]
        held = {"id": asked["id"], "lease": asked["lease"]}
    assert server.client.get(f"/api/jobs/{long['id']}").json()["state"] == "running"
    server.client.delete(f"/api/jobs/{long['id']}?for=everyone")
    return taken


def _maps_and_cutoffs(server: RunningServer) -> None:
    """Print how long maps of 61 x 61 cells and a cutoff question for N = 100 take."""
    for spins in (20, 100):
        for every in ("adaptive", "all"):
            link = f"/map?spins={spins}&every={every}"
            began = time.perf_counter()
            job = server.client.post("/api/jobs?first=5", json={"link": link}).json()
            first = time.perf_counter() - began
            rest = _complete(server, link)[0]
            print(f"{link}: first cells {first:.2f} s, complete {first + rest:.1f} s, {job['total']} cells")
    for link in ("/cutoff?spins=100", "/cutoff?spins=100&stated=40"):
        print(f"{link}: {_complete(server, link)[0]:.2f} s")


def main() -> None:
    """Print what a user would wait for, on this machine."""
    with tempfile.TemporaryDirectory() as place:
        server = RunningServer(Path(place) / "data", "--workers", "2")
        try:
            _complete(server, WARM)
            sweeps = [_complete(server, f"/sweep?mode={1 + k / 1000}")[0] for k in range(5)]
            print(f"default sweep, N = 20, 101 points, 6 levels: {statistics.median(sweeps):.2f} s")
            moves = sorted(_knob_moves(server))
            middle = statistics.median(moves)
            print("first picture of a new sweep while a long one runs, 20 times, ms:")
            print(f"  median {1e3 * middle:.0f}, 90 % {1e3 * moves[-3]:.0f}, most {1e3 * moves[-1]:.0f}")
            with sync_playwright() as driver:
                browser = driver.chromium.launch(executable_path=CHROMIUM, args=FLAGS)
                page = browser.new_page()
                page.goto(f"{server.address}/sweep")
                page.wait_for_selector(DRAWN, state="attached")
                page.wait_for_timeout(2500)
                taken = [_first_curve(page, spins) for spins in (21, 22, 19, 18, 23)]
                browser.close()
            print("first curve after a committed change of N, ms:", [round(t) for t in taken])
            seconds, reports = _complete(server, LARGE)
            print(
                f"N = 1000, 201 points to three times critical: {seconds:.1f} s, {reports} progress reports"
            )
            _maps_and_cutoffs(server)
            print(json.dumps({"processors": os.cpu_count()}))
        finally:
            server.stop()


if __name__ == "__main__":
    main()
