"""What the server does, as numbers for a monitoring system, and one log line for every request."""

import contextlib
import logging
import os
import time
from collections import Counter as Tally
from collections.abc import Iterator
from pathlib import Path

from prometheus_client import CollectorRegistry, Counter, Histogram, ProcessCollector
from prometheus_client.core import CounterMetricFamily, GaugeMetricFamily, Metric
from prometheus_client.exposition import choose_encoder
from prometheus_client.registry import Collector
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from app.engine import Engine
from app.errors import StoreError

logger = logging.getLogger(__name__)

METHODS = frozenset({"GET", "HEAD", "POST", "DELETE", "OPTIONS", "PUT", "PATCH"})
STATES = ("queued", "running", "done", "failed", "cancelled", "restarting")
# seconds; a cached page is at the low end, a sweep somebody waits for at the high one
BUCKETS = (0.005, 0.01, 0.025, 0.05, 0.1, 0.25, 0.5, 1.0, 2.5, 10.0, 30.0, 120.0)


class EngineNumbers(Collector):
    """Reads the engine whenever it is asked; `stored` is the last known content of the store."""

    def __init__(self, engine: Engine) -> None:
        self.engine = engine
        self.stored: dict[str, int] = {}

    def collect(self) -> Iterator[Metric]:
        """Yield the numbers of the engine as they are now."""
        facts = self.engine.facts()
        jobs = GaugeMetricFamily("softmode_jobs", "Jobs the server remembers", labels=["state"])
        states = Tally(job.state for job in self.engine.jobs.values())
        for state in STATES:
            jobs.add_metric([state], states[state])
        yield jobs
        waiting = sum(len(job.waiting) for job in self.engine.jobs.values())
        yield GaugeMetricFamily("softmode_queue_chunks", "Chunks that wait for a worker", waiting)
        chunks = CounterMetricFamily("softmode_chunks", "Finished chunks by what happened", labels=["what"])
        for what in ("computed", "found", "stored"):
            chunks.add_metric([what], facts[f"chunks_{what}"])
        yield chunks
        yield CounterMetricFamily("softmode_points", "Points computed", facts["points_computed"])
        workers = GaugeMetricFamily("softmode_workers", "Computing processes", labels=["state"])
        workers.add_metric(["ready"], facts["workers_ready"])
        workers.add_metric(["busy"], facts["workers_busy"])
        yield workers
        yield CounterMetricFamily("softmode_workers_lost", "Processes that died", facts["workers_lost"])
        yield GaugeMetricFamily(
            "softmode_workers_memory_bytes", "Resident memory of the computing processes", _workers_bytes()
        )
        for name, meaning in (("bytes", "Bytes of stored results"), ("results", "Stored results")):
            if name in self.stored:
                yield GaugeMetricFamily(f"softmode_store_{name}", meaning, self.stored[name])
        usable = 1 if self.engine.store.trouble is None else 0
        yield GaugeMetricFamily("softmode_store_usable", "1 while results are kept on disk", usable)


class Metrics:
    """The numbers of one server."""

    def __init__(self, engine: Engine) -> None:
        self.engine = engine
        self.registry = CollectorRegistry()
        self.numbers = EngineNumbers(engine)
        self.registry.register(self.numbers)
        ProcessCollector(registry=self.registry)
        labels = ["method", "route", "status"]
        self.requests = Counter("softmode_requests", "Answered requests", labels, registry=self.registry)
        self.seconds = Histogram(
            "softmode_request_seconds",
            "Seconds until an answer began",
            ["route"],
            buckets=BUCKETS,
            registry=self.registry,
        )

    def count(self, method: str, route: str, status: int, seconds: float) -> None:
        """Count an answered request."""
        self.requests.labels(method if method in METHODS else "other", route, str(status)).inc()
        self.seconds.labels(route).observe(seconds)

    async def text(self, accept: str) -> tuple[bytes, str]:
        """Return everything in the form that `accept` asks for, and its media type."""
        with contextlib.suppress(StoreError):
            self.numbers.stored = await self.engine.store.usage()
        encoder, kind = choose_encoder(accept)
        return encoder(self.registry), kind


class Observed:
    """Wraps the whole application: counts and logs every answer when it begins."""

    def __init__(self, app: ASGIApp, metrics: Metrics) -> None:
        self.app = app
        self.metrics = metrics

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Handle one connection."""
        if scope["type"] != "http":
            await self.app(scope, receive, send)
            return
        began = time.perf_counter()

        async def counted(message: Message) -> None:
            if message["type"] == "http.response.start":
                self._note(scope, message["status"], time.perf_counter() - began)
            await send(message)

        await self.app(scope, receive, counted)

    def _note(self, scope: Scope, status: int, seconds: float) -> None:
        # the pattern, not the address: names of jobs and leases are nobody's business
        route = getattr(scope.get("route"), "path", "none")
        self.metrics.count(scope["method"], route, status, seconds)
        client = scope.get("client")
        facts = {
            "method": scope["method"][:20],
            "route": route,
            "status": status,
            "seconds": round(seconds, 4),
            "client": client[0] if client else None,
        }
        logger.info("request", extra={"facts": facts})


def _workers_bytes() -> int:
    """Return the resident memory of this process's children in bytes, 0 where /proc does not tell."""
    page, total = os.sysconf("SC_PAGE_SIZE"), 0
    for listed in Path("/proc/self/task").glob("*/children"):
        with contextlib.suppress(OSError):
            for child in listed.read_text().split():
                total += int(Path(f"/proc/{child}/statm").read_text().split()[1]) * page
    return total
