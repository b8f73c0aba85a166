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
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from solver.converged import Converged, converge
from solver.cutoff import needed_cutoff, weight_above
from solver.errors import QuestionError
from solver.floor import Floors
from solver.forecast import classical_quanta, first_cutoff, forecast
from solver.model import CollectiveModel
from solver.price import point_seconds
from solver.truncated import Accuracy, FockTruncations, TruncatedValues, Truncations, largest_affordable
from solver.truncated_blocks import BlockTruncations
from solver.wanted import QUANTITIES, Wanted

Array = NDArray[np.float64]
NeedStatus = Literal["proven", "checked"]

LARGEST_STATED = 100_000
MOST_LEVELS = 40
_LOOK_BEYOND = 2
_LONGEST_LOOK = 40


# what most papers and run sheets are content with
COMMON = Wanted(energies=1e-3, gap=1e-3, boson_number=1e-2, order_parameter=1e-3, tail=1e-4)


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
    level = min([0.1 * w for w in (wanted.energies, wanted.gap) if w is not None], default=1e-6)
    state = min([1e-3 * w for w in (wanted.boson_number, wanted.order_parameter) if w is not None], default=1)
    return model.mode * max(1e-12, min(1e-9, level)), max(1e-11, min(1e-7, state))


def truncations_of(converged: Converged, wanted: Wanted, top: int) -> Truncations:
    """Truncated calculations of a converged model, accurate enough to judge the wanted errors."""
    if converged.blocks is not None:
        return BlockTruncations(converged)
    spread = math.sqrt(converged.boson_number + 1.0)
    state = min(
        [1e-2 * wanted.boson_number / spread] if wanted.boson_number is not None else [1e-4],
    )
    if wanted.order_parameter is not None:
        state = min(state, 1e-2 * wanted.order_parameter)
    gap = wanted.gap if wanted.gap is not None else 1e-3
    accuracy = Accuracy(max(1e-11, min(state, 1e-4)), max(1e-9, min(1e-3, 0.1 * math.sqrt(gap))))
    negligible = 1e-2 * min(
        [w for w in (wanted.gap, wanted.boson_number, wanted.order_parameter) if w is not None], default=1e-3
    )
    return FockTruncations(converged, top, accuracy, negligible)


class _Desk:
    """Everything known about one question while it is answered."""

    def __init__(self, question: CutoffQuestion) -> None:
        self.question, self.wanted, self.model = question, question.wanted, question.model
        tolerance, angle = solving_accuracy(self.model, self.wanted)
        self.exact = converge(self.model, question.levels, tolerance, angle)
        self.last = max(sector.end for sector in self.exact.sectors.values()) - 1
        self.notes: list[str] = []
        ground = self.exact.sectors[self.exact.ground]
        self.ground_curve = _ground_curve(self.exact)
        self._ground = ground
        self._truncations: Truncations | None = None
        self.top = 0

    def answer(self) -> CutoffAnswer:
        needed: dict[str, int | None] = dict.fromkeys(QUANTITIES)
        status: dict[str, NeedStatus | None] = dict.fromkeys(QUANTITIES)
        error: dict[str, float | None] = dict.fromkeys(QUANTITIES)
        for name in self.wanted.asked:
            found = self._needed(name)
            if found is not None:
                needed[name], status[name], error[name] = found
        settled = {name: cutoff for name, cutoff in needed.items() if cutoff is not None}
        covering = max(settled.values())
        deciding = next(name for name, cutoff in settled.items() if cutoff == covering)
        exact = self.exact
        return CutoffAnswer(
            needed=needed,
            status=status,
            error=error,
            covering=covering,
            deciding=deciding,
            stated=self._stated(needed),
            energy=exact.energy,
            boson_number=exact.boson_number,
            order_parameter=exact.order_parameter,
            gap=exact.gap,
            note="; ".join(self.notes) or None,
        )

    def _needed(self, name: str) -> tuple[int, NeedStatus, float] | None:
        wanted = self.wanted.of(name)
        if wanted is None:
            return None
        if name == "energies":
            cutoff = max(
                needed_cutoff(sector.cut(sector.shown).profile, sector.energies[: sector.shown], w, 2.0)
                for sector in self.exact.sectors.values()
                if sector.shown
                for w in (wanted * self.model.mode,)
            )
            return cutoff, "proven", self.levels_bound(cutoff)
        if name == "tail":
            cutoff = self._tail_cutoff(wanted)
            return cutoff, "proven", self.tail(cutoff)
        return self._checked(name, wanted)

    def levels_bound(self, cutoff: int) -> float:
        """Bound on the error of the shown levels, in units of the mode."""
        return levels_bound(self.exact, cutoff)

    def tail(self, cutoff: int) -> float:
        """Largest weight of a shown state above the cutoff."""
        return tail_above(self.exact, cutoff)

    def _tail_cutoff(self, wanted: float) -> int:
        needed = 0
        for sector in self.exact.sectors.values():
            if sector.shown:
                profile = sector.cut(sector.shown).profile
                needed = max(needed, profile.first + int(np.argmax(weight_above(profile) <= wanted)))
        return needed

    # quantities that need truncated solves

    def _checked(self, name: str, wanted: float) -> tuple[int, NeedStatus, float] | None:
        if name == "gap" and self.exact.gap is None:
            self.notes.append("the gap needs a second level")
            return None
        limit = self.last
        if self.exact.blocks is None:
            limit = min(limit, largest_affordable(self.model))
        guess = min(self._guess(name, wanted), limit)
        self.top = max(self.top, min(limit, guess + 3))
        search = _Walk(lambda cutoff: abs(self.error(name, cutoff)), wanted, self.ground_curve)
        found = search.run(guess, self.last, limit)
        if found is None:
            cutoff = self._proven(name, wanted)
            self.notes.append(f"{name}: a bound; a truncated solve to check it would be too large")
            return cutoff, "proven", self._loose_bound(name, cutoff)
        return found, "checked", abs(self.error(name, found))

    def _guess(self, name: str, wanted: float) -> int:
        """First cutoff to try, from the errors of the cut states."""
        scale = 1.0 if name == "order_parameter" else 4.0
        ok = scale * self.ground_curve / self.model.mode <= wanted
        guess = self.last if not ok.any() else int(np.argmax(ok))
        if name == "gap" and self.exact.blocks is None and len(self._ground.energies) > 1:
            pair = self._ground.cut(2)
            return needed_cutoff(pair.profile, self._ground.energies[:2], wanted * self.model.mode, 2.0)
        return guess

    def values(self, cutoff: int, *, gap: bool, levels: bool = False) -> TruncatedValues:
        """What a calculation with this cutoff finds."""
        if self._truncations is None:
            self._truncations = truncations_of(self.exact, self.wanted, self.top)
        if isinstance(self._truncations, FockTruncations):
            self._truncations.top = max(self._truncations.top, self.top)
        return self._truncations.at(cutoff, gap=gap, levels=levels)

    def error(self, name: str, cutoff: int) -> float:
        """Signed error of a quantity at a cutoff, in the unit of the wanted error."""
        if cutoff >= self.last:
            return 0.0
        values = self.values(cutoff, gap=name == "gap")
        return error_of(self.exact, values, name)

    def _proven(self, name: str, wanted: float) -> int:
        """Smallest cutoff at which the bound holds."""
        low, high = -1, self.last
        while high - low > 1:
            middle = (low + high) // 2
            if self._loose_bound(name, middle) <= wanted:
                high = middle
            else:
                low = middle
        return high

    def _loose_bound(self, name: str, cutoff: int) -> float:
        """Rigorous bound on the error of gap, quanta or order parameter, without a truncated solve."""
        if cutoff >= self.last:
            return 0.0
        mode = self.model.mode
        worst = 0.0
        lifted = float(self.ground_curve[cutoff])
        for key, sector in self.exact.sectors.items():
            apart = float(sector.energies[0]) - self.exact.energy
            if key != self.exact.ground and apart > lifted:
                continue
            if name == "gap":
                if len(sector.energies) < 2:
                    return math.inf
                worst = max(worst, float(sector.cut(2).errors(cutoff).max()) / mode)
                continue
            worst = max(
                worst, self._state_bound(name, float(sector.cut(1).errors(cutoff)[0]), sector.energies)
            )
        return worst

    def _state_bound(self, name: str, lifted: float, energies: Array) -> float:
        """Eckart's bound on the angle of the truncated ground state, and what follows from it."""
        if len(energies) < 2 or not math.isfinite(lifted):
            return math.inf
        gap = float(energies[1] - energies[0])
        squared = lifted / gap
        if squared >= 1.0:
            return math.inf
        sine = math.sqrt(squared)
        if name == "order_parameter":
            square = self.exact.order_parameter**2
            return max(
                math.sqrt(square + sine) - self.exact.order_parameter,
                self.exact.order_parameter - math.sqrt(max(0.0, square - sine)),
            )
        floor = Floors(self.model).share_floor(0.5)
        admixed = (lifted + squared * max(0.0, float(energies[0]) - floor)) / (0.5 * self.model.mode)
        quanta = self.exact.boson_number
        root = math.sqrt(quanta) + math.sqrt(admixed)
        return squared * root**2 + 2.0 * root * math.sqrt(admixed) + admixed

    def _stated(self, needed: dict[str, int | None]) -> Stated | None:
        stated = self.question.stated
        if stated is None:
            return None
        cutoff = min(stated, self.last)
        error: dict[str, float | None] = {}
        good: dict[str, bool] = {}
        solvable = self.exact.blocks is not None or cutoff <= largest_affordable(self.model)
        asked = self.wanted.asked
        values: TruncatedValues | None = None
        if cutoff < self.last and solvable and set(asked) - {"tail"}:
            self.top = max(self.top, cutoff)
            values = self.values(cutoff, gap="gap" in asked, levels="energies" in asked)
        for name in asked:
            least, wanted = needed[name], self.wanted.of(name)
            if name == "tail":
                size = self.tail(cutoff)
            elif cutoff >= self.last:
                size = 0.0
            elif values is not None:
                size = abs(error_of(self.exact, values, name))
            else:
                size = self.levels_bound(cutoff) if name == "energies" else self._loose_bound(name, cutoff)
            error[name] = size if math.isfinite(size) else None
            within = wanted is not None and size <= wanted
            # an error that only passes through zero at this cutoff is not a good one
            good[name] = within if name == "energies" else least is not None and within and stated >= least
        return Stated(stated, error, good, all(good.values()))


def error_of(exact: Converged, values: TruncatedValues, name: str) -> float:
    """Signed error of one quantity of a truncated calculation; levels and gap in units of the mode."""
    if name == "energies":
        return math.inf if values.levels is None else values.levels / exact.model.mode
    if name == "gap":
        if values.gap is None or exact.gap is None:
            return math.inf
        return (values.gap - exact.gap) / exact.model.mode
    if name == "boson_number":
        return values.boson_number - exact.boson_number
    return values.order_parameter - exact.order_parameter


def levels_bound(exact: Converged, cutoff: int) -> float:
    """Bound on the error of the shown levels at a cutoff, in units of the mode."""
    return max(
        float(sector.cut(sector.shown).errors(cutoff).max()) / exact.model.mode
        for sector in exact.sectors.values()
        if sector.shown
    )


def tail_above(exact: Converged, cutoff: int) -> float:
    """Largest weight of a shown state above the cutoff."""
    worst = 0.0
    for sector in exact.sectors.values():
        at = cutoff - sector.profile.first
        if sector.shown and at + 1 < len(sector.profile.overlaps):
            weights = np.einsum("nii->ni", sector.profile.overlaps[max(0, at + 1) :])
            worst = max(worst, float(weights[:, : sector.shown].sum(axis=0).max()))
    return worst


def _ground_curve(exact: Converged) -> Array:
    """Bound on the error of the ground level for every cutoff from 0 on (unit of the inputs)."""
    sector = exact.sectors[exact.ground]
    profile = sector.profile
    kept = np.cumsum(profile.overlaps[:, 0, 0])
    link = -profile.links[:, 0, 0]
    with np.errstate(divide="ignore", invalid="ignore"):
        lifted = np.where(kept > 1e-13, np.maximum(link, 0.0) / kept, np.inf)
    # what lies below: at most the fall from one layer to the next counts
    return np.concatenate((np.full(profile.first, np.inf), np.minimum.accumulate(lifted)))


class _Walk:
    """Find the smallest cutoff from which on an error stays within what is wanted."""

    def __init__(self, error: Callable[[int], float], wanted: float, curve: Array) -> None:
        self.error, self.wanted, self.curve = error, wanted, curve

    def run(self, guess: int, last: int, limit: int, bad: int = -1) -> int | None:
        """The cutoff, or None where cutoffs beyond `limit` would have to be tried.

        last: cutoff from which on the error is zero; bad: one known not to hold.
        """
        good = last
        at = min(guess, limit)
        step = 1
        while good - bad > 1:
            if at > limit:
                return None
            size = self.error(at)
            if size <= self.wanted:
                good = at
            else:
                bad = at
            proposed = self._predicted(at, size)
            if proposed >= good:
                proposed = good - 1
            if proposed <= bad:
                proposed = bad + 1
            # a wrong guess of the slope must not creep
            if size > self.wanted and proposed < bad + step and bad + step < good:
                proposed = bad + step
            step = 2 * step if size > self.wanted else 1
            at = proposed
        if good > limit and good < last:
            return None
        return self._beyond(good, last, limit)

    def _predicted(self, at: int, size: float) -> int:
        """Where the error falls below the wanted one if it keeps its ratio to the ground curve."""
        if at >= len(self.curve) or not 0.0 < self.curve[at] < math.inf or not math.isfinite(size):
            return at + 1
        if size == 0.0:
            return at - 1
        goal = self.wanted * self.curve[at] / size
        below = np.flatnonzero(self.curve <= goal)
        return int(below[0]) if below.size else len(self.curve)

    def _beyond(self, good: int, last: int, limit: int) -> int | None:
        """Look past a good cutoff: an error that changes sign comes back."""
        before = self.error(good)
        for apart in range(1, _LONGEST_LOOK):
            at = good + apart
            if at >= min(last, limit + 1):
                return good
            size = self.error(at)
            if size > self.wanted:
                return self.run(at + 1, last, limit, bad=at) if at + 1 <= limit else None
            if apart >= _LOOK_BEYOND and size <= 0.5 * self.wanted and size <= before:
                return good
            before = size
        return good


def predicted_cutoff_seconds(question: CutoffQuestion) -> float:
    """Expected time of `answer_cutoff` on one core."""
    model = question.model
    if model.conserves_excitations:
        layers = (model.spins + 1.0) * classical_quanta(model)
        return 4e-3 + point_seconds(model, question.levels) + 2.7e-6 * layers
    solve = forecast(model, question.levels).seconds
    cutoff = first_cutoff(model, "fock", question.levels)
    sectors = 2 if model.conserves_parity else 1
    width = (model.spins + 1.0) / sectors + 1.0
    dimension = (cutoff + 1.0) * (model.spins + 1.0) / sectors
    return solve + 5e-3 + dimension * width * (5e-10 * width + 100.0 * 1e-9)
