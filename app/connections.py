"""Connections that lose patience: with a request that does not arrive, and a reader who does not read.

uvicorn waits for ever for the rest of a request's head, and for a reader; a few hundred slow clients would
then hold every connection.
"""

import asyncio
import json
from http import HTTPStatus

import h11
from uvicorn.protocols.http.h11_impl import H11Protocol

from app.errors import BusyError, RequestError, SoftmodeError
from app.security import HEADERS

MOST_CONNECTIONS = 1000
STALLED_SECONDS = 60.0


def raw_answer(error: SoftmodeError) -> bytes:
    """Return an error in the one JSON shape as the bytes of an answer that ends the connection."""
    body = json.dumps(error.body()).encode()
    headers = HEADERS | {
        "Content-Type": "application/json",
        "Content-Length": str(len(body)),
        "Cache-Control": "no-store",
        "Connection": "close",
    }
    if error.retry_after is not None:
        headers["Retry-After"] = str(error.retry_after)
    lines = [f"HTTP/1.1 {error.status} {HTTPStatus(error.status).phrase}"]
    lines += [f"{name}: {value}" for name, value in headers.items()]
    return "\r\n".join(lines).encode() + b"\r\n\r\n" + body


class Connection(H11Protocol):
    """One connection; the head of a request may take `patience` seconds."""

    patience = 15.0
    _late: asyncio.TimerHandle | None = None
    _stalled: asyncio.TimerHandle | None = None

    def connection_made(self, transport: asyncio.Transport) -> None:  # type: ignore[override]
        """Start the clock of the first request; turn away what is too much."""
        super().connection_made(transport)
        if len(self.connections) > MOST_CONNECTIONS:
            self._refuse(BusyError("too-many-connections", "too many connections; ask again", retry_after=5))
            return
        self._late = self.loop.call_later(self.patience, self._give_up)

    def connection_lost(self, exc: Exception | None) -> None:
        """Stop the clocks."""
        self._unset_late()
        self._unset_stalled()
        super().connection_lost(exc)

    def data_received(self, data: bytes) -> None:
        """Take in a piece of a request."""
        if self.transport.is_closing():
            return
        super().data_received(data)
        self._watch()

    def on_response_complete(self) -> None:
        """Wait for the next request."""
        super().on_response_complete()
        self._watch()

    def send_400_response(self, msg: str) -> None:
        """Answer what is not HTTP in the one error shape."""
        self._refuse(RequestError("bad-request", msg))

    def pause_writing(self) -> None:
        """Start the clock of a reader who does not read."""
        super().pause_writing()
        self._stalled = self.loop.call_later(STALLED_SECONDS, self.transport.abort)

    def resume_writing(self) -> None:
        """Stop the clock of a reader."""
        self._unset_stalled()
        super().resume_writing()

    def _watch(self) -> None:
        """Let the clock run while a request is half there and nothing is being answered."""
        answering = self.cycle is not None and not self.cycle.response_complete
        half = self.conn.their_state is h11.SEND_BODY or (
            self.conn.their_state is h11.IDLE and bool(self.conn.trailing_data[0])
        )
        if answering or not half:
            self._unset_late()
        elif self._late is None:
            self._late = self.loop.call_later(self.patience, self._give_up)

    def _give_up(self) -> None:
        self._late = None
        if self.conn.their_state is h11.IDLE and self.conn.trailing_data[0]:
            self._refuse(
                RequestError(
                    "request-too-slow",
                    f"the request was not there within {self.patience:g} s",
                    status=408,
                )
            )
        else:
            self.transport.close()

    def _refuse(self, error: SoftmodeError) -> None:
        if not self.transport.is_closing():
            self.transport.write(raw_answer(error))
            self.transport.close()

    def _unset_late(self) -> None:
        if self._late is not None:
            self._late.cancel()
            self._late = None

    def _unset_stalled(self) -> None:
        if self._stalled is not None:
            self._stalled.cancel()
            self._stalled = None


def protocol(patience: float) -> type[Connection]:
    """Return the class of connections on which the head of a request may take `patience` seconds."""
    return type("PatientConnection", (Connection,), {"patience": patience})
