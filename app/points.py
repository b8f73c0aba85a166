"""The desk for single points: computed in the process pool, one computation however many ask.

Its state belongs to the event loop. A point that nobody waits for any more is stopped after a grace period;
finished ones are remembered for a while.
"""

import asyncio
import datetime as dt
import hashlib
import logging
import math
from collections import OrderedDict
from dataclasses import dataclass
from typing import Any

from app import identity, plan
from app.calibration import POINTS, Calibration
from app.cutoff_plan import told_as_sheet_errors
from app.cutoff_work import MarginsQuestion, margins_bytes, margins_seconds
from app.engine import OVERSPENDING, Engine
from app.errors import BusyError, ClusterError, JobFailedError, PriceError, SheetError, SoftmodeError
from app.exports import point_of
from app.places import Place
from app.settings import Settings
from app.workers import Outcome, Task
from solver import (
    CollectiveModel,
    PointQuestion,
    StateName,
    portrait_seconds,
    predicted_bytes,
    predicted_seconds,
)

MOST_REMEMBERED = 16
# one client's points must not fill the queue that sweeps wait in, too
MOST_PER_CLIENT = 4
Asked = tuple[tuple[Any, ...], str, StateName]

logger = logging.getLogger(__name__)


@dataclass
class _Entry:
    """A computation under way or finished, the spins of its point, and how many wait for it."""

    task: Task
    client: str
    spins: int
    outcome: "asyncio.Future[Outcome]"
    waiting: int = 0
    finished_at: str = ""
    limit: asyncio.TimerHandle | None = None
    overspent: bool = False


def chain_of(place: Place) -> tuple[PointQuestion, ...]:
    """Return the questions that lead to a point, itself last.

    A point of the sweep is solved after those before it in its chunk, so that its numbers are those of the
    sweep to the last bit; a place between them starts cold.
    """
    number = place.number
    if number is None:
        return (plan.question_at(place.sheet, place.at, place.member),)
    made = plan.make(place.sheet)
    point = place.curve * place.sheet.points + number
    chunk = next(chunk for chunk in made.chunks if point in chunk.points)
    before = chunk.points[: chunk.points.index(point) + 1]
    return tuple(made.questions[one] for one in before)


def check_price(questions: tuple[PointQuestion, ...], settings: Settings, calibration: Calibration) -> None:
    """Raise PriceError when a portrait costs more processor time or memory than the server allows."""
    seconds = sum(predicted_seconds(question) for question in questions) + portrait_seconds(questions[-1])
    most_bytes = max(predicted_bytes(question) for question in questions)
    check_ceilings(questions[-1].model, calibration.factor(POINTS) * seconds, most_bytes, settings)


def check_ceilings(model: CollectiveModel, seconds: float, most_bytes: int, settings: Settings) -> None:
    """Raise PriceError when a point costs more processor time or memory than the server allows."""
    plan.check_price(plan.Plan((), (), (), seconds, most_bytes, model), math.inf, settings.memory_ceiling)
    if seconds > settings.price_ceiling:
        raise PriceError(
            "too-expensive",
            f"this point would take about {seconds:.3g} s of processor time; ask for fewer spins, fewer "
            "levels or a smaller coupling",
            "spins",
            model.spins,
            f"at most {settings.price_ceiling:.3g} s of processor time",
        )


def check_margins_price(
    model: CollectiveModel, asked: MarginsQuestion, settings: Settings, calibration: Calibration
) -> None:
    """Raise PriceError when the margins of a point cost more than the server allows."""
    with told_as_sheet_errors():
        seconds, most_bytes = margins_seconds(asked), margins_bytes(model, asked)
    check_ceilings(model, calibration.factor("margins") * seconds, most_bytes, settings)


class PointDesk:
    """Portraits of points of one server."""

    def __init__(self, engine: Engine) -> None:
        self.engine = engine
        self.entries: OrderedDict[Asked, _Entry] = OrderedDict()

    async def ask(self, place: Place, client: str, wait: float) -> dict[str, Any] | None:
        """Return the result of a point, or None when `wait` seconds are not enough.

        Raises PriceError, BusyError, or what went wrong with the computation.
        """
        questions = await asyncio.to_thread(chain_of, place)
        check_price(questions, self.engine.settings, self.engine.calibrator.found)
        asked = (questions, "portrait", place.state)
        found = await self.compute(asked, questions[-1].model.spins, client, wait)
        return None if found is None else await self._told(place, *found)

    async def compute(
        self, asked: Asked, spins: int, client: str, wait: float
    ) -> tuple[Outcome, dict[str, Any]] | None:
        """Return the outcome of a computation and its provenance, None when `wait` seconds are not enough.

        `asked` holds the questions, their work (see `workers`) and the state drawn; `spins` is for the words
        of an error. Raises BusyError, or what went wrong.
        """
        if asked not in self.entries:
            await asyncio.to_thread(self.engine.pool.check)
        entry = self.entries.get(asked) or self._begin(asked, spins, client)
        self.entries.move_to_end(asked)
        entry.waiting += 1
        try:
            await asyncio.wait([entry.outcome], timeout=wait)
        finally:
            entry.waiting -= 1
            if not entry.outcome.done():
                loop = asyncio.get_running_loop()
                loop.call_later(self.engine.lease_length, self._drop_if_left, entry)
        if not entry.outcome.done():
            return None
        return self._finished(asked, entry)

    def _begin(self, asked: Asked, spins: int, client: str) -> _Entry:
        if self.engine.restarting:
            raise BusyError("restarting", "the server is restarting; ask again in a moment", retry_after=3)
        active = [entry.client for entry in self.entries.values() if not entry.outcome.done()]
        counted = (
            ("points", len(active), self.engine.settings.queue_limit),
            ("of your points", active.count(client), MOST_PER_CLIENT),
        )
        for whose, number, limit in counted:
            if number >= limit:
                raise BusyError(
                    "queue-full",
                    f"{number} {whose} are being computed; ask again later",
                    "queue_limit",
                    number,
                    f"at most {limit} at a time",
                    retry_after=1,
                )
        loop = asyncio.get_running_loop()
        outcome: asyncio.Future[Outcome] = loop.create_future()

        def report(found: Outcome) -> None:
            if not loop.is_closed():
                loop.call_soon_threadsafe(self._landed, entry, found)

        entry = _Entry(Task(asked[0], report, asked[1], asked[2]), client, spins, outcome)
        self.entries[asked] = entry
        self.engine.counts["portraits_started"] += 1
        self.engine.pool.submit(entry.task)
        most = OVERSPENDING * self.engine.settings.price_ceiling
        entry.limit = loop.call_later(most, self._stop_overspent, entry)
        return entry

    def _landed(self, entry: _Entry, outcome: Outcome) -> None:
        entry.finished_at = dt.datetime.now(dt.UTC).isoformat(timespec="seconds")
        entry.outcome.set_result(outcome)
        if entry.limit is not None:
            entry.limit.cancel()
        if outcome.kind == "broken":
            logger.error("a point failed: %s\n%s", entry.task.questions[-1], outcome.trace)
        resting = [asked for asked, one in self.entries.items() if one.outcome.done()]
        for asked in resting[:-MOST_REMEMBERED]:
            del self.entries[asked]

    def _drop_if_left(self, entry: _Entry) -> None:
        if entry.waiting == 0 and not entry.outcome.done():
            self.engine.pool.stop(entry.task)

    def _stop_overspent(self, entry: _Entry) -> None:
        if not entry.outcome.done():
            entry.overspent = True
            self.engine.pool.stop(entry.task)

    def _finished(self, asked: Asked, entry: _Entry) -> tuple[Outcome, dict[str, Any]]:
        """Return an outcome and its provenance, or raise the error that it stands for."""
        outcome = entry.outcome.result()
        if outcome.kind == "done":
            made = {"computed_at": entry.finished_at, "seconds": round(outcome.seconds, 4)}
            return outcome, identity.versions() | made
        if outcome.kind in {"stopped", "broken", "unavailable"}:
            # worth another try, unlike what the solver refuses
            self.entries.pop(asked, None)
        raise _error_of(outcome, entry, self.engine)

    async def _told(self, place: Place, outcome: Outcome, provenance: dict[str, Any]) -> dict[str, Any]:
        """Return the result of a point."""
        name = hashlib.sha256(f"{identity.sheet_id(place.sheet)} {place.at!r} {place.member!r}".encode())
        return await asyncio.to_thread(
            point_of, place, outcome.rows[0], name=name.hexdigest(), provenance=provenance
        )


def _error_of(outcome: Outcome, entry: _Entry, engine: Engine) -> SoftmodeError:
    if outcome.kind == "refused" and outcome.error is not None:
        return SheetError("not-solvable", **outcome.error)
    if outcome.kind == "unavailable" and outcome.error is not None:
        return ClusterError(**outcome.error, retry_after=5)
    if outcome.kind == "stopped" and entry.overspent:
        most = OVERSPENDING * engine.settings.price_ceiling
        return PriceError(
            "took-too-long",
            "this took much longer than predicted and was stopped; ask for fewer spins, fewer levels or a "
            "smaller coupling",
            "spins",
            entry.spins,
            f"at most {most:.0f} s for a point",
        )
    if outcome.kind == "stopped":
        return BusyError("restarting", "the computation was stopped; ask again in a moment", retry_after=3)
    if outcome.kind == "lost":
        return JobFailedError(
            "kills-workers",
            "computing this point ended the computing process twice, most likely for want of memory; ask for "
            "fewer spins, fewer levels or a smaller coupling",
            "spins",
            entry.spins,
        )
    return JobFailedError("internal", "the solver failed at this point; the server's log says why")
