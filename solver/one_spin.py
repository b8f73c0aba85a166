"""The quantum Rabi family (N = 1, no bias) in one go: two parity chains, each with its bounds.

The same mathematics as the general search, written out for two tridiagonal matrices, where the
general bookkeeping would cost more than the eigenvalues.
"""

from __future__ import annotations

import math
from bisect import bisect_left

import numpy as np
from numpy.typing import NDArray

from solver.bounds import RitzSet
from solver.eigen import lowest_of_chain
from solver.floor import Floors
from solver.forecast import first_cutoff
from solver.model import CollectiveModel
from solver.parity_chain import ParityChain
from solver.spectrum import Level, SectorLevels, Spectrum, Start, in_order

Array = NDArray[np.float64]
_EPS = float(np.finfo(np.float64).eps)
_ROUNDS = 6
_MARGIN = 4


def one_spin_levels(
    model: CollectiveModel,
    count: int,
    tolerance: float,
    floors: Floors,
    start: Start | None,
    state_accuracy: float,
) -> Spectrum | None:
    """Lowest levels of a one-spin model without bias, or None where the general search is needed.

    Arguments as in `levels.lowest_levels`.
    """
    cutoff = first_cutoff(model, "fock", count) if start is None else start.cutoff
    for _ in range(_ROUNDS):
        shift = floors.ground
        chains = {parity: ParityChain(model, parity, cutoff, shift) for parity in (1, -1)}
        found = {
            parity: lowest_of_chain(chain.along, chain.beside, min(count + 2, chain.dimension))
            for parity, chain in chains.items()
        }
        line = _line(found[1][0], found[-1][0], count)
        spectrum = None
        if line is not None:
            spectrum = _bounded(model, chains, found, line, floors, cutoff)
        if spectrum is not None:
            ground = spectrum.sectors[spectrum.levels[0].parity]
            room = float(ground.line - ground.ritz.energies[-1])
            sine = math.sqrt(float(ground.ritz.leaked[0, 0])) / max(room, 1e-300)
            width = max(level.upper - level.lower for level in spectrum.levels)
            rounding = 2.0 * float(ground.ritz.roundoff[0])
            if sine <= state_accuracy and width <= max(tolerance, 1.5 * rounding):
                spectrum.met = width <= tolerance
                return spectrum
        cutoff += _MARGIN + cutoff // 6
    return None


def _line(even: Array, odd: Array, count: int) -> float | None:
    """Energy (above the shift) for the count: in the widest gap above the wanted levels."""
    merged = sorted([(float(value), 1) for value in even] + [(float(value), -1) for value in odd])
    again = [at for at, pair in enumerate(merged) if pair[1] == merged[0][1]]
    reach = max(count, 2, again[1] + 1)
    top = bisect_left(merged, (min(float(even[-1]), float(odd[-1])), -2))
    last = min(top, reach + 2)
    if last < reach:
        return None
    lower, upper = max(
        ((merged[at - 1][0], merged[at][0]) for at in range(reach, last + 1) if at < len(merged)),
        key=lambda pair: pair[1] - pair[0],
        default=(0.0, 0.0),
    )
    return lower + 0.6 * (upper - lower) if upper > lower else None


def _bounded(
    model: CollectiveModel,
    chains: dict[int, ParityChain],
    found: dict[int, tuple[Array, Array]],
    line: float,
    floors: Floors,
    cutoff: int,
) -> Spectrum | None:
    """Levels below the line with their bounds, or None where the count is not certified."""
    absolute = line + floors.ground
    room = floors.above(cutoff, shifted=False) - absolute
    if room <= 0.0:
        return None
    sectors: dict[int, SectorLevels] = {}
    rows: list[Level] = []
    for parity, chain in chains.items():
        values, vectors = found[parity]
        energies = values.tolist()
        inside = bisect_left(energies, line)
        if chain.levels_below(absolute, room) > inside:
            return None
        kept = vectors[:inside]
        last = kept[:, -1] * chain.leak
        # the matrix of lower bounds is diagonal up to the leak: its trace bounds the shift
        leaks = last.tolist()
        lift = sum(leak * leak / (line - energy) for leak, energy in zip(leaks, energies, strict=False))
        lift *= 1.0 + 1e-12
        scale = 8.0 * _EPS * (abs(floors.ground) + model.mode * 2.0 + line + abs(chain.beside[-1]))
        upper = values[:inside] + floors.ground
        leaked = last[:, None] * last
        ritz = RitzSet(chain, upper, kept, leaked, leaked, np.full(inside, scale))
        sectors[parity] = SectorLevels(ritz, upper - (lift + scale), absolute)
        rows += [
            Level(energy + scale, energy - lift - scale, parity, place, "bracketed")
            for place, energy in enumerate(upper.tolist())
        ]
    levels = tuple(in_order(rows))
    return Spectrum(levels, sectors, "fock", cutoff, True, floors)
