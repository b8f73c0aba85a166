"""Taking results along: link, files, script; and long work: progress, cancel, going on."""

import csv
import io
import json
import subprocess
import sys
from pathlib import Path

from tests.browser.conftest import VisitFactory
from tests.running import RunningServer

QUERY = "spins=3&points=11"
LONG = "spins=900&points=401&to=1"


def test_link_is_copied_without_the_clipboard_interface(visit: VisitFactory) -> None:
    one = visit(color_scheme="light")
    page = one.open(f"/sweep?{QUERY}")
    page.evaluate("Object.defineProperty(navigator, 'clipboard', {value: undefined})")
    page.click("#copy-link")
    page.locator("#said", has_text="Link copied.").wait_for()
    page.focus("#group-words summary")
    page.keyboard.press("Enter")
    page.focus("#box-note")
    page.keyboard.press("Control+V")
    assert page.input_value("#box-note") == page.url


def test_files_hold_the_numbers_of_the_page(visit: VisitFactory, server: RunningServer) -> None:
    page = visit().open(f"/sweep?{QUERY}")
    expected = server.client.get(f"/api/sweep?{QUERY}").json()
    with page.expect_download() as saved:
        page.click("#save-json")
    assert json.loads(saved.value.path().read_text()) == expected
    assert saved.value.suggested_filename == f"softmode-{expected['id'][:12]}.json"
    with page.expect_download() as saved:
        page.click("#save-csv")
    lines = [line for line in saved.value.path().read_text().splitlines() if not line.startswith("#")]
    rows = list(csv.DictReader(io.StringIO("\n".join(lines))))
    assert [float(row["boson_number"]) for row in rows] == expected["series"]["boson_number"]
    with page.expect_download() as saved:
        page.click("#save-png")
    picture = saved.value.path().read_bytes()
    assert picture.startswith(b"\x89PNG")
    assert len(picture) > 20_000
    with page.expect_download() as saved:
        page.click("#save-svg")
    drawing = saved.value.path().read_text()
    assert drawing.startswith("<svg")
    assert "Energy levels" in drawing
    assert "token:" not in drawing


def test_script_shown_by_the_page_runs(visit: VisitFactory, tmp_path: Path) -> None:
    page = visit().open(f"/sweep?{QUERY}")
    page.click("#show-python")
    page.locator("#python").wait_for(state="visible")
    script = tmp_path / "sweep.py"
    script.write_text(page.inner_text("#python-code"))
    page.click("#python-close")
    assert page.locator("#python").is_hidden()
    run = subprocess.run(
        [sys.executable, str(script)], capture_output=True, text=True, timeout=120, check=False
    )
    assert run.returncode == 0, run.stderr
    assert len(run.stdout.splitlines()) == 11


def test_long_work_shows_progress_and_is_cancelled_for_real(
    visit: VisitFactory, server: RunningServer
) -> None:
    one = visit()
    before = server.counts()["jobs_cancelled"]
    page = one.open(f"/sweep?{LONG}", drawn=False)
    page.locator("#progress").wait_for(state="visible")
    one.until("document.getElementById('bar').max === 401")
    one.until("document.getElementById('plot').data?.length > 0")
    assert "of 401 points" in page.inner_text("#progress-words")
    assert page.get_attribute("#stage", "aria-busy") == "true"
    page.click("#cancel")
    page.locator("#progress-words", has_text="Cancelled").wait_for()
    server.wait_until(lambda: server.counts()["jobs_cancelled"] == before + 1)
    assert page.locator("#cancel").is_hidden()
    assert page.locator("#strip").is_visible()
    page.click("#go-on")
    page.locator("#cancel").wait_for(state="visible")
    page.click("#cancel")
    page.locator("#progress-words", has_text="Cancelled").wait_for()


def test_leaving_the_page_stops_work_nobody_else_waits_for(
    visit: VisitFactory, server: RunningServer
) -> None:
    one = visit()
    page = one.open(f"/sweep?{LONG}&ratio=0.9", drawn=False)
    one.until("document.getElementById('bar').max === 401")
    server.wait_until(lambda: server.counts()["jobs_active"] == 1)
    page.goto("about:blank")
    server.wait_until(lambda: server.counts()["jobs_active"] == 0)


def test_a_sheet_that_costs_too_much_is_refused_with_what_to_change(visit: VisitFactory) -> None:
    one = visit()
    one.expected = ("422",)
    page = one.open("/sweep?spins=5000&points=2001&levels=40&to=3", drawn=False)
    page.locator("#message").wait_for(state="visible")
    assert len(page.inner_text("#message")) > 40
    assert page.locator("#progress").is_hidden()


def test_a_renewed_server_asks_for_a_reload(visit: VisitFactory) -> None:
    one = visit()
    page = one.open("/sweep?spins=2&points=9")
    # the page believes it came with other files, as after an upgrade
    page.route("**/health", lambda route: route.fulfill(json={"assets": "other", "solver": "other"}))
    page.route("**/events", lambda route: route.abort())
    one.expected = ("ERR_FAILED",)
    page.fill("#box-spins", "900")
    page.fill("#box-points", "401")
    page.press("#box-points", "Enter")
    page.locator("#reload").wait_for(state="visible")
    page.unroute("**/health")
    page.unroute("**/events")
    page.locator("#cancel").click()


def test_without_event_streams_the_page_asks_instead(visit: VisitFactory) -> None:
    one = visit()
    one.expected = ("ERR_FAILED",)
    page = one.page
    page.route("**/events", lambda route: route.abort())
    one.open("/sweep?spins=60&points=41&to=1")
    assert page.locator("#strip").is_visible()


def test_a_long_note_gets_a_short_link_that_opens(visit: VisitFactory) -> None:
    one = visit()
    page = one.open("/sweep?spins=2&points=9")
    page.click("#group-words summary")
    note = "Measured on a Tuesday, détuning ± 3 kHz. " * 45
    with page.expect_response(lambda answer: "/api/face" in answer.url):
        page.fill("#box-note", note.strip())
        page.focus("#box-spins")
    one.until("location.search.startsWith('?stored=')")
    one.commit("spins", "3")
    again = visit()
    again.open(f"/sweep?{one.query}")
    assert again.page.inner_text("#note") == note.strip()
    assert again.page.input_value("#box-spins") == "3"
    assert again.query == one.query
