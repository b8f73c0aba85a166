"""Certified counts: how many levels of the full, untruncated sector can lie below a line.

The count is made on its own truncation, large enough for the Schur complement of what it leaves
out to stay above the line; the trial vectors may live on a smaller one, or in the other basis.
"""

from __future__ import annotations

import math
from collections.abc import Iterator

from solver.blocks import BasisName
from solver.eigen import count_below_zero
from solver.floor import Floors
from solver.fock_basis import FockBlock
from solver.model import CollectiveModel
from solver.shifted_basis import LadderCoupling, ShiftedBlock, count_on_ladders

_CLASSICAL_SHARE = 0.7


def counting_cutoffs(
    model: CollectiveModel, basis: BasisName, cutoff: int, line: float, floors: Floors
) -> Iterator[int]:
    """Cutoffs worth trying for a count below `line`, cheapest first."""
    if basis == "shifted":
        lowest = cutoff
        while floors.above(lowest, True) <= line + model.mode:
            lowest += 1
        yield from (lowest, lowest + 4, lowest + 10)
        return
    # a state on the last layer has at least w M - t sqrt(N M) - leak - field: make that > line
    total = max(abs(model.total_coupling), abs(model.coupling_difference))
    depth = total * total * model.spins / (4.0 * model.mode * _CLASSICAL_SHARE)
    depth += 0.5 * model.spins * math.hypot(model.splitting, model.bias) + line + model.mode
    slope = total * math.sqrt(model.spins)
    root = (slope + math.sqrt(slope * slope + 4.0 * model.mode * max(depth, 0.0))) / (2.0 * model.mode)
    first = max(cutoff, int(math.ceil(root * root)))
    yield from (first, int(1.4 * first) + 4, 2 * first + 10)


def levels_below(
    model: CollectiveModel,
    parities: tuple[int, ...],
    line: float,
    floors: Floors,
    basis: BasisName,
    cutoff: int,
    coupling: LadderCoupling | None = None,
) -> list[int] | None:
    """Upper bounds on the number of levels below `line` in each sector, or None.

    None when the part above the cutoff is not bounded away from the line. coupling: the ladder
    coupling of this cutoff where it is already at hand.
    """
    room = floors.above(cutoff, basis == "shifted") - line
    if room <= 0.0:
        return None
    if basis == "shifted":
        if coupling is None or coupling.cutoff != cutoff:
            coupling = LadderCoupling(model, cutoff)
        return count_on_ladders(
            [ShiftedBlock(model, parity, cutoff, line, coupling) for parity in parities], room
        )
    out = []
    for parity in parities:
        block = FockBlock(model, parity, cutoff, line)
        out.append(count_below_zero(block.band - block.leak_band() / room, block.half_width))
    return out
