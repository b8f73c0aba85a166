"""Certified counts in the displaced-ladder basis, parities sharing all but the last ladder.

Two certificates, the second stronger and dearer. Both write H = s w b^dag b + f + A with A >= 0
(f a floor, s = 1 for Dicke), r = s w (M+1) + f - E > 0 and W >= V V^dag, V = P A Q:

plain      levels of H below E are at most the negative eigenvalues of P(H - E)P - W/r;
projected  A is at least its part seen from P (A projected in its own inner product), which adds
           V^dag A_PP^(-1) V to the discarded block; what remains is D + A (A + W/r)^(-1) A with
           D = s w n + f - E, positive wherever n is large, however strong the leak. Its negative
           eigenvalues are those of [[D, A], [A, -(A + W/r)]] less one per basis state.

Sources: Bazley, Fox, Phys. Rev. 124, 483 (1961), for the projected operator; Haynsworth,
Linear Algebra Appl. 1, 73 (1968), for inertia of Schur complements.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from solver.eigen import eliminate
from solver.shifted_basis import ShiftedBlock

Array = NDArray[np.float64]


def plain_count(blocks: Sequence[ShiftedBlock], room: float) -> list[int]:
    """Levels below the blocks' shift E, per parity; room is r of the module text."""
    first = blocks[0]
    n = np.arange(first.cutoff + 1)
    stack = -first.leaks() / room
    stack[:, n, n] += first.offset[:, None] + first.model.mode * n
    return _eliminated(blocks, stack, first.kept_table, _last_ladders(blocks, stack[-1]))


def projected_count(blocks: Sequence[ShiftedBlock], room: float, share: float, floor: float) -> list[int]:
    """As `plain_count`, with the projected operator; share and floor are s and f."""
    first = blocks[0]
    levels = first.cutoff + 1
    n = np.arange(levels)
    mode, energy = first.model.mode, first.shift
    positive = np.zeros((first.m.size, levels, levels))
    # offset already carries -E: back to A = H - s w n - f
    positive[:, n, n] = first.offset[:, None] + energy - floor + (1.0 - share) * mode * n
    leaks = first.leaks() / room
    remainder = np.asarray(share * mode * n + floor - energy, dtype=np.float64)
    lasts = [
        _paired(remainder[kept], part, leaks[-1][np.ix_(kept, kept)])
        for kept, part in _last_parts(blocks, positive[-1])
    ]
    stack = np.zeros((first.m.size, 2 * levels, 2 * levels))
    stack[:, n, n] = remainder
    stack[:, levels:, :levels] = positive
    stack[:, :levels, levels:] = positive
    stack[:, levels:, levels:] = -(positive + leaks)
    table = first.kept_table
    beside = np.block([[np.zeros_like(table), table], [table, -table]])
    counted = _eliminated(blocks, stack, beside, lasts)
    return [have - block.dimension for have, block in zip(counted, blocks, strict=True)]


def _paired(remainder: Array, positive: Array, leak: Array) -> Array:
    return np.block([[np.diag(remainder), positive], [positive, -(positive + leak)]])


def _last_parts(blocks: Sequence[ShiftedBlock], part: Array) -> list[tuple[NDArray[np.int64], Array]]:
    """Kept levels and own matrix of the last ladder, per parity, mirror coupling included."""
    out = []
    for block in blocks:
        kept = block.centre_kept
        own = part[np.ix_(kept, kept)]
        if block.folded and not block.has_centre:
            own = own + block.mirror_matrix(block.kept_table)
        out.append((kept, own))
    return out


def _last_ladders(blocks: Sequence[ShiftedBlock], part: Array) -> list[Array]:
    return [own for _, own in _last_parts(blocks, part)]


def _eliminated(
    blocks: Sequence[ShiftedBlock], stack: Array, beside: Array, lasts: Sequence[Array]
) -> list[int]:
    """Negative eigenvalues of the block tridiagonal matrix, per parity.

    stack: diagonal blocks (ladders, k, k), k a multiple of cutoff+1; beside: coupling to the next
    ladder, without its spin factor; lasts: the last diagonal block of each parity.
    """
    first = blocks[0]
    count, size = stack.shape[0], stack.shape[1]
    levels = first.cutoff + 1
    upper = np.ascontiguousarray(beside.T)
    negative = 0
    carried = np.zeros((size, size))
    for at in range(count - 1):
        fewer, solved = eliminate(stack[at] - carried, upper, likely_definite=size == levels)
        negative += fewer
        carried = beside @ solved
        if at < count - 2:
            carried *= first.steps[at] ** 2
    copies = np.arange(0, size, levels)
    out = []
    for block, last in zip(blocks, lasts, strict=True):
        kept = (copies[:, None] + block.centre_kept).ravel()
        coupled = carried[np.ix_(kept, kept)] * block.steps[-1] ** 2 if count > 1 else 0.0
        out.append(negative + (eliminate(last - coupled, None)[0] if last.size else 0))
    return out
