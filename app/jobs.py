"""A job: one computation under way, whoever asked for it, and the leases of those who wait for it."""

import asyncio
import secrets
import time
from collections import deque
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

from app.errors import SoftmodeError
from app.plan import Chunk, Plan
from app.questions import Question
from app.store import StoredChunk
from app.workers import Task

ACTIVE = frozenset({"queued", "running"})


@dataclass
class Lease:
    """Somebody's interest in a job: it lapses at `expires` (monotonic seconds) unless renewed.

    Leases of pages are renewed by name; those of scripts (`by_polling`) whenever the job is asked about.
    """

    expires: float
    by_polling: bool


@dataclass(eq=False)
class Job:
    """One computation, named by its content hash.

    `state` is queued, running, done, failed, cancelled or restarting. `rows` has one entry for each point
    of the plan, None while it is missing; `revision` counts its changes; `notice` says why it does not go on
    at present.
    """

    id: str
    sheet: Question
    client: str
    state: str = "queued"
    plan: Plan | None = None
    rows: list[dict[str, Any] | None] = field(default_factory=list)
    finished_chunks: set[int] = field(default_factory=set)
    waiting: deque[Chunk] = field(default_factory=deque)
    active: dict[int, Task] = field(default_factory=dict)
    leases: dict[str, Lease] = field(default_factory=dict)
    error: SoftmodeError | None = None
    revision: int = 0
    seconds: float = 0.0
    finished_at: str | None = None
    preparing: asyncio.Task[None] | None = None
    turn: int = 0
    pace: tuple[float, float] = (0.0, 0.0)
    notice: str | None = None
    _changed: asyncio.Event = field(default_factory=asyncio.Event)

    @property
    def is_active(self) -> bool:
        """Whether the job waits for computation or is being computed."""
        return self.state in ACTIVE

    @property
    def is_settled(self) -> bool:
        """Whether asking again changes nothing: there is a result, or a failure that would come again."""
        failed = self.state == "failed" and (self.error is None or self.error.retry_after is None)
        return self.state == "done" or failed

    @property
    def done(self) -> int:
        """Number of finished points, with those that need no computation."""
        if self.plan is None:
            return 0
        return self.plan.settled + sum(
            len(self.plan.chunks[number].points) for number in self.finished_chunks
        )

    @property
    def is_computed(self) -> bool:
        """Whether all chunks that the plan has so far are finished."""
        return self.plan is not None and len(self.finished_chunks) == len(self.plan.chunks)

    @property
    def total(self) -> int:
        """Number of points of the sheet, known before the plan is."""
        return self.sheet.total

    def changed(self) -> None:
        """Wake up everybody who watches this job."""
        self.revision += 1
        event, self._changed = self._changed, asyncio.Event()
        event.set()

    async def wait_for_change(self, revision: int, seconds: float) -> None:
        """Return when the job has changed since `revision`, or after some seconds."""
        if self.revision != revision:
            return
        event = self._changed
        try:
            async with asyncio.timeout(max(0.0, seconds)):
                await event.wait()
        except TimeoutError:
            return

    async def wait_until(self, reached: Callable[["Job"], bool], seconds: float) -> bool:
        """Wait until a condition on the job holds; say whether it does."""
        deadline = time.monotonic() + seconds
        while not reached(self):
            left = deadline - time.monotonic()
            if left <= 0.0:
                return False
            await self.wait_for_change(self.revision, left)
        return True

    def accept(self, chunk: Chunk, finished: StoredChunk) -> None:
        """Enter the rows of a finished chunk."""
        for point, row in zip(chunk.points, finished.rows, strict=True):
            self.rows[point] = row
        self.finished_chunks.add(chunk.number)
        self.seconds += finished.seconds

    def refill(self) -> None:
        """Queue the chunks that are neither finished nor under way, in the order of the plan."""
        if self.plan is not None:
            left = (chunk for chunk in self.plan.chunks if chunk.number not in self.finished_chunks)
            self.waiting = deque(chunk for chunk in left if chunk.number not in self.active)

    @property
    def speed(self) -> float:
        """Actual over predicted seconds of a chunk: as measured so far, before that as the price has it."""
        predicted, measured = self.pace
        if predicted > 0.0:
            return min(10.0, max(0.02, measured / predicted))
        whole = sum(chunk.seconds for chunk in self.plan.chunks) if self.plan is not None else 0.0
        return self.plan.seconds / whole if self.plan is not None and whole > 0.0 else 1.0

    def is_shorter_than(self, seconds: float) -> bool:
        """Say whether the chunks that wait will take less processor time than that."""
        left, speed = seconds, self.speed
        for chunk in self.waiting:
            left -= speed * chunk.seconds
            if left < 0.0:
                return False
        return True

    def seconds_left(self, workers: int) -> float | None:
        """Return the expected time to the end of this job alone, None when it is unknown or over."""
        if self.plan is None or not self.is_active:
            return None
        left = sum(chunk.seconds for chunk in self.plan.chunks if chunk.number not in self.finished_chunks)
        return self.speed * (left + self.plan.later_seconds) / workers

    def snapshot(self, workers: int) -> dict[str, Any]:
        """Return the public facts of the job."""
        left = self.seconds_left(workers)
        facts: dict[str, Any] = {
            "id": self.id,
            "state": self.state,
            "done": self.done,
            "total": self.total,
            "seconds_left": None if left is None else round(left, 2),
            "revision": self.revision,
        }
        if self.notice is not None and self.is_active:
            facts["notice"] = self.notice
        if self.error is not None:
            facts |= self.error.body()
        return facts

    def add_lease(self, seconds: float, *, by_polling: bool = False) -> str:
        """Enter somebody's interest, and return the name under which it is renewed."""
        name = secrets.token_hex(12)
        self.leases[name] = Lease(time.monotonic() + seconds, by_polling)
        return name

    def renew(self, name: str, seconds: float) -> bool:
        """Renew a lease; say whether there was one."""
        lease = self.leases.get(name)
        if lease is not None:
            lease.expires = max(lease.expires, time.monotonic() + seconds)
        return lease is not None

    def renew_scripts(self, seconds: float) -> None:
        """Renew the leases that live by asking about the job."""
        for name, lease in self.leases.items():
            if lease.by_polling:
                self.renew(name, seconds)

    def drop_lapsed(self) -> None:
        """Forget leases that were not renewed in time."""
        now = time.monotonic()
        self.leases = {name: lease for name, lease in self.leases.items() if lease.expires > now}
