"""Slow and malformed clients on raw sockets: each is answered or cut off, and holds nobody else up."""

import contextlib
import json
import socket
import time
from collections.abc import Iterator
from urllib.parse import urlsplit

import pytest

from app.security import HEADERS
from tests.running import RunningServer

PATIENCE = 2.0
HEAD = b"POST /api/jobs HTTP/1.1\r\nHost: localhost\r\nContent-Type: application/json\r\n"


@pytest.fixture(scope="module")
def impatient(tmp_path_factory: pytest.TempPathFactory) -> Iterator[RunningServer]:
    running = RunningServer(
        tmp_path_factory.mktemp("impatient") / "data", "--workers", "1", "--patience", str(PATIENCE)
    )
    yield running
    running.stop()


@contextlib.contextmanager
def connected(server: RunningServer) -> Iterator[socket.socket]:
    port = urlsplit(server.address).port
    assert port is not None
    with socket.create_connection(("127.0.0.1", port), timeout=20.0) as one:
        yield one


def rest(one: socket.socket) -> bytes:
    """Return everything until the server hangs up."""
    found = b""
    with contextlib.suppress(ConnectionResetError):
        while piece := one.recv(65536):
            found += piece
    return found


def trickle(one: socket.socket, text: bytes, seconds: float) -> bytes:
    """Send a byte at a time for some seconds or until the server hangs up; return what it said."""
    over = time.monotonic() + seconds
    with contextlib.suppress(OSError):
        for byte in text:
            if time.monotonic() > over:
                break
            one.sendall(bytes([byte]))
            time.sleep(0.1)
    return rest(one)


def read(answer: bytes) -> tuple[int, dict[str, str], bytes]:
    head, _, body = answer.partition(b"\r\n\r\n")
    first, *lines = head.decode().split("\r\n")
    pairs = [line.partition(": ")[::2] for line in lines]
    return int(first.split(" ")[1]), {name.lower(): value for name, value in pairs}, body


def check(answer: bytes, status: int, code: str) -> None:
    found, headers, body = read(answer)
    assert found == status
    assert json.loads(body)["error"]["code"] == code
    assert headers["connection"] == "close"
    for name, value in HEADERS.items():
        assert headers[name.lower()] == value


def test_a_head_that_trickles_in_is_cut_off(impatient: RunningServer) -> None:
    with connected(impatient) as one:
        check(trickle(one, HEAD + b"X: " + b"x" * 200, 30.0), 408, "request-too-slow")


def test_a_second_head_that_trickles_in_is_cut_off(impatient: RunningServer) -> None:
    with connected(impatient) as one:
        one.sendall(b"GET /health HTTP/1.1\r\nHost: localhost\r\n\r\n")
        assert one.recv(65536).startswith(b"HTTP/1.1 200")
        check(trickle(one, HEAD + b"X: " + b"x" * 200, 30.0), 408, "request-too-slow")


def test_a_body_that_trickles_in_is_cut_off(impatient: RunningServer) -> None:
    with connected(impatient) as one:
        one.sendall(HEAD + b"Content-Length: 1000\r\n\r\n")
        check(trickle(one, b" " * 900, 30.0), 408, "request-too-slow")


def test_silence_is_cut_off(impatient: RunningServer) -> None:
    with connected(impatient) as one:
        assert rest(one) == b""
    with connected(impatient) as one:
        # a body that was announced with a request that takes none
        one.sendall(b"GET /health HTTP/1.1\r\nHost: localhost\r\nContent-Length: 1000\r\n\r\n")
        status, _, _ = read(rest(one))
        assert status in {200, 408}


def test_slow_clients_hold_nobody_up(impatient: RunningServer) -> None:
    with contextlib.ExitStack() as stack:
        slow = [stack.enter_context(connected(impatient)) for _ in range(200)]
        for one in slow:
            one.sendall(HEAD)
        answer = impatient.client.get("/api/sweep?spins=2&points=5")
        assert answer.status_code == 200
        for one in slow:
            check(rest(one), 408, "request-too-slow")


@pytest.mark.parametrize(
    "sent",
    [
        b"nonsense\r\n\r\n",
        b"GET / HTTP/1.1\r\nHost localhost\r\n\r\n",
        b"\x16\x03\x01\x02\x00\x01\x00",
        b"GET /health HTTP/1.1\r\nHost: localhost\r\nX: " + b"x" * 200_000 + b"\r\n\r\n",
        b"GET /health HTTP/1.1\r\nHost: localhost\r\nContent-Length: -1\r\n\r\n",
        b"GET /health HTTP/1.1\r\nHost: a\r\nHost: b\r\n\r\n",
    ],
    ids=["words", "no-colon", "tls", "huge", "negative", "two-hosts"],
)
def test_what_is_not_http_is_answered_in_the_one_shape(impatient: RunningServer, sent: bytes) -> None:
    with connected(impatient) as one:
        with contextlib.suppress(OSError):
            one.sendall(sent)
        answer = rest(one)
    # a huge head may be cut off while it is still being sent
    if answer:
        check(answer, 400, json.loads(read(answer)[2])["error"]["code"])
    assert impatient.client.get("/health").status_code == 200


def test_a_stream_outlives_patience(impatient: RunningServer) -> None:
    job = impatient.client.post("/api/jobs", json={"spins": 60, "points": 1001, "to": 1.5}).json()
    with connected(impatient) as one:
        one.sendall(f"GET /api/jobs/{job['id']}/events HTTP/1.1\r\nHost: localhost\r\n\r\n".encode())
        time.sleep(1.5 * PATIENCE)
        impatient.client.delete(f"/api/jobs/{job['id']}?for=everyone")
        answer = b""
        while b"event: end" not in answer:
            piece = one.recv(65536)
            assert piece
            answer += piece
        status, headers, _ = read(answer)
        assert status == 200
        for name, value in HEADERS.items():
            assert headers[name.lower()] == value
