"""The sweep page in use: what it draws, how knobs, address and history keep in step."""

import re
from urllib.parse import parse_qs

import pytest

from tests.browser.conftest import VisitFactory
from tests.running import RunningServer

MARK = "window.stayed = true"
FIRST_LEVEL = """energy => document.getElementById("plot").data.some(
    trace => trace.name === "even" && Math.abs(trace.y[0] - energy) < 1e-6)"""


def test_opening_the_page_computes_nothing_by_itself(server: RunningServer) -> None:
    before = server.counts()["jobs_started"]
    answer = server.client.get("/sweep?spins=3&points=7", headers={"Accept": "text/html"})
    assert answer.status_code == 200
    assert '<link rel="alternate" type="application/json"' in answer.text
    assert server.counts()["jobs_started"] == before


def test_default_sweep_draws_all_panels(visit: VisitFactory) -> None:
    page = visit().open("/sweep")
    assert page.title() == "Dicke model, N = 20: λ from 0 to 0.75 – Softmode"
    assert page.locator("#plot .cartesianlayer .subplot").count() == 5
    names = page.evaluate("document.getElementById('plot').data.map(trace => trace.name)")
    for name in ("even", "odd", "N → ∞", "uncoupled", "same parity", "any parity", "inversion", "needed"):
        assert name in names
    looks = page.evaluate(
        """Object.fromEntries(document.getElementById("plot").data.map(
            trace => [trace.name, [trace.line.color, trace.line.dash]]))"""
    )
    assert looks["even"] == ["rgb(11, 98, 99)", "solid"]
    assert looks["odd"] == ["rgb(180, 81, 13)", "dash"]
    assert looks["N → ∞"][1] == "dot"
    critical = page.evaluate(
        "document.getElementById('plot').layout.shapes.filter(s => s.xref === 'x').map(s => s.x0)"
    )
    assert critical == [pytest.approx(0.5)] * 5
    assert page.locator("#hamiltonian math msqrt").count() == 1


def test_front_page_shows_a_lab_marked_as_invented(visit: VisitFactory) -> None:
    page = visit().open("/")
    assert page.inner_text("#invented") == "Invented example"
    assert page.inner_text("#title").startswith("Invented lab")
    assert "δ" in (page.text_content("#hamiltonian") or "")
    assert page.input_value("#link").endswith("frame=trap") or "frame=trap" in page.input_value("#link")


def test_knob_changes_address_plot_and_title_without_a_load(visit: VisitFactory) -> None:
    one = visit()
    page = one.open("/sweep?points=21")
    page.evaluate(MARK)
    one.commit("spins", "10")
    assert one.query == "spins=10&points=21"
    one.until("document.title.includes('N = 10')")
    one.until(FIRST_LEVEL, -5)
    assert page.evaluate("window.stayed") is True
    assert one.loads == 1
    assert "10" in (page.text_content("#values") or "")
    assert page.input_value("#link") == page.url


def test_decimal_comma_and_other_meanings_of_the_coupling(visit: VisitFactory) -> None:
    one = visit()
    page = one.open("/sweep?along=splitting&points=9&spins=4")
    one.commit("coupling", "0,25")
    assert parse_qs(one.query)["coupling"] == ["0.25"]
    page.select_option("#coupling-as", "single")
    one.until("document.getElementById('box-coupling').value === '0.125'")
    assert parse_qs(one.query)["coupling"] == ["0.25"]
    page.select_option("#coupling-as", "critical")
    one.until("document.getElementById('box-coupling').value === '0.5'")
    one.commit("coupling", "1.2")
    assert parse_qs(one.query)["coupling"] == ["0.6"]


def test_splitting_may_be_given_as_detuning(visit: VisitFactory) -> None:
    one = visit()
    page = one.open("/sweep?splitting=1.5&points=9&spins=2")
    page.select_option("#splitting-as", "detuning")
    one.until("location.search.includes('detuning=0.5')")
    assert page.input_value("#box-splitting") == "0.5"
    assert "splitting" not in one.query
    one.wait_drawn()


def test_back_and_forward_walk_the_history(visit: VisitFactory) -> None:
    one = visit()
    page = one.open("/sweep?points=9&spins=2")
    page.evaluate(MARK)
    one.commit("spins", "3")
    one.commit("spins", "4")
    one.until("document.title.includes('N = 4')")
    page.go_back()
    one.until("document.title.includes('N = 3')")
    assert page.input_value("#box-spins") == "3"
    page.go_back()
    one.until("document.title.includes('N = 2')")
    one.until(FIRST_LEVEL, -1)
    page.go_forward()
    one.until("document.title.includes('N = 3')")
    assert page.evaluate("window.stayed") is True


def test_a_change_that_asks_nothing_new_pushes_nothing(visit: VisitFactory) -> None:
    one = visit()
    page = one.open("/sweep?points=9&spins=2")
    length = page.evaluate("history.length")
    with page.expect_response(lambda answer: "/api/face" in answer.url):
        page.fill("#box-mode", "1.0")
        page.press("#box-mode", "Enter")
    assert page.evaluate("history.length") == length
    assert one.query == "points=9&spins=2"


def test_dragging_replaces_the_address_and_pushes_one_entry(visit: VisitFactory) -> None:
    one = visit()
    page = one.open("/sweep?spins=2&points=9")
    length = page.evaluate("history.length")
    slider = page.locator("[data-slider=splitting]")
    box = slider.bounding_box()
    assert box is not None
    middle = box["y"] + box["height"] / 2
    page.mouse.move(box["x"] + box["width"] / 2, middle)
    page.mouse.down()
    for step in range(1, 9):
        page.mouse.move(box["x"] + box["width"] * (0.5 + 0.04 * step), middle)
        page.wait_for_timeout(60)
    one.until("location.search.includes('splitting')")
    assert page.evaluate("history.length") == length
    page.mouse.up()
    one.until("n => history.length === n + 1", length)
    one.until("document.getElementById('link').value === location.href")
    assert float(parse_qs(one.query)["splitting"][0]) > 1.2
    page.go_back()
    one.until("!location.search.includes('splitting')")
    one.wait_drawn()


def test_bad_input_is_explained_at_its_field_and_runs_nothing(
    visit: VisitFactory, server: RunningServer
) -> None:
    one = visit()
    one.expected = ("422",)
    page = one.open("/sweep?points=9&spins=2")
    before = server.counts()["jobs_started"]
    page.fill("#box-mode", "fast")
    page.press("#box-mode", "Enter")
    problem = page.locator("#problem-mode")
    problem.wait_for(state="visible")
    assert "fast" in problem.inner_text()
    assert "0.000001" in problem.inner_text() or "1e-6" in problem.inner_text()
    assert page.input_value("#box-mode") == "fast"
    assert page.get_attribute("#box-mode", "aria-invalid") == "true"
    assert one.query == "points=9&spins=2"
    assert server.counts()["jobs_started"] == before
    one.commit("mode", "2")
    assert problem.is_hidden()


def test_malformed_link_says_what_is_wrong_and_keeps_what_was_typed(
    visit: VisitFactory, server: RunningServer
) -> None:
    before = server.counts()["jobs_started"]
    one = visit()
    one.expected = ("422",)
    page = one.open("/sweep?spins=0&coupling=0.3", drawn=False)
    message = page.inner_text("#message")
    assert "spins" in message
    assert "1 to 5000" in message
    assert page.input_value("#box-spins") == "0"
    assert "1 to 5000" in page.inner_text("#problem-spins")
    assert server.counts()["jobs_started"] == before
    one.commit("spins", "2")
    one.wait_drawn()
    assert page.locator("#message").is_hidden()
    assert parse_qs(one.query) == {"spins": ["2"], "coupling": ["0.3"]}


def test_script_in_the_title_is_text(visit: VisitFactory) -> None:
    one = visit()
    evil = "%3Cscript%3Ewindow.hit%3D1%3C/script%3E%3Cimg src%3Dx onerror%3Dwindow.hit%3D1%3E"
    page = one.open(f"/sweep?spins=2&points=5&title={evil}&note={evil}")
    assert page.inner_text("#title").startswith("<script>")
    assert page.title().startswith("<script>")
    assert page.locator("#title *, #note *").count() == 0
    with page.expect_download() as saved:
        page.click("#save-svg")
    assert "<script" not in saved.value.path().read_text()
    assert page.evaluate("window.hit") is None


@pytest.mark.parametrize(
    ("family", "first", "last"),
    [
        ("spins:2,4,8", "N = 2", "N = 8"),
        ("splitting:0.5,1", "ω0 = 0.5", "ω0 = 1"),
        ("detuning:-0.5,0,0.5", "ω0 − ω = −0.5", "ω0 − ω = 0.5"),
        ("mode:1,2", "ω = 1", "ω = 2"),
        ("ratio:0,0.5,1", "λ′/λ = 0", "λ′/λ = 1"),
        ("bias:0,0.2", "ε = 0", "ε = 0.2"),
    ],
)
def test_families_have_a_curve_and_a_key_for_each_value(
    visit: VisitFactory, family: str, first: str, last: str
) -> None:
    page = visit().open(f"/sweep?spins=3&points=7&each={family}")
    labels = page.evaluate("document.getElementById('plot').layout.meta.family.map(entry => entry.label)")
    assert len(labels) == family.count(",") + 1
    assert re.sub("<[^>]*>", "", labels[0]) == first
    assert re.sub("<[^>]*>", "", labels[-1]) == last
    assert page.locator("#strip tr").count() == len(labels) + 1
    looks = page.evaluate(
        """document.getElementById("plot").data
            .filter(trace => trace.marker && trace.yaxis === "y3").map(trace => trace.marker.symbol)"""
    )
    assert len(set(looks)) == len(labels)


@pytest.mark.parametrize(
    "query",
    [
        "along=detuning&coupling=0.3",
        "along=splitting&energies=ground",
        "along=mode&energies=uncoupled",
        "along=ratio&overlay=effective",
        "along=bias&bosons=per-spin",
        "along=coupling-over-critical&bias=0.1",
        "along=spins&spins=9&coupling=0.6",
        "each=coupling:0.2,0.7&along=spins&spins=6",
        "each=coupling-over-critical:0.5,1.5&along=splitting&frame=trap&unit=kHz",
    ],
)
def test_every_axis_and_view_draws(visit: VisitFactory, query: str) -> None:
    spins = "" if "spins=" in query else "&spins=3"
    points = "" if "along=spins" in query else "&points=7"
    page = visit().open(f"/sweep?{query}{spins}{points}")
    assert page.locator("#plot .cartesianlayer .subplot").count() == 5
    assert page.locator("#strip").is_visible()


def test_choosing_a_family_fills_in_values(visit: VisitFactory) -> None:
    one = visit()
    page = one.open("/sweep?spins=2&points=7")
    page.select_option("#box-each_name", "ratio")
    one.until("location.search.includes('each=ratio')")
    assert parse_qs(one.query)["each"] == ["ratio:0,0.5,1"]
    one.commit("each_values", "0,25 0,75")
    assert parse_qs(one.query)["each"] == ["ratio:0.25,0.75"]
    one.wait_drawn()
