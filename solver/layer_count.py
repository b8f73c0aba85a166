"""Certified count in the number basis, layer by layer, with the projected operator.

As in `ladder_count`: with H = s w n + f + A, A >= 0, the levels of the untruncated sector below E
are at most the negative eigenvalues of D + A (A + V V^dag/r)^(-1) A, D = s w n + f - E. Layer n
couples to n+1 through sqrt(n+1) times one spin matrix, so the elimination needs two of them only.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from solver.eigen import eliminate
from solver.fock_basis import FockBlock
from solver.spin import raising_elements

Array = NDArray[np.float64]
Index = NDArray[np.int64]


def projected_number_count(block: FockBlock, room: float, share: float, floor: float) -> int:
    """Levels below the block's shift E; room is r, share and floor are s and f."""
    model = block.model
    kinds = [_layer_states(block, n) for n in range(2)]
    couplings = [_coupling(block, kinds[n], kinds[1 - n]) for n in range(2)]
    spins = [_spin_matrix(block, kept) for kept in kinds]
    carried: Array | None = None
    negative = 0
    for n in range(block.cutoff + 1):
        kept, link = kinds[n % 2], couplings[n % 2]
        size = kept.size
        positive = spins[n % 2] + ((1.0 - share) * model.mode * n - floor) * np.eye(size)
        lower = positive
        if n == block.cutoff:
            lower = positive + ((n + 1.0) / room) * (link.T @ link)
        pivot = np.empty((2 * size, 2 * size))
        pivot[:size, :size] = (share * model.mode * n + floor - block.shift) * np.eye(size)
        pivot[size:, :size] = positive
        pivot[:size, size:] = positive
        pivot[size:, size:] = -lower
        if carried is not None:
            pivot -= carried
        if n == block.cutoff:
            negative += eliminate(pivot, None, likely_definite=False)[0]
            break
        climb = math.sqrt(n + 1.0) * link
        beside = np.block([[np.zeros_like(climb), climb], [climb, -climb]])
        fewer, solved = eliminate(pivot, beside.T, likely_definite=False)
        negative += fewer
        carried = beside @ solved
    return negative - block.dimension


def _layer_states(block: FockBlock, quanta: int) -> Index:
    """Spin excitations j present in an even or odd layer."""
    size = block.model.spins + 1
    if block.parity == 0:
        return np.arange(size)
    return np.arange((quanta + (1 - block.parity) // 2) % 2, size, 2)


def _spin_matrix(block: FockBlock, kept: Index) -> Array:
    """w0 Jz + eps Jx on the states of one layer."""
    model = block.model
    out = np.diag(model.splitting * (kept - 0.5 * model.spins))
    if model.bias != 0.0:
        half = 0.5 * model.bias * raising_elements(model.spins)
        out += np.diag(half, 1) + np.diag(half, -1)
    return out


def _coupling(block: FockBlock, here: Index, above: Index) -> Array:
    """(lr J- + lc J+)/sqrt(N) from the states of a layer to those of the next."""
    model = block.model
    size = model.spins + 1
    steps = raising_elements(model.spins) / math.sqrt(model.spins)
    full = np.diag(model.rotating * steps, 1) + np.diag(model.counter * steps, -1)
    return np.asarray(full.reshape(size, size)[np.ix_(above, here)])
