"""N -> infinity: classical minimum and its two normal modes, for every member of the family.

The boson follows the spin direction, which leaves the energy per spin

    e(theta) = (w0 cos + eps sin)/2 - (lr+lc)^2 sin^2 / (4 w)        (mean spin in the xz plane;
for |lr - lc| > |lr + lc| the spin tilts towards y instead, with lr - lc in place of lr + lc).

Expanding to second order around the minimum couples two oscillators; their frequencies squared
are the eigenvalues of [[w, q],[q, W]] [[w, r],[r, W]] with W the precession frequency,
r = -(lr+lc) cos(theta), q = lr - lc.

Sources: Emary, Brandes, Phys. Rev. E 67, 066203 (2003); Hepp, Lieb, Ann. Phys. 76, 360 (1973);
Hioe, Phys. Rev. A 8, 1440 (1973).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from solver.model import CollectiveModel


@dataclass(frozen=True, slots=True)
class LargeNLimit:
    """Leading order in N of the ground state, and the two excitation branches.

    Energies in the unit of the model; boson number per spin; branches None where the expansion
    has no stable minimum (not even a soft one).
    """

    critical_coupling: float
    energy_per_spin: float
    boson_number_per_spin: float
    inversion: float
    order_parameter: float
    lower_branch: float | None
    upper_branch: float | None


def _direction(field: float, bias: float, pull: float) -> float:
    """Angle theta of the mean spin minimising (field cos + bias sin)/2 - pull sin^2 / 4."""
    if bias == 0.0:
        if pull <= abs(field) or pull == 0.0:
            return math.pi if field > 0.0 else (0.0 if field < 0.0 else -0.5 * math.pi)
        return -math.acos(-field / pull)
    # stationary points in t = tan(theta/2): a quartic, solved as a companion eigenproblem
    roots = np.roots([-bias, -2.0 * field + 2.0 * pull, 0.0, -2.0 * field - 2.0 * pull, bias])
    angles = [2.0 * math.atan(float(root.real)) for root in roots if abs(root.imag) < 1e-7]
    angles += [math.pi, -0.5 * math.pi if bias > 0 else 0.5 * math.pi]

    def energy(theta: float) -> float:
        sine = math.sin(theta)
        return 0.5 * (field * math.cos(theta) + bias * sine) - 0.25 * pull * sine * sine

    best = min(angles, key=energy)
    return _polished(best, field, bias, pull)


def _polished(theta: float, field: float, bias: float, pull: float) -> float:
    """A few Newton steps on the stationarity condition."""
    for _ in range(30):
        sine, cosine = math.sin(theta), math.cos(theta)
        slope = 0.5 * (-field * sine + bias * cosine) - 0.5 * pull * sine * cosine
        bend = -0.5 * (field * cosine + bias * sine) - 0.5 * pull * (cosine**2 - sine**2)
        if bend <= 0.0 or abs(slope) < 1e-16 * (abs(field) + abs(bias) + pull):
            break
        theta -= slope / bend
    return theta


def large_n_limit(model: CollectiveModel) -> LargeNLimit:
    """Leading order in 1/N for the given model; its `spins` does not matter."""
    total, difference = model.total_coupling, model.coupling_difference
    along_y = model.bias == 0.0 and abs(difference) > abs(total)
    if along_y:
        # same physics after a quarter turn of spin and boson
        total, difference = difference, total
    pull = total * total / model.mode
    theta = _direction(model.splitting, model.bias, pull)
    sine, cosine = math.sin(theta), math.cos(theta)
    energy = 0.5 * (model.splitting * cosine + model.bias * sine) - 0.25 * pull * sine * sine
    precession = -(model.splitting * cosine + model.bias * sine) + pull * sine * sine
    lower, upper = _branches(model.mode, precession, -total * cosine, difference)
    return LargeNLimit(
        critical_coupling=model.critical_coupling,
        energy_per_spin=energy,
        boson_number_per_spin=(total * sine / (2.0 * model.mode)) ** 2,
        inversion=cosine,
        order_parameter=0.0 if along_y else abs(sine),
        lower_branch=lower,
        upper_branch=upper,
    )


def _branches(
    mode: float, precession: float, position: float, momentum: float
) -> tuple[float | None, float | None]:
    """Normal-mode frequencies of two oscillators coupled in position and in momentum."""
    trace = mode**2 + precession**2 + 2.0 * position * momentum
    product = (mode * precession - position**2) * (mode * precession - momentum**2)
    spread = math.sqrt(max(0.0, 0.25 * trace * trace - product))
    upper_square = 0.5 * trace + spread
    if upper_square <= 0.0:
        return None, None
    # the small root from the product keeps its digits near the transition
    lower_square = product / upper_square
    if lower_square < 0.0:
        if lower_square > -1e-9 * upper_square:
            return 0.0, math.sqrt(upper_square)
        return None, math.sqrt(upper_square)
    return math.sqrt(lower_square), math.sqrt(upper_square)
