"""The engine: turns sheets into jobs, one computation per sheet however many ask, and runs them fairly.

All its state belongs to the event loop; computing happens in the process pool, planning and encoding in
threads, and the store has threads of its own.
"""

import asyncio
import contextlib
import datetime as dt
import logging
import time
from collections import Counter, OrderedDict
from collections.abc import Callable
from typing import Any

from app import identity, kinds, plan
from app.calibration import Calibrator
from app.errors import (
    BusyError,
    ClusterError,
    JobFailedError,
    NotFoundError,
    PriceError,
    SheetError,
    SoftmodeError,
)
from app.executor import open_executor
from app.jobs import Job
from app.plan import Chunk
from app.questions import Question
from app.settings import Settings
from app.store import StoredChunk, open_store
from app.turns import Turns
from app.workers import Outcome, Task

logger = logging.getLogger(__name__)

MOST_REMEMBERED_JOBS = 200
TIDY_SECONDS = 1.0
OVERSPENDING = 2.0


class Engine:
    """Jobs of one server. Make it, `await start()`, and at the end `await close()`."""

    def __init__(self, settings: Settings) -> None:
        self.settings = settings
        self.store = open_store(settings.data, settings.store_bytes)
        self.pool = open_executor(settings.workers, settings.cluster, settings.cluster_patience)
        self.calibrator = Calibrator(self.store.directory, self.pool, settings.cluster)
        self.turns = Turns()
        self.jobs: OrderedDict[str, Job] = OrderedDict()
        self.counts: Counter[str] = Counter()
        self.restarting = False
        self._busy = 0
        self._loop: asyncio.AbstractEventLoop | None = None
        self._tending: tuple[asyncio.Task[None], ...] = ()

    async def start(self) -> None:
        """Begin to look after leases; measure the workers when there is nothing else to do."""
        self._loop = asyncio.get_running_loop()
        measuring = self.calibrator.run(lambda: not any(job.is_active for job in self.jobs.values()))
        self._tending = (asyncio.create_task(self._tidy()), asyncio.create_task(measuring))

    def announce_restart(self) -> None:
        """Tell everybody who watches that the server goes down; finished chunks are kept."""
        self.restarting = True
        for job in self.jobs.values():
            if job.is_active:
                job.state = "restarting"
                job.waiting.clear()
                job.changed()

    async def close(self) -> None:
        """Stop computing, finish writing."""
        self.announce_restart()
        for task in self._tending:
            task.cancel()
            with contextlib.suppress(asyncio.CancelledError):
                await task
        await asyncio.to_thread(self.pool.close)
        await asyncio.to_thread(self.store.close)

    # -- asking ---------------------------------------------------------------------------------

    @property
    def lease_length(self) -> float:
        """Seconds after which somebody who was not heard of has left."""
        return self.settings.lease_seconds + self.settings.grace_seconds

    async def submit(
        self, sheet: Question, client: str, *, by_polling: bool = False, extra_seconds: float = 0.0
    ) -> tuple[Job, str]:
        """Return the job of a sheet, started if need be, and the name of a lease on it.

        Raises PriceError, BusyError, or the error with which the computation failed before.
        """
        name = identity.sheet_id(sheet)
        job = self.jobs.get(name)
        if job is None or not (job.is_active or job.is_settled):
            job = self._begin(name, sheet, client, job)
        elif job.state == "done":
            self.store.touch(name)
        self.jobs.move_to_end(name)
        lease = job.add_lease(self.lease_length + extra_seconds, by_polling=by_polling)
        if job.preparing is not None:
            await asyncio.shield(job.preparing)
        if job.error is not None and job.plan is None:
            raise job.error
        return job, lease

    def _begin(self, name: str, sheet: Question, client: str, old: Job | None) -> Job:
        """Enter a job, or take up a cancelled one again."""
        if self.restarting:
            raise BusyError(
                "restarting", "the server is restarting; ask again in a moment", retry_after=3, status=503
            )
        unfinished = sum(job.is_active for job in self.jobs.values())
        if unfinished >= self.settings.queue_limit:
            raise BusyError(
                "queue-full",
                f"{unfinished} sheets are being computed; ask again later",
                "queue_limit",
                unfinished,
                f"at most {self.settings.queue_limit} at a time",
                retry_after=5,
            )
        if old is not None and old.state == "cancelled":
            job = old
            job.state, job.client, job.error = "queued", client, None
        else:
            job = self.jobs[name] = Job(name, sheet, client)
        self.counts["jobs_started"] += 1
        if job.preparing is None:
            job.preparing = asyncio.create_task(self._prepare(job))
        return job

    def job(self, name: str) -> Job:
        """Return a job by name; raise NotFoundError."""
        job = self.jobs.get(name)
        if job is None:
            raise NotFoundError(
                "unknown-job",
                "this server does not know the job (any more); ask for the sheet again, "
                "finished parts are kept",
                "id",
                name,
                None,
            )
        return job

    def renew(self, job: Job, lease: str) -> None:
        """Renew a lease; raise NotFoundError when it has lapsed."""
        if not job.renew(lease, self.lease_length):
            raise NotFoundError(
                "unknown-lease", "this lease has lapsed; ask for the sheet again", "lease", lease, None
            )

    def leave(self, job: Job, lease: str) -> None:
        """Give up a lease; the job stops when nobody holds one."""
        job.leases.pop(lease, None)
        if not job.leases and job.is_active:
            self.cancel(job)

    def cancel(self, job: Job) -> None:
        """Stop a job for everybody; finished chunks are kept."""
        if not job.is_active:
            return
        self.counts["jobs_cancelled"] += 1
        job.state = "cancelled"
        self._abandon(job)
        job.changed()

    async def result(self, job: Job, sheet: Question) -> dict[str, Any]:
        """Return the result of a job as it is now, for a sheet with the same computation."""
        return await self.drawn(job, sheet, kinds.result_of)

    async def drawn(self, job: Job, sheet: Question, draw: Callable[..., dict[str, Any]]) -> dict[str, Any]:
        """Return what `draw` makes of a job as it is now: question, plan, rows, name and provenance."""
        if job.plan is None:
            raise BusyError(
                "not-planned", "the job has not started yet; ask again in a moment", retry_after=1
            )
        provenance = identity.versions() | {"computed_at": job.finished_at, "seconds": round(job.seconds, 4)}
        return await asyncio.to_thread(
            draw, sheet, job.plan, list(job.rows), name=job.id, provenance=provenance
        )

    def facts(self) -> dict[str, Any]:
        """Return counters since the start."""
        names = (
            "jobs_started",
            "jobs_cancelled",
            "chunks_computed",
            "chunks_found",
            "points_computed",
            "portraits_started",
        )
        return {name: self.counts[name] for name in names} | {
            "chunks_stored": self.store.stored,
            "jobs_active": sum(job.is_active for job in self.jobs.values()),
            "workers": self.pool.size,
            "workers_ready": self.pool.ready,
            "workers_busy": self._busy,
            "workers_lost": self.pool.lost,
        }

    # -- running --------------------------------------------------------------------------------

    async def _prepare(self, job: Job) -> None:
        """Plan a job, take what the store has, queue the rest."""
        try:
            if job.plan is None:
                made = self.calibrator.found.priced(await asyncio.to_thread(kinds.plan_of, job.sheet))
                plan.check_price(made, self.settings.price_ceiling, self.settings.memory_ceiling)
                found = await self.store.load(job.id)
                job.rows = [None] * len(made.questions)
                job.plan = made
                self._take_stored(job, found, made.chunks)
                while job.is_computed and job.plan.grow is not None:
                    made, before = job.plan, len(job.plan.chunks)
                    job.plan = await asyncio.to_thread(made.grown, list(job.rows))
                    self._take_stored(job, found, job.plan.chunks[before:])
                if job.is_computed:
                    job.finished_at = await self.store.finished_at(job.id)
            if job.plan is not None and len(job.finished_chunks) < len(job.plan.chunks):
                await asyncio.to_thread(self.pool.check)
        except SoftmodeError as error:
            self._fail(job, error)
            self.jobs.pop(job.id, None)
        except Exception:
            logger.exception("a sheet could not be planned")
            self._fail(
                job, JobFailedError("internal", "the sheet could not be planned; the server's log says why")
            )
            self.jobs.pop(job.id, None)
        else:
            self._queue(job)
        finally:
            self._prepared(job)

    def _prepared(self, job: Job) -> None:
        """Note that the task that runs now has done its part, unless another one follows it already."""
        if job.preparing is asyncio.current_task():
            job.preparing = None

    def _take_stored(self, job: Job, found: dict[int, StoredChunk], chunks: tuple[Chunk, ...]) -> None:
        """Enter those chunks of a plan that the store has."""
        for chunk in chunks:
            stored = found.get(chunk.number)
            if stored is not None and stored.points == chunk.points:
                job.accept(chunk, stored)
                self.counts["chunks_found"] += 1

    async def _grow(self, job: Job) -> None:
        """Add to a plan what its computed rows ask for, and go on with that, or finish."""
        try:
            if job.plan is not None and job.is_computed:
                job.plan = await asyncio.to_thread(job.plan.grown, list(job.rows))
        except Exception:
            logger.exception("a plan could not grow")
            self._fail(
                job, JobFailedError("internal", "the sheet could not be planned; the server's log says why")
            )
        else:
            self._queue(job)
            if job.state == "done":
                self.store.end(job.id, job.finished_at)
        finally:
            self._prepared(job)

    def _queue(self, job: Job) -> None:
        """Queue what is left of a planned job, unless it was cancelled meanwhile."""
        if job.plan is None or not job.is_active:
            return
        if job.is_computed and job.plan.grow is None:
            self._finish(job)
            return
        if job.is_computed:  # cancelled while its plan grew, and asked for again
            job.preparing = asyncio.create_task(self._grow(job))
            return
        job.refill()
        self.store.begin(job.id, job.sheet.computation_key())
        job.changed()
        self._dispatch()

    def _dispatch(self) -> None:
        """Give free workers the next chunks, of whoever has the next turn."""
        while self._busy < self.pool.size:
            candidates = [job for job in self.jobs.values() if job.waiting and job.is_active]
            if not candidates:
                self.turns.clear()
                return
            job = self.turns.choose(candidates)
            self._run(job, job.waiting.popleft())

    def _run(self, job: Job, chunk: Chunk) -> None:
        if job.plan is None or self._loop is None:
            return
        loop = self._loop

        def report(outcome: Outcome) -> None:
            with contextlib.suppress(RuntimeError):  # the loop has ended: so has the server
                loop.call_soon_threadsafe(self._landed, job, chunk, outcome)

        task = Task(job.plan.chunk_questions(chunk), report, job.plan.work)
        job.active[chunk.number] = task
        job.state = "running"
        self._busy += 1
        self.turns.charge(job.client, chunk.seconds * job.speed)
        self.pool.submit(task)

    def _landed(self, job: Job, chunk: Chunk, outcome: Outcome) -> None:
        """Take in the outcome of a chunk."""
        self._busy -= 1
        job.active.pop(chunk.number, None)
        if outcome.kind == "done":
            self._take(job, chunk, outcome)
        elif outcome.kind == "stopped" and job.is_active:
            job.waiting.appendleft(chunk)  # cancelled and asked for again before the stop took effect
        elif outcome.kind == "broken":
            # the numbers asked for, without title and note
            asked = job.sheet.computation_key()
            logger.error("computing chunk %d of %s failed:\n%s", chunk.number, asked, outcome.trace)
            self._fail(
                job,
                JobFailedError(
                    "internal", "the solver failed at a point of this sheet; the server's log says why"
                ),
            )
        elif outcome.kind == "refused" and outcome.error is not None:
            self._fail(job, SheetError("not-solvable", **outcome.error))
        elif outcome.kind == "unavailable" and outcome.error is not None:
            self._fail(job, ClusterError(**outcome.error, retry_after=5))
        elif outcome.kind == "lost" and not self.restarting:
            self._fail(
                job,
                JobFailedError(
                    "kills-workers",
                    "computing this sheet ended the computing process twice, most likely for want of memory; "
                    "it is refused until the server restarts. Ask for fewer spins, fewer levels or a smaller "
                    "coupling",
                    "spins",
                    job.sheet.spins,
                    None,
                ),
            )
        self._dispatch()

    def _take(self, job: Job, chunk: Chunk, outcome: Outcome) -> None:
        finished = StoredChunk(chunk.points, outcome.rows, outcome.seconds)
        job.accept(chunk, finished)
        self.turns.charge(job.client, outcome.seconds - chunk.seconds * job.speed)
        job.pace = (job.pace[0] + chunk.seconds, job.pace[1] + outcome.seconds)
        self.counts["chunks_computed"] += 1
        self.counts["points_computed"] += len(chunk.points)
        if job.is_computed and job.is_active and job.plan is not None and job.plan.grow is None:
            self._finish(job)
        else:
            job.changed()
        # told after publishing: nobody waits for the disk
        self.store.keep(job.id, chunk.number, finished)
        if job.state == "done":
            self.store.end(job.id, job.finished_at)
        elif job.is_computed and job.is_active:
            job.preparing = asyncio.create_task(self._grow(job))

    def _finish(self, job: Job) -> None:
        now = dt.datetime.now(dt.UTC)
        job.finished_at = job.finished_at or now.isoformat(timespec="seconds")
        job.state = "done"
        job.changed()
        self._forget()

    def _fail(self, job: Job, error: SoftmodeError) -> None:
        job.error = error
        job.state = "failed"
        self._abandon(job)
        job.changed()

    def _abandon(self, job: Job) -> None:
        """Drop the chunks of a job that wait, stop those under way, unpin what is stored."""
        job.waiting.clear()
        for task in job.active.values():
            self.pool.stop(task)
        job.leases.clear()
        if job.plan is not None:
            self.store.end(job.id, None)

    async def _tidy(self) -> None:
        """Drop lapsed leases, and the jobs that nobody holds any more."""
        pause = min(TIDY_SECONDS, max(0.05, self.lease_length / 4.0))
        while True:
            await asyncio.sleep(pause)
            for job in list(self.jobs.values()):
                job.drop_lapsed()
                if job.is_active and not job.leases:
                    self.cancel(job)
                self._check_spending(job)
                self._tell_trouble(job)
            self._forget()

    def _tell_trouble(self, job: Job) -> None:
        """Let those who watch a job know why it does not go on, and when it does again."""
        if job.is_active and job.notice != self.pool.trouble:
            job.notice = self.pool.trouble
            job.changed()

    def _check_spending(self, job: Job) -> None:
        """Stop a job that takes far longer than its price: a wrong forecast must not hold the workers."""
        if self.pool.trouble is not None:
            return
        now = time.monotonic()
        spent = job.pace[1] + sum(now - task.handed_over for task in job.active.values())
        most = OVERSPENDING * self.settings.price_ceiling
        if job.is_active and spent > most:
            self._fail(
                job,
                PriceError(
                    "took-too-long",
                    f"this took much longer than predicted and was stopped after {spent:.0f} s of processor "
                    "time; ask for fewer spins, fewer levels, a smaller coupling or a larger 'tol'",
                    "points",
                    job.total,
                    f"at most {most:.0f} s of processor time for a sheet",
                ),
            )

    def _forget(self) -> None:
        """Forget the jobs used longest ago when there are too many points in memory; the store has them."""
        resting = [job for job in self.jobs.values() if not job.is_active and not job.active]
        points = sum(job.total for job in resting)
        for job in resting[:-1]:
            if points <= self.settings.remembered_points and len(resting) <= MOST_REMEMBERED_JOBS:
                return
            if job.error is None:
                del self.jobs[job.id]
            points -= job.total
