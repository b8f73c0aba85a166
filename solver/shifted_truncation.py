"""Calculations truncated in the displaced-ladder basis, one solve per cutoff."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from solver.bounds import ritz_set
from solver.converged import DOUBLET, Converged
from solver.floor import Floors
from solver.levels import lowest_levels, sector_builder
from solver.shifted_basis import ShiftedBlock
from solver.truncated import TruncatedValues, error_of

Array = NDArray[np.float64]
_ACCURACY = 1e-9


class ShiftedTruncations:
    """Calculations with displaced levels n <= M on every ladder."""

    def __init__(self, converged: Converged, tolerance: float, angle: float) -> None:
        model, levels = converged.model, converged.levels
        self.converged, self.model = converged, model
        self._found: dict[int, TruncatedValues] = {}
        spectrum = converged.spectrum
        if spectrum is None or spectrum.basis != "shifted":
            spectrum = lowest_levels(model, levels, tolerance, "shifted", state_accuracy=angle)
        self.spectrum = spectrum
        self.shift = Floors(model).ground - 0.05 * model.mode
        self.shown = {
            parity: sum(level.parity == parity for level in spectrum.levels[:levels])
            for parity in spectrum.sectors
        }
        tails = []
        for parity, sector in spectrum.sectors.items():
            if self.shown[parity]:
                weights = sector.ritz.block.layer_weights(sector.ritz.vectors[: self.shown[parity]])
                tails.append(np.cumsum(weights[:, ::-1], axis=1)[:, ::-1].max(axis=0))
        self._weights: Array = np.max(tails, axis=0)

    def tail_above(self, cutoff: int) -> float:
        """Largest weight of a shown state in displaced levels above the cutoff."""
        return float(self._weights[cutoff + 1]) if cutoff + 1 < len(self._weights) else 0.0

    def needed(self, tail: float) -> int:
        """Smallest cutoff that leaves no more than `tail` above it."""
        return next(m for m in range(len(self._weights) + 1) if self.tail_above(m) <= tail)

    def errors(self, name: str) -> dict[int, float]:
        """Signed errors of one quantity at the cutoffs solved so far."""
        return {cutoff: error_of(self.converged, values, name) for cutoff, values in self._found.items()}

    def at(self, cutoff: int, *, gap: bool, levels: bool = False) -> TruncatedValues:
        """What the calculation with displaced n <= cutoff finds (unit of the inputs)."""
        build = sector_builder(self.model, "shifted", cutoff, self.shift)
        energies: dict[int, Array] = {}
        ground: tuple[ShiftedBlock, Array] | None = None
        for parity in sorted(self.spectrum.sectors, key=lambda p: p != self.spectrum.levels[0].parity):
            block = build(parity)
            count = max(2 if gap else 1, self.shown[parity] if levels else 0)
            known = self.spectrum.sectors[parity].ritz
            start = known.block.embed(known.vectors, block)
            few = min(count, block.dimension)
            found = ritz_set(block, few, 1, start, _ACCURACY, blockwise=True)
            energies[parity] = found.energies[:count]
            if not isinstance(block, ShiftedBlock):
                raise TypeError("displaced ladders expected")
            # the sector of the true ground state comes first and keeps a closed doublet
            if ground is None or self._clearly_lower(found.energies[0], energies[ground[0].parity][0]):
                ground = (block, found.vectors[0])
        if ground is None:
            raise AssertionError("a model has at least one sector")
        block, vector = ground
        own = energies[block.parity]
        quanta, order = _observables(block, vector)
        self._found[cutoff] = TruncatedValues(
            energy=float(own[0]),
            gap=float(own[1] - own[0]) if own.size > 1 else None,
            boson_number=quanta,
            order_parameter=order,
            levels=self._error(energies) if levels else None,
        )
        return self._found[cutoff]

    def _clearly_lower(self, energy: float, than: float) -> bool:
        return bool(than - energy > DOUBLET * self.model.mode)

    def _error(self, energies: dict[int, Array]) -> float:
        worst = 0.0
        for parity, count in self.shown.items():
            exact = self.spectrum.sectors[parity].ritz.energies[:count]
            values = energies[parity][:count]
            if values.size < count:
                return math.inf
            if count:
                worst = max(worst, float(np.max(values - exact)))
        return worst


def _observables(block: ShiftedBlock, vector: Array) -> tuple[float, float]:
    """<a^dag a> and sqrt(<Jx^2>)/(N/2) of a vector of displaced ladders."""
    psi = block.ladders(vector[None])[0]
    once = -block.model.displacement_per_quantum * block.m[:, None] * psi
    once[:, :-1] += np.sqrt(np.arange(1.0, block.cutoff + 1.0)) * psi[:, 1:]
    along = float(np.sum(psi * psi, axis=1) @ (block.m * block.m))
    return float(np.sum(once * once)), 2.0 * math.sqrt(along) / block.model.spins
