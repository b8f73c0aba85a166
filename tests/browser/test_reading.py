"""Reading values off the plots: one cursor, a strip that agrees with the JSON, keyboard, looks, paper."""

from typing import Any

import pytest
from playwright.sync_api import Page

from tests.browser.conftest import VisitFactory
from tests.running import RunningServer

QUERY = "spins=4&points=31"


def number(text: str) -> float:
    return float(text.split(maxsplit=1)[0].replace("−", "-"))


def cells(page: Page) -> dict[str, tuple[float, str]]:
    """Return the strip as title, value and bound."""
    found: list[list[str]] = page.evaluate(
        """[...document.querySelectorAll("#strip .cell")].map(cell => [
            cell.querySelector("dt").textContent,
            cell.querySelector(".value").textContent,
            cell.querySelector(".bound").textContent])"""
    )
    return {title: (number(value), bound) for title, value, bound in found}


def result_of(server: RunningServer, query: str) -> dict[str, Any]:
    answer = server.client.get(f"/api/sweep?{query}")
    assert answer.status_code == 200
    data: dict[str, Any] = answer.json()
    return data


def test_strip_shows_the_values_of_the_json(visit: VisitFactory, server: RunningServer) -> None:
    page = visit().open(f"/sweep?{QUERY}")
    data = result_of(server, QUERY)
    page.focus("#plot-cursor")
    page.keyboard.press("Home")
    for _ in range(20):
        page.keyboard.press("ArrowRight")
    assert page.inner_text("#strip .place") == "λ = 0.5 ω"
    series = data["series"]
    shown = cells(page)
    energy, bound = next(value for title, value in shown.items() if title.startswith("E₀"))
    assert energy == pytest.approx(series["energy"][20][0], abs=1e-9)
    assert bound.startswith("+0 −")
    assert any("even" in title and series["energy_status"][20][0] in title for title in shown)
    for name, key in (
        ("Gap, same parity", "gap"),
        ("Gap, any parity", "gap_any"),
        ("Boson number", "boson_number"),
        ("Order parameter", "order_parameter"),
        ("Inversion", "inversion"),
    ):
        value, bound = next(found for title, found in shown.items() if title.startswith(name))
        error = series[f"{key}_error"][20]
        assert value == pytest.approx(series[key][20], abs=max(error, 1e-11))
        assert number(bound.removeprefix("± ")) >= error
    assert shown["Cutoff needed"][0] == series["cutoff_needed"][20]
    assert shown["Cutoff used"][0] == series["cutoff_used"][20]
    assert series["basis"][20] in shown["Cutoff used"][1]


def test_the_full_list_has_every_level_and_number(visit: VisitFactory, server: RunningServer) -> None:
    page = visit().open(f"/sweep?{QUERY}&at=0.5")
    series = result_of(server, QUERY)["series"]
    page.click("#more-values summary")
    rows: list[list[str]] = page.evaluate(
        "[...document.querySelectorAll('#more-table tr')].map(r => [...r.cells].map(c => c.textContent))"
    )
    by_name = {row[0]: row for row in rows}
    for rank in range(6):
        assert number(by_name[f"E{rank}"][1]) == pytest.approx(series["energy"][20][rank], abs=1e-9)
    entropy = next(row for name, row in by_name.items() if "entanglement" in name)
    assert number(entropy[1]) == pytest.approx(series["entropy"][20], abs=1e-6)


def test_pointer_moves_the_cursor_and_a_click_pins_it(visit: VisitFactory) -> None:
    one = visit()
    page = one.open(f"/sweep?{QUERY}")
    spot: list[float] = page.evaluate(
        """(() => {
            const box = document.getElementById("plot").getBoundingClientRect();
            const axis = document.getElementById("plot")._fullLayout.xaxis;
            return [box.left + axis._offset + axis.d2p(0.25), box.top + 120];
        })()"""
    )
    page.mouse.move(*spot)
    one.until("document.querySelector('#strip .place').textContent === 'λ = 0.25 ω'")
    line = page.locator("#plot-cursor").bounding_box()
    plots = page.locator("#plot").bounding_box()
    assert line is not None
    assert plots is not None
    assert line["height"] > 0.85 * plots["height"]
    page.mouse.click(*spot)
    one.until("location.search.includes('at=0.25')")
    page.mouse.move(5, 5)
    assert page.inner_text("#strip .place") == "λ = 0.25 ω"
    page.reload()
    one.wait_drawn()
    assert page.inner_text("#strip .place") == "λ = 0.25 ω"
    page.click("#strip >> text=Unpin")
    one.until("!location.search.includes('at=')")


def test_zoom_is_kept_by_new_pictures_and_by_the_link(visit: VisitFactory) -> None:
    one = visit()
    page = one.open("/sweep?spins=2&points=31")
    page.evaluate("Plotly.relayout('plot', {'xaxis.range': [0.3, 0.6]})")
    one.until("location.search.includes('zoom=0.3:0.6')")
    one.commit("ratio", "0.5")
    one.wait_drawn()
    assert page.evaluate("document.getElementById('plot')._fullLayout.xaxis.range") == [0.3, 0.6]
    page.click("#reset-zoom")
    one.until("!location.search.includes('zoom')")


def test_keyboard_alone_reaches_everything(visit: VisitFactory) -> None:
    one = visit()
    page = one.open("/sweep?spins=2&points=9")
    for group in ("show", "accuracy", "words"):
        page.focus(f"#group-{group} summary")
        page.keyboard.press("Enter")
    page.evaluate("document.activeElement.blur()")
    reached: list[str] = []
    for _ in range(90):
        page.keyboard.press("Tab")
        name: str = page.evaluate(
            """(() => {
                const e = document.activeElement;
                return e.id || e.dataset.slider || e.getAttribute("aria-label") || e.textContent.trim();
            })()"""
        )
        if name in reached:
            break
        reached.append(name)
    boxes = (
        "spins mode splitting ratio bias along from to points each_name energies bosons overlay frame unit "
        "levels tol need tail title note"
    )
    buttons = (
        "copy-link save-csv save-json save-png save-svg show-python print reset-zoom look-theme look-size"
    )
    wanted = {f"box-{name}" for name in boxes.split()} | {"spins", "link", "plot-cursor", *buttons.split()}
    assert wanted <= set(reached)
    assert page.get_attribute("#plot-cursor", "role") == "slider"
    page.focus("#plot-cursor")
    page.keyboard.press("End")
    assert "λ = 0.75" in (page.get_attribute("#plot-cursor", "aria-valuetext") or "")
    page.keyboard.press("Enter")
    one.until("location.search.includes('at=0.75')")
    page.keyboard.press("Escape")
    one.until("!location.search.includes('at=')")


def test_every_control_has_a_name(visit: VisitFactory) -> None:
    page = visit().open("/sweep?spins=2&points=9")
    nameless = page.evaluate(
        """[...document.querySelectorAll("input:not([type=hidden]), select, textarea, button")]
            .filter(e => !(e.getAttribute("aria-label") || e.labels?.length || e.textContent.trim()))
            .map(e => e.outerHTML)"""
    )
    assert nameless == []


def contrast(page: Page, front: str, back: str) -> float:
    """Return the contrast ratio of two of the stylesheet's colours."""
    ratio: float = page.evaluate(
        """([front, back]) => {
            const probe = document.createElement("span");
            document.body.append(probe);
            const light = name => {
                probe.style.color = `var(--${name})`;
                const parts = getComputedStyle(probe).color.match(/[\\d.]+/g).slice(0, 3).map(Number)
                    .map(v => v / 255).map(v => v <= 0.04045 ? v / 12.92 : ((v + 0.055) / 1.055) ** 2.4);
                return 0.2126 * parts[0] + 0.7152 * parts[1] + 0.0722 * parts[2];
            };
            const [a, b] = [light(front), light(back)].sort((x, y) => y - x);
            probe.remove();
            return (a + 0.05) / (b + 0.05);
        }""",
        [front, back],
    )
    return ratio


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_colours_keep_their_contrast(visit: VisitFactory, scheme: str) -> None:
    page = visit(color_scheme=scheme).open("/sweep?spins=2&points=9")
    for text in ("ink", "ink-soft", "accent", "warning", "critical"):
        assert contrast(page, text, "paper") >= 4.5, text
        assert contrast(page, text, "card") >= 4.5, text
    curves = ["even", "odd", "second", "limit", "uncoupled", "effective"]
    for curve in [*curves, *(f"family-{place}" for place in range(1, 9))]:
        assert contrast(page, curve, "paper") >= 3.0, curve


def test_dark_follows_the_system_and_the_button(visit: VisitFactory) -> None:
    one = visit(color_scheme="dark")
    page = one.open("/sweep?spins=2&points=9")
    paper = "document.getElementById('plot')._fullLayout.paper_bgcolor"
    assert page.evaluate(paper) == "rgb(27, 25, 22)"
    page.click("#look-theme")
    one.until(f"{paper} === 'rgb(250, 246, 238)'")
    page.reload()
    one.wait_drawn()
    assert page.evaluate(paper) == "rgb(250, 246, 238)"


def test_projector_enlarges_page_and_figure(visit: VisitFactory) -> None:
    one = visit(color_scheme="light")
    page = one.open("/sweep?spins=2&points=9")
    page.click("#look-size")
    one.until("document.getElementById('plot')._fullLayout.xaxis.tickfont.size === 17")
    assert page.get_attribute("#look-size", "aria-pressed") == "true"


@pytest.mark.parametrize("query", ["spins=2&points=9", "spins=2&points=5&each=ratio:0,0.25,0.5,0.75,1"])
def test_phone_has_no_sideways_scrolling(visit: VisitFactory, query: str) -> None:
    page = visit(viewport={"width": 390, "height": 844}, has_touch=True).open(f"/sweep?{query}")
    assert page.evaluate("document.documentElement.scrollWidth") == 390
    plots = page.locator("#plot").bounding_box()
    form = page.locator("#form").bounding_box()
    assert plots is not None
    assert form is not None
    assert plots["width"] <= 390
    assert plots["y"] < form["y"]


def test_paper_has_the_run_sheet_and_no_controls(visit: VisitFactory) -> None:
    one = visit(color_scheme="dark")
    page = one.open("/")
    page.evaluate("window.dispatchEvent(new Event('beforeprint'))")
    page.emulate_media(media="print")
    one.until("document.getElementById('plot')._fullLayout.paper_bgcolor === 'rgb(255, 255, 255)'")
    for hidden in ("#form", "#toolbar", "#strip", ".top"):
        assert page.locator(hidden).is_hidden()
    for shown in ("#title", "#hamiltonian", "#values", "#plot", "#run-sheet", "#print-link", "#provenance"):
        assert page.locator(shown).is_visible()
    text = page.inner_text("main")
    assert "safety rules" in text
    assert "numpy" in text
    assert page.locator("#run-sheet tr").count() >= 9
    page.evaluate("window.dispatchEvent(new Event('afterprint'))")
    page.emulate_media(media="screen")
    assert page.locator("#toolbar").is_visible()
    assert len(page.pdf(format="A4")) > 10_000
