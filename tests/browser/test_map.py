"""The map in a real browser: draws, reads out, leads to points, sweeps and zoomed maps."""

import json
import re
from typing import Any
from urllib.parse import urlsplit

import numpy as np
import pytest
from playwright.sync_api import Page

from tests.browser.conftest import Visit, VisitFactory
from tests.running import RunningServer

MAP = "spins=4&to=1&points=13&across=splitting&low=0.4&high=1.6&rows=9&every=all"
DRAWN = "#stage[aria-busy=false] .main-svg"


def opened(one: Visit, query: str = MAP) -> Page:
    page = one.open(f"/map?{query}")
    page.wait_for_selector(DRAWN, state="attached")
    page.wait_for_selector("#cut-column .main-svg", state="attached")
    return page


def result(server: RunningServer, query: str = MAP) -> dict[str, Any]:
    found: dict[str, Any] = server.client.get(f"/api/map?{query}").json()
    return found


def value(page: Page, cell: int = 0) -> str:
    return page.locator("#cells .value").nth(cell).inner_text().replace("\u2212", "-").split()[0]


def centre(page: Page, column: int, row: int) -> tuple[float, float]:
    """Return where a cell lies on the screen."""
    place = page.evaluate(
        """([column, row]) => {
            const full = document.getElementById("plot")._fullLayout;
            const box = document.getElementById("stage").getBoundingClientRect();
            const trace = document.getElementById("plot").data[0];
            return [box.left + full.xaxis._offset + full.xaxis.d2p(trace.x[column]),
                    box.top + full.yaxis._offset + full.yaxis.d2p(trace.y[row])];
        }""",
        [column, row],
    )
    return place[0], place[1]


def test_draws_reads_out_and_follows_keys(visit: VisitFactory, server: RunningServer) -> None:
    one = visit()
    page = opened(one)
    found = result(server)
    drawn = page.evaluate("document.getElementById('plot').data[0].z")
    assert drawn == found["series"]["gap"]
    names = page.evaluate("document.getElementById('plot').data.map((trace) => trace.name)")
    assert "critical" in names
    page.focus("#map-cursor")
    for key in ("Home", "ArrowRight", "ArrowRight", "Shift+ArrowDown", "ArrowUp"):
        page.keyboard.press(key)
    page.locator("#place", has_text="λ = 0.166666").wait_for()
    assert "ω₀ = 0.55" in page.inner_text("#place")
    assert float(value(page)) == pytest.approx(found["series"]["gap"][1][2], abs=1e-8)
    assert value(page, 1) == str(found["series"]["cutoff_needed"][1][2])
    assert page.inner_text("#state") == "computed"
    assert page.locator("#cells .bound").first.inner_text().startswith("±")
    one.until("document.getElementById('spoken').textContent.includes('0.55')")
    row = page.evaluate("document.getElementById('cut-row').data.at(-1).y")
    column = page.evaluate("document.getElementById('cut-column').data.at(-1).y")
    assert row == found["series"]["gap"][1]
    assert column == [line[2] for line in found["series"]["gap"]]
    assert page.inner_text("#counted").startswith("117 of 117 cells computed")
    x, y = centre(page, 9, 6)
    page.mouse.move(x, y)
    page.locator("#place", has_text="λ = 0.75").wait_for()
    assert float(value(page)) == pytest.approx(found["series"]["gap"][6][9], abs=1e-8)


def test_a_click_opens_the_point_and_back_finds_the_cell(visit: VisitFactory, server: RunningServer) -> None:
    one = visit()
    page = opened(one, f"{MAP}&show=boson-number")
    found = result(server)
    page.mouse.move(*centre(page, 6, 4))
    page.locator("#place", has_text="λ = 0.5").wait_for()
    page.mouse.click(*centre(page, 6, 4))
    page.wait_for_url("**/point?**")
    page.wait_for_selector("#content:not([hidden])")
    query = urlsplit(page.url).query
    point = server.client.get(f"/api/point?{query}").json()["series"]
    error = point["boson_number_error"][0] + found["series"]["boson_number_error"][4][6]
    assert point["boson_number"][0] == pytest.approx(found["series"]["boson_number"][4][6], abs=error)
    shown = page.locator("#numbers .cell", has_text="Boson number ⟨n⟩").first.locator(".value").inner_text()
    assert float(shown) == pytest.approx(found["series"]["boson_number"][4][6], abs=1e-7)
    page.go_back()
    page.wait_for_selector(DRAWN, state="attached")
    page.locator("#place", has_text="λ = 0.5").wait_for()
    page.focus("#map-cursor")
    page.keyboard.press("Enter")
    page.wait_for_url("**/point?**at=0.5**")


def test_rows_and_columns_are_sweeps(visit: VisitFactory, server: RunningServer) -> None:
    one = visit()
    page = opened(one)
    found = result(server)
    page.focus("#map-cursor")
    page.keyboard.press("Home")
    page.keyboard.press("ArrowUp")
    page.click("#row-sweep")
    page.wait_for_url("**/sweep?**")
    one.wait_drawn()
    sweep = server.client.get(f"/api/sweep?{urlsplit(page.url).query}").json()
    assert sweep["axis"] == found["axis"]
    assert np.allclose(sweep["series"]["boson_number"], found["series"]["boson_number"][5], atol=1e-9)
    page.go_back()
    page.wait_for_selector(DRAWN, state="attached")
    page.locator("#place", has_text="λ = 0 ω").wait_for()
    page.click("#column-sweep")
    page.wait_for_url("**/sweep?**along=splitting**")
    one.wait_drawn()
    sweep = server.client.get(f"/api/sweep?{urlsplit(page.url).query}").json()
    assert sweep["axis"]["values"] == found["across"]["values"]
    page.click("#to-map")
    page.wait_for_url("**/map?**")
    page.wait_for_selector("#plot .main-svg", state="attached")


def test_a_box_opens_the_zoomed_map_in_one_step_of_history(visit: VisitFactory) -> None:
    one = visit()
    page = opened(one)
    before = page.url
    length = page.evaluate("history.length")
    x0, y0 = centre(page, 3, 2)
    x1, y1 = centre(page, 9, 6)
    page.mouse.move(x0, y0)
    page.mouse.down()
    page.mouse.move((x0 + x1) / 2, (y0 + y1) / 2, steps=4)
    page.mouse.move(x1, y1, steps=4)
    page.mouse.up()
    one.until("old => location.href !== old", before)
    page.wait_for_selector(DRAWN, state="attached")
    keys = dict(re.findall(r"([a-z]+)=([^&]*)", one.query))
    for name, place in {"from": 0.25, "to": 0.75, "low": 0.7, "high": 1.3}.items():
        assert float(keys[name]) == pytest.approx(place, abs=0.02), name
    assert page.evaluate("history.length") == length + 1
    assert one.loads == 1
    page.go_back()
    one.until("old => location.href === old", before)
    one.until("document.getElementById('plot').data[0].x.at(-1) === 1")
    page.go_forward()
    one.until("document.getElementById('plot').data[0].x.at(-1) < 0.8")
    # the keyboard's way
    page.go_back()
    one.until("document.getElementById('plot').data[0].x.at(-1) === 1")
    page.focus("#map-cursor")
    page.keyboard.press("Home")
    page.keyboard.press("+")
    one.until("document.getElementById('plot').data[0].x.at(-1) === 0.5")
    assert "to=0.5" in one.query
    page.click("#zoom-out")
    one.until("document.getElementById('plot').data[0].x.at(-1) === 1")
    assert one.loads == 1


@pytest.mark.soak
def test_other_quantities_are_drawn_without_computing(visit: VisitFactory, server: RunningServer) -> None:
    one = visit()
    page = opened(one)
    found = result(server)
    before = server.counts()["jobs_started"]
    page.select_option("#box-show", "order-parameter")
    one.until("document.getElementById('plot').data[0].name === 'order-parameter'")
    assert page.evaluate("document.getElementById('plot').data[0].z") == found["series"]["order_parameter"]
    page.fill("#box-contours", "0,3; 0,6")
    page.press("#box-contours", "Enter")
    one.until("document.getElementById('plot').data.some((trace) => trace.name === 'contour 0.6')")
    assert "contours=0.3,0.6" in one.query
    page.select_option("#box-scale", "log")
    one.until("document.getElementById('plot').data[0].zmax < 0.1")
    assert server.counts()["jobs_started"] == before
    page.fill("#box-shades", "-1:1")
    page.press("#box-shades", "Enter")
    one.expected = ("422",)
    page.locator("#problem-shades", has_text="not positive").wait_for()
    page.fill("#box-shades", "")
    page.press("#box-shades", "Enter")
    page.locator("#problem-shades").wait_for(state="hidden")
    page.fill("#box-spins", "3")
    page.press("#box-spins", "Enter")
    one.until("location.search.startsWith('?spins=3')")
    page.wait_for_selector(DRAWN, state="attached")
    page.locator("h1", has_text="N = 3").wait_for()
    page.go_back()
    page.locator("h1", has_text="N = 4").wait_for()
    assert page.input_value("#box-spins") == "4"


def test_interpolated_cells_are_dotted_and_say_so(visit: VisitFactory, server: RunningServer) -> None:
    query = "spins=3&to=0.3&points=17&across=splitting&low=0.8&high=1.6&rows=17"
    one = visit()
    page = opened(one, query)
    found = result(server, query)
    assert found["counts"]["computed"] < 17 * 17
    assert page.locator("#stage-hint").inner_text().count("interpolated") == 1
    assert "interpolated" in page.evaluate("document.getElementById('plot').data.map((trace) => trace.name)")
    row, column = map(int, np.argwhere(np.array(found["computed"]) == 0)[0])
    page.mouse.move(*centre(page, column, row))
    page.locator("#state", has_text="interpolated between computed cells, no bound").wait_for()
    assert page.locator("#cells .bound").first.inner_text() == ""


def test_files(visit: VisitFactory, server: RunningServer) -> None:
    one = visit()
    page = opened(one)
    for kind in ("csv", "json", "npz", "png", "svg"):
        with page.expect_download() as saved:
            page.click(f"#save-{kind}")
        body = saved.value.path().read_bytes()
        if kind == "json":
            assert json.loads(body) == result(server)
        if kind in {"csv", "npz"}:
            assert body == server.client.get(f"/api/map.{kind}?{MAP}").content
        if kind == "png":
            assert body.startswith(b"\x89PNG")
        if kind == "svg":
            assert b"Gap, same parity" in body
    page.evaluate("Object.defineProperty(navigator, 'clipboard', {value: undefined})")
    page.click("#copy-link")
    page.locator("#said", has_text="Link copied.").wait_for()
    page.evaluate("window.dispatchEvent(new Event('beforeprint'))")
    page.emulate_media(media="print")
    assert page.locator("#cuts").is_visible()
    assert page.locator("#toolbar").is_hidden()
    assert page.pdf(format="A4").startswith(b"%PDF")


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_narrow_screens(visit: VisitFactory, scheme: str) -> None:
    one = visit(viewport={"width": 390, "height": 844}, color_scheme=scheme, has_touch=True)
    page = opened(one, f"{MAP}&title={'long' * 25}")
    assert page.evaluate("document.documentElement.scrollWidth") == 390
    page.tap("[data-step='1,0']")
    page.locator("#place", has_text="λ = 0.583333").wait_for()
    page.evaluate("document.getElementById('stage-hint').scrollIntoView({block: 'end'})")
    page.touchscreen.tap(*centre(page, 3, 4))
    page.locator("#place", has_text="λ = 0.25").wait_for()
    assert "/map" in page.url


def test_long_work_shows_progress_and_can_be_left(visit: VisitFactory) -> None:
    one = visit()
    page = one.open("/map?spins=61&points=81&rows=81", drawn=False)
    page.locator("#progress").wait_for()
    page.locator("#progress-words", has_text="cells settled").wait_for()
    page.click("#cancel")
    page.locator("#progress-words", has_text="Cancelled").wait_for()
    assert page.locator("#go-on").is_visible()


def test_what_cannot_be_drawn_says_why(visit: VisitFactory) -> None:
    one = visit()
    one.expected = ("422",)
    page = one.open("/map?across=coupling", drawn=False)
    assert "sets already" in page.inner_text("#message")
    assert page.locator("#problem-across").is_visible()
    page.select_option("#box-across", "ratio")
    page.wait_for_selector("#plot .main-svg", state="attached")
    assert "across=ratio" in one.query
