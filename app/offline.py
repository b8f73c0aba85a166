"""Computing a sheet without a server: the same plan, the same processes, the same numbers."""

import contextlib
import datetime as dt
import queue
from collections.abc import Callable
from pathlib import Path
from typing import Any

from app import calibration, identity, kinds
from app.calibration import Calibration, Reference
from app.errors import ClusterError, JobFailedError, SheetError
from app.executor import open_executor
from app.plan import Chunk
from app.questions import Question
from app.settings import Settings
from app.workers import Outcome, Task

Progress = Callable[[int, int], None]


def compute_sheet(
    sheet: Question, workers: int, progress: Progress, cluster: str | None = None
) -> dict[str, Any]:
    """Return the complete result of a sheet.

    Parameters
    ----------
    sheet : Sheet or CutoffSheet
        The question.
    workers : int
        Number of computing processes.
    progress : callable
        Called with the finished and the total number of points.
    cluster : str or None
        Address of a Dask scheduler whose workers compute in the place of processes.

    Raises
    ------
    SheetError
        When the solver refuses a point.
    JobFailedError
        When a chunk ends its process twice.
    StartError, ClusterError
        When the cluster cannot be used, or is lost.
    """
    made = kinds.plan_of(sheet)
    rows: list[dict[str, Any] | None] = [None] * len(made.questions)
    landed: queue.SimpleQueue[tuple[Chunk, Outcome]] = queue.SimpleQueue()
    pool = open_executor(workers, cluster, Settings().cluster_patience)
    seconds = 0.0
    done = 0
    progress(0, len(rows))
    submitted = finished = 0
    try:
        while True:
            for chunk in made.chunks[submitted:]:
                pool.submit(Task(made.chunk_questions(chunk), _reporter(landed, chunk), made.work))
            submitted = len(made.chunks)
            if finished == submitted:
                break
            chunk, outcome = landed.get()
            finished += 1
            if outcome.kind == "unavailable" and outcome.error is not None:
                raise ClusterError(**outcome.error)
            if outcome.error is not None:
                raise SheetError("not-solvable", **outcome.error)
            if outcome.kind == "broken":
                raise JobFailedError("internal", f"the solver failed at a point:\n{outcome.trace}")
            if outcome.kind != "done":
                raise JobFailedError(
                    "kills-workers",
                    "computing this sheet ended the computing process twice, most likely for want of memory; "
                    "ask for fewer spins, fewer levels or a smaller coupling",
                    "spins",
                    sheet.spins,
                )
            for point, row in zip(chunk.points, outcome.rows, strict=True):
                rows[point] = row
            seconds += outcome.seconds
            done += len(chunk.points)
            if finished == submitted:
                made = made.grown(rows)
            progress(made.settled + done, len(rows))
    finally:
        pool.close()
    provenance = identity.versions() | {
        "computed_at": dt.datetime.now(dt.UTC).isoformat(timespec="seconds"),
        "seconds": round(seconds, 4),
    }
    return kinds.result_of(sheet, made, rows, name=identity.sheet_id(sheet), provenance=provenance)


def measure_machine(directory: Path) -> Calibration:
    """Return how fast the processes of this machine are, and keep it where there is a data directory.

    Raises JobFailedError when a process cannot answer.
    """
    landed: queue.SimpleQueue[Outcome] = queue.SimpleQueue()
    pool = open_executor(1, None, 0.0)

    def seconds(reference: Reference) -> float:
        pool.submit(Task(reference.questions, landed.put, reference.work))
        outcome = landed.get()
        if outcome.kind != "done":
            raise JobFailedError("internal", f"the machine's speed could not be measured: {outcome.trace}")
        return outcome.seconds

    try:
        found = calibration.measured(seconds)
    finally:
        pool.close()
    if directory.is_dir():
        with contextlib.suppress(OSError):
            calibration.keep(directory, found)
    return found


def _reporter(landed: "queue.SimpleQueue[tuple[Chunk, Outcome]]", chunk: Chunk) -> Callable[[Outcome], None]:
    def report(outcome: Outcome) -> None:
        landed.put((chunk, outcome))

    return report
