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
_CLEAR = 1e-11


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
    wanted = count // 2 + 3
    for _ in range(_ROUNDS):
        shift = floors.ground
        chains = {parity: ParityChain(model, parity, cutoff, shift) for parity in (1, -1)}
        found = {
            parity: lowest_of_chain(chain.along, chain.beside, min(wanted, chain.dimension))
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
                spectrum.met = bool(width <= tolerance)
                return spectrum
        cutoff += _MARGIN + cutoff // 6
    return None


def _line(even: Array, odd: Array, count: int) -> float | None:
    """Energy (above the shift) for the count: in the widest gap above the wanted levels."""
    first, second = even.tolist(), odd.tolist()
    own = first if first[0] <= second[0] else second
    top = min(first[-1], second[-1])
    merged = sorted(first + second)
    # both gaps must exist: reach past the second level of the ground state's parity
    reach = max(count, 2, bisect_left(merged, own[1]) + 1)
    last = min(bisect_left(merged, top), reach + 2)
    if last < reach:
        return None
    width, at = max((merged[at] - merged[at - 1], at) for at in range(reach, last + 1))
    # a line in a gap as narrow as rounding would prove nothing: the general search knows better
    return merged[at - 1] + 0.6 * width if width > _CLEAR * merged[at] else None


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
    # any share of the boson energy gives a valid room; half is good almost everywhere
    room = 0.5 * model.mode * (cutoff + 1) + floors.share_floor(0.5) - absolute
    if room <= 0.0:
        room = floors.above(cutoff, shifted=False) - absolute
    if room <= 0.0:
        return None
    ground, mode = floors.ground, model.mode
    sectors: dict[int, SectorLevels] = {}
    rows: list[Level] = []
    for parity, chain in chains.items():
        values, vectors = found[parity]
        energies = values.tolist()
        inside = bisect_left(energies, line)
        if chain.levels_below(absolute, room) > inside:
            return None
        kept = vectors[:inside]
        last = kept[:, -1]
        # the matrix of lower bounds is diagonal up to the leak: its trace bounds the shift
        squared = chain.leak * chain.leak
        lift = squared * sum(
            end * end / (line - energy) for end, energy in zip(last.tolist(), energies, strict=False)
        )
        lift *= 1.0 + 1e-12
        scale = 8.0 * _EPS * (abs(ground) + 2.0 * mode + line + chain.reach)
        leaked = squared * np.multiply.outer(last, last)
        upper = values[:inside] + ground
        ritz = RitzSet(chain, upper, kept, leaked, leaked, np.full(inside, scale))
        sectors[parity] = SectorLevels(ritz, upper - (lift + scale), absolute)
        above, below = ground + scale, ground - lift - scale
        for place in range(inside):
            energy = energies[place]
            rows.append(Level(energy + above, energy + below, parity, place, "bracketed"))
    levels = tuple(in_order(rows, 2.0 * scale))
    return Spectrum(levels, sectors, "fock", cutoff, True, floors)
