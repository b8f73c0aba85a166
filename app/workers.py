"""The processes that compute.

Each worker is one spawned process with one BLAS thread and one pipe, watched by a thread of its own in the
server. When a process dies, the chunk it was working on is known, a new process takes its place, and the
chunk is tried once more; a chunk that kills two processes is given up.
"""

import contextlib
import functools
import json
import logging
import multiprocessing
import os
import queue
import signal
import threading
import time
import traceback
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from multiprocessing.connection import Connection, wait
from multiprocessing.context import SpawnProcess
from pathlib import Path
from typing import Any

from app.companions import companions
from app.cutoff_work import answer_margins, answer_needs
from app.point_work import answer_convergence
from app.series import SERIES_KEYS
from solver import (
    SOLVER_DIGEST,
    CollectiveModel,
    ConvergenceError,
    PointQuestion,
    SolverError,
    StateName,
    draw_portrait,
    solve_chain,
)

logger = logging.getLogger(__name__)

NICENESS = 10
THREAD_CAPS = (
    "OMP_NUM_THREADS",
    "OPENBLAS_NUM_THREADS",
    "MKL_NUM_THREADS",
    "BLIS_NUM_THREADS",
    "VECLIB_MAXIMUM_THREADS",
    "NUMEXPR_NUM_THREADS",
)
MOST_DEATHS = 2
_NOTHING = dict.fromkeys(SERIES_KEYS)
STOP = "stop"
STOP_SECONDS = 0.25
START_SECONDS = 60.0


@dataclass(frozen=True)
class Outcome:
    """How a chunk ended.

    `kind` is "done", "stopped" (cancelled half-way), "refused" (the solver says why in `error`), "broken"
    (an unforeseen failure, its trace in `trace`), "lost" (killed two processes) or "unavailable" (a cluster
    that cannot compute it, `error` says why); `rows` and `seconds` (processor time) belong to "done".
    """

    kind: str
    rows: list[dict[str, Any]] = field(default_factory=list)
    seconds: float = 0.0
    error: dict[str, Any] | None = None
    trace: str = ""


@dataclass
class Task:
    """A chunk under way: its questions, and what to call with its outcome (from a thread of the pool).

    `work` names what answers the questions: "portrait" (only the last point is answered, with the pictures
    of `state`) or a key of WORK.
    """

    questions: Sequence[Any]
    report: Callable[[Outcome], None]
    work: str = "points"
    state: StateName = "ground"
    deaths: int = 0
    stopped: bool = False
    handed_over: float = field(default_factory=time.monotonic)


def cap_threads() -> None:
    """Give BLAS one thread in this process and its children; must run before numpy is imported."""
    for name in THREAD_CAPS:
        os.environ[name] = "1"


def compute(
    questions: Sequence[PointQuestion],
    stopped: Callable[[], bool],
    beside: Callable[[PointQuestion], dict[str, Any]] = companions,
) -> list[dict[str, Any]] | None:
    """Return the rows of a chunk, or None when it was stopped between two points.

    `beside` gives what a row holds beside its answer. A point whose levels the solver cannot settle has a
    row without numbers, and a note that says so; the points after it start cold.
    """
    rows = []
    answers = solve_chain(questions)
    for number, question in enumerate(questions):
        if stopped():
            return None
        try:
            answer = next(answers).row()
        except ConvergenceError as error:
            answer = {**_NOTHING, "meets_tolerance": False, "note": f"not settled: {error.message}"}
            answers = solve_chain(questions[number + 1 :])
        rows.append(_plain_row({"answer": answer} | beside(question)))
    return rows


def compute_each(
    answer: Callable[[Any], dict[str, Any]], questions: Sequence[Any], stopped: Callable[[], bool]
) -> list[dict[str, Any]] | None:
    """Return the rows of questions that do not help each other, or None when stopped between two of them."""
    rows = []
    for question in questions:
        if stopped():
            return None
        rows.append(_plain_row(answer(question)))
    return rows


Computer = Callable[[Sequence[Any], Callable[[], bool]], list[dict[str, Any]] | None]
WORK: dict[str, Computer] = {
    "points": compute,
    "cells": functools.partial(compute, beside=lambda _: {}),
    "needs": functools.partial(compute_each, answer_needs),
    "margins": functools.partial(compute_each, answer_margins),
    "convergence": functools.partial(compute_each, answer_convergence),
}


def compute_portrait(questions: Sequence[PointQuestion], state: StateName) -> list[dict[str, Any]]:
    """Return the row of the last point of a chunk, the same as `compute` gives it, with its `portrait`."""
    found = draw_portrait(questions, state)
    row = {"answer": found.answer.row(), "portrait": found.pictures()} | companions(questions[-1])
    return [_plain_row(row)]


def _plain_row(row: dict[str, Any]) -> dict[str, Any]:
    """Return a row through JSON and back: what is shown at once is what the store gives back later."""
    plain: dict[str, Any] = json.loads(json.dumps(row, allow_nan=False, default=_plain_scalar))
    return plain


def _plain_scalar(value: Any) -> Any:
    """Return what a numpy scalar holds as a Python number or truth value."""
    return value.item()


def _serve(pipe: Connection) -> None:
    """Answer chunks until the pipe closes (runs in the worker process)."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    parent = multiprocessing.parent_process()
    if parent is not None:
        threading.Thread(target=_follow, args=(parent.sentinel,), daemon=True).start()
    # the server, and a browser on the same machine, come first: they show what is computed here
    stand_back()
    warm = [CollectiveModel(spins, 1.0, 1.0, 0.6, 0.6) for spins in (1, 4, 20)]
    compute([PointQuestion(model=model) for model in warm], lambda: False)
    with contextlib.suppress(EOFError, OSError):
        pipe.send(SOLVER_DIGEST)
        while True:
            message = pipe.recv()
            if message != STOP:  # a stop that came too late
                questions, work, state = message
                # nothing but a stop is sent while a chunk is under way
                pipe.send(answer(questions, work, state, lambda: pipe.poll() and pipe.recv() == STOP))


def stand_back() -> None:
    """Let everything else on this machine come first.

    Linux shares processors between sessions before it looks at niceness, so that a worker needs a session
    of its own, with a niceness of its own, to stand back behind a browser.
    """
    os.nice(NICENESS)
    with contextlib.suppress(OSError):
        os.setsid()
        Path("/proc/self/autogroup").write_text(str(NICENESS))


def answer(questions: Sequence[Any], work: str, state: StateName, stopped: Callable[[], bool]) -> Outcome:
    """Return the outcome of a chunk, computed in this thread; `stopped` is asked between two points."""
    started = time.thread_time()
    try:
        if work == "portrait":
            rows: list[dict[str, Any]] | None = compute_portrait(questions, state)
        else:
            rows = WORK[work](questions, stopped)
    except SolverError as error:
        facts = {
            "message": error.message,
            "field": error.field,
            "value": str(error.value),
            "allowed": error.allowed,
        }
        return Outcome("refused", error=facts)
    except Exception:  # noqa: BLE001 - told to the server, which logs it
        return Outcome("broken", trace=traceback.format_exc())
    if rows is None:
        return Outcome("stopped")
    return Outcome("done", rows, time.thread_time() - started)


def _follow(sentinel: int) -> None:
    """End this process when the server is gone, even in the middle of a long point."""
    wait([sentinel])
    os._exit(1)


class Worker:
    """One computing process and the thread that watches it."""

    def __init__(self, tasks: "queue.SimpleQueue[Task | None]") -> None:
        self.tasks = tasks
        self.lost = 0
        self.ready = threading.Event()
        self.closing = False
        self.agrees = True
        self.context = multiprocessing.get_context("spawn")
        self.process: SpawnProcess | None = None
        self.pipe: Connection | None = None
        self.current: Task | None = None
        # held while `current` or `process` changes, so that a kill never hits the next task
        self.lock = threading.Lock()
        self.thread = threading.Thread(target=self._watch, name="softmode-worker", daemon=True)
        self.thread.start()

    def interrupt(self, task: Task) -> None:
        """Ask the process to stop `task` after the point under way."""
        with self.lock:
            if self.current is task and self.pipe is not None:
                with contextlib.suppress(OSError):
                    self.pipe.send(STOP)

    def kill(self, task: Task) -> None:
        """End the process if it is still busy with `task`."""
        with self.lock:
            if self.current is task and self.process is not None:
                self.process.kill()

    def close(self) -> None:
        """End the process and the thread."""
        self.closing = True
        with self.lock:
            if self.process is not None:
                self.process.kill()

    def _start(self) -> None:
        pipe, theirs = self.context.Pipe()
        process = self.context.Process(target=_serve, args=(theirs,), daemon=True)
        try:
            process.start()
        except OSError as error:  # no memory, or too many processes
            logger.warning("a computing process cannot be started: %s", error)
            pipe.close()
            time.sleep(1.0)
            return
        finally:
            theirs.close()
        with self.lock:
            self.process, self.pipe = process, pipe
        if wait([pipe, process.sentinel], START_SECONDS) and pipe.poll():
            with contextlib.suppress(EOFError, OSError):
                self.agrees = pipe.recv() == SOLVER_DIGEST
                self.ready.set()

    def _watch(self) -> None:
        """Start the process, hand it tasks, start it again when it dies."""
        self._start()
        while not self.closing:
            task = self.tasks.get()
            if task is None:
                break
            self._finish(task)
        self._end()

    def _finish(self, task: Task) -> None:
        """Run a task and report its outcome, once more when the process dies over it."""
        while True:
            outcome = Outcome("stopped") if task.stopped else self._run(task)
            if outcome is None and not task.stopped and not self.closing:
                self.lost += 1
                task.deaths += 1
                logger.warning("a computing process died; another one takes its place")
            over = task.stopped or self.closing or task.deaths >= MOST_DEATHS
            if outcome is not None or over:
                # told before a new process is started: nobody waits for that
                task.report(outcome or Outcome("stopped" if task.stopped else "lost"))
            if outcome is None and not self.closing:
                self._end()
                self._start()
            if outcome is not None or over:
                return

    def _run(self, task: Task) -> Outcome | None:
        """Return the outcome of a task, or None when the process died over it."""
        pipe, process = self.pipe, self.process
        if pipe is None or process is None:
            return None
        if not self.agrees:
            return Outcome(
                "broken", trace="the solver's files have changed since the server started: restart it"
            )
        try:
            with self.lock:
                if task.stopped:
                    return Outcome("stopped")
                self.current = task
                pipe.send((tuple(task.questions), task.work, task.state))
            if pipe not in wait([pipe, process.sentinel]):
                return None
            outcome = pipe.recv()
        except (EOFError, OSError):
            return None
        finally:
            with self.lock:
                self.current = None
        return outcome if isinstance(outcome, Outcome) else None

    def _end(self) -> None:
        with self.lock:
            process, pipe = self.process, self.pipe
            self.process = self.pipe = None
        if process is not None:
            process.kill()
            process.join(5.0)
            process.close()
        if pipe is not None:
            pipe.close()


class ProcessPool:
    """A fixed number of workers that share one queue of tasks."""

    def __init__(self, workers: int) -> None:
        cap_threads()
        self.tasks: queue.SimpleQueue[Task | None] = queue.SimpleQueue()
        self.workers = [Worker(self.tasks) for _ in range(workers)]

    @property
    def size(self) -> int:
        """Number of workers."""
        return len(self.workers)

    @property
    def ready(self) -> int:
        """Number of workers that have started."""
        return sum(worker.ready.is_set() for worker in self.workers)

    @property
    def lost(self) -> int:
        """Number of processes that died without being asked to."""
        return sum(worker.lost for worker in self.workers)

    @property
    def trouble(self) -> str | None:
        """None: processes are always there, a dead one is replaced."""
        return None

    def check(self) -> None:
        """Do nothing: each process compares its solver when it starts."""

    def submit(self, task: Task) -> None:
        """Hand over a task; its `report` is called once, from a thread of the pool."""
        self.tasks.put(task)

    def stop(self, task: Task) -> None:
        """Stop a task: after the point under way, or by ending its process when that takes too long."""
        task.stopped = True
        for worker in self.workers:
            worker.interrupt(task)
        timer = threading.Timer(STOP_SECONDS, self._kill, [task])
        timer.daemon = True
        timer.start()

    def _kill(self, task: Task) -> None:
        for worker in self.workers:
            worker.kill(task)

    def close(self) -> None:
        """End all processes."""
        for worker in self.workers:
            worker.close()
        for _ in self.workers:
            self.tasks.put(None)
        for worker in self.workers:
            worker.thread.join(10.0)
