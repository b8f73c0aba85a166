"""The cutoff a start of the mode needs, before and after the model is switched on at once.

At the start the weight above M is a closed form (Poisson, geometric, one number). Afterwards the
states are propagated in the number basis, the cutoff grown until what H sends above it no longer
matters; a thermal start is the mixture of number states, its rare far part counted as lying above.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln, pdtrc

from solver.errors import QuestionError
from solver.model import CollectiveModel
from solver.propagation import SINGLE_DOWN_TO, Evolution, evolution_seconds, evolve

Array = NDArray[np.float64]
StartKind = Literal["thermal", "fock", "coherent"]

KINDS: tuple[StartKind, ...] = ("thermal", "fock", "coherent")
MOST_QUANTA = 10_000.0
MOST_PERIODS = 1000.0
SMALLEST_TAIL = 1e-12
LARGEST_STATED = 100_000
LARGEST_PROPAGATION = 2_000_000
_MOST_TIMES = 20_000
_POINTS = 10
# squared distance allowed between cut and full evolution, and what may be counted as above, of `tail`
_ESCAPED = 1e-3
_DROPPED = 0.02
# relative error of a peak read from the grid
_BETWEEN_TIMES = 1e-3
_GROUP = 16
_MOST_GROWTH = 25


@dataclass(frozen=True, slots=True)
class StartQuestion:
    """Start of the mode and how long the model acts.

    kind: "thermal" (mean number `quanta`), "fock" (n = quanta, a whole number) or "coherent" (real
    amplitude sqrt(quanta)). The spins start in the lowest state of w0 Jz + eps Jx, Jz = -N/2 where
    both vanish. periods: of the bare mode, 0 to 1000. tail: weight allowed above the cutoff, 1e-12 to
    below 1. stated: a cutoff to judge, 0 to 100000, or None. Raises QuestionError naming the field.
    """

    model: CollectiveModel
    kind: StartKind
    quanta: float
    periods: float
    tail: float
    stated: int | None = None

    def __post_init__(self) -> None:
        if self.kind not in KINDS:
            raise QuestionError("kind", self.kind, "one of " + ", ".join(KINDS))
        if not (math.isfinite(self.quanta) and 0.0 <= self.quanta <= MOST_QUANTA):
            raise QuestionError("quanta", self.quanta, f"0 to {MOST_QUANTA:g}")
        if self.kind == "fock" and self.quanta != math.floor(self.quanta):
            raise QuestionError("quanta", self.quanta, "a whole number for a Fock start")
        if not (math.isfinite(self.periods) and 0.0 <= self.periods <= MOST_PERIODS):
            raise QuestionError("periods", self.periods, f"0 to {MOST_PERIODS:g}")
        if not (math.isfinite(self.tail) and SMALLEST_TAIL <= self.tail < 1.0):
            raise QuestionError("tail", self.tail, f"{SMALLEST_TAIL:g} to below 1")
        if self.stated is not None and not (type(self.stated) is int and 0 <= self.stated <= LARGEST_STATED):
            raise QuestionError("stated", self.stated, f"a whole number, 0 to {LARGEST_STATED}")


@dataclass(frozen=True, slots=True)
class StartAnswer:
    """Cutoffs at the start ("proven") and over the whole evolution ("checked").

    mean_bosons_most: largest <n> met; weight_error: error of the weight above `needed`, a bound on what
    the propagation's own cutoff changes and an estimate for peaks between the times.
    """

    at_start: int
    needed: int
    mean_bosons_most: float
    stated: dict[str, Any] | None
    status: dict[str, str] = field(default_factory=lambda: {"at_start": "proven", "needed": "checked"})
    weight_error: float = 0.0
    note: str | None = None

    def row(self) -> dict[str, Any]:
        """Everything by key, JSON-able."""
        return {
            "at_start": self.at_start,
            "needed": self.needed,
            "status": dict(self.status),
            "mean_bosons_most": self.mean_bosons_most,
            "weight_error": self.weight_error,
            "stated": self.stated,
            "note": self.note,
        }


def weight_above_start(kind: StartKind, quanta: float, cutoff: int) -> float:
    """Weight of n > cutoff in the start: (n/(1+n))^(M+1), the Poisson tail, or 0 and 1."""
    if kind == "fock":
        return 1.0 if quanta > cutoff else 0.0
    if quanta == 0.0:
        return 0.0
    if kind == "coherent":
        return float(pdtrc(cutoff, quanta))
    return math.exp((cutoff + 1.0) * -math.log1p(1.0 / quanta))


def start_cutoff(kind: StartKind, quanta: float, tail: float) -> int:
    """Smallest cutoff with at most `tail` of the start above it."""
    low, high = -1, 1
    while weight_above_start(kind, quanta, high) > tail:
        low, high = high, 2 * high
    while high - low > 1:
        middle = (low + high) // 2
        if weight_above_start(kind, quanta, middle) <= tail:
            high = middle
        else:
            low = middle
    return high


def lowest_spin_state(model: CollectiveModel) -> Array:
    """Lowest state of w0 Jz + eps Jx over j = m + N/2, real, shape (N+1,)."""
    size, field_size = model.spins, math.hypot(model.splitting, model.bias)
    if model.bias == 0.0 or field_size == 0.0:
        out = np.zeros(size + 1)
        out[size if model.splitting < 0.0 else 0] = 1.0
        return out
    # each spin antiparallel to the field: cosine down, minus sine up
    half = 0.5 * math.atan2(model.bias, model.splitting)
    j = np.arange(size + 1.0)
    logs = 0.5 * (gammaln(size + 1.0) - gammaln(j + 1.0) - gammaln(size - j + 1.0))
    down, up = math.cos(half), -math.sin(half)
    with np.errstate(divide="ignore"):
        logs = logs + np.where(j < size, (size - j) * np.log(abs(down)), 0.0)
        logs = logs + np.where(j > 0, j * np.log(abs(up)), 0.0)
    signs = np.where(j % 2 == 0, 1.0, math.copysign(1.0, up)) * np.where(
        (size - j) % 2 == 0, 1.0, math.copysign(1.0, down)
    )
    return np.asarray(signs * np.exp(logs), dtype=np.float64)


@dataclass(frozen=True, slots=True)
class _Group:
    """Starts of the mode that are propagated together: amplitudes (starts, n), probabilities, cutoff.

    allowed: squared distance between cut and full evolution, times probability, that is of no matter.
    """

    amplitudes: Array
    chances: Array
    cutoff: int
    allowed: float


def _turning_point(model: CollectiveModel, quanta: float) -> float:
    """Largest quanta the energy of the start allows classically, spins against the field.

    w n - (N/2) sqrt(F^2 + 4 g^2 n / N) = w n0 - N F / 2, F the field of the spins, g = |lr| + |lc|.
    """
    field = math.hypot(model.splitting, model.bias)
    push = 4.0 * (abs(model.rotating) + abs(model.counter)) ** 2 / model.spins
    # with s the square root this is quadratic: w (s^2 - F^2)/push - N s/2 = w n0 - N F/2
    stiffness = model.mode / push
    constant = model.mode * quanta - 0.5 * model.spins * field + stiffness * field * field
    half = 0.25 * model.spins
    root = (half + math.sqrt(half * half + stiffness * max(constant, 0.0))) / stiffness
    return max(quanta, (root * root - field * field) / push)


def _reach(question: StartQuestion, quanta: int, chance: float, allowed: float) -> int:
    """First cutoff for starts with at most `quanta` and together the probability `chance`."""
    model = question.model
    if question.periods == 0.0 or model.is_uncoupled:
        return quanta
    drive = 0.5 * (abs(model.rotating) + abs(model.counter)) * math.sqrt(model.spins) / model.mode
    pushed = 2.0 * math.pi * question.periods * drive
    furthest = min(math.sqrt(_turning_point(model, quanta + 0.5)), math.sqrt(quanta + 0.5) + pushed)
    # the width is as observed on random models; where it is too small the cutoff grows
    spread = 0.44 * math.sqrt(max(1.0, math.log(100.0 * chance / allowed))) + 0.1
    reach = math.ceil((furthest + spread * min(1.0, pushed)) ** 2) + 2
    if model.conserves_excitations:
        return min(reach, quanta + model.spins)
    return reach


def _groups(question: StartQuestion) -> tuple[list[_Group], float, float]:
    """Starts in groups of similar n, the probability left out, and the quanta it holds."""
    kind, quanta = question.kind, question.quanta
    escaped = _ESCAPED * question.tail
    if kind == "fock" or quanta == 0.0:
        amplitudes = np.zeros((1, int(quanta) + 1))
        amplitudes[0, -1] = 1.0
        return (
            [_Group(amplitudes, np.ones(1), _reach(question, int(quanta), 1.0, escaped), escaped)],
            0.0,
            0.0,
        )
    if kind == "coherent":
        # cut where the missing weight is a part of what the evolution itself may lose
        last = start_cutoff(kind, quanta, 0.1 * escaped)
        n = np.arange(last + 1.0)
        row = np.exp(0.5 * (n * math.log(quanta) - quanta - gammaln(n + 1.0)))
        typical = start_cutoff(kind, quanta, question.tail)
        cutoff = max(last, _reach(question, typical, question.tail, escaped))
        return [_Group(row[None], np.ones(1), cutoff, escaped)], 0.0, 0.0
    last = start_cutoff(kind, quanta, _DROPPED * question.tail)
    n = np.arange(last + 1)
    chances = np.exp(-n * math.log1p(1.0 / quanta)) / (1.0 + quanta)
    groups = []
    count = last // _GROUP + 1
    for first in range(0, last + 1, _GROUP):
        part = n[first : first + _GROUP]
        amplitudes = np.zeros((part.size, int(part[-1]) + 1))
        amplitudes[np.arange(part.size), part] = 1.0
        # the first group holds most of the probability
        allowed = escaped if count == 1 else 0.5 * escaped / (1.0 if first == 0 else count - 1.0)
        likely = _reach(question, int(part[-1]), float(chances[part].sum()), allowed)
        groups.append(_Group(amplitudes, chances[part], likely, allowed))
    dropped = weight_above_start(kind, quanta, last)
    return groups, dropped, dropped * (quanta + last + 1.0)


def _times(question: StartQuestion, cutoff: int) -> Array:
    """Grid with ten points in a period of the fastest motion of the layer weights."""
    model = question.model
    last = 2.0 * math.pi * question.periods / model.mode
    flip = 2.0 * (abs(model.rotating) + abs(model.counter)) * math.sqrt((cutoff + 1.0) / model.spins)
    fastest = max(model.mode, math.hypot(model.splitting, model.bias), flip)
    count = math.ceil(_POINTS * last * fastest / (2.0 * math.pi)) + 1
    if count > _MOST_TIMES:
        raise QuestionError("periods", question.periods, "fewer periods: the motion is too fast to follow")
    return np.linspace(0.0, last, max(count, 3)) if last > 0.0 else np.zeros(1)


def _propagated(question: StartQuestion, group: _Group, times: Array) -> Evolution:
    """Evolution of one group with its cutoff grown until no more escapes than it may."""
    model, spin = question.model, lowest_spin_state(question.model)
    cutoff = max(group.cutoff, group.amplitudes.shape[1] - 1)
    for _ in range(_MOST_GROWTH):
        if (cutoff + 1) * (model.spins + 1) > LARGEST_PROPAGATION:
            break
        starts = np.zeros((group.amplitudes.shape[0], cutoff + 1, model.spins + 1))
        starts[:, : group.amplitudes.shape[1]] = group.amplitudes[:, :, None] * spin
        found = evolve(model, starts, group.chances, times, single=question.tail >= SINGLE_DOWN_TO)
        if found.escaped <= group.allowed:
            return found
        cutoff += max(4, cutoff // 10)
    raise QuestionError("quanta", question.quanta, "fewer quanta, fewer spins or less coupling")


def answer_start(question: StartQuestion) -> StartAnswer:
    """Cutoffs that keep the weight above them at or below `tail`, at the start and ever after.

    Raises QuestionError when the evolution needs more states than can be handled.
    """
    at_start = start_cutoff(question.kind, question.quanta, question.tail)
    groups, dropped, dropped_quanta = _groups(question)
    times = _times(question, max(group.cutoff for group in groups))
    parts = [_propagated(question, group, times) for group in groups]
    layers = np.zeros((times.size, max(part.layers.shape[1] for part in parts)))
    for part in parts:
        layers[:, : part.layers.shape[1]] += part.layers
    above = np.cumsum(layers[:, ::-1], axis=1)[:, ::-1]
    above = np.append(above[:, 1:], np.zeros((times.size, 1)), axis=1) + dropped
    most = _highest(above)
    escaped = sum(part.escaped for part in parts)
    weight_error = 2.0 * math.sqrt(question.tail * escaped) + escaped + _BETWEEN_TIMES * question.tail
    fine = most + weight_error <= question.tail
    moved = int(np.argmax(fine)) if fine.any() else most.size - 1
    if question.periods == 0.0 or question.model.is_uncoupled:
        moved, weight_error = at_start, 0.0
    quanta = layers @ np.arange(layers.shape[1]) + dropped_quanta
    stated = None
    if question.stated is not None:
        weight = float(most[min(question.stated, most.size - 1)])
        if question.stated >= most.size:
            weight = weight_above_start(question.kind, question.quanta, question.stated)
        stated = {
            "cutoff": question.stated,
            "weight_most": weight,
            "enough": weight <= question.tail and question.stated >= at_start,
        }
    return StartAnswer(
        at_start=at_start,
        needed=max(at_start, moved),
        mean_bosons_most=float(_highest(quanta[:, None])[0]),
        stated=stated,
        weight_error=weight_error,
        note=_note(question),
    )


def _note(question: StartQuestion) -> str | None:
    if question.model.splitting == 0.0 and question.model.bias == 0.0:
        return "without splitting and bias every spin state is lowest; started from Jz = -N/2"
    return None


def _highest(values: Array) -> Array:
    """Largest value over the first axis (times), the peak between grid points by a parabola."""
    best = values.max(axis=0)
    if values.shape[0] < 3:
        return np.asarray(best, dtype=np.float64)
    left, middle, right = values[:-2], values[1:-1], values[2:]
    bend = left - 2.0 * middle + right
    peak = (middle >= left) & (middle >= right) & (bend < 0.0)
    safe = np.where(peak, bend, -1.0)
    top = np.where(peak, middle - (right - left) ** 2 / (8.0 * safe), -np.inf)
    return np.asarray(np.maximum(best, top.max(axis=0)), dtype=np.float64)


def predicted_start_seconds(question: StartQuestion) -> float:
    """Predicted computing time in seconds on the development machine, usually within a factor of 3."""
    groups, _, _ = _groups(question)
    times = _times(question, max(group.cutoff for group in groups))
    single = question.tail >= SINGLE_DOWN_TO
    return 2e-3 + sum(
        evolution_seconds(question.model, group.cutoff, group.chances.size, times, single=single)
        for group in groups
    )
