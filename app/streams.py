"""The event stream of a job: a snapshot first, then progress, heartbeats, and how it ended."""

import time
from collections.abc import AsyncIterator
from typing import Any

from app.engine import Engine
from app.exports import encode
from app.jobs import Job


async def events(job: Job, engine: Engine) -> AsyncIterator[bytes]:
    """Yield the server-sent events of a job until it ends.

    The first change goes out at once, later ones at most every `update_seconds`; the end is never delayed.
    """
    settings = engine.settings
    workers = engine.pool.size
    revision = job.revision
    yield _event("snapshot", job.snapshot(workers))
    earliest = 0.0
    while job.is_active:
        await job.wait_for_change(revision, settings.heartbeat_seconds)
        if job.revision == revision:
            yield _event("heartbeat", {"revision": revision})
            continue
        pause = earliest - time.monotonic()
        if await job.wait_until(lambda one: not one.is_active, max(0.0, pause)):
            break
        revision = job.revision
        earliest = time.monotonic() + settings.update_seconds
        yield _event("progress", job.snapshot(workers))
    yield _event("end", job.snapshot(workers))


def _event(name: str, data: dict[str, Any]) -> bytes:
    return b"event: " + name.encode() + b"\ndata: " + encode(data) + b"\n\n"
