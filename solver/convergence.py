"""What truncated calculations find, cutoff by cutoff, beside the certified answer.

In the number basis and in the displaced-ladder basis: values, true errors, the errors told in
advance from one converged solve, weights above the cutoff, and false plateaus, where a value
looks settled and is wrong.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from solver.converged import Converged, converge
from solver.errors import QuestionError
from solver.forecast import first_cutoff, forecast
from solver.model import CollectiveModel
from solver.needs import MOST_LEVELS, CutoffQuestion, answer_cutoff, solving_accuracy, truncations_of
from solver.shifted_truncation import ShiftedTruncations
from solver.truncated import FockTruncations, Truncations, error_of, largest_affordable
from solver.truncation_bounds import levels_bound, tail_above
from solver.wanted import COMMON, Wanted

Array = NDArray[np.float64]
ConvergenceBasis = Literal["fock", "shifted"]

VALUES = ("energy", "gap", "boson_number", "order_parameter")
ERRORS = ("energies", "gap", "boson_number", "order_parameter")
MOST_CUTOFFS = 60
LARGEST_CUTOFF = 100_000
_REACH = 1.5
_LONG = 4
_FAR_OFF = 3.0


@dataclass(frozen=True, slots=True)
class ConvergenceQuestion:
    """Values against cutoff for one model.

    cutoffs: ascending, at most 60, or None for a run up to past 1.5 times the needed one; wanted:
    errors that decide what is needed and what looks settled. Raises QuestionError.
    """

    model: CollectiveModel
    levels: int = 6
    cutoffs: tuple[int, ...] | None = None
    basis: ConvergenceBasis = "fock"
    wanted: Wanted = COMMON

    def __post_init__(self) -> None:
        if not 1 <= self.levels <= MOST_LEVELS:
            raise QuestionError("levels", self.levels, f"1 to {MOST_LEVELS}")
        if self.basis not in ("fock", "shifted"):
            raise QuestionError("basis", self.basis, "fock or shifted")
        if self.cutoffs is not None:
            if not 1 <= len(self.cutoffs) <= MOST_CUTOFFS:
                raise QuestionError("cutoffs", len(self.cutoffs), f"1 to {MOST_CUTOFFS} of them")
            if list(self.cutoffs) != sorted(set(self.cutoffs)):
                raise QuestionError("cutoffs", self.cutoffs, "ascending, each once")
            if not 0 <= self.cutoffs[0] <= self.cutoffs[-1] <= LARGEST_CUTOFF:
                raise QuestionError("cutoffs", self.cutoffs, f"0 to {LARGEST_CUTOFF}")


@dataclass(frozen=True, slots=True)
class Plateau:
    """A stretch of cutoffs over which a value looks settled while it is wrong."""

    quantity: str
    first: int
    last: int
    value: float
    truth: float

    def row(self) -> dict[str, Any]:
        """The same as plain data."""
        return {
            "quantity": self.quantity,
            "from": self.first,
            "to": self.last,
            "value": self.value,
            "truth": self.truth,
        }


@dataclass(frozen=True, slots=True)
class Convergence:
    """Truncated values against cutoff; None where a calculation does not hold enough levels.

    truth, value: unit of the inputs; error, bound: levels and gap in units of the mode. bound:
    told in advance from the converged states (number basis only): proven for "energies",
    estimates for the others.
    """

    basis: str
    cutoffs: tuple[int, ...]
    truth: dict[str, float | None]
    value: dict[str, list[float | None]]
    error: dict[str, list[float | None]]
    bound: dict[str, list[float | None] | None]
    tail: list[float]
    plateaus: tuple[Plateau, ...]
    note: str | None = None

    def row(self) -> dict[str, Any]:
        """JSON-able."""
        return {
            "basis": self.basis,
            "cutoffs": list(self.cutoffs),
            "truth": dict(self.truth),
            "value": {key: list(values) for key, values in self.value.items()},
            "error": {key: list(values) for key, values in self.error.items()},
            "bound": {key: None if values is None else list(values) for key, values in self.bound.items()},
            "tail": list(self.tail),
            "plateaus": [plateau.row() for plateau in self.plateaus],
            "note": self.note,
        }


def convergence(question: ConvergenceQuestion) -> Convergence:
    """Truncated calculations at every cutoff asked for. Raises ConvergenceError."""
    model, wanted = question.model, question.wanted
    tolerance, angle = solving_accuracy(model, wanted)
    exact = converge(model, question.levels, tolerance, angle)
    shifted = ShiftedTruncations(exact, tolerance, angle) if question.basis == "shifted" else None
    cutoffs = question.cutoffs or _sensible(question, shifted)
    note = None
    if shifted is None and exact.blocks is None and cutoffs[-1] > largest_affordable(model):
        most = largest_affordable(model)
        cutoffs = tuple(cutoff for cutoff in cutoffs if cutoff <= most)
        note = f"cutoffs above {most} left out: a truncated solve would be too large"
        if not cutoffs:
            raise QuestionError("cutoffs", question.cutoffs, f"at least one up to {most}")
    truncations: Truncations = shifted or truncations_of(exact, wanted, cutoffs[-1])
    found = [truncations.at(cutoff, gap=True, levels=True) for cutoff in cutoffs]
    tails = [
        shifted.tail_above(cutoff) if shifted is not None else tail_above(exact, cutoff) for cutoff in cutoffs
    ]
    truth: dict[str, float | None] = {
        "energy": exact.energy,
        "gap": exact.gap,
        "boson_number": exact.boson_number,
        "order_parameter": exact.order_parameter,
    }
    value = {key: [_plain(getattr(values, key)) for values in found] for key in VALUES}
    error = {key: [_plain(abs(error_of(exact, values, key))) for values in found] for key in ERRORS}
    return Convergence(
        basis=question.basis,
        cutoffs=tuple(cutoffs),
        truth=truth,
        value=value,
        error=error,
        bound=_bounds(exact, truncations, cutoffs),
        tail=tails,
        plateaus=tuple(_plateaus(cutoffs, value, truth, wanted, model.mode)),
        note=note,
    )


def _plain(value: float | None) -> float | None:
    return value if value is not None and math.isfinite(value) else None


def _sensible(question: ConvergenceQuestion, shifted: ShiftedTruncations | None) -> tuple[int, ...]:
    """From none to past 1.5 times the needed cutoff, thinned to MOST_CUTOFFS."""
    if shifted is None:
        asked = CutoffQuestion(question.model, question.levels, question.wanted)
        needed = answer_cutoff(asked).covering
    else:
        needed = shifted.needed(min(1e-6, question.wanted.tail or 1.0))
    most = math.ceil(_REACH * needed) + 4
    if most < MOST_CUTOFFS:
        return tuple(range(most + 1))
    return tuple(sorted({round(most * at / (MOST_CUTOFFS - 1)) for at in range(MOST_CUTOFFS)}))


def _bounds(
    exact: Converged, truncations: Truncations, cutoffs: Sequence[int]
) -> dict[str, list[float | None] | None]:
    """Errors told from the converged states alone, one per cutoff (number basis only)."""
    out: dict[str, list[float | None] | None] = dict.fromkeys(ERRORS)
    if isinstance(truncations, ShiftedTruncations):
        return out
    out["energies"] = [_plain(levels_bound(exact, cutoff)) for cutoff in cutoffs]
    if not isinstance(truncations, FockTruncations):
        return out
    ground = exact.sectors[exact.ground]
    if len(ground.energies) > 1:
        pair = ground.cut(2)
        lifted = [pair.errors(cutoff) for cutoff in cutoffs]
        out["gap"] = [
            abs(float(second - first)) / exact.model.mode if math.isfinite(second) else None
            for first, second in lifted
        ]
    for name, errors in truncations.estimates(cutoffs[-1] + 1).items():
        out[name] = [abs(float(errors[cutoff])) for cutoff in cutoffs]
    return out


def _plateaus(
    cutoffs: Sequence[int],
    value: dict[str, list[float | None]],
    truth: dict[str, float | None],
    wanted: Wanted,
    mode: float,
) -> list[Plateau]:
    """Stretches of successive cutoffs over which a value moves little per step and is far off."""
    out = []
    for key in VALUES:
        allowed = wanted.of("energies" if key == "energy" else key)
        exact = truth[key]
        if allowed is None or exact is None:
            continue
        if key in ("energy", "gap"):
            allowed *= mode
        for first, last in _stretches(cutoffs, value[key], exact, allowed):
            middle = value[key][last]
            if middle is not None:
                out.append(Plateau(key, cutoffs[first], cutoffs[last], middle, exact))
    return out


def _stretches(
    cutoffs: Sequence[int], values: Sequence[float | None], exact: float, allowed: float
) -> list[tuple[int, int]]:
    """Runs of places, at least four cutoffs long, that look settled and are wrong."""
    out: list[tuple[int, int]] = []
    first = 0
    for at in range(len(cutoffs) + 1):
        here = values[at] if at < len(cutoffs) else None
        wrong = here is not None and abs(here - exact) > _FAR_OFF * allowed
        steady = False
        if at > first and wrong and here is not None:
            before = values[at - 1]
            steps = cutoffs[at] - cutoffs[at - 1]
            steady = before is not None and abs(here - before) < allowed * steps
        if not (wrong and (at == first or steady)):
            if at - first >= _LONG:
                out.append((first, at - 1))
            first = at if wrong else at + 1
    return out


def predicted_convergence_seconds(question: ConvergenceQuestion) -> float:
    """Expected time of `convergence` on one core."""
    model = question.model
    solve = forecast(model, question.levels).seconds
    sectors = 2 if model.conserves_parity else 1
    cutoff = first_cutoff(model, question.basis, question.levels)
    dimension = (cutoff + 1.0) * (model.spins + 1.0) / sectors
    count = MOST_CUTOFFS if question.cutoffs is None else len(question.cutoffs)
    count = min(count, round(_REACH * cutoff) + 4)
    width = (model.spins + 1.0) / sectors if question.basis == "fock" else 2.0 * cutoff
    return solve + 0.01 + sectors * count * (1e-3 + dimension * width * 40e-9)
