"""What the computing processes answer for the cutoff desk: one point, and the margins at one point."""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from solver import CollectiveModel, PointQuestion, SolverError, predicted_bytes
from solver.convergence import ConvergenceQuestion, convergence, predicted_convergence_seconds
from solver.needs import CutoffQuestion, answer_cutoff, predicted_cutoff_seconds
from solver.start import StartQuestion, answer_start, predicted_start_seconds
from solver.thermal import ThermalQuestion, answer_thermal, predicted_thermal_seconds

Main = CutoffQuestion | ThermalQuestion


@dataclass(frozen=True)
class NeedsQuestion:
    """What is asked at one point: levels or thermal equilibrium, and how the mode starts, if asked."""

    main: Main
    start: StartQuestion | None = None

    @property
    def model(self) -> CollectiveModel:
        """The model at this point."""
        return self.main.model


@dataclass(frozen=True)
class MarginsQuestion:
    """The errors of one point at a few cutoffs: of levels (at these, and along a run), heat or a start."""

    cutoffs: tuple[int, ...]
    levels: tuple[ConvergenceQuestion, ConvergenceQuestion] | None
    thermal: tuple[ThermalQuestion, ...] = ()
    starts: tuple[StartQuestion, ...] = ()


def needs_seconds(question: NeedsQuestion) -> float:
    """Predicted processor time of a point."""
    if isinstance(question.main, ThermalQuestion):
        seconds = predicted_thermal_seconds(question.main)
    else:
        seconds = predicted_cutoff_seconds(question.main)
    return seconds + (predicted_start_seconds(question.start) if question.start else 0.0)


def needs_bytes(question: NeedsQuestion) -> int:
    """Predicted memory of a point."""
    levels = question.main.levels if isinstance(question.main, CutoffQuestion) else 1
    return predicted_bytes(PointQuestion(model=question.model, levels=levels))


def margins_seconds(question: MarginsQuestion) -> float:
    """Predicted processor time of the margins of a point."""
    seconds = sum(predicted_convergence_seconds(one) for one in question.levels or ())
    seconds += sum(predicted_thermal_seconds(one) for one in question.thermal)
    return seconds + sum(predicted_start_seconds(one) for one in question.starts)


def margins_bytes(model: CollectiveModel, question: MarginsQuestion) -> int:
    """Predicted memory of the margins of a point."""
    levels = question.levels[0].levels if question.levels else 1
    return predicted_bytes(PointQuestion(model=model, levels=levels))


def margin_cutoffs(cutoff: int) -> tuple[int, ...]:
    """Return the cutoffs whose errors are told: M, M + 2, a quarter more, half more (rounded up)."""
    return tuple(sorted({cutoff, cutoff + 2, -(-5 * cutoff // 4), -(-3 * cutoff // 2)}))


def answer_needs(question: NeedsQuestion) -> dict[str, Any]:
    """Return the row of a point: `answer`, `start` and a `note` where a part could not be solved."""
    notes: list[str] = []
    row: dict[str, Any] = {"answer": _tried(lambda: _main_row(question.main), notes), "start": None}
    if question.start is not None:
        started = question.start
        row["start"] = _tried(lambda: answer_start(started).row(), notes)
    return row | {"note": "; ".join(notes) or None}


def answer_margins(question: MarginsQuestion) -> dict[str, Any]:
    """Return `cutoffs`, the `error` of each quantity at each of them, and the false `plateaus`."""
    error: dict[str, list[float | None]] = {}
    plateaus: list[dict[str, Any]] = []
    if question.levels is not None:
        few, run = (convergence(one).row() for one in question.levels)
        error |= few["error"] | {"tail": few["tail"]}
        plateaus = run["plateaus"]
    for one in question.thermal:
        for name, value in answer_thermal(one).row()["stated"]["error"].items():
            error.setdefault(name, []).append(value)
    if question.starts:
        error["start"] = [answer_start(one).row()["stated"]["weight_most"] for one in question.starts]
    return {"cutoffs": list(question.cutoffs), "error": error, "plateaus": plateaus}


def _main_row(main: Main) -> dict[str, Any]:
    return answer_thermal(main).row() if isinstance(main, ThermalQuestion) else answer_cutoff(main).row()


def _tried(solve: Callable[[], dict[str, Any]], notes: list[str]) -> dict[str, Any] | None:
    """Return what a solver answers, or None with a note that says why there is no answer."""
    try:
        row = solve()
    except SolverError as error:
        notes.append(f"not settled: {error.message}")
        return None
    if row.get("note"):
        notes.append(str(row["note"]))
    return row


__all__ = [
    "MarginsQuestion",
    "NeedsQuestion",
    "answer_margins",
    "answer_needs",
    "margin_cutoffs",
    "margins_bytes",
    "margins_seconds",
    "needs_bytes",
    "needs_seconds",
]
