"""The noise of the spin around its mean direction: the ellipse that squeezing is read from."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from solver.phase_space import SchmidtState
from solver.spin import lowered, projections, raised, raising_elements

_VANISHING = 1e-12


@dataclass(frozen=True, slots=True)
class NoiseEllipse:
    """Standard deviations of the spin orthogonal to its mean, in units of a coherent state's sqrt(N)/2.

    in_plane: along the direction orthogonal to the mean spin in the x-z plane; along_y: along y.
    These are the axes, for states whose amplitudes are real. polar: angle of the mean spin from z
    towards x, in radians; mean_spin: |<J>|/(N/2). Without a mean spin (below 1e-12) the mean is
    taken to lie along -z. The smaller axis squared is xi_S^2 of Kitagawa and Ueda, Phys. Rev. A
    47, 5138 (1993).
    """

    in_plane: float
    along_y: float
    polar: float
    mean_spin: float


def noise_ellipse(state: SchmidtState) -> NoiseEllipse:
    """Noise of the spin in a pure state of boson and spin with real amplitudes."""
    size = state.spins
    psi = np.sqrt(state.weights)[:, None] * state.spin
    m = projections(size)
    steps = raising_elements(size)
    along_x = 0.5 * (raised(psi, steps) + lowered(psi, steps))
    jx, jz = float(np.sum(psi * along_x)), float(np.sum(psi * psi * m))
    jxx, jzz = float(np.sum(along_x * along_x)), float(np.sum(psi * psi * m * m))
    jxz = float(np.sum(along_x * psi * m))
    jyy = 0.25 * size * (size + 2.0) - jxx - jzz
    length = math.hypot(jx, jz)
    mean = 2.0 * length / size
    sine, cosine = (jx / length, jz / length) if mean > _VANISHING else (0.0, -1.0)
    across = cosine**2 * jxx + sine**2 * jzz - 2.0 * sine * cosine * jxz
    unit = 0.5 * math.sqrt(size)
    return NoiseEllipse(
        math.sqrt(max(0.0, across)) / unit,
        math.sqrt(max(0.0, jyy)) / unit,
        math.atan2(sine, cosine),
        mean if mean > _VANISHING else 0.0,
    )
