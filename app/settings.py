"""What can be set when the server starts, and where its own files are."""

import ipaddress
import os
from dataclasses import dataclass, field
from pathlib import Path
from urllib.parse import urlsplit

from app.errors import StartError

MEBIBYTE = 1024 * 1024
SHORTEST_KEY = 8


def default_data_directory() -> Path:
    """Return the per-user data directory: $XDG_DATA_HOME/softmode or ~/.local/share/softmode."""
    base = os.environ.get("XDG_DATA_HOME", "")
    return (Path(base) if base else Path.home() / ".local" / "share") / "softmode"


def processors() -> int:
    """Return how many processors this process may use."""
    return max(1, len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1)


def machine_bytes() -> int:
    """Return the machine's memory in bytes."""
    return os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES")


@dataclass(frozen=True)
class Settings:
    """Settings of one server.

    Attributes
    ----------
    host, port : str, int
        Where to listen; port 0 takes a free one.
    data : Path
        Directory of the store; must be on a local file system.
    workers : int
        Number of computing processes, each with one BLAS thread.
    key : str or None
        Shared key asked of every visitor; `open_to_all` says that none is wanted on a network address.
    prefix : str
        Path below which a proxy shows the server without stripping it, such as "/softmode".
    allowed_hosts : tuple of str
        Further names under which the server is addressed.
    cluster : str or None
        Address of a Dask scheduler that computes in the place of processes on this machine: tcp:// on this
        machine, tls:// anywhere.
    cluster_patience : float
        Seconds for which work under way waits for a lost scheduler.
    price_ceiling : float
        Largest predicted processor time of one sheet, in seconds.
    memory_ceiling : int
        Largest predicted memory of one point, in bytes.
    queue_limit : int
        Number of unfinished sheets taken on at the same time.
    store_bytes : int
        Byte budget of the stored results; least recently used ones go first.
    remembered_points : int
        Number of finished points kept in memory.
    lease_seconds, grace_seconds : float
        A viewer that has not been heard of for the sum of both has left.
    heartbeat_seconds, update_seconds : float
        Pause between heartbeats, and shortest pause between two updates, of an event stream.
    body_bytes, query_characters : int
        Longest request body and query string.
    patience_seconds : float
        Longest time that the head of a request, and again its body, may take to arrive.
    log : str
        "plain" lines or "json".
    """

    host: str = "127.0.0.1"
    port: int = 8150
    data: Path = field(default_factory=default_data_directory)
    workers: int = field(default_factory=processors)
    key: str | None = None
    open_to_all: bool = False
    prefix: str = ""
    allowed_hosts: tuple[str, ...] = ()
    cluster: str | None = None
    cluster_patience: float = 300.0
    price_ceiling: float = 1200.0
    memory_ceiling: int = field(default_factory=lambda: max(256 * MEBIBYTE, machine_bytes() // 4))
    queue_limit: int = 32
    store_bytes: int = 2048 * MEBIBYTE
    remembered_points: int = 30_000
    lease_seconds: float = 90.0
    grace_seconds: float = 30.0
    heartbeat_seconds: float = 15.0
    update_seconds: float = 0.25
    body_bytes: int = 64 * 1024
    query_characters: int = 32_000
    patience_seconds: float = 15.0
    log: str = "plain"

    def check(self) -> None:
        """Raise StartError when these settings are unsafe or cannot work."""
        if self.workers < 1:
            raise StartError("bad-workers", "at least one worker is needed", "workers", self.workers, ">= 1")
        if self.cluster is not None:
            check_cluster_address(self.cluster)
        if not self.patience_seconds > 0.0:
            raise StartError(
                "bad-patience", "patience must be positive", "patience", self.patience_seconds, "> 0 seconds"
            )
        if self.key is not None and len(self.key) < SHORTEST_KEY:
            raise StartError(
                "short-key", f"the key needs at least {SHORTEST_KEY} characters", "key", None, "longer keys"
            )
        if self.prefix and not (self.prefix.startswith("/") and not self.prefix.endswith("/")):
            raise StartError(
                "bad-prefix",
                "the prefix looks like /name",
                "prefix",
                self.prefix,
                "/name, no slash at the end",
            )
        if not is_loopback(self.host) and self.key is None and not self.open_to_all:
            raise StartError(
                "key-needed",
                f"{self.host} can be reached from other machines: give a shared key with --key KEY (or in "
                "the environment variable SOFTMODE_KEY), or say --open to let everybody compute here",
                "host",
                self.host,
                "127.0.0.1, or any address with --key or --open",
            )


def is_loopback(host: str) -> bool:
    """Say whether `host` can be reached from this machine only."""
    if host == "localhost":
        return True
    try:
        return ipaddress.ip_address(host.strip("[]")).is_loopback
    except ValueError:
        return False


def check_cluster_address(address: str) -> None:
    """Raise StartError unless this is a scheduler to trust: on this machine, or proven by TLS."""
    allowed = "tcp://127.0.0.1:PORT, or tls://HOST:PORT with Dask's own TLS settings"
    try:
        parts = urlsplit(address)
        complete = parts.scheme in {"tcp", "tls"} and parts.hostname and parts.port
    except ValueError:
        complete = False
    if not complete:
        raise StartError(
            "bad-cluster-address",
            "the address of the cluster's scheduler looks like tcp://127.0.0.1:8786",
            "cluster",
            address,
            allowed,
        )
    if parts.scheme == "tcp" and not is_loopback(parts.hostname or ""):
        raise StartError(
            "cluster-not-encrypted",
            f"{address} would be reached in the clear, and whoever answers there could run programs here: "
            "use tls://, or a scheduler on this machine (an SSH tunnel makes a far one look like that)",
            "cluster",
            address,
            allowed,
        )


def templates_dir() -> Path:
    """Return the directory of the page templates."""
    return _shipped("templates")


def static_dir() -> Path:
    """Return the directory of stylesheets, scripts and icons."""
    return _shipped("static")


def _shipped(name: str) -> Path:
    """Return a directory that lies in the package when installed and beside it in a checkout."""
    package = Path(__file__).resolve().parent
    inside = package / name
    return inside if inside.is_dir() else package.parent / name
