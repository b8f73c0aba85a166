"""The cutoff desk in a real browser: answer, reverse question, margins, tables, narrow screens, paper."""

import csv
import io
import json
from pathlib import Path

import pytest
from playwright.sync_api import Page

from tests.browser.conftest import Visit, VisitFactory
from tests.running import RunningServer

QUERY = "spins=5&points=21"
ANSWERED = "html[data-answered]"


def open_desk(one: Visit, query: str = QUERY) -> Page:
    page = one.open(f"/cutoff?{query}", drawn=False)
    page.wait_for_selector(ANSWERED, state="attached")
    page.locator("#margins tr").first.wait_for(state="attached")
    return page


def answered(page: Page, visit: Visit, old: str) -> None:
    """Wait until another answer than `old` stands at the top."""
    visit.until("old => document.getElementById('headline').textContent !== old", old)
    page.wait_for_selector(ANSWERED, state="attached")


def test_the_answer_says_levels_and_largest_n(visit: VisitFactory, server: RunningServer) -> None:
    one = visit()
    page = open_desk(one)
    summary = server.client.get(f"/api/cutoff?{QUERY}").json()["summary"]
    cutoff = summary["covering"]
    assert (
        page.inner_text("#headline") == f"{cutoff + 1} boson levels (n = 0..{cutoff}) cover the whole sweep."
    )
    assert "at λ = 0.75 ω" in page.inner_text("#decided")
    rows = page.locator("#quantities tr")
    assert rows.count() == 6
    for quantity, name in (("energies", "Levels"), ("boson_number", "Boson number")):
        cells = page.locator(f"#quantities tr:has(th:text-is('{name}')) td").all_inner_texts()
        peak = summary["per_quantity"][quantity]
        assert cells[1:3] == [str(peak["cutoff"]), str(peak["cutoff"] + 1)]
        assert cells[4] == peak["status"]
    assert page.locator("#plot .main-svg").count() > 0
    assert page.locator("#reverse").is_hidden()
    assert page.get_attribute("#twin", "href") == f"api/cutoff?{QUERY}"


def test_a_stated_cutoff_answers_the_reverse_question(visit: VisitFactory, server: RunningServer) -> None:
    one = visit()
    page = open_desk(one)
    page.fill("#box-stated", "8")
    page.press("#box-stated", "Enter")
    page.locator("#verdict", has_text="Your 9 boson levels (n = 0..8)").wait_for()
    page.wait_for_selector(ANSWERED, state="attached")
    assert one.query == f"{QUERY}&stated=8"
    assert one.loads == 1
    stated = server.client.get(f"/api/cutoff?{QUERY}&stated=8").json()["summary"]["stated"]
    assert f"at {stated['good_points']} of 21 points" in page.inner_text("#verdict")
    last = stated["good"][0]["to"]
    assert page.inner_text("#where") == f"enough for λ from 0 to {last:g} ω"
    assert page.locator("#reverse-table tr").count() == 6
    page.locator("#stage", has_text="not enough").wait_for()
    page.fill("#box-stated", "60")
    page.press("#box-stated", "Enter")
    page.locator("#verdict", has_text="enough for the whole sweep").wait_for()
    page.go_back()
    page.locator("#verdict", has_text="n = 0..8").wait_for()
    assert page.input_value("#box-stated") == "8"
    page.go_back()
    page.locator("#reverse").wait_for(state="hidden")
    assert page.input_value("#box-stated") == ""
    page.go_forward()
    page.locator("#verdict", has_text="n = 0..8").wait_for()
    assert one.loads == 1


def test_quantities_can_be_left_out(visit: VisitFactory) -> None:
    one = visit()
    page = open_desk(one)
    old = page.inner_text("#headline")
    for name in ("energies", "gap", "tail"):
        with page.expect_response(lambda answer: "/api/cutoff/face" in answer.url):
            page.uncheck(f"[data-asked={name}]")
    answered(page, one, old)
    assert one.query == f"{QUERY}&asked=boson_number,order_parameter"
    assert page.locator("#quantities tr").count() == 3
    page.uncheck("[data-asked=boson_number]")
    one.expected = ("422",)
    page.uncheck("[data-asked=order_parameter]")
    page.locator("#problem-asked", has_text="at least one").wait_for()
    page.check("[data-asked=tail]")
    one.until("location.search.endsWith('asked=tail')")


def test_margins_and_the_table_of_sizes(visit: VisitFactory, server: RunningServer) -> None:
    one = visit(accept_downloads=True)
    page = open_desk(one)
    cutoff = server.client.get(f"/api/cutoff?{QUERY}").json()["summary"]["covering"]
    heads = page.locator("#margins th[scope=col]").all_inner_texts()
    assert heads[2:4] == [f"n = 0..{cutoff} (covering)", f"n = 0..{cutoff + 2} (+2)"]
    assert page.locator("#margins tr").count() == 6
    with page.expect_download() as waiting:
        page.click("#save-sizes")
    assert waiting.value.suggested_filename.startswith("softmode-cutoffs-sizes-")
    text = Path(waiting.value.path()).read_text(encoding="utf-8")
    rows = list(csv.DictReader(io.StringIO(text, newline=""), strict=True))
    assert [row["treatment"] for row in rows] == ["collective", "parity", "product"]
    assert {int(row["cutoff"]) for row in rows} == {cutoff}
    assert int(rows[0]["dimension"]) == 6 * (cutoff + 1)
    shown = page.locator("#sizes tr").nth(1).inner_text()
    assert rows[0]["dimension"] in shown
    with page.expect_download() as waiting:
        page.click("#save-json")
    found = json.loads(Path(waiting.value.path()).read_text(encoding="utf-8"))
    assert found["summary"]["covering"] == cutoff


def test_the_cursor_by_keyboard(visit: VisitFactory, server: RunningServer) -> None:
    one = visit()
    page = open_desk(one, f"{QUERY}&stated=8&at=0.6")
    result = server.client.get(f"/api/cutoff?{QUERY}&stated=8").json()
    page.locator("#strip .place", has_text="λ = 0.6 ω").wait_for()
    point = result["x"].index(0.6)
    shown = page.locator("#strip tr:has(th:text-is('gap')) td").all_inner_texts()
    assert shown[0] == str(result["needed"]["gap"][point])
    assert shown[-1] == ("enough" if result["stated"]["good"]["gap"][point] else "not enough")
    page.focus("#plot-cursor")
    page.keyboard.press("ArrowRight")
    page.locator("#strip .place", has_text="λ = 0.6375 ω").wait_for()
    assert "gap: n = " in (page.get_attribute("#plot-cursor", "aria-valuetext") or "")


def test_from_the_sweep_to_the_desk_and_back(visit: VisitFactory) -> None:
    one = visit()
    page = one.open(f"/sweep?{QUERY}&need=0.01")
    page.get_by_role("link", name="How many phonon levels?").click()
    page.wait_for_selector(ANSWERED, state="attached")
    assert one.query == f"{QUERY}&need=0.01"
    assert page.input_value("#box-need") == "0.01"
    page.click("#to-sweep")
    page.wait_for_selector("#plot .main-svg", state="attached")
    assert page.url.endswith(f"/sweep?{QUERY}&need=0.01")
    page = one.open(f"/point?{QUERY}&at=0.6", drawn=False)
    page.get_by_role("link", name="How many phonon levels?").click()
    page.wait_for_selector(ANSWERED, state="attached")
    assert one.query == f"{QUERY}&at=0.6"
    page.click("#open-point")
    page.wait_for_url(f"**/point?{QUERY}&at=0.75")
    page.wait_for_selector("html[data-drawn]", state="attached")


def test_thermal_equilibrium_and_a_start(visit: VisitFactory) -> None:
    one = visit()
    page = open_desk(one, "spins=3&points=5")
    page.click("#group-heat summary")
    page.select_option("#box-ensemble", "collective")
    one.until("location.search.includes('ensemble=collective')")
    assert one.query == "spins=3&points=5&ensemble=collective&quanta=1"
    page.locator("#quantities tr").nth(3).wait_for()
    page.wait_for_selector(ANSWERED, state="attached")
    assert page.locator("#quantities tr").count() == 4
    assert page.locator("[data-asked=gap]").is_disabled()
    page.locator("#values-there", has_text="Equilibrium there").wait_for()
    page.click("#group-start summary")
    page.select_option("#box-start", "thermal")
    page.locator("#quantities", has_text="Time evolution from its start").wait_for()
    page.locator("#margins", has_text="Time evolution from its start").wait_for()
    assert "the bare mode has the mean number 1" in page.inner_text("#more-words")
    assert "The start alone needs" in page.inner_text("#more-words")
    page.select_option("#box-ensemble", "lowest")
    one.until("!location.search.includes('ensemble')")
    assert one.query == "spins=3&points=5&start=thermal"


def test_a_map(visit: VisitFactory) -> None:
    one = visit()
    page = open_desk(one, "spins=3&points=7")
    page.click("#group-map summary")
    page.select_option("#box-across", "bias")
    page.fill("#box-rows", "4")
    page.press("#box-rows", "Enter")
    one.until("location.search.endsWith('across=bias&rows=4')")
    page.locator("#headline", has_text="the whole map").wait_for()
    page.locator("#plot .heatmaplayer image").first.wait_for(state="attached")
    assert "ε from 0 to 1" in page.inner_text("h1")
    assert page.locator("#strip").is_hidden()
    page.click("#map-rows summary")
    assert page.locator("#rows-table tr").count() == 5
    assert page.locator("#open-point").is_hidden()


def test_a_long_computation_shows_progress_and_can_be_cancelled(visit: VisitFactory) -> None:
    one = visit()
    page = one.open("/cutoff?spins=60&points=401&to=0.81", drawn=False)
    page.locator("#progress-words", has_text="of 401 points").wait_for()
    page.get_by_role("button", name="Cancel").click()
    page.locator("#progress-words", has_text="Cancelled").wait_for()
    page.get_by_role("button", name="Compute the rest").wait_for()


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_narrow_screens_need_no_sideways_scrolling(visit: VisitFactory, scheme: str) -> None:
    one = visit(viewport={"width": 390, "height": 844}, color_scheme=scheme)
    page = open_desk(one, f"{QUERY}&stated=8&note=" + "long" * 60)
    assert page.evaluate("document.documentElement.scrollWidth") == 390
    widths = page.evaluate("[...document.querySelectorAll('.main-svg')].map((drawn) => drawn.clientWidth)")
    assert max(widths) <= 390


def test_on_paper(visit: VisitFactory) -> None:
    one = visit()
    page = open_desk(one, f"{QUERY}&stated=8")
    page.evaluate("window.dispatchEvent(new Event('beforeprint'))")
    page.emulate_media(media="print")
    one.until("document.querySelector('#plot .main-svg').clientWidth < 720")
    for shown in ("#answer", "#quantities", "#reverse-table", "#margins", "#sizes", "#print-link"):
        assert page.locator(shown).is_visible()
    for hidden in ("#form", "#toolbar", "#to-sweep", "#save-sizes", "#strip"):
        assert page.locator(hidden).is_hidden()
    assert page.inner_text("#print-link") == f"{one.base}/cutoff?{QUERY}&stated=8"
    assert page.pdf(format="A4").startswith(b"%PDF")


def test_an_example_is_marked_and_a_bad_link_explained(visit: VisitFactory) -> None:
    one = visit()
    page = one.open("/cutoff", drawn=False)
    page.wait_for_selector(ANSWERED, state="attached")
    assert page.inner_text("#invented") == "Invented example"
    page.fill("#box-points", "5")
    page.press("#box-points", "Enter")
    one.until("location.search === '?points=5'")
    assert page.locator("#invented").is_hidden()
    one.expected = ("422",)
    page = one.open("/cutoff?stated=-3", drawn=False)
    assert "out of range" in page.inner_text("#message")
    assert page.input_value("#box-stated") == "-3"
    page.fill("#box-stated", "3")
    page.press("#box-stated", "Enter")
    page.locator("#verdict", has_text="Your 4 boson levels").wait_for()


def test_everything_has_a_name_for_screen_readers(visit: VisitFactory) -> None:
    one = visit()
    page = open_desk(one, f"{QUERY}&stated=8")
    unnamed = page.evaluate(
        """() => [...document.querySelectorAll('input:not([type=hidden]), select, textarea, button')]
        .filter((box) => !(box.labels?.length || box.getAttribute('aria-label') || box.textContent.trim()))
        .map((box) => box.outerHTML.slice(0, 120))"""
    )
    assert unnamed == []
