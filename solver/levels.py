"""The lowest levels of a model, over all symmetry sectors, each with a two-sided bound.

The cutoff of every sector grows until each requested level is known to `tolerance`. Completeness
is part of the claim: a count by inertia proves that no level was overlooked.
"""

from __future__ import annotations

import math
import operator
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from solver.blocks import BasisName, Block
from solver.bounds import RitzSet, lower_bounds, ritz_set
from solver.certificate import counting_attempts, levels_below, levels_inside
from solver.errors import ConvergenceError
from solver.floor import Floors
from solver.forecast import first_cutoff, levels_per_sector
from solver.model import CollectiveModel
from solver.one_spin import one_spin_levels
from solver.parity_chain import number_block
from solver.shifted_basis import LadderCoupling, ShiftedBlock
from solver.spectrum import Level, SectorLevels, Spectrum, Start, in_order

Array = NDArray[np.float64]

LARGEST_DIMENSION = 4_000_000
_MOST_ROUNDS = 24
_GUARDS = 1
_FINEST = 1e-12
# a gap this many roundings wide separates levels; parities this close may be listed either way
_CLEAR = 1e4
_DOUBLET = 1e-9
_EXTRA_LEVELS = 60
_PATIENT_UP_TO = 60


def sector_builder(
    model: CollectiveModel, basis: BasisName, cutoff: int, shift: float
) -> Callable[[int], Block]:
    """Function making the block of a given parity; what the parities share is made once."""
    if basis == "fock":
        return lambda parity: number_block(model, parity, cutoff, shift)
    coupling = LadderCoupling(model, cutoff)
    return lambda parity: ShiftedBlock(model, parity, cutoff, shift, coupling)


def lowest_levels(
    model: CollectiveModel,
    count: int,
    tolerance: float,
    basis: BasisName,
    start: Start | None = None,
    floors: Floors | None = None,
    state_accuracy: float = 1.0,
) -> Spectrum:
    """The `count` lowest levels of the model to `tolerance` (unit of the model).

    basis: "fock" or "shifted". state_accuracy: wanted bound on the angle between computed and
    exact ground state. If rounding stands in the way, `met` is False and the bounds say what was
    reached. Raises ConvergenceError when the dimension passes LARGEST_DIMENSION.
    """
    floors = floors or Floors(model)
    if model.spins == 1 and model.conserves_parity and basis == "fock":
        quick = one_spin_levels(model, count, tolerance, floors, start, state_accuracy)
        if quick is not None:
            return quick
    shift = floors.ground - 0.05 * model.mode
    parities = (1, -1) if model.conserves_parity else (0,)
    search = _Search(model, count, tolerance, state_accuracy, basis, floors, shift, parities)
    if start is not None and start.basis == basis:
        search.adopt(start)
    return search.run()


class _Search:
    """Grow cutoff and level counts until every requested level is bracketed to tolerance."""

    def __init__(
        self,
        model: CollectiveModel,
        count: int,
        tolerance: float,
        state_accuracy: float,
        basis: BasisName,
        floors: Floors,
        shift: float,
        parities: tuple[int, ...],
    ) -> None:
        self.model, self.count, self.tolerance = model, count, tolerance
        self.state_accuracy, self.basis, self.floors = state_accuracy, basis, floors
        self.shift, self.parities = shift, parities
        self.counts = dict.fromkeys(parities, levels_per_sector(model, count))
        self.starts: dict[int, RitzSet] = {}
        self.cutoff = first_cutoff(model, basis, count)
        self.guards = _GUARDS
        self.most = count + _EXTRA_LEVELS
        self.blockwise = False
        # a larger cutoff for the sake of the count alone pays for few spins only
        self.refused = 0
        self.patience = 4 if model.spins <= _PATIENT_UP_TO else 0
        # residual^2 / gap is the energy error: this aims well below the tolerance
        self.accuracy = min(0.3 * state_accuracy, 0.3 * math.sqrt(tolerance / model.mode))

    def adopt(self, start: Start) -> None:
        self.cutoff = start.cutoff
        for parity in self.parities:
            if parity in start.counts:
                self.counts[parity] = start.counts[parity]
                self.starts[parity] = start.sets[parity]

    def run(self) -> Spectrum:
        spectrum: Spectrum | None = None
        for _ in range(_MOST_ROUNDS):
            sets = self._solve()
            if not self._complete(sets):
                continue
            line = self._line(sets)
            if line is None:
                self.counts = {parity: have + 2 for parity, have in self.counts.items()}
                self.blockwise = True
                continue
            spectrum = self._spectrum(sets, line)
            if self._coarse(spectrum):
                self.accuracy *= 0.02
                continue
            more = self._grown(spectrum)
            if more:
                self.cutoff += more
                continue
            # the count comes last: it is the dear part, and only the final cutoff needs it
            certified = self._certified(sets, line)
            if certified is not None:
                return spectrum if certified else spectrum.as_estimate()
        if spectrum is None:
            raise ConvergenceError("levels", self.count, "fewer levels, or a wider tolerance")
        return spectrum.as_estimate()

    def _coarse(self, spectrum: Spectrum) -> bool:
        """Whether the iteration inside the block, rather than the cutoff, limits the bounds."""
        if self.accuracy < _FINEST:
            return False
        for sector in spectrum.sectors.values():
            known = len(sector.lower)
            inside = np.diag(sector.ritz.residuals - sector.ritz.leaked)[:known]
            if np.any(inside > 0.2 * self.tolerance * (sector.line - sector.ritz.energies[:known])):
                return True
        return False

    def _solve(self) -> dict[int, RitzSet]:
        build = sector_builder(self.model, self.basis, self.cutoff, self.shift)
        sets = {}
        for parity in self.parities:
            block = build(parity)
            if block.dimension > LARGEST_DIMENSION:
                raise ConvergenceError(
                    "cutoff",
                    self.cutoff,
                    f"at most {LARGEST_DIMENSION} basis states per sector; "
                    "ask for less coupling, fewer spins or a wider tolerance",
                )
            known = self.starts.get(parity)
            if known is None and self.starts:
                known = _mirrored(next(iter(self.starts.values())), block)
            first = None if known is None else known.block.embed(known.vectors, block)
            wanted = min(self.counts[parity], block.dimension)
            sets[parity] = ritz_set(
                block, wanted, self.guards, first, self.accuracy, blockwise=self.blockwise
            )
            self.starts[parity] = sets[parity]
        return sets

    def _complete(self, sets: dict[int, RitzSet]) -> bool:
        """Every sector reaches past the last wanted level; else ask for more and try again."""
        merged = np.sort(np.concatenate([found.energies for found in sets.values()]))
        reach = self._reach(sets)
        if merged.size <= reach:
            self.cutoff += 2
            self.counts = dict.fromkeys(self.parities, reach)
            return False
        last = merged[reach - 1]
        fine = True
        for parity, found in sets.items():
            if found.energies[-1] <= last:
                if found.energies.size >= found.block.dimension:
                    self.cutoff += 2
                self.counts[parity] = int(np.sum(found.energies <= last)) + 1
                fine = False
            elif np.sum(found.energies <= last) > self.counts[parity]:
                self.counts[parity] = int(np.sum(found.energies <= last))
                fine = False
        return fine

    def _reach(self, sets: dict[int, RitzSet]) -> int:
        """How many of the merged levels must be certified: the asked ones and both gaps."""
        merged = np.sort(np.concatenate([found.energies for found in sets.values()]))
        reach = max(self.count, 2)
        for found in sets.values():
            # either parity of a closed doublet may count as the ground state's
            if found.energies[0] <= merged[0] + _DOUBLET * self.model.mode:
                second = found.energies[min(1, len(found.energies) - 1)]
                reach = max(reach, int(np.searchsorted(merged, second)) + 1)
        return reach

    def _line(self, sets: dict[int, RitzSet]) -> float | None:
        """Energy at which levels are counted: in the widest gap above the last wanted level.

        None where every such gap is as narrow as rounding: a line inside a degenerate cluster
        would count the cluster wrongly.
        """
        merged = np.sort(np.concatenate([found.energies for found in sets.values()]))
        top = min(found.energies[-1] for found in sets.values())
        usable = merged[(merged <= top)]
        reach = self._reach(sets)
        lower, upper = usable[reach - 1 : -1], usable[reach:]
        at = int(np.argmax(upper - lower))
        line = float(lower[at] + 0.6 * (upper[at] - lower[at]))
        if self._clearance(sets, line) < _CLEAR and max(self.counts.values()) < self.most:
            return None
        return line

    def _clearance(self, sets: dict[int, RitzSet], line: float) -> float:
        """Distance from the line to the nearest level, in roundings."""
        roundoff = max(float(found.roundoff.max()) for found in sets.values())
        return min(float(np.abs(found.energies - line).min()) for found in sets.values()) / roundoff

    def _certified(self, sets: dict[int, RitzSet], line: float) -> bool | None:
        """Whether the count below `line` is proven; None when the search must go on."""
        if self._clearance(sets, line) < _CLEAR:
            # no wider gap was found: a count so close to a level proves nothing
            return False
        block = next(iter(sets.values())).block
        shared = block.coupling if isinstance(block, ShiftedBlock) else None
        expected = [int(np.sum(found.energies < line)) for found in sets.values()]
        for attempt in counting_attempts(self.model, self.basis, self.cutoff, line, self.floors):
            counted = levels_below(self.model, self.parities, line, self.floors, self.basis, attempt, shared)
            if counted is not None and all(map(operator.le, counted, expected)):
                return True
        inside = levels_inside([found.block for found in sets.values()], line)
        if any(map(operator.ne, inside, expected)):
            # the iteration overlooked a degenerate level
            self.guards += int(self.blockwise)
            self.blockwise = True
            return None
        self.refused += 1
        if self.refused > self.patience:
            return False
        self.cutoff += max(3, self.cutoff // 4)
        return None

    def _spectrum(self, sets: dict[int, RitzSet], line: float) -> Spectrum:
        """Levels below the line with their bounds, taking the count for granted."""
        sectors, rows = {}, []
        for parity, found in sets.items():
            inside = int(np.sum(found.energies < line))
            low = lower_bounds(found.energies[:inside], found.residuals[:inside, :inside], line)
            sectors[parity] = SectorLevels(found, low - found.roundoff[:inside], line)
            for place in range(inside):
                upper = float(found.energies[place] + found.roundoff[place])
                lower = float(low[place] - found.roundoff[place])
                rows.append(Level(upper, lower, parity, place, "bracketed"))
        roundoff = max(float(found.roundoff.max()) for found in sets.values())
        levels = tuple(in_order(rows, 4.0 * roundoff)[: self._reach(sets)])
        met = all(level.upper - level.lower <= self.tolerance for level in levels)
        return Spectrum(levels, sectors, self.basis, self.cutoff, met, self.floors)

    def _grown(self, spectrum: Spectrum) -> int:
        """Layers to add until levels and ground state are good enough; 0 when nothing helps."""
        roundoff = 2.0 * max(float(sector.ritz.roundoff.max()) for sector in spectrum.sectors.values())
        width = max(level.upper - level.lower for level in spectrum.levels)
        sector = spectrum.sectors[spectrum.levels[0].parity]
        decades = 0.0
        if width > self.tolerance and width > 1.2 * roundoff:
            decades = math.log10(width / max(self.tolerance, roundoff))
        gap = float(sector.lower[1] if len(sector.lower) > 1 else sector.line) - spectrum.levels[0].upper
        sine = math.sqrt(max(float(sector.ritz.leaked[0, 0]), 0.0)) / max(gap, roundoff)
        if sine > self.state_accuracy and sine > 10.0 * roundoff / max(gap, roundoff):
            decades = max(decades, 2.0 * math.log10(sine / self.state_accuracy))
        if decades <= 0.0:
            return 0
        slope = min(_decay(sector.ritz) for sector in spectrum.sectors.values())
        return max(1, math.ceil(1.1 * decades / slope) + 1)


def _decay(found: RitzSet) -> float:
    """Decades of weight lost per layer near the cutoff, of the slowest wanted state."""
    weights = found.block.layer_weights(found.vectors[:-1] if len(found.vectors) > 1 else found.vectors)
    span = min(4, weights.shape[1] - 1)
    if span < 1:
        return 0.5
    last = np.maximum(weights[:, -2:].max(axis=1), 1e-40)
    earlier = np.maximum(weights[:, -2 - span : -span].max(axis=1), 1e-40)
    return float(np.clip(np.min(np.log10(earlier / last)) / span, 0.15, 3.0))


def _mirrored(known: RitzSet, block: Block) -> RitzSet | None:
    """Vectors of the other parity as a start: above the transition they differ only in sign."""
    other = known.block
    if not isinstance(other, ShiftedBlock) or not isinstance(block, ShiftedBlock):
        return None
    if other.cutoff != block.cutoff:
        return None
    moved = block.flatten(other.ladders(known.vectors))
    return RitzSet(block, known.energies, moved, known.residuals, known.leaked, known.roundoff)
