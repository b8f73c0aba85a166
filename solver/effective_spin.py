"""The boson eliminated: an effective model of the collective spin alone.

For w much larger than w0 and the couplings, H becomes w0 Jz + eps Jx - w K^dag K with
K = (lr J- + lc J+)/(w sqrt(N)); for Dicke w0 Jz - (4 l^2/(w N)) Jx^2. Its ground energy is at the
same time a rigorous floor of the full model.

Source: Lipkin, Meshkov, Glick, Nucl. Phys. 62, 188 (1965).
"""

from __future__ import annotations

import numpy as np
from scipy.linalg import eig_banded, eigh_tridiagonal

from solver.model import CollectiveModel
from solver.spin import projections, raising_elements


def effective_spin_levels(model: CollectiveModel, count: int) -> tuple[float, ...]:
    """The lowest `count` levels (at most N+1) of the effective spin model, ascending."""
    size = model.spins
    steps, m = raising_elements(size), projections(size)
    scale = 1.0 / (model.mode * size)
    before = np.concatenate(([0.0], steps))
    after = np.concatenate((steps, [0.0]))
    diagonal = model.splitting * m - scale * ((model.rotating * before) ** 2 + (model.counter * after) ** 2)
    second = -scale * model.rotating * model.counter * steps[:-1] * steps[1:]
    if model.bias != 0.0:
        band = np.zeros((3, size + 1))
        band[0] = diagonal
        band[1, :-1] = 0.5 * model.bias * steps
        if size > 1:
            band[2, :-2] = second
        top = min(count, size + 1)
        values = eig_banded(
            band[: min(3, size + 1)],
            lower=True,
            eigvals_only=True,
            select="i",
            select_range=(0, top - 1),
        )
        return tuple(float(value) for value in values)
    found: list[float] = []
    for first in range(2):
        part, beside = diagonal[first::2], second[first::2]
        if part.size == 1:
            found.append(float(part[0]))
            continue
        top = min(count, part.size)
        found.extend(
            float(value)
            for value in eigh_tridiagonal(
                part, beside, eigvals_only=True, select="i", select_range=(0, top - 1)
            )
        )
    return tuple(sorted(found)[:count])
