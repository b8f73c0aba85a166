"""How fast this machine is, compared with the constants of the forecasts.

A few fixed questions are answered by a worker when nobody waits for anything, once for each set of
versions and processor; what they took is kept in the data directory. Only prices, times left and the order
of work follow from it: numbers and chunks never do.
"""

import asyncio
import contextlib
import dataclasses
import datetime as dt
import functools
import json
import logging
import math
import os
import platform
import statistics
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from app import identity
from app.cutoff_work import NeedsQuestion, needs_seconds
from app.executor import Executor
from app.plan import Plan
from app.workers import Outcome, Task
from solver import CollectiveModel, CutoffQuestion, PointQuestion, predicted_seconds

logger = logging.getLogger(__name__)

FILE = "calibration.json"
IDLE_SECONDS = 3.0
PAUSE_SECONDS = 0.5
PATIENCE_SECONDS = 60.0
REPEATS = 2
# a machine outside this range is one that was held up while it was measured
SLOWEST, FASTEST = 50.0, 0.02
POINTS, NEEDS = "points", "needs"


@dataclass(frozen=True)
class Calibration:
    """Actual over predicted processor seconds for each kind of work, and where and when they were found.

    `measured_at` is None as long as nothing has been measured: the factors are 1 then.
    """

    factors: Mapping[str, float] = field(default_factory=dict)
    versions: Mapping[str, str] = field(default_factory=dict)
    processor: str = ""
    measured_at: str | None = None

    def factor(self, work: str) -> float:
        """Return the factor for a kind of work (see `workers.WORK`); margins are priced like needs."""
        return self.factors.get(POINTS if work in {POINTS, "portrait"} else NEEDS, 1.0)

    def priced(self, made: Plan) -> Plan:
        """Return a plan with its price in seconds of this machine; its chunks stay as they are."""
        return dataclasses.replace(made, seconds=made.seconds * self.factor(made.work))

    def data(self) -> dict[str, Any]:
        """Return the calibration as JSON-able data."""
        return {
            "factors": dict(self.factors),
            "versions": dict(self.versions),
            "processor": self.processor,
            "measured_at": self.measured_at,
        }


@functools.cache
def processor_name() -> str:
    """Return what the processor calls itself."""
    with contextlib.suppress(OSError):
        for line in Path("/proc/cpuinfo").read_text(encoding="utf-8").splitlines():
            name, _, value = line.partition(":")
            if name.strip() == "model name":
                return value.strip()
    return platform.processor() or platform.machine()


def load(directory: Path, place: str | None = None) -> Calibration | None:
    """Return what was measured with these versions on this processor (or cluster), None when nothing was."""
    try:
        found = json.loads((directory / FILE).read_text(encoding="utf-8"))
        kept = Calibration(**found)
        valid = all(FASTEST <= kept.factors[work] <= SLOWEST for work in (POINTS, NEEDS))
    except (OSError, ValueError, TypeError, KeyError):
        return None
    known = (dict(kept.versions), kept.processor) == (identity.versions(), place or processor_name())
    return kept if valid and known else None


def keep(directory: Path, calibration: Calibration) -> None:
    """Write a calibration to the data directory, in one step."""
    written = directory / f"{FILE}.{os.getpid()}"
    written.write_text(json.dumps(calibration.data(), indent=1), encoding="utf-8")
    written.replace(directory / FILE)


@dataclass(frozen=True)
class Reference:
    """One chunk that is measured: its kind of work, its questions and their predicted seconds."""

    work: str
    questions: tuple[Any, ...]
    seconds: float


def references() -> tuple[Reference, ...]:
    """Return the chunks that are measured, small and large, of every way to solve."""
    chains = [
        [CollectiveModel(spins, 1.0, 1.0, part * x, part * ratio * x, bias) for x in multiples]
        for spins, ratio, bias, part, multiples in (
            (1, 1.0, 0.0, 0.5, (0.5, 1.0, 1.5, 2.0, 3.0)),
            (4, 1.0, 0.0, 0.5, (0.5, 1.0, 1.5, 2.0)),
            (20, 1.0, 0.0, 0.5, (0.8, 1.0, 1.2, 1.4)),
            (20, 0.5, 0.3, 0.7, (0.8, 1.2, 1.6)),
            (100, 1.0, 0.0, 0.5, (0.9, 1.5)),
            (300, 1.0, 0.0, 0.5, (1.5,)),
            (200, 0.0, 0.0, 1.0, (0.7, 1.3)),
        )
    ]
    found = []
    for models in chains:
        points = tuple(PointQuestion(model=model) for model in models)
        found.append(Reference(POINTS, points, sum(map(predicted_seconds, points))))
    for model in (chains[1][1], chains[2][2], chains[4][0]):
        asked = NeedsQuestion(CutoffQuestion(model=model))
        found.append(Reference(NEEDS, (asked,), needs_seconds(asked)))
    return tuple(found)


def concluded(spent: Mapping[Reference, float], place: str | None = None) -> Calibration:
    """Return the calibration that follows from the processor seconds that references took."""
    ratios: dict[str, list[float]] = {}
    for reference, seconds in spent.items():
        ratios.setdefault(reference.work, []).append(math.log(max(seconds, 1e-9) / reference.seconds))
    factors = {
        work: min(SLOWEST, max(FASTEST, math.exp(statistics.median(logs)))) for work, logs in ratios.items()
    }
    now = dt.datetime.now(dt.UTC).isoformat(timespec="seconds")
    return Calibration(factors, identity.versions(), place or processor_name(), now)


def measured(answer: Callable[[Reference], float]) -> Calibration:
    """Return the calibration of whatever answers references and says how long it took."""
    return concluded({one: min(answer(one) for _ in range(REPEATS)) for one in references()})


class Calibrator:
    """Measures the workers of a server once, while nobody waits."""

    def __init__(self, directory: Path, pool: Executor, cluster: str | None) -> None:
        self.directory = directory
        self.pool = pool
        self.place = None if cluster is None else f"cluster {cluster}"
        self.found = load(directory, self.place) or Calibration()
        self._has_begun = False

    async def run(self, is_idle: Callable[[], bool]) -> None:
        """Measure, unless it has been done; start, and go on, only while `is_idle`."""
        if self.found.measured_at is not None:
            return
        spent: dict[Reference, float] = {}
        # the first round warms caches; of the others the best one counts
        for number in range(REPEATS):
            for reference in await asyncio.to_thread(references):
                await self._wait_until_idle(is_idle)
                outcome = await self._answered(reference)
                if outcome.kind != "done":
                    logger.warning("the machine's speed could not be measured: %s", outcome.kind)
                    return
                best = math.inf if number == 0 else spent[reference]
                spent[reference] = min(best, outcome.seconds)
        self.found = concluded(spent, self.place)
        try:
            await asyncio.to_thread(keep, self.directory, self.found)
        except OSError as error:
            logger.warning("the machine's speed could not be kept: %s", error)

    async def _wait_until_idle(self, is_idle: Callable[[], bool]) -> None:
        """Return when nobody has waited for anything for a while; once begun, when nobody waits."""
        while not (self._has_begun and is_idle()):
            idle = 0.0
            while idle < IDLE_SECONDS:
                await asyncio.sleep(PAUSE_SECONDS)
                idle = idle + PAUSE_SECONDS if is_idle() and self.pool.ready else 0.0
            self._has_begun = True

    async def _answered(self, reference: Reference) -> Outcome:
        loop = asyncio.get_running_loop()
        landed: asyncio.Future[Outcome] = loop.create_future()

        def land(outcome: Outcome) -> None:
            if not landed.done():
                landed.set_result(outcome)

        def report(outcome: Outcome) -> None:
            with contextlib.suppress(RuntimeError):  # the loop has ended: so has the server
                loop.call_soon_threadsafe(land, outcome)

        task = Task(reference.questions, report, reference.work)
        self.pool.submit(task)
        try:
            return await asyncio.wait_for(landed, PATIENCE_SECONDS)
        except TimeoutError:
            return Outcome("stopped")
        finally:
            if not landed.done() or landed.cancelled():
                self.pool.stop(task)
