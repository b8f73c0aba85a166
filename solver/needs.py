"""Which cutoff each quantity needs: levels, gap, quanta, order parameter, weight above the cutoff.

Needed means: a calculation with n <= M, and every one with a larger cutoff, stays within the
wanted error. Levels come from the cut states alone (never too low, see `cutoff`); the weight
above M is that of the exact states. Gap, quanta and order parameter of a truncated calculation
are not those of the cut states, because the rest of the state gives way: they are read from
truncated solves, walking to the smallest cutoff that holds and looking beyond it for a return
of the error.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any, Literal

from solver.converged import Converged, converge
from solver.cutoff_walk import Walk
from solver.errors import QuestionError
from solver.forecast import first_cutoff, forecast
from solver.model import CollectiveModel
from solver.truncated import (
    Accuracy,
    FockTruncations,
    TruncatedValues,
    Truncations,
    error_of,
    largest_affordable,
)
from solver.truncated_blocks import BlockTruncations
from solver.truncation_bounds import (
    gap_cutoff,
    ground_curve,
    levels_bound,
    levels_cutoff,
    state_bound,
    tail_above,
    tail_cutoff,
)
from solver.wanted import COMMON, QUANTITIES, Wanted

NeedStatus = Literal["proven", "checked"]

LARGEST_STATED = 100_000
MOST_LEVELS = 40


@dataclass(frozen=True, slots=True)
class CutoffQuestion:
    """Which cutoff one model needs, and whether `stated` is enough.

    levels: lowest levels judged, 1..40; stated: 0..100000 or None. Raises QuestionError.
    """

    model: CollectiveModel
    levels: int = 6
    wanted: Wanted = COMMON
    stated: int | None = None

    def __post_init__(self) -> None:
        if not 1 <= self.levels <= MOST_LEVELS:
            raise QuestionError("levels", self.levels, f"1 to {MOST_LEVELS}")
        if self.stated is not None and not 0 <= self.stated <= LARGEST_STATED:
            raise QuestionError("stated", self.stated, f"0 to {LARGEST_STATED}, or None")


@dataclass(frozen=True, slots=True)
class Stated:
    """How a calculation with the stated cutoff does; error None: it does not hold the levels."""

    cutoff: int
    error: dict[str, float | None]
    good: dict[str, bool]
    enough: bool

    def row(self) -> dict[str, Any]:
        """The same as plain data."""
        return {
            "cutoff": self.cutoff,
            "error": dict(self.error),
            "good": dict(self.good),
            "enough": self.enough,
        }


@dataclass(frozen=True, slots=True)
class CutoffAnswer:
    """Needed cutoffs with what is claimed of them; None for quantities not asked.

    error: at the needed cutoff; levels and gap in units of the mode. energy and gap: exact, unit
    of the inputs.
    """

    needed: dict[str, int | None]
    status: dict[str, NeedStatus | None]
    error: dict[str, float | None]
    covering: int
    deciding: str
    stated: Stated | None
    energy: float
    boson_number: float
    order_parameter: float
    gap: float | None
    note: str | None = None

    def row(self) -> dict[str, Any]:
        """JSON-able."""
        return {
            "needed": dict(self.needed),
            "status": dict(self.status),
            "error": dict(self.error),
            "covering": self.covering,
            "deciding": self.deciding,
            "stated": None if self.stated is None else self.stated.row(),
            "energy": self.energy,
            "boson_number": self.boson_number,
            "order_parameter": self.order_parameter,
            "gap": self.gap,
            "note": self.note,
        }


def answer_cutoff(question: CutoffQuestion) -> CutoffAnswer:
    """Needed cutoff of every quantity asked, from one converged solve and a few truncated ones.

    Raises ConvergenceError where the model itself is too large to solve.
    """
    return _Desk(question).answer()


def solving_accuracy(model: CollectiveModel, wanted: Wanted) -> tuple[float, float]:
    """Tolerance of the levels (unit of the inputs) and angle of the ground state to solve to."""
    level = 0.1 * (wanted.least("energies", "gap") or 1.0)
    angle = 1e-3 * (wanted.least("boson_number", "order_parameter") or 1.0)
    return model.mode * max(1e-12, min(1e-9, level)), max(1e-11, min(1e-7, angle))


def truncations_of(converged: Converged, wanted: Wanted, top: int) -> Truncations:
    """Truncated calculations of a converged model, accurate enough to judge the wanted errors.

    top: largest cutoff expected.
    """
    if converged.blocks is not None:
        return BlockTruncations(converged)
    # observables of the ground state err in proportion to its residual, levels to the square
    state = 1e-2 * (wanted.of("order_parameter") or 1e-2)
    if wanted.boson_number is not None:
        state = min(state, 1e-2 * wanted.boson_number / math.sqrt(converged.boson_number + 1.0))
    others = 0.03 * math.sqrt(wanted.least("energies", "gap") or 1e-3)
    accuracy = Accuracy(max(1e-11, min(state, 1e-4)), max(1e-8, min(1e-3, others)))
    negligible = 1e-2 * (wanted.least("gap", "boson_number", "order_parameter") or 1e-3)
    return FockTruncations(converged, top, accuracy, negligible)


class _Desk:
    """Everything known about one question while it is answered."""

    def __init__(self, question: CutoffQuestion) -> None:
        self.question, self.wanted, self.model = question, question.wanted, question.model
        tolerance, angle = solving_accuracy(self.model, self.wanted)
        self.exact = converge(self.model, question.levels, tolerance, angle)
        self.last = max(sector.end for sector in self.exact.sectors.values()) - 1
        self.curve = ground_curve(self.exact)
        self.limit = self.last
        if self.exact.blocks is None:
            self.limit = min(self.last, largest_affordable(self.model))
        self.notes: list[str] = []
        self._truncations: Truncations | None = None

    def answer(self) -> CutoffAnswer:
        needed: dict[str, int | None] = dict.fromkeys(QUANTITIES)
        status: dict[str, NeedStatus | None] = dict.fromkeys(QUANTITIES)
        error: dict[str, float | None] = dict.fromkeys(QUANTITIES)
        for name in self.wanted.asked:
            needed[name], status[name], error[name] = self._needed(name)
        settled = {name: cutoff for name, cutoff in needed.items() if cutoff is not None}
        covering = max(settled.values())
        exact = self.exact
        return CutoffAnswer(
            needed=needed,
            status=status,
            error=error,
            covering=covering,
            deciding=next(name for name, cutoff in settled.items() if cutoff == covering),
            stated=self._stated(needed),
            energy=exact.energy,
            boson_number=exact.boson_number,
            order_parameter=exact.order_parameter,
            gap=exact.gap,
            note="; ".join(self.notes) or None,
        )

    def _needed(self, name: str) -> tuple[int, NeedStatus, float]:
        wanted = self.wanted.of(name) or 0.0
        if name == "energies":
            cutoff = levels_cutoff(self.exact, wanted)
            if not self.exact.proven:
                self.notes.append("levels are estimates: their count could not be proven")
            return cutoff, "proven" if self.exact.proven else "checked", levels_bound(self.exact, cutoff)
        if name == "tail":
            cutoff = tail_cutoff(self.exact, wanted)
            return cutoff, "proven", tail_above(self.exact, cutoff)
        known = {} if self._truncations is None else self._truncations.errors(name)
        walk = Walk(
            lambda cutoff: self._error(name, cutoff), known, wanted, self.curve, self.last, self.limit
        )
        found = walk.run(self._guess(name, wanted))
        if found is None:
            cutoff = self._bounded(name, wanted)
            self.notes.append(f"{name}: a bound; the truncated solve that would check it is too large")
            return cutoff, "proven", state_bound(self.exact, name, cutoff)
        return found, "checked", abs(walk.signed(found))

    def _guess(self, name: str, wanted: float) -> int:
        """First cutoff to try, from the errors of the cut states."""
        guess = gap_cutoff(self.exact, wanted) if name == "gap" else None
        if guess is None:
            allowed = wanted * self.model.mode * (1.0 if name == "order_parameter" else 0.25)
            guess = next((at for at, size in enumerate(self.curve.tolist()) if size <= allowed), self.last)
        return min(guess, self.limit)

    def _values(self, cutoff: int, *, gap: bool, levels: bool = False) -> TruncatedValues:
        """What a calculation with this cutoff finds."""
        if self._truncations is None:
            self._truncations = truncations_of(self.exact, self.wanted, min(self.limit, cutoff + 3))
        return self._truncations.at(cutoff, gap=gap, levels=levels)

    def _error(self, name: str, cutoff: int) -> float:
        """Signed error of a quantity at a cutoff, in the unit of the wanted error."""
        return error_of(self.exact, self._values(cutoff, gap=name == "gap"), name)

    def _bounded(self, name: str, wanted: float) -> int:
        """Smallest cutoff at which the bound holds."""
        low, high = -1, self.last
        while high - low > 1:
            middle = (low + high) // 2
            if state_bound(self.exact, name, middle) <= wanted:
                high = middle
            else:
                low = middle
        return high

    def _stated(self, needed: dict[str, int | None]) -> Stated | None:
        stated = self.question.stated
        if stated is None:
            return None
        cutoff, asked = min(stated, self.last), self.wanted.asked
        values: TruncatedValues | None = None
        if cutoff < self.last and cutoff <= self.limit and set(asked) != {"tail"}:
            values = self._values(cutoff, gap="gap" in asked, levels="energies" in asked)
        error: dict[str, float | None] = {}
        good: dict[str, bool] = {}
        for name in asked:
            if name == "tail":
                size = tail_above(self.exact, cutoff)
            elif cutoff >= self.last:
                size = 0.0
            elif values is not None:
                size = abs(error_of(self.exact, values, name))
            elif name == "energies":
                size = levels_bound(self.exact, cutoff)
            else:
                size = state_bound(self.exact, name, cutoff)
            error[name] = size if math.isfinite(size) else None
            least, wanted = needed[name], self.wanted.of(name) or 0.0
            # an error that only passes through zero at this cutoff is not a good one
            good[name] = size <= wanted and (name == "energies" or least is None or stated >= least)
        return Stated(stated, error, good, all(good.values()))


def predicted_cutoff_seconds(question: CutoffQuestion) -> float:
    """Expected time of `answer_cutoff` on one core."""
    model = question.model
    if model.conserves_excitations:
        return 5e-3 + 4e-5 * model.spins * question.levels
    solve = forecast(model, question.levels).seconds
    cutoff = first_cutoff(model, "fock", question.levels)
    sectors = 2 if model.conserves_parity else 1
    width = (model.spins + 1.0) / sectors + 1.0
    dimension = (cutoff + 1.0) * (model.spins + 1.0) / sectors
    return solve + 5e-3 + dimension * width * (5e-10 * width + 100.0 * 1e-9)
