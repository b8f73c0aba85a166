"""Every page against the rules of axe-core, in light and dark, in the states a visitor meets."""

import importlib.resources
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any, Literal

import pytest
from playwright.sync_api import Page

from tests.browser.conftest import Visit, VisitFactory
from tests.running import RunningServer

AXE = Path(str(importlib.resources.files("axe_playwright_python") / "axe.min.js"))
# WCAG 2.0 to 2.2, A and AA, and what axe-core calls best practice
RULES = ["wcag2a", "wcag2aa", "wcag21a", "wcag21aa", "wcag22aa", "best-practice"]
# the plotting library's own drawing has a description of ours beside it
DRAWN_BY_PLOTLY = [".main-svg", ".modebar-container"]
LOOKS: list[Literal["light", "dark"]] = ["light", "dark"]
KEY = "correct horse battery"


def check(page: Page) -> None:
    """Fail with every violation that axe-core finds."""
    found: dict[str, Any] = page.evaluate(
        "([rules, without]) => axe.run({exclude: without}, {runOnly: rules, resultTypes: ['violations']})",
        [RULES, [[one] for one in DRAWN_BY_PLOTLY]],
    )
    assert found["passes"], "axe-core looked at nothing"
    told = [
        f"{one['id']} ({one['impact']}): {node['target']} {node['failureSummary']}"
        for one in found["violations"]
        for node in one["nodes"]
    ]
    assert not told, "\n".join(told)


def opened(one: Visit) -> Page:
    # before every page's own scripts, and not as one of them: the policy forbids those
    one.page.add_init_script(path=AXE)
    return one.page


def sweep(one: Visit) -> None:
    page = one.open("/sweep?spins=4&points=21&at=0.3&title=A+title&note=A+note")
    page.locator("#strip").wait_for(state="visible")
    for summary in page.locator("details > summary:visible").all():
        summary.click()


def python_of_sweep(one: Visit) -> None:
    page = one.open("/sweep?spins=4&points=21")
    page.click("#show-python")
    page.locator("#python").wait_for(state="visible")


def point(one: Visit) -> None:
    page = one.open("/point?spins=4&points=21&at=0.3&each=ratio:0.5,1", drawn=False)
    page.locator("#content").wait_for(state="visible")
    page.wait_for_selector("#wigner .main-svg", state="attached")


def cutoff(one: Visit) -> None:
    page = one.open("/cutoff?spins=2&points=5&stated=12")
    for summary in page.locator("details > summary:visible").all():
        summary.click()


def wrong_link(one: Visit) -> None:
    one.expected = ("422",)
    one.open("/sweep?spins=0", drawn=False).locator("#message").wait_for(state="visible")


def wrong_point(one: Visit) -> None:
    one.expected = ("422",)
    one.open("/point?spins=0", drawn=False).locator("#message").wait_for(state="visible")


def wrong_cutoff(one: Visit) -> None:
    one.expected = ("422",)
    one.open("/cutoff?spins=0", drawn=False).locator("#message").wait_for(state="visible")


def nothing_here(one: Visit) -> None:
    one.expected = ("404",)
    one.open("/nothing", drawn=False)


PAGES: list[Callable[[Visit], None]] = [
    sweep,
    python_of_sweep,
    point,
    cutoff,
    wrong_link,
    wrong_point,
    wrong_cutoff,
    nothing_here,
]


def check_looks(page: Page) -> None:
    for look in LOOKS:
        page.emulate_media(color_scheme=look)
        check(page)


@pytest.mark.parametrize("visited", PAGES, ids=lambda one: one.__name__)
def test_pages_break_no_rule(visit: VisitFactory, visited: Callable[[Visit], None]) -> None:
    one = visit()
    page = opened(one)
    visited(one)
    check_looks(page)


@pytest.fixture(scope="module")
def locked(tmp_path_factory: pytest.TempPathFactory) -> Iterator[RunningServer]:
    # below a prefix as well, with a data directory that cannot be used
    place = tmp_path_factory.mktemp("locked") / "data"
    place.write_text("a file")
    running = RunningServer(place, "--workers", "1", "--key", KEY, "--prefix", "/lab/softmode")
    yield running
    running.stop()


def test_login_breaks_no_rule_and_leads_below_the_prefix(visit: VisitFactory, locked: RunningServer) -> None:
    one = visit(locked.address, color_scheme="light")
    one.expected = ("401",)
    page = opened(one)
    one.open("/sweep?spins=2&points=9", drawn=False)
    check_looks(page)
    page.fill("input[name=key]", "not the key")
    page.press("input[name=key]", "Enter")
    page.locator("[role=alert]").wait_for(state="visible")
    check_looks(page)
    page.fill("input[name=key]", KEY)
    page.press("input[name=key]", "Enter")
    one.wait_drawn()
    assert page.url == f"{locked.address}/sweep?spins=2&points=9"
    assert "only until the server stops" in page.inner_text(".trouble")
    check_looks(page)
    # the ways between the pages stay below the prefix, and each page draws
    page.click("#to-cutoff")
    one.wait_drawn()
    assert page.url.startswith(f"{locked.address}/cutoff?")
    one.open("/point?spins=2&points=9&at=0.3", drawn=False)
    page.wait_for_selector("#wigner .main-svg", state="attached")
    page.click("#back")
    one.wait_drawn()
    assert page.url.startswith(f"{locked.address}/sweep?")
