"""A real browser with a fresh profile; foreign requests and console errors fail any test."""

import time
from collections.abc import Callable, Iterator
from typing import Any
from urllib.parse import urlsplit

import pytest
from playwright.sync_api import Browser, BrowserContext, Page, sync_playwright

from tests.running import RunningServer

CHROMIUM = "/usr/bin/chromium"
FLAGS = [
    "--no-sandbox",
    "--disable-gpu",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
]
DRAWN = "#stage[aria-busy=false] .main-svg"
PATIENCE = 60_000


class Visit:
    """One page on one server, with everything it asked for and everything it complained about."""

    def __init__(self, page: Page, base: str) -> None:
        self.page = page
        self.base = base
        self.requests: list[str] = []
        self.complaints: list[str] = []
        self.loads = 0
        self.expected: tuple[str, ...] = ()
        page.set_default_timeout(PATIENCE)
        page.on("request", lambda request: self.requests.append(request.url))
        page.on("console", lambda message: self._heard(message.type, message.text))
        page.on("pageerror", lambda error: self.complaints.append(str(error)))
        page.on("domcontentloaded", lambda _: self._loaded())

    def _heard(self, kind: str, text: str) -> None:
        if kind in {"error", "warning"}:
            self.complaints.append(text)

    def _loaded(self) -> None:
        self.loads += 1

    def open(self, address: str, *, drawn: bool = True) -> Page:
        self.page.goto(f"{self.base}{address}")
        if drawn:
            self.page.wait_for_selector(DRAWN, state="attached")
        return self.page

    def wait_drawn(self) -> None:
        self.page.wait_for_selector(DRAWN, state="attached")

    @property
    def query(self) -> str:
        return urlsplit(self.page.url).query

    def until(self, expression: str, argument: Any = None) -> None:
        """Wait for a condition from outside: the page's own policy forbids it to evaluate text."""
        deadline = time.monotonic() + PATIENCE / 1000.0
        while not self.page.evaluate(expression, argument):
            assert time.monotonic() < deadline, f"waited in vain for {expression}"
            self.page.wait_for_timeout(30)

    def commit(self, box: str, text: str) -> None:
        """Type into a box and leave it with Enter; wait until address and form say the same again."""
        before = self.page.url
        with self.page.expect_response(lambda answer: "/api/face" in answer.url):
            self.page.fill(f"#box-{box}", text)
            self.page.press(f"#box-{box}", "Enter")
        self.until("old => location.href !== old", before)

    def check(self) -> None:
        foreign = [
            url for url in self.requests if not url.startswith((self.base, "data:", "blob:", "about:"))
        ]
        assert not foreign
        left = [text for text in self.complaints if not any(part in text for part in self.expected)]
        assert not left


@pytest.fixture(scope="session")
def chromium() -> Iterator[Browser]:
    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=CHROMIUM, args=FLAGS)
        yield browser
        browser.close()


@pytest.fixture(scope="session")
def profile(chromium: Browser) -> Iterator[BrowserContext]:
    """Return a profile whose cache the tests share, so that the plotting script is read once."""
    context = chromium.new_context(viewport={"width": 1440, "height": 900})
    yield context
    context.close()


VisitFactory = Callable[..., Visit]


@pytest.fixture
def visit(chromium: Browser, profile: BrowserContext, server: RunningServer) -> Iterator[VisitFactory]:
    """Return a function that opens a page; with options for the browser's context it gets its own profile."""
    made: list[Visit] = []
    contexts: list[BrowserContext] = []

    def start(base: str | None = None, **options: Any) -> Visit:
        context = profile
        if options:
            options.setdefault("viewport", {"width": 1440, "height": 900})
            context = chromium.new_context(**options)
            contexts.append(context)
        made.append(Visit(context.new_page(), base or server.address))
        return made[-1]

    yield start
    for one in made:
        one.page.close()
    for context in contexts:
        context.close()
    for one in made:
        one.check()
