"""The plan of a cutoff question: its points, and the margins at one of them."""

import contextlib
from collections.abc import Iterator

from app import plan
from app.cutoff_sheets import CutoffSheet
from app.cutoff_work import (
    Main,
    MarginsQuestion,
    NeedsQuestion,
    margin_cutoffs,
    needs_bytes,
    needs_seconds,
)
from app.errors import SheetError
from app.keys import Key
from app.plan import Curve, Plan
from solver import CollectiveModel, SolverError
from solver.convergence import ConvergenceQuestion
from solver.needs import CutoffQuestion
from solver.start import StartQuestion
from solver.thermal import ThermalQuestion, temperature_of_quanta
from solver.wanted import Wanted

POINT = Key("point", "integer", 0, "number of the point, from 0, row after row", low=0)
CUTOFF = Key("cutoff", "integer", None, "cutoff whose surroundings are looked at", low=0, high=100_000)


def curves(question: CutoffSheet) -> tuple[Curve, ...]:
    """Return the curves of a question, or the rows of its map."""
    axis = plan.axis_values(question.sheet)
    return tuple(Curve(question.second, value, axis) for value in question.curves)


def make(question: CutoffSheet) -> Plan:
    """Return the plan of a cutoff question."""
    drawn = curves(question)
    with told_as_sheet_errors():
        points = tuple(point_at(question, x, curve.value) for curve in drawn for x in curve.axis)
        prices = [needs_seconds(point) for point in points]
        sizes = [needs_bytes(point) for point in points]
    largest = points[max(range(len(points)), key=sizes.__getitem__)]
    return plan.assembled(drawn, points, prices, peak_bytes=max(sizes), largest=largest.model, work="needs")


@contextlib.contextmanager
def told_as_sheet_errors() -> Iterator[None]:
    """Turn what the solver refuses to be asked into the error of the sheet's own key."""
    try:
        yield
    except SolverError as error:
        names = {
            "quanta": "start-quanta",
            "periods": "start-periods",
            "energies": "need",
            "gap": "need-gap",
            "boson_number": "need-bosons",
            "order_parameter": "need-order",
        }
        field = names.get(error.field, error.field)
        raise SheetError("not-solvable", error.message, field, str(error.value), error.allowed) from None


def model_at(question: CutoffSheet, x: float, second: float | None) -> CollectiveModel:
    """Return the model at one value of the axis, and of the second quantity where there is one."""
    settings = [(question.sheet.along, x)]
    if question.second is not None and second is not None:
        settings.insert(0, (question.second, second))
    return plan.model_with(question.sheet, settings)


def point_at(
    question: CutoffSheet, x: float, second: float | None, stated: int | None = None
) -> NeedsQuestion:
    """Return what is asked at one point; `stated` takes the place of the question's own stated cutoff."""
    model = model_at(question, x, second)
    cutoff = question["stated"] if stated is None else stated
    return NeedsQuestion(_main(question, model, cutoff), _start(question, model, cutoff))


def _main(question: CutoffSheet, model: CollectiveModel, stated: int | None) -> Main:
    wanted = wanted_of(question)
    if question["ensemble"] == "lowest":
        return CutoffQuestion(model=model, levels=question.sheet.levels, wanted=wanted, stated=stated)
    return ThermalQuestion(
        model=model,
        temperature=_temperature(question, model),
        distinguishable=question["ensemble"] == "distinguishable",
        wanted=wanted,
        stated=stated,
    )


def _temperature(question: CutoffSheet, model: CollectiveModel) -> float:
    if question["temperature"] is not None:
        return float(question["temperature"])
    return temperature_of_quanta(model.mode, question["quanta"])


def _start(question: CutoffSheet, model: CollectiveModel, stated: int | None) -> StartQuestion | None:
    if question["start"] == "none":
        return None
    return StartQuestion(
        model=model,
        kind=question["start"],
        quanta=question["start-quanta"],
        periods=question["start-periods"],
        tail=question.sheet.tail,
        stated=stated,
    )


def wanted_of(question: CutoffSheet) -> Wanted:
    """Return the errors allowed for what is asked, None for the rest."""
    sheet = question.sheet
    allowed = {
        "energies": sheet.need,
        "gap": question["need-gap"],
        "boson_number": question["need-bosons"],
        "order_parameter": question["need-order"],
        "tail": sheet.tail,
    }
    return Wanted(**{name: value if name in question.asked else None for name, value in allowed.items()})


def place_of(question: CutoffSheet, point: int) -> tuple[float, float | None]:
    """Return the value on the axis, and of the second quantity, of a point by number; raise SheetError."""
    if point >= question.total:
        raise SheetError(
            "out-of-range", f"there is no point {point}", "point", point, f"0 to {question.total - 1}"
        )
    row, column = divmod(point, question.sheet.points)
    return plan.axis_values(question.sheet)[column], question.curves[row]


def margins_at(question: CutoffSheet, point: int, cutoff: int) -> tuple[CollectiveModel, MarginsQuestion]:
    """Return the model of a point and what is asked about the cutoffs around `cutoff`; raise SheetError."""
    place = place_of(question, point)
    cutoffs = margin_cutoffs(cutoff)
    with told_as_sheet_errors():
        asked = [point_at(question, *place, stated) for stated in cutoffs]
    first = asked[0].main
    levels = None
    if isinstance(first, CutoffQuestion):
        few, run = (
            ConvergenceQuestion(model=first.model, levels=first.levels, cutoffs=chosen, wanted=first.wanted)
            for chosen in (cutoffs, None)
        )
        levels = (few, run)
    return first.model, MarginsQuestion(
        cutoffs=cutoffs,
        levels=levels,
        thermal=tuple(one.main for one in asked if isinstance(one.main, ThermalQuestion)),
        starts=tuple(one.start for one in asked if one.start is not None),
    )
