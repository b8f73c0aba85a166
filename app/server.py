"""Running the web server: one process, an address printed, a shutdown that tells its streams."""

import contextlib
import resource
import socket
import threading
import webbrowser
from types import FrameType

import uvicorn

from app import connections, logs
from app.api import create_app
from app.engine import Engine
from app.errors import StartError
from app.settings import Settings

SHUTDOWN_SECONDS = 5
LONGEST_HEADERS = 64 * 1024


class Service(uvicorn.Server):
    """A server that tells its event streams when it is asked to stop, so that they do not hold it up."""

    def __init__(self, config: uvicorn.Config, engine: Engine) -> None:
        super().__init__(config)
        self.engine = engine

    def handle_exit(self, sig: int, frame: FrameType | None) -> None:
        """Pass on the signal, and end the streams."""
        self.engine.announce_restart()
        super().handle_exit(sig, frame)


def listen(host: str, port: int) -> socket.socket:
    """Return a listening socket; raise StartError when the address cannot be had."""
    family = socket.AF_INET6 if ":" in host else socket.AF_INET
    # the protocol is named because asyncio turns Nagle's delay off only where it is
    listener = socket.socket(family, socket.SOCK_STREAM, socket.IPPROTO_TCP)
    listener.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
    try:
        listener.bind((host.strip("[]"), port))
    except OSError as error:
        listener.close()
        raise StartError(
            "address-in-use",
            f"cannot listen on {host}:{port}: {error.strerror or error}; choose another --port",
            "port",
            port,
            "a free port; 0 takes any",
        ) from error
    listener.set_inheritable(False)
    return listener


def _allow_many_files() -> None:
    """Take as many open files as this user may have: every connection is one."""
    _soft, hard = resource.getrlimit(resource.RLIMIT_NOFILE)
    with contextlib.suppress(OSError, ValueError):
        resource.setrlimit(resource.RLIMIT_NOFILE, (hard, hard))


def serve(settings: Settings, *, browser: bool) -> int:
    """Run the server until it is stopped; return the exit status. Raises StartError."""
    settings.check()
    logs.set_up(settings.log)
    _allow_many_files()
    listener = listen(settings.host, settings.port)
    port = listener.getsockname()[1]
    app = create_app(settings)
    shown = f"[{settings.host}]" if ":" in settings.host else settings.host
    address = f"http://{shown}:{port}{settings.prefix}/"
    config = uvicorn.Config(
        app,
        http=connections.protocol(settings.patience_seconds),
        ws="none",
        log_config=None,
        access_log=False,
        server_header=False,
        proxy_headers=False,
        lifespan="on",
        h11_max_incomplete_event_size=LONGEST_HEADERS,
        timeout_graceful_shutdown=SHUTDOWN_SECONDS,
    )
    print(f"Softmode is at {address}", flush=True)  # noqa: T201 - the one thing the server has to say
    store = app.state.engine.store
    print(store.trouble or f"Results are kept in {store.directory}; stop with Ctrl-C", flush=True)  # noqa: T201
    if browser:
        threading.Timer(0.8, webbrowser.open, [address]).start()
    Service(config, app.state.engine).run(sockets=[listener])
    return 0
