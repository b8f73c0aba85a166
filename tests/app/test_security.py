"""Headers, hosts, foreign sites, the shared key, sizes, prefixes, and one error shape on all routes."""

import ast
import html
import json
import os
import re
import socket
import subprocess
import sys
import time
from pathlib import Path
from typing import Any
from urllib.parse import urljoin

import httpx
import pytest
from prometheus_client.parser import text_string_to_metric_families
from starlette.routing import Route

from app.api import router
from app.assets import PLOTLY, asset_url
from app.security import GUESS_SECONDS, HEADERS, MOST_GUESSES, Guesses, safe_return
from app.settings import Settings, is_loopback
from tests.running import ROOT, RunningServer, ServerFactory

KEY = "correct horse battery"
PAGE = {"accept": "text/html,application/xhtml+xml"}


def addresses() -> list[tuple[str, str]]:
    """Return every route of the service with each of its methods, some value filled in."""
    found = [("GET", "/"), ("GET", "/sweep"), ("GET", "/nothing"), ("GET", "/api/nothing"), ("GET", "/login")]
    for route in router.routes:
        assert isinstance(route, Route)
        path = re.sub(r"\{[^}]*\}", "x", route.path)
        if path == "/api/sweep":
            path += "?points=3&spins=1"
        found += [(method, path) for method in sorted(route.methods or ())]
    return found


@pytest.mark.parametrize(("method", "path"), addresses(), ids=str)
@pytest.mark.parametrize("accept", ["text/html", "application/json"])
def test_every_answer_carries_the_headers(server: RunningServer, method: str, path: str, accept: str) -> None:
    body = {"content": b"{}", "headers": {"accept": accept, "content-type": "application/json"}}
    if method in {"GET", "DELETE"}:
        body = {"headers": {"accept": accept}}
    answer = server.client.request(method, path, **body)  # type: ignore[arg-type]
    for name, value in HEADERS.items():
        assert answer.headers[name] == value
    assert "cache-control" in answer.headers
    assert "server" not in answer.headers
    if answer.status_code >= 400 and (accept == "application/json" or path.startswith("/api/")):
        assert set(answer.json()) == {"error"}
        assert set(answer.json()["error"]) == {"code", "message", "field", "value", "allowed"}
    if answer.headers["content-type"].startswith("text/html"):
        assert "<script>" not in answer.text
        assert not re.search(r"\son\w+=|javascript:|style=", answer.text)


@pytest.mark.parametrize(
    "path", ["/sweep", "/api/sweep", "/api/jobs", "/health", "/", "/api/link", "/nothing"]
)
def test_wrong_methods_have_the_one_shape(server: RunningServer, path: str) -> None:
    answer = server.client.request("PATCH", path)
    assert answer.status_code in {404, 405}
    assert set(answer.json()["error"]) == {"code", "message", "field", "value", "allowed"}


def test_policy_allows_no_inline_script() -> None:
    policy = dict(part.strip().partition(" ")[::2] for part in HEADERS["Content-Security-Policy"].split(";"))
    assert policy["default-src"] == "'none'"
    assert policy["script-src"] == "'self'"
    assert policy["frame-ancestors"] == "'none'"


@pytest.mark.parametrize(
    ("host", "fine"),
    [
        ("localhost:80", True),
        ("127.0.0.1", True),
        ("[::1]:8150", True),
        ("LOCALHOST", True),
        ("evil.example", False),
        ("127.0.0.1.evil.example", False),
        ("localhost.evil.example:8150", False),
        ("10.0.0.7", False),
        ("", False),
    ],
)
def test_only_own_names_are_answered(server: RunningServer, host: str, fine: bool) -> None:
    answer = server.client.get("/health", headers={"host": host})
    assert (answer.status_code == 200) is fine
    if not fine and host:
        assert answer.json()["error"]["code"] == "unknown-host"


@pytest.mark.parametrize(
    ("headers", "fine"),
    [
        ({}, True),
        ({"sec-fetch-site": "same-origin"}, True),
        ({"sec-fetch-site": "none"}, True),
        ({"sec-fetch-site": "cross-site"}, False),
        ({"sec-fetch-site": "same-site"}, False),
        ({"origin": "http://evil.example"}, False),
        ({"origin": "null"}, False),
        ({"sec-fetch-site": "cross-site", "origin": "SELF"}, False),
        ({"origin": "SELF"}, True),
    ],
)
def test_other_sites_may_not_write(server: RunningServer, headers: dict[str, str], fine: bool) -> None:
    sent = {name: server.address if value == "SELF" else value for name, value in headers.items()}
    answer = server.client.post("/api/link", json={"spins": "3"}, headers=sent)
    assert (answer.status_code == 200) is fine
    refused = server.client.delete("/api/jobs/x?for=everyone", headers=sent)
    assert refused.status_code == (404 if fine else 403)
    if not fine:
        assert refused.json()["error"]["code"] == "foreign-site"


def test_bodies_without_length_are_cut_off(server: RunningServer) -> None:
    def endless() -> Any:
        for _ in range(200):
            yield b" " * 1024

    answer = server.client.post("/api/jobs", content=endless(), headers={"content-type": "application/json"})
    assert answer.status_code == 413
    assert answer.json()["error"]["code"] == "body-too-large"


def test_large_headers_are_refused(server: RunningServer) -> None:
    answer = server.client.get("/health", headers={"x-large": "x" * 40_000})
    assert answer.status_code == 431
    assert answer.json()["error"]["code"] == "headers-too-large"


def test_assets_never_change_and_nothing_else_is_served(server: RunningServer) -> None:
    answer = server.client.get(f"/{asset_url(PLOTLY)}")
    assert answer.status_code == 200
    assert "immutable" in answer.headers["cache-control"]
    assert answer.headers["content-encoding"] == "gzip"
    assert answer.headers["content-type"].startswith("text/javascript")
    digest = asset_url(PLOTLY).split("/")[1]
    for path in (
        "/assets/",
        f"/assets/{digest}/",
        f"/assets/0000000000000000/{PLOTLY}",
        f"/assets/{digest}/../../app/api.py",
        f"/assets/{digest}/%2e%2e/%2e%2e/pyproject.toml",
        f"/assets/{digest}//etc/passwd",
        "/static/",
        "/pyproject.toml",
    ):
        assert server.client.get(path).status_code == 404


@pytest.fixture(scope="module")
def locked(tmp_path_factory: pytest.TempPathFactory) -> Any:
    running = RunningServer(tmp_path_factory.mktemp("locked") / "data", "--workers", "1", "--key", KEY)
    yield running
    running.stop()


def test_the_key_is_asked_for(locked: RunningServer) -> None:
    with httpx.Client(base_url=locked.address, trust_env=False) as client:
        for path in ("/api/sweep?points=3&spins=1", "/api/limits", "/api/jobs/x"):
            answer = client.get(path)
            assert answer.status_code == 401
            assert answer.json()["error"]["code"] == "key-needed"
        assert client.post("/api/jobs", json={}).status_code == 401
        for word in ("", "Bearer", "Bearer wrong", f"Basic {KEY}", f"Bearer {KEY}x"):
            assert client.get("/api/limits", headers={"authorization": word}).status_code == 401
        assert client.get("/api/limits", headers={"authorization": f"Bearer {KEY}"}).status_code == 200
        assert client.get("/health").status_code == 200
        assert locked.counts()["jobs_started"] == 0


def test_login_keeps_the_whole_address(locked: RunningServer) -> None:
    wanted = "/sweep?spins=3&title=a%26b%20c&zoom=0.1:0.2"
    with httpx.Client(base_url=locked.address, trust_env=False, headers=PAGE) as client:
        sent = client.get(wanted)
        assert sent.status_code == 303
        assert sent.headers["location"].startswith("login?next=")
        form = client.get("/" + sent.headers["location"])
        assert form.status_code == 200
        target = re.search(r'name="next" value="([^"]*)"', form.text)
        assert target is not None
        assert html.unescape(target.group(1)) == wanted[1:]
        fields = {"next": html.unescape(target.group(1))}
        refused = client.post("/login", data=fields | {"key": "not the key"})
        assert refused.status_code == 401
        assert "not the key." in refused.text
        foreign = client.post("/login", data=fields | {"key": KEY}, headers={"origin": "http://evil.example"})
        assert foreign.status_code == 403
        entered = client.post("/login", data=fields | {"key": KEY})
        assert entered.status_code == 303
        assert "/" + entered.headers["location"] == wanted
        cookie = entered.headers["set-cookie"].lower()
        assert "httponly" in cookie
        assert "samesite=lax" in cookie
        assert client.get(wanted).status_code == 200
        assert client.get("/api/limits").status_code == 200
        value = client.cookies["softmode"]
        client.cookies.clear()
        expires, _, mark = value.partition(".")
        longer = f"{int(expires) + 9}.{mark}"
        for forged in (longer, f"1.{mark}", mark, f"{expires}.", value[:-1], f"{expires}.\u00e9"):
            sent_headers = [(b"cookie", f"softmode={forged}".encode()), (b"accept", b"application/json")]
            assert client.get("/api/limits", headers=sent_headers).status_code == 401


@pytest.mark.parametrize(
    ("target", "kept"),
    [
        ("sweep?spins=3&title=x", "sweep?spins=3&title=x"),
        ("", "./"),
        ("?spins=3", "./?spins=3"),
        ("//evil.example/", ""),
        ("https://evil.example/", ""),
        ("/sweep", ""),
        ("../other", ""),
        ("\\\\evil", ""),
        ("javascript:alert(1)", ""),
        ("sweep?a=\r\nSet-Cookie: x", ""),
    ],
)
def test_login_returns_to_this_server_only(target: str, kept: str) -> None:
    assert safe_return(target) == kept


def test_works_below_a_prefix_stripped_or_not(start_server: ServerFactory) -> None:
    server = start_server("--prefix", "/lab/softmode", "--key", KEY)
    assert server.address.endswith("/lab/softmode")
    root = server.address.removesuffix("/lab/softmode")
    with httpx.Client(
        base_url=root, trust_env=False, timeout=60.0, headers={"authorization": f"Bearer {KEY}"} | PAGE
    ) as client:
        for prefix in ("/lab/softmode", ""):
            assert client.get(f"{prefix}/sweep?spins=3").status_code == 200
            assert client.get(f"{prefix}/api/sweep?spins=3&points=5").status_code == 200
        assert client.get("/lab/softmode").headers["location"].endswith("/lab/softmode/")
        page = client.get("/lab/softmode/sweep").text
        assert not re.search(r"(?:href|src|action)=\"/", page)
        # every address on every page leads somewhere, as a browser below the prefix reads it: with the
        # prefix kept by the proxy, and with it taken away
        for name in (
            "sweep?spins=3&points=5",
            "point?spins=3&at=0.4",
            "cutoff?spins=3&points=5",
            "sweep?spins=0",
        ):
            page = client.get(f"/lab/softmode/{name}").text
            found = re.findall(r"(?:href|src|action)=\"([^\"#]+)\"", page)
            assert any("assets/" in one for one in found)
            for one in found:
                whole = urljoin(f"{root}/lab/softmode/{name}", html.unescape(one))
                assert whole.startswith(f"{root}/lab/softmode/")
                for asked in (whole, whole.replace("/lab/softmode", "")):
                    answer = client.get(asked, headers={"accept": "*/*"}, follow_redirects=True)
                    assert answer.status_code == 200, asked
    with httpx.Client(base_url=root, trust_env=False, headers=PAGE) as client:
        sent = client.get("/lab/softmode/sweep?spins=3")
        assert sent.headers["location"] == "login?next=sweep%3Fspins%3D3"


def run_softmode(*options: str, **environment: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "app", *options],
        cwd=ROOT,
        env={k: v for k, v in os.environ.items() if k != "SOFTMODE_KEY"} | environment,
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )


@pytest.mark.parametrize("host", ["0.0.0.0", "::", "192.0.2.1", "lab.example"])
def test_a_network_address_needs_a_key_or_open(host: str, tmp_path: Path) -> None:
    ended = run_softmode("--host", host, "--port", "0", "--data", str(tmp_path / "data"), "--no-browser")
    assert ended.returncode == 2
    assert "--key" in ended.stderr
    assert "--open" in ended.stderr
    assert "Traceback" not in ended.stderr
    assert not (tmp_path / "data").exists()


def test_a_short_key_is_refused(tmp_path: Path) -> None:
    ended = run_softmode("--host", "0.0.0.0", "--data", str(tmp_path / "data"), SOFTMODE_KEY="1234")
    assert ended.returncode == 2
    assert "characters" in ended.stderr
    assert "1234" not in ended.stderr


def test_open_and_key_settings_pass(start_server: ServerFactory) -> None:
    # the settings are those of a network address; the connection stays on loopback
    server = start_server("--host", "0.0.0.0", "--open", "--allow-host", "lab.example")
    port = server.address.rsplit(":", 1)[1]
    with httpx.Client(base_url=f"http://127.0.0.1:{port}", trust_env=False) as client:
        for host, status in (
            ("10.1.2.3", 200),
            ("lab.example", 200),
            (socket.gethostname(), 200),
            ("evil.example", 421),
        ):
            assert client.get("/health", headers={"host": host}).status_code == status
    Settings(host="0.0.0.0", key="long enough").check()


def test_a_port_in_use_and_a_directory_in_use_are_named(server: RunningServer, tmp_path: Path) -> None:
    port = server.address.rsplit(":", 1)[1]
    ended = run_softmode("--port", port, "--data", str(tmp_path / "data"), "--no-browser")
    assert ended.returncode == 2
    assert "--port" in ended.stderr
    ended = run_softmode("--port", "0", "--data", str(server.data), "--no-browser")
    assert ended.returncode == 2
    assert "--data" in ended.stderr


@pytest.mark.parametrize(
    ("host", "own"),
    [("127.0.0.1", True), ("::1", True), ("localhost", True), ("0.0.0.0", False), ("127.evil", False)],
)
def test_loopback(host: str, own: bool) -> None:
    assert is_loopback(host) is own


def test_guessing_the_key_is_slowed_down(start_server: ServerFactory) -> None:
    server = start_server("--workers", "1", "--key", KEY)
    with httpx.Client(base_url=server.address, trust_env=False, headers=PAGE) as client:
        entered = client.post("/login", data={"key": KEY})
        session = {"cookie": f"softmode={client.cookies['softmode']}"}
        client.cookies.clear()
        assert entered.status_code == 303
        for number in range(5):
            assert client.post("/login", data={"key": f"guess {number}"}).status_code == 401
            bearer = client.get("/api/limits", headers={"authorization": f"Bearer guess {number}"})
            assert bearer.status_code == 401
        wanted = "sweep?spins=3&title=a"
        late = client.post("/login", data={"key": KEY, "next": wanted})
        assert late.status_code == 429
        assert 0 < int(late.headers["retry-after"]) <= 60
        assert html.escape(wanted) in late.text
        script = client.get("/api/limits", headers={"authorization": f"Bearer {KEY}"})
        assert script.status_code == 429
        assert script.json()["error"]["code"] == "too-many-guesses"
        assert int(script.headers["retry-after"]) > 0
        # who was let in before is not locked out
        assert client.get("/api/limits", headers=session).status_code == 200
    assert KEY not in server.log.read_text()


def test_guesses_are_counted_by_network_and_forgotten_in_time(monkeypatch: pytest.MonkeyPatch) -> None:
    guesses = Guesses()
    for number in range(MOST_GUESSES):
        guesses.note(f"2001:db8::{number:x}")
    assert guesses.wait("2001:db8::ffff") > 0.0
    assert guesses.wait("2001:db8:0:1::1") == 0.0
    assert guesses.wait("192.0.2.1") == 0.0
    later = time.monotonic() + GUESS_SECONDS + 1.0
    monkeypatch.setattr(time, "monotonic", lambda: later)
    assert guesses.wait("2001:db8::1") <= 0.0


def test_keys_are_compared_in_constant_time() -> None:
    """Whoever compares a secret in `security` does it with `hmac.compare_digest`."""
    tree = ast.parse((ROOT / "app" / "security.py").read_text())
    compared = [
        node
        for node in ast.walk(tree)
        if isinstance(node, ast.Compare) and "settings.key" in ast.unparse(node)
    ]
    assert [ast.unparse(node) for node in compared] == ["self.settings.key is None"]
    used = [
        node for node in ast.walk(tree) if isinstance(node, ast.Attribute) and node.attr == "compare_digest"
    ]
    assert len(used) == 2


def test_the_numbers_for_monitoring(locked: RunningServer) -> None:
    with httpx.Client(base_url=locked.address, trust_env=False) as client:
        assert client.get("/metrics").status_code == 401
        client.headers["authorization"] = f"Bearer {KEY}"
        assert client.get("/api/sweep?spins=2&points=5&title=secret").status_code == 200
        locked.wait_until(lambda: locked.counts()["chunks_stored"] > 0)
        answer = client.get("/metrics")
    assert answer.headers["content-type"].startswith("text/plain; version=")
    families = {family.name: family for family in text_string_to_metric_families(answer.text)}
    samples = {
        (sample.name, tuple(sorted(sample.labels.items()))): sample.value
        for family in families.values()
        for sample in family.samples
    }
    route = (("method", "GET"), ("route", "/api/sweep"), ("status", "200"))
    assert samples["softmode_requests_total", route] == 1
    assert samples["softmode_request_seconds_count", (("route", "/api/sweep"),)] == 1
    assert samples["softmode_jobs", (("state", "done"),)] == 1
    counts = locked.counts()
    for what in ("computed", "found", "stored"):
        assert samples["softmode_chunks_total", (("what", what),)] == counts[f"chunks_{what}"]
    assert samples["softmode_workers", (("state", "ready"),)] == 1
    assert samples["softmode_workers", (("state", "busy"),)] == 0
    assert samples["softmode_workers_lost_total", ()] == 0
    assert samples["softmode_queue_chunks", ()] == 0
    assert samples["softmode_store_bytes", ()] > 0
    assert samples["softmode_store_usable", ()] == 1
    # a Python process with numpy takes more than 20 MB
    assert samples["softmode_workers_memory_bytes", ()] > 2e7
    assert samples["process_resident_memory_bytes", ()] > 2e7
    assert "secret" not in answer.text


def test_the_log_as_json_tells_no_secrets(start_server: ServerFactory) -> None:
    server = start_server("--workers", "1", "--key", KEY, "--log", "json")
    headers = {"authorization": f"Bearer {KEY}"}
    server.client.get("/api/sweep?spins=2&points=5&title=my+private+title&note=n", headers=headers)
    server.client.get("/sweep?spins=0&title=my+private+title", headers=headers)
    server.client.post("/login", data={"key": "wrong and private", "next": "sweep?title=private"})
    lines = [json.loads(line) for line in server.log.read_text().splitlines()]
    assert all({"time", "level", "logger", "message"} <= set(line) for line in lines)
    asked = [line for line in lines if line.get("route") == "/api/sweep"]
    assert [(line["method"], line["status"]) for line in asked] == [("GET", 200)]
    assert asked[0]["seconds"] > 0.0
    text = server.log.read_text()
    for secret in (KEY, "private", "title", "spins"):
        assert secret not in text
