"""What converged states alone say of every truncated calculation: bounds and weights, no solve."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from solver.converged import Converged
from solver.cutoff import needed_cutoff, weight_above
from solver.floor import Floors

Array = NDArray[np.float64]
_QUANTA_SHARE = 0.5


def levels_cutoff(exact: Converged, wanted: float) -> int:
    """Cutoff at which every shown level is within `wanted` (units of the mode): never too small."""
    return max(
        needed_cutoff(
            sector.cut(sector.shown).profile,
            sector.energies[: sector.shown],
            wanted * exact.model.mode,
            1.0 + 1e-9,
        )
        for sector in exact.sectors.values()
        if sector.shown
    )


def levels_bound(exact: Converged, cutoff: int) -> float:
    """Bound on the error of the shown levels at a cutoff, in units of the mode."""
    return max(
        float(sector.cut(sector.shown).errors(cutoff).max()) / exact.model.mode
        for sector in exact.sectors.values()
        if sector.shown
    )


def tail_cutoff(exact: Converged, wanted: float) -> int:
    """Smallest cutoff with no more than `wanted` of any shown state above it."""
    needed = 0
    for sector in exact.sectors.values():
        if sector.shown:
            profile = sector.cut(sector.shown).profile
            needed = max(needed, profile.first + int(np.argmax(weight_above(profile) <= wanted)))
    return needed


def tail_above(exact: Converged, cutoff: int) -> float:
    """Largest weight of a shown state above the cutoff."""
    worst = 0.0
    for sector in exact.sectors.values():
        at = cutoff - sector.profile.first
        if sector.shown and at + 1 < len(sector.profile.overlaps):
            weights = np.einsum("nii->ni", sector.profile.overlaps[max(0, at + 1) :])
            worst = max(worst, float(weights[:, : sector.shown].sum(axis=0).max()))
    return worst


def ground_curve(exact: Converged) -> Array:
    """Bound on the error of the ground level for every cutoff from 0 on (unit of the inputs)."""
    profile = exact.sectors[exact.ground].profile
    kept = np.cumsum(profile.overlaps[:, 0, 0])
    link = -profile.links[:, 0, 0]
    lifted = np.where(kept > 1e-13, np.maximum(link, 0.0) / np.maximum(kept, 1e-13), np.inf)
    return np.concatenate((np.full(profile.first, np.inf), np.minimum.accumulate(lifted)))


def gap_cutoff(exact: Converged, wanted: float) -> int | None:
    """Cutoff at which ground level and next one of its sector are within `wanted` (units of the mode)."""
    ground = exact.sectors[exact.ground]
    if exact.blocks is not None or len(ground.energies) < 2:
        return None
    pair = ground.cut(2)
    return needed_cutoff(pair.profile, ground.energies[:2], wanted * exact.model.mode, 1.0 + 1e-9)


def state_bound(exact: Converged, name: str, cutoff: int) -> float:
    """Rigorous bound on the error of gap, quanta or order parameter, without a truncated solve.

    Far from sharp: the angle of the truncated ground state is at most the root of its energy
    error over the gap (Eckart, Phys. Rev. 36, 878 (1930)), and the errors are linear in it.
    """
    curve = ground_curve(exact)
    if cutoff + 1 >= len(curve):
        return 0.0
    worst = 0.0
    for key, sector in exact.sectors.items():
        apart = float(sector.energies[0]) - exact.energy
        if key != exact.ground and apart > curve[cutoff]:
            continue
        if len(sector.energies) < 2:
            return math.inf
        if name == "gap":
            worst = max(worst, float(sector.cut(2).errors(cutoff).max()) / exact.model.mode)
        else:
            lifted = float(sector.cut(1).errors(cutoff)[0])
            worst = max(worst, _from_angle(exact, name, lifted, sector.energies))
    return worst


def _from_angle(exact: Converged, name: str, lifted: float, energies: Array) -> float:
    """Bound on the change of an observable of a ground state whose energy is `lifted` too high."""
    squared = lifted / float(energies[1] - energies[0])
    if not squared < 1.0:
        return math.inf
    sine = math.sqrt(squared)
    if name == "order_parameter":
        order = exact.order_parameter
        return max(math.sqrt(order**2 + sine) - order, order - math.sqrt(max(0.0, order**2 - sine)))
    floor = Floors(exact.model).share_floor(_QUANTA_SHARE)
    admixed = lifted + squared * max(0.0, float(energies[0]) - floor)
    admixed /= _QUANTA_SHARE * exact.model.mode
    root = math.sqrt(exact.boson_number) + math.sqrt(admixed)
    return squared * root**2 + 2.0 * root * math.sqrt(admixed) + admixed
