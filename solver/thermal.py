"""Thermal equilibrium of a model and the cutoff that a calculation of it needs.

An asker's calculation keeps number states n <= M and the Gibbs state of the H cut there. The cutoff a
quantity needs is guessed from the exact weights and then verified with calculations cut like the
asker's own; the weight above M comes from the exact state.
Sources: Hepp, Lieb, Ann. Phys. 76, 360 (1973); Wang, Hioe, Phys. Rev. A 7, 831 (1973); with unequal
couplings Hioe, Phys. Rev. A 8, 1440 (1973).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from solver.ensemble import Averages, Ensemble
from solver.errors import QuestionError
from solver.model import CollectiveModel
from solver.thermal_limit import critical_temperature
from solver.wanted import Wanted

Array = NDArray[np.float64]

THERMAL_QUANTITIES = ("boson_number", "order_parameter", "tail")
LARGEST_STATED = 100_000
LARGEST_DISTINGUISHABLE = 200
LARGEST_COLLECTIVE = 1000
_COLDEST = 1e-10
_HOTTEST = 1e4
_FINE = 0.02
_ROUNDING = 1e-11
_AHEAD = 3


@dataclass(frozen=True, slots=True)
class ThermalQuestion:
    """Equilibrium of `model` at `temperature` = k_B T / hbar > 0 (unit of the model).

    distinguishable: N distinguishable spins, every J with its multiplicity; else J = N/2 alone.
    wanted: boson_number, order_parameter and tail are used, at least one must be given. stated: a cutoff
    to judge, 0 to 100000, or None. Raises QuestionError naming the field.
    """

    model: CollectiveModel
    temperature: float
    distinguishable: bool
    wanted: Wanted
    stated: int | None = None

    def __post_init__(self) -> None:
        hottest = _HOTTEST * self.model.mode
        if not (math.isfinite(self.temperature) and 0.0 < self.temperature <= hottest):
            raise QuestionError("temperature", self.temperature, f"greater than 0, up to {hottest:g}")
        if not self.asked:
            raise QuestionError("wanted", None, "at least one of " + ", ".join(THERMAL_QUANTITIES))
        if self.stated is not None and not (type(self.stated) is int and 0 <= self.stated <= LARGEST_STATED):
            raise QuestionError("stated", self.stated, f"a whole number, 0 to {LARGEST_STATED}")
        most = LARGEST_DISTINGUISHABLE if self.distinguishable else LARGEST_COLLECTIVE
        if self.model.spins > most:
            raise QuestionError("spins", self.model.spins, f"1 to {most} in thermal equilibrium")

    @property
    def asked(self) -> tuple[str, ...]:
        """Quantities asked for, in the order of THERMAL_QUANTITIES."""
        return tuple(key for key in THERMAL_QUANTITIES if getattr(self.wanted, key) is not None)


@dataclass(frozen=True, slots=True)
class ThermalAnswer:
    """Equilibrium values with error estimates, and the cutoffs needed (see `answer_thermal`)."""

    boson_number: float
    boson_number_error: float
    order_parameter: float
    order_parameter_error: float
    inversion: float
    needed: dict[str, int | None]
    status: dict[str, str | None]
    error: dict[str, float | None]
    covering: int
    deciding: str
    stated: dict[str, Any] | None
    critical_temperature: float | None
    layers: tuple[float, ...]
    note: str | None = None

    def row(self) -> dict[str, Any]:
        """Everything by key, JSON-able; P(n) stays out."""
        return {
            "boson_number": self.boson_number,
            "boson_number_error": self.boson_number_error,
            "order_parameter": self.order_parameter,
            "order_parameter_error": self.order_parameter_error,
            "inversion": self.inversion,
            "needed": dict(self.needed),
            "status": dict(self.status),
            "error": dict(self.error),
            "covering": self.covering,
            "deciding": self.deciding,
            "stated": self.stated,
            "critical_temperature": self.critical_temperature,
            "note": self.note,
        }


def temperature_of_quanta(mode: float, quanta: float) -> float:
    """Temperature at which a bare mode of frequency `mode` holds `quanta` on average: w / ln(1 + 1/n).

    Unit of `mode`. Raises QuestionError unless quanta > 0.
    """
    if not (math.isfinite(quanta) and quanta > 0.0):
        raise QuestionError("quanta", quanta, "greater than 0")
    return mode / math.log1p(1.0 / quanta)


def _ensemble(question: ThermalQuestion) -> Ensemble:
    """The equilibrium, aimed at a small part of the errors wanted."""
    wanted, model = question.wanted, question.model
    parts = [1e-6]
    if wanted.tail is not None:
        parts.append(_FINE * wanted.tail)
    if wanted.order_parameter is not None:
        parts.append(_FINE * wanted.order_parameter)
    quanta = 1e-3 if wanted.boson_number is None else min(1e-3, _FINE * wanted.boson_number)
    temperature = max(question.temperature, _COLDEST * model.mode)
    return Ensemble(
        model,
        1.0 / temperature,
        distinguishable=question.distinguishable,
        small=max(min(parts), 1e-14),
        quanta_small=max(quanta, 1e-12),
    )


def answer_thermal(question: ThermalQuestion) -> ThermalAnswer:
    """Equilibrium values and, per quantity asked, the smallest cutoff M good enough.

    Boson number and order parameter sqrt(<Jx^2>)/(N/2): |value of the calculation cut at M - value|
    within `wanted` at M and at every larger cutoff, verified by calculations cut at M ("checked").
    tail: weight of the exact state above M at most `wanted`. Raises QuestionError when the
    temperature asks for more states than can be handled.
    """
    ensemble = _ensemble(question)
    exact = ensemble.exact()
    search = _Search(question, ensemble, exact)
    needed: dict[str, int | None] = dict.fromkeys(THERMAL_QUANTITIES)
    status: dict[str, str | None] = dict.fromkeys(THERMAL_QUANTITIES)
    error: dict[str, float | None] = dict.fromkeys(THERMAL_QUANTITIES)
    for key in question.asked:
        cutoff = search.needed(key)
        needed[key], error[key], status[key] = cutoff, search.error(key, cutoff), "checked"
    deciding = max(question.asked, key=lambda key: needed[key] or 0)
    order, order_error = _order(question.model, exact)
    return ThermalAnswer(
        boson_number=exact.quanta,
        boson_number_error=exact.quanta_error,
        order_parameter=order,
        order_parameter_error=order_error,
        inversion=2.0 * exact.jz / question.model.spins,
        needed=needed,
        status=status,
        error=error,
        covering=needed[deciding] or 0,
        deciding=deciding,
        stated=search.stated(),
        critical_temperature=critical_temperature(question.model) if question.distinguishable else None,
        layers=tuple(exact.layers.tolist()),
        note=search.note(),
    )


def predicted_thermal_seconds(question: ThermalQuestion) -> float:
    """Predicted computing time in seconds on the development machine, usually within a factor of 3."""
    ensemble = _ensemble(question)
    once = ensemble.seconds()
    searched = {"boson_number", "order_parameter"} & set(question.asked)
    passes = 5.0 if searched else 0.0
    if question.stated is not None:
        passes += 1.0
    return 2e-3 + once + passes * ensemble.seconds(0.7)


def _order(model: CollectiveModel, averages: Averages) -> tuple[float, float]:
    """Order parameter and its error."""
    half = 0.5 * model.spins
    value = math.sqrt(max(averages.jxx, 0.0)) / half
    most = math.sqrt(max(averages.jxx, 0.0) + averages.along_error) / half
    return value, most - value


class _Search:
    """Cutoffs of one question; every cut calculation is done once."""

    def __init__(self, question: ThermalQuestion, ensemble: Ensemble, exact: Averages) -> None:
        self.question, self.ensemble, self.exact = question, ensemble, exact
        self.above = exact.weight_above()
        self.largest = exact.layers.size - 1
        self.pressure = ensemble.pressure_curve(exact)
        self.cut: dict[int, Averages] = {}
        self.limited: list[str] = []

    def _truncated(self, cutoff: int) -> Averages:
        if cutoff not in self.cut:
            self.cut[cutoff] = self.ensemble.truncated(cutoff)
        return self.cut[cutoff]

    def error(self, key: str, cutoff: int) -> float:
        """Error of one quantity in the calculation cut at `cutoff`."""
        return abs(self._signed(key, cutoff))

    def _signed(self, key: str, cutoff: int) -> float:
        if key == "tail":
            return float(self.above[min(cutoff, self.largest)])
        if cutoff >= self.largest:
            return 0.0
        cut = self._truncated(cutoff)
        if key == "boson_number":
            return cut.quanta - self.exact.quanta
        return _order(self.question.model, cut)[0] - _order(self.question.model, self.exact)[0]

    def needed(self, key: str) -> int:
        """Smallest cutoff from which on the quantity is within what is wanted."""
        allowed = float(getattr(self.question.wanted, key))
        if key == "tail":
            certain = self.above + self.exact.leaked <= allowed
            if not certain.any():
                self.limited.append(key)
                return self.largest
            return int(np.argmax(certain))
        scale = self.largest + 1.0 if key == "boson_number" else 1.0
        if allowed < _ROUNDING * scale:
            self.limited.append(key)
        # the factors are what the errors typically come to
        quanta = key == "boson_number"
        curve = self.pressure * (0.4 * (np.arange(self.pressure.size) + 1.0) if quanta else 0.2)
        return last_crossing(lambda cutoff: self._signed(key, cutoff), curve, allowed, list(self.cut))

    def stated(self) -> dict[str, Any] | None:
        """Errors at the cutoff somebody stated, and whether they are within what is wanted."""
        cutoff = self.question.stated
        if cutoff is None:
            return None
        error = {key: self.error(key, cutoff) for key in self.question.asked}
        good = {key: value <= float(getattr(self.question.wanted, key)) for key, value in error.items()}
        return {
            "cutoff": cutoff,
            "error": {key: error.get(key) for key in THERMAL_QUANTITIES},
            "good": good,
            "enough": all(good.values()),
        }

    def note(self) -> str | None:
        """What stands in the way of the accuracy wanted, if anything does."""
        notes = []
        if self.limited:
            notes.append("wanted accuracy below what rounding allows: " + ", ".join(self.limited))
        if self.question.temperature < _COLDEST * self.question.model.mode:
            notes.append("colder than levels are resolved: levels this close are weighted equally")
        return "; ".join(notes) or None


def last_crossing(error: Callable[[int], float], curve: Array, allowed: float, known: list[int]) -> int:
    """Smallest M with |error(M')| <= allowed for M' = M and above, as far as probed.

    error: signed. curve: foreseen errors for M = 0..K, whose shape guides the search; K counts as good.
    known: cutoffs whose errors cost nothing. Where error and curve do not fall alike from M - 1 to M,
    the next cutoffs are probed too, so that a change of sign is not taken for accuracy.
    """
    low, high = -1, curve.size - 1
    scale, turn = 1.0, 0

    def narrow(guess: int) -> None:
        nonlocal low, high, scale
        found = abs(error(guess))
        if found <= allowed:
            high = guess
        else:
            low = guess
        if curve[guess] > 0.0 and found > 0.0:
            scale = found / float(curve[guess])

    for guess in sorted(known, reverse=True):
        if low < guess < high:
            narrow(guess)
    while high - low > 1:
        turn += 1
        if turn % 4 == 0:
            narrow((low + high) // 2)
            continue
        inside = np.arange(low + 1, high)
        guess = int(inside[min(int(np.searchsorted(-scale * curve[inside], -allowed)), inside.size - 1)])
        narrow(guess)
    if _falls_evenly(error, curve, high):
        return high
    probe = high + 1
    while probe <= min(high + _AHEAD, curve.size - 2):
        if abs(error(probe)) > allowed:
            high = probe + 1
        probe += 1
    return high


def _falls_evenly(error: Callable[[int], float], curve: Array, cutoff: int) -> bool:
    """Whether the error keeps its sign from cutoff - 1 to cutoff and shrinks about as foreseen."""
    if cutoff < 1 or cutoff >= curve.size - 1 or curve[cutoff] <= 0.0:
        return cutoff >= curve.size - 1
    before, here = error(cutoff - 1), error(cutoff)
    if before * here <= 0.0:
        return False
    compared = (here / before) / float(curve[cutoff] / curve[cutoff - 1])
    return 1.0 / 3.0 <= compared <= 3.0
