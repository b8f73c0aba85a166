"""The page of one point: reached from a sweep, with the same numbers; neighbours, narrow screens, paper."""

import json

import pytest
from playwright.sync_api import Page

from tests.browser.conftest import Visit, VisitFactory
from tests.running import RunningServer

SWEEP = "spins=4&points=11&to=1"
DRAWN = "html[data-drawn]"


def open_point(one: Visit, query: str) -> Page:
    page = one.open(f"/point?{query}", drawn=False)
    page.wait_for_selector(DRAWN, state="attached")
    return page


def cell(page: Page, place: str, title: str) -> str:
    return page.inner_text(f"{place} .cell:has(dt:text-is('{title}')) dd")


def test_from_a_sweep_to_its_point_and_back(visit: VisitFactory, server: RunningServer) -> None:
    one = visit()
    page = one.open(f"/sweep?{SWEEP}&at=0.7")
    titles = [
        "Gap, same parity Δ",
        "Boson number ⟨n⟩",
        "Order parameter √⟨Jx²⟩/(N/2)",
        "Inversion ⟨Jz⟩/(N/2)",
    ]
    page.locator("#strip .cell").first.wait_for()
    one.until("document.getElementById('stage').getAttribute('aria-busy') === 'false'")
    expected = {title: cell(page, "#strip", title) for title in titles}
    energy = page.inner_text("#strip .cell:has(dt:has-text('ground level')) dd")
    page.get_by_role("button", name="Open this point").click()
    page.wait_for_selector(DRAWN, state="attached")
    assert page.url.endswith("/point?spins=4&to=1&points=11&at=0.7")
    assert {title: cell(page, "#numbers", title) for title in titles} == expected
    assert page.inner_text("#levels tr:nth-child(2) td:nth-child(2)") == energy
    assert page.locator("#levels tr").count() == 7
    assert page.inner_text("#cutoffs .cell:first-child .value") == str(
        server.client.get(f"/api/point?{SWEEP}&at=0.7").json()["series"]["cutoff_needed"][0]
    )
    page.click("#back")
    page.locator("#strip .place", has_text="λ = 0.7").wait_for()
    assert cell(page, "#strip", titles[0]) == expected[titles[0]]


def test_the_cursor_decides_which_point_is_opened(visit: VisitFactory) -> None:
    one = visit()
    page = one.open(f"/sweep?{SWEEP}")
    one.until("document.getElementById('stage').getAttribute('aria-busy') === 'false'")
    page.focus("#plot-cursor")
    page.keyboard.press("End")
    page.keyboard.press("ArrowLeft")
    page.locator("#strip .place", has_text="λ = 0.9").wait_for()
    page.get_by_role("button", name="Open this point").click()
    page.wait_for_url("**/point?*at=0.9")
    page.wait_for_selector(DRAWN, state="attached")


def test_arrow_keys_walk_along_the_sweep(visit: VisitFactory) -> None:
    one = visit()
    page = open_point(one, f"{SWEEP}&at=0.9")
    page.keyboard.press("ArrowRight")
    page.wait_for_url("**at=1")
    page.wait_for_selector(DRAWN, state="attached")
    assert page.locator(".way.end").count() == 1
    page.keyboard.press("ArrowRight")
    page.keyboard.press("ArrowLeft")
    page.wait_for_url("**at=0.9")
    page.wait_for_selector(DRAWN, state="attached")
    assert page.inner_text("h1").endswith("λ = 0.9")
    page.go_back()
    page.wait_for_url("**at=1")
    # a box keeps its own arrow keys
    page.wait_for_selector(DRAWN, state="attached")
    page.focus("#link")
    page.keyboard.press("ArrowLeft")
    page.wait_for_timeout(200)
    assert page.url.endswith("at=1")


def test_pictures_and_files(visit: VisitFactory, server: RunningServer) -> None:
    one = visit()
    page = open_point(one, f"{SWEEP}&at=0.5")
    found = server.client.get(f"/api/point?{SWEEP}&at=0.5").json()
    assert (
        page.evaluate("document.getElementById('wigner').data[0].z") == found["portrait"]["wigner"]["values"]
    )
    assert page.locator("#wigner image").count() == 1
    assert page.locator("#husimi image").count() == 1
    assert page.locator("#distribution .bars .point").count() >= 5
    assert f"cutoff needed {found['series']['cutoff_needed'][0]}" in page.text_content("#distribution")
    with page.expect_download() as saved:
        page.click("#save-json")
    assert json.loads(saved.value.path().read_text()) == found
    page.evaluate("Object.defineProperty(navigator, 'clipboard', {value: undefined})")
    page.click("#copy-link")
    page.locator("#said", has_text="Link copied.").wait_for()
    assert page.get_attribute("#twin", "href") == "api/point?spins=4&to=1&points=11&at=0.5"


def test_convergence_is_compared_once_somebody_looks(visit: VisitFactory, server: RunningServer) -> None:
    one = visit()
    page = open_point(one, "spins=10&at=0.7")
    assert "mean spin" in page.inner_text("#told-noise")
    page.locator("#convergence-part").scroll_into_view_if_needed()
    page.wait_for_selector("html[data-compared]", state="attached")
    assert page.locator("#convergence .cartesianlayer .subplot").count() == 4
    key = page.inner_text("#key-convergence")
    assert all(words in key for words in ("number states", "displaced ladders", "told from one solve"))
    told = server.client.get("/api/point/convergence?spins=10&at=0.7").json()
    assert f"up to {told['bases']['fock']['cutoffs'][-1]}." in page.inner_text("#told-convergence")


def test_broken_states_are_offered_where_the_doublet_is_closed(visit: VisitFactory) -> None:
    one = visit()
    page = open_point(one, "spins=30&to=1&at=1&points=5")
    page.get_by_role("link", name="broken symmetry, ⟨a⟩ < 0").click()
    page.wait_for_url("**state=minus")
    page.wait_for_selector(DRAWN, state="attached")
    assert page.evaluate("document.getElementById('wigner').data[0].x.at(-1)") < 0
    assert page.locator("#states [aria-current]").inner_text() == "broken symmetry, ⟨a⟩ < 0"
    open_point(one, "spins=4&to=1&at=0.1")
    assert page.locator("#states").is_hidden()


def test_a_family_has_a_page_for_each_curve(visit: VisitFactory) -> None:
    one = visit()
    page = open_point(one, "each=spins:3,5&points=5&at=0.1")
    assert "N = 3" in page.inner_text("h1")
    page.get_by_role("link", name="N = 5").click()
    page.wait_for_url("**member=5")
    page.wait_for_selector(DRAWN, state="attached")
    assert "N = 5" in page.inner_text("h1")


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_narrow_screens_need_no_sideways_scrolling(visit: VisitFactory, scheme: str) -> None:
    one = visit(viewport={"width": 390, "height": 844}, color_scheme=scheme)
    page = open_point(one, "spins=20&at=0.75&state=ground&note=" + "long" * 60)
    assert page.evaluate("document.documentElement.scrollWidth") == 390
    widths = page.evaluate("[...document.querySelectorAll('.main-svg')].map((drawn) => drawn.clientWidth)")
    assert max(widths) <= 390


def test_a_point_on_paper(visit: VisitFactory) -> None:
    one = visit()
    page = open_point(one, f"{SWEEP}&at=0.7")
    page.evaluate("window.dispatchEvent(new Event('beforeprint'))")
    page.emulate_media(media="print")
    one.until("document.querySelector('#wigner .main-svg').clientWidth < 360")
    assert page.locator("#levels").is_visible()
    assert page.locator("#print-link").is_visible()
    assert page.inner_text("#print-link") == f"{one.base}/point?spins=4&to=1&points=11&at=0.7"
    for hidden in ("#toolbar", "#back", "#way-next"):
        assert page.locator(hidden).is_hidden()
    assert page.pdf(format="A4").startswith(b"%PDF")
    page.emulate_media(media="screen")
    page.evaluate("window.dispatchEvent(new Event('afterprint'))")
    one.until("document.querySelector('#wigner .main-svg').clientWidth > 360")


def test_what_cannot_be_shown_says_why(visit: VisitFactory) -> None:
    one = visit()
    one.expected = ("422",)
    page = one.open("/point?spins=4&points=11", drawn=False)
    assert "at=value" in page.inner_text("#message")
    page = one.open("/point?spins=4&at=0.1&state=plus", drawn=False)
    page.locator("#message", has_text="doublet").wait_for()
