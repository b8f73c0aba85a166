"""One point of a sweep: the question, and the answer with everything that is shown of it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from solver.blocks import BasisName
from solver.bounds import RitzSet, sine_of_angle
from solver.cutoff import needed_cutoff
from solver.errors import QuestionError
from solver.excitation import ExcitationLevel, ExcitationSpectrum, excitation_levels
from solver.fock_basis import FockBlock
from solver.forecast import cheaper_basis
from solver.layers import (
    LayerProfile,
    NumberAmplitudes,
    excitation_layers,
    fock_layers,
    number_amplitudes,
    shifted_layers,
)
from solver.levels import lowest_levels
from solver.model import CollectiveModel
from solver.moments import Moments, excitation_moments, fock_moments, shifted_moments
from solver.observables import REGISTRY, StateAccuracy
from solver.shifted_basis import ShiftedBlock
from solver.spectrum import Spectrum, Start

Array = NDArray[np.float64]

MOST_LEVELS = 40
TIGHTEST, WIDEST = 1e-12, 1e-2
_EPS = float(np.finfo(np.float64).eps)
_QUANTA_SHARE = 0.5


@dataclass(frozen=True, slots=True)
class PointQuestion:
    """What is asked of one model.

    levels: lowest levels over all sectors, 1..40. tolerance: wanted bound on each of them;
    need, tail: error of a level and weight above the cutoff that the asker's own calculation in
    the number basis may have. tolerance and need in units of model.mode. Raises QuestionError.
    """

    model: CollectiveModel
    levels: int = 6
    tolerance: float = 1e-9
    need: float = 1e-3
    tail: float = 1e-4

    def __post_init__(self) -> None:
        if not 1 <= self.levels <= MOST_LEVELS:
            raise QuestionError("levels", self.levels, f"1 to {MOST_LEVELS}")
        if not TIGHTEST <= self.tolerance <= WIDEST:
            raise QuestionError("tolerance", self.tolerance, f"{TIGHTEST} to {WIDEST}")
        for name in ("need", "tail"):
            value = getattr(self, name)
            if not TIGHTEST <= value < 1.0:
                raise QuestionError(name, value, f"{TIGHTEST} up to below 1")

    @property
    def solving_tolerance(self) -> float:
        """Tolerance used, in the unit of the model: never coarser than a tenth of `need`."""
        return self.model.mode * max(TIGHTEST, min(self.tolerance, 0.1 * self.need))


@dataclass(frozen=True, slots=True)
class PointAnswer:
    """Levels, ground-state observables, cutoffs and claims of one point; plain data."""

    energy: tuple[float, ...]
    energy_lower: tuple[float, ...]
    energy_status: tuple[str, ...]
    parity: tuple[int, ...]
    gap: float | None
    gap_error: float | None
    gap_any: float | None
    gap_any_error: float | None
    observables: dict[str, float | None]
    cutoff_needed: int | None
    cutoff_used: int
    basis: str
    meets_tolerance: bool
    note: str | None = None

    def row(self) -> dict[str, Any]:
        """All series of this point by key, JSON-able."""
        return {
            "energy": list(self.energy),
            "energy_lower": list(self.energy_lower),
            "energy_status": list(self.energy_status),
            "parity": list(self.parity),
            "gap": self.gap,
            "gap_error": self.gap_error,
            "gap_any": self.gap_any,
            "gap_any_error": self.gap_any_error,
            **self.observables,
            "cutoff_needed": self.cutoff_needed,
            "cutoff_used": self.cutoff_used,
            "basis": self.basis,
            "meets_tolerance": self.meets_tolerance,
            "note": self.note,
        }


@dataclass(slots=True)
class _Rows:
    """Levels in order, as both routes deliver them."""

    upper: list[float]
    lower: list[float]
    parity: list[int]
    status: list[str]
    notes: list[str] = field(default_factory=list)


def answer_point(
    question: PointQuestion, start: Start | None = None, basis: BasisName | None = None
) -> tuple[PointAnswer, Start | None]:
    """Solve one point; `start` is what a neighbour left behind, and a new one is returned.

    basis: force "fock" or "shifted" (default: the cheaper one; models that conserve excitations
    are solved block by block unless a basis is forced).
    """
    model = question.model
    if model.conserves_excitations and basis is None:
        return _from_excitations(question), None
    chosen = basis or cheaper_basis(model, question.levels)
    spectrum = lowest_levels(
        model,
        question.levels,
        question.solving_tolerance,
        chosen,
        start,
        state_accuracy=max(1e-7, 1e-2 * math.sqrt(question.tolerance)),
    )
    return _from_spectrum(question, spectrum), spectrum.as_start()


def _gap(rows: _Rows, *, same_parity: bool) -> tuple[float | None, float | None]:
    """Distance from the ground level to the next one (of its own parity), with error."""
    for at in range(1, len(rows.upper)):
        if not same_parity or rows.parity[at] == rows.parity[0]:
            value = max(rows.upper[at] - rows.upper[0], 0.0)
            most = max(rows.upper[at] - rows.lower[0], rows.upper[0] - rows.lower[at])
            least = max(rows.lower[at] - rows.upper[0], 0.0)
            error = max(most - value, value - least)
            return value, error
    return None, None


def _assembled(
    question: PointQuestion,
    rows: _Rows,
    moments: Moments,
    accuracy: StateAccuracy,
    needed: int | None,
    used: int,
    basis: str,
) -> PointAnswer:
    observables: dict[str, float | None] = {}
    notes = rows.notes
    for entry in REGISTRY:
        value, error = entry.compute(moments, accuracy)
        observables[entry.key] = None if value is None else float(value)
        observables[f"{entry.key}_error"] = None if error is None else float(error)
        if value is None and entry.undefined and entry.undefined not in notes:
            notes.append(entry.undefined)
    gap, gap_error = _gap(rows, same_parity=True)
    gap_any, gap_any_error = _gap(rows, same_parity=False)
    count = question.levels
    wanted = question.tolerance * question.model.mode
    widest = max(up - low for up, low in zip(rows.upper[:count], rows.lower[:count], strict=True))
    meets = bool(widest <= wanted)
    if gap is None or gap_any is None:
        notes.append("the gap needs a second level")
    if not meets:
        notes.append(f"bounds reach {widest:.1e}; rounding or size stands in the way of tol")
    return PointAnswer(
        energy=tuple(rows.upper[:count]),
        energy_lower=tuple(rows.lower[:count]),
        energy_status=tuple(rows.status[:count]),
        parity=tuple(rows.parity[:count]),
        gap=gap,
        gap_error=gap_error,
        gap_any=gap_any,
        gap_any_error=gap_any_error,
        observables=observables,
        cutoff_needed=needed,
        cutoff_used=used,
        basis=basis,
        meets_tolerance=meets,
        note="; ".join(notes) or None,
    )


def _from_spectrum(question: PointQuestion, spectrum: Spectrum) -> PointAnswer:
    levels = spectrum.levels
    rows = _Rows(
        [level.upper for level in levels],
        [level.lower for level in levels],
        [level.parity for level in levels],
        [level.status for level in levels],
    )
    count = question.levels
    shown = {
        parity: [level.place for level in levels[:count] if level.parity == parity]
        for parity in spectrum.sectors
    }
    ground = levels[0]
    chosen = {parity: spectrum.sectors[parity].ritz for parity, places in shown.items() if places}
    counts = {parity: max(shown[parity]) + 1 for parity in chosen}
    amplitudes = _shared_amplitudes(chosen, counts)
    allowed = question.need * question.model.mode
    needed = max(
        needed_cutoff(
            _profile(found, counts[parity], amplitudes.get(parity)),
            found.energies[: counts[parity]],
            allowed,
            question.tail,
        )
        for parity, found in chosen.items()
    )
    moments = _moments(chosen[ground.parity], amplitudes.get(ground.parity))
    return _assembled(question, rows, moments, _accuracy(spectrum), needed, spectrum.cutoff, spectrum.basis)


def _profile(found: RitzSet, count: int, amplitudes: NumberAmplitudes | None) -> LayerProfile:
    """Number layers of the lowest `count` states of a sector."""
    if isinstance(found.block, ShiftedBlock) and amplitudes is not None:
        return shifted_layers(found.block, amplitudes)
    if not isinstance(found.block, FockBlock):
        raise TypeError("number layers of a displaced block come from its amplitudes")
    return fock_layers(found.block, found.vectors[:count])


def _moments(found: RitzSet, amplitudes: NumberAmplitudes | None) -> Moments:
    """Moments of the lowest state of a sector."""
    if isinstance(found.block, ShiftedBlock) and amplitudes is not None:
        return shifted_moments(found.block, found.vectors[0], amplitudes)
    if not isinstance(found.block, FockBlock):
        raise TypeError("moments of a displaced block need its amplitudes")
    return fock_moments(found.block, found.vectors[0])


def _shared_amplitudes(chosen: dict[int, RitzSet], counts: dict[int, int]) -> dict[int, NumberAmplitudes]:
    """Number-layer amplitudes of displaced-ladder states, both parities in one pass."""
    blocks = {
        parity: found.block for parity, found in chosen.items() if isinstance(found.block, ShiftedBlock)
    }
    if not blocks:
        return {}
    stacked = np.concatenate([block.ladders(chosen[p].vectors[: counts[p]]) for p, block in blocks.items()])
    everything = number_amplitudes(next(iter(blocks.values())), stacked)
    edges = np.cumsum([counts[parity] for parity in blocks])[:-1]
    parts = np.split(everything.values, edges)
    return {
        parity: NumberAmplitudes(part, everything.ladders, everything.first)
        for parity, part in zip(blocks, parts, strict=True)
    }


def _accuracy(spectrum: Spectrum) -> StateAccuracy:
    """Bound on the angle of the ground state and on the quanta of what is mixed into it."""
    model = spectrum.floors.model
    ground = spectrum.levels[0]
    sector = spectrum.sectors[ground.parity]
    energy = float(sector.ritz.energies[0])
    following = float(sector.lower[1]) if len(sector.lower) > 1 else sector.line
    residual = math.sqrt(max(0.0, float(sector.ritz.residuals[0, 0])))
    residual += float(sector.ritz.roundoff[0])
    sine = sine_of_angle(residual, energy, following)
    if sine >= 1.0:
        return StateAccuracy(1.0, max(0.0, spectrum.floors.boson_bound(energy)), _EPS)
    room = following - energy
    lowered = residual * residual / room
    floor = spectrum.floors.share_floor(_QUANTA_SHARE)
    admixed = (lowered + sine**2 * max(0.0, energy - floor)) / (_QUANTA_SHARE * model.mode)
    return StateAccuracy(sine, admixed, 8.0 * _EPS * math.sqrt(sector.ritz.block.dimension))


def _from_excitations(question: PointQuestion) -> PointAnswer:
    model = question.model
    spectrum = excitation_levels(model, question.levels)
    levels = spectrum.levels
    rows = _Rows(
        [level.energy + level.roundoff for level in levels],
        [level.energy - level.roundoff for level in levels],
        [spectrum.parity(level) for level in levels],
        ["exact"] * len(levels),
    )
    shown = levels[: question.levels]
    needed = _excitation_cutoff(question, spectrum, shown)
    accuracy = StateAccuracy(
        min(1.0, 64.0 * _EPS * model.spins), 0.0, 8.0 * _EPS * math.sqrt(model.spins + 1.0)
    )
    return _assembled(
        question,
        rows,
        excitation_moments(spectrum, levels[0]),
        accuracy,
        needed,
        max(level.block for level in shown),
        "excitation",
    )


def _excitation_cutoff(
    question: PointQuestion, spectrum: ExcitationSpectrum, shown: Sequence[ExcitationLevel]
) -> int:
    """Needed cutoff over the shown levels: blocks of different K do not couple."""
    needed = 0
    for block in {level.block for level in shown}:
        same = sorted((level for level in shown if level.block == block), key=lambda level: level.place)
        profile = excitation_layers(spectrum, same)
        energies = np.array([level.energy for level in same])
        needed = max(
            needed,
            needed_cutoff(profile, energies, question.need * question.model.mode, question.tail),
        )
    return needed
