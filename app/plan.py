"""The plan of a sheet: its points, in chunks that are solved one after another in one process.

The plan depends on the sheet alone, never on the machine: a chunk starts cold and its points help each
other in order, so the same plan gives the same numbers to the last bit wherever it runs.
"""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any, Self

from app.errors import PriceError
from app.keys import MOST_CURVES, number_text
from app.sheets import Sheet, critical_coupling
from solver import CollectiveModel, PointQuestion, predicted_bytes, predicted_seconds

COARSE_STEP = 8
# a chunk this short brings a first curve while the finger is still on the key
FIRST_CHUNK_SECONDS = 0.02
CHUNK_SECONDS = 0.2
MOST_POINTS_IN_CHUNK = 64


@dataclass(frozen=True)
class Curve:
    """One curve of a sheet: the value of `each` (None without a family) and the values along the axis."""

    name: str | None
    value: float | None
    axis: tuple[float, ...]


@dataclass(frozen=True)
class Chunk:
    """Points solved in one go, by their numbers in the plan, and their predicted processor seconds."""

    number: int
    points: tuple[int, ...]
    seconds: float


@dataclass(frozen=True)
class Growth:
    """What a plan adds once everything in it is computed: points in the order in which they are solved.

    `settled` is the number of points of the question that need no computation; `seconds` the processor time
    predicted for what may be added later.
    """

    runs: tuple[tuple[int, ...], ...]
    settled: int
    seconds: float


@dataclass(frozen=True)
class Plan:
    """What has to be computed for a sheet.

    `questions` holds curve after curve, each in the order of the axis; `chunks` are in the order in which
    they should run, coarse ones first. `seconds` is the predicted processor time, `peak_bytes` the
    predicted memory of the largest point, whose model is `largest`. `work` names what the workers do with
    the questions (see `workers.WORK`).

    A plan may grow: `grow` then says what the rows found so far ask for, None when it is at its end. It must
    depend on the rows alone.
    """

    curves: tuple[Curve, ...]
    questions: tuple[Any, ...]
    chunks: tuple[Chunk, ...]
    seconds: float
    peak_bytes: int
    largest: CollectiveModel
    work: str = "points"
    prices: tuple[float, ...] = ()
    grow: Callable[[Sequence[Mapping[str, Any] | None]], Growth] | None = None
    settled: int = 0
    later_seconds: float = 0.0

    def grown(self, rows: Sequence[Mapping[str, Any] | None]) -> Self:
        """Return the plan with its next chunks, now that all of it is computed; without `grow` at its end."""
        if self.grow is None:
            return self
        added = self.grow(rows)
        first = len(self.chunks)
        chunks = tuple(
            Chunk(first + number, run, sum(self.prices[point] for point in run))
            for number, run in enumerate(added.runs)
        )
        return replace(
            self,
            chunks=self.chunks + chunks,
            settled=added.settled,
            later_seconds=added.seconds,
            grow=self.grow if chunks else None,
        )

    def chunk_questions(self, chunk: Chunk) -> tuple[Any, ...]:
        """Return the questions of a chunk in the order in which they are solved."""
        return tuple(self.questions[point] for point in chunk.points)


def axis_values(sheet: Sheet) -> tuple[float, ...]:
    """Return the values along the axis, both ends exact, whole numbers for spins."""
    last = sheet.points - 1
    if sheet.along == "spins":
        low, high = int(sheet.start), int(sheet.stop)
        return tuple((low * (last - i) + high * i + last // 2) // last for i in range(sheet.points))
    inner = tuple((sheet.start * (last - i) + sheet.stop * i) / last for i in range(1, last))
    return (sheet.start, *inner, sheet.stop)


def model_at(sheet: Sheet, x: float, family_value: float | None = None) -> CollectiveModel:
    """Return the model at the value `x` of the axis and one value of the family."""
    settings = [(sheet.along, x)]
    if sheet.each is not None and family_value is not None:
        settings.insert(0, (sheet.each.name, family_value))
    return model_with(sheet, settings)


def model_with(sheet: Sheet, settings: Sequence[tuple[str, float]]) -> CollectiveModel:
    """Return the model of a sheet with some swept quantities set, in this order."""
    values: dict[str, float | None] = {
        name: getattr(sheet, name)
        for name in ("spins", "mode", "splitting", "detuning", "coupling", "ratio", "bias")
    }
    for name, value in settings:
        if name == "splitting":
            values["detuning"] = None
        values[name] = value
    mode, ratio = values["mode"] or sheet.mode, values["ratio"] or 0.0
    detuning = values["detuning"]
    splitting = mode + detuning if detuning is not None else values["splitting"] or 0.0
    coupling = values["coupling"] or 0.0
    multiple = values.get("coupling-over-critical")
    if multiple is not None:
        coupling = multiple * critical_coupling(mode, splitting, ratio)
    return CollectiveModel(
        spins=int(values["spins"] or 1),
        mode=mode,
        splitting=splitting,
        rotating=coupling,
        counter=ratio * coupling,
        bias=values["bias"] or 0.0,
    )


def question_at(sheet: Sheet, x: float, family_value: float | None = None) -> PointQuestion:
    """Return what is asked at one point."""
    return PointQuestion(
        model=model_at(sheet, x, family_value),
        levels=sheet.levels,
        tolerance=sheet.tol,
        need=sheet.need,
        tail=sheet.tail,
    )


def curves(sheet: Sheet) -> tuple[Curve, ...]:
    """Return the curves of a sheet."""
    axis = axis_values(sheet)
    if sheet.each is None:
        return (Curve(None, None, axis),)
    return tuple(Curve(sheet.each.name, value, axis) for value in sheet.each.values)


def make(sheet: Sheet) -> Plan:
    """Return the plan of a sheet."""
    drawn = curves(sheet)
    questions = tuple(question_at(sheet, x, curve.value) for curve in drawn for x in curve.axis)
    largest = max(questions, key=predicted_bytes)
    seconds = [predicted_seconds(question) for question in questions]
    return assembled(drawn, questions, seconds, peak_bytes=predicted_bytes(largest), largest=largest.model)


def assembled(
    drawn: tuple[Curve, ...],
    questions: tuple[Any, ...],
    prices: list[float],
    *,
    peak_bytes: int,
    largest: CollectiveModel,
    work: str = "points",
) -> Plan:
    """Return a plan of points that lie curve after curve; `prices` are their predicted seconds."""
    coarse: list[list[int]] = []
    fine: list[list[int]] = []
    # with many rows the first few chunks are a picture already
    shortest = FIRST_CHUNK_SECONDS if len(drawn) <= MOST_CURVES else CHUNK_SECONDS
    first = 0
    for one in drawn:
        last = first + len(one.axis) - 1
        picked = sorted({*range(first, last + 1, COARSE_STEP), last})
        others = sorted(set(range(first, last + 1)) - set(picked))
        coarse += _combed(picked, prices, shortest)
        fine += _cut(others, prices)
        first = last + 1
    chunks = tuple(
        Chunk(number, tuple(points), sum(prices[point] for point in points))
        for number, points in enumerate(coarse + fine)
    )
    return Plan(drawn, questions, chunks, sum(prices), peak_bytes, largest, work)


def _pieces(points: list[int], prices: list[float], most_seconds: float) -> int:
    """Return in how many chunks a set of points goes: two at least, so that two processes can share it."""
    total = sum(prices[point] for point in points)
    pieces = max(2, round(total / most_seconds + 0.5), -(-len(points) // MOST_POINTS_IN_CHUNK))
    return min(pieces, len(points))


def _combed(points: list[int], prices: list[float], most_seconds: float) -> list[list[int]]:
    """Share points out in turn, so that each chunk alone shows the whole curve."""
    pieces = _pieces(points, prices, most_seconds)
    return [points[first::pieces] for first in range(pieces)]


def _cut(points: list[int], prices: list[float]) -> list[list[int]]:
    """Cut a run of points into chunks of neighbours, of similar price."""
    if not points:
        return []
    share = sum(prices[point] for point in points) / _pieces(points, prices, CHUNK_SECONDS)
    cut: list[list[int]] = [[]]
    spent = 0.0
    for point in points:
        full = spent >= share * len(cut) or len(cut[-1]) >= MOST_POINTS_IN_CHUNK
        if cut[-1] and full:
            cut.append([])
        cut[-1].append(point)
        spent += prices[point]
    return cut


def check_price(plan: Plan, price_ceiling: float, memory_ceiling: int) -> None:
    """Raise PriceError when a plan costs more processor time or memory than the ceilings allow."""
    if plan.peak_bytes > memory_ceiling:
        raise PriceError(
            "too-much-memory",
            f"one point would take about {plan.peak_bytes / 1e9:.3g} GB of memory (at {plan.largest.spins} "
            f"spins, coupling {number_text(plan.largest.rotating)}); ask for fewer spins, a smaller "
            "coupling or fewer levels",
            "spins",
            plan.largest.spins,
            f"at most {memory_ceiling / 1e9:.3g} GB for a point",
        )
    if plan.seconds > price_ceiling:
        fitting = int(len(plan.questions) * price_ceiling / plan.seconds)
        raise PriceError(
            "too-expensive",
            f"this would take about {_minutes(plan.seconds)} of processor time; ask for fewer points "
            f"(about {fitting} would fit), fewer spins, a smaller coupling or a larger 'tol'",
            "points",
            len(plan.questions),
            f"at most {_minutes(price_ceiling)} of processor time for a sheet",
        )


def _minutes(seconds: float) -> str:
    return f"{seconds:.3g} s" if seconds < 120.0 else f"{seconds / 60.0:.3g} min"
