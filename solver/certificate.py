"""Certified counts: how many levels of the full, untruncated sector can lie below a line.

The count is made on its own truncation, large enough for the Schur complement of what it leaves
out to stay above the line; the trial vectors may live on a smaller one, or in the other basis.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from solver.blocks import BasisName, Block
from solver.eigen import count_below_zero
from solver.floor import Floors
from solver.fock_basis import FockBlock
from solver.ladder_count import plain_count, projected_count
from solver.layer_count import projected_number_count
from solver.model import CollectiveModel
from solver.parity_chain import ParityChain, number_block
from solver.shifted_basis import LadderCoupling, ShiftedBlock

# above this the plain certificate of the displaced basis rarely succeeds
_PLAIN_UP_TO = 100


@dataclass(frozen=True, slots=True)
class Attempt:
    """One way to count: on which cutoff, and whether with the projected operator."""

    cutoff: int
    projected: bool = False


def counting_attempts(
    model: CollectiveModel, basis: BasisName, cutoff: int, line: float, floors: Floors
) -> Iterator[Attempt]:
    """Ways worth trying for a count below `line`, cheapest first."""
    if basis == "shifted":
        lowest = cutoff
        while floors.above(lowest, shifted=True) <= line + model.mode:
            lowest += 1
        if model.spins <= _PLAIN_UP_TO:
            yield Attempt(lowest)
        yield Attempt(lowest, projected=True)
        yield Attempt(lowest + 6, projected=True)
        return
    lowest = cutoff
    while floors.above(lowest, shifted=False) <= line + model.mode:
        lowest += 1 + lowest // 32
    yield Attempt(lowest, projected=True)
    yield Attempt(lowest + lowest // 8 + 6, projected=True)


def levels_below(
    model: CollectiveModel,
    parities: tuple[int, ...],
    line: float,
    floors: Floors,
    basis: BasisName,
    attempt: Attempt,
    coupling: LadderCoupling | None = None,
) -> list[int] | None:
    """Upper bounds on the number of levels below `line` in each sector, or None.

    None when the part above the cutoff is not bounded away from the line. coupling: the ladder
    coupling of this cutoff where it is already at hand.
    """
    cutoff = attempt.cutoff
    shifted = basis == "shifted"
    share, floor = floors.best_split(cutoff, shifted=shifted)
    room = share * model.mode * (cutoff + 1) + floor - line
    if room <= 0.0:
        return None
    if shifted:
        if coupling is None or coupling.cutoff != cutoff:
            coupling = LadderCoupling(model, cutoff)
        blocks = [ShiftedBlock(model, parity, cutoff, line, coupling) for parity in parities]
        if attempt.projected:
            return projected_count(blocks, room, share, floor)
        return plain_count(blocks, room)
    return [
        _count_numbers(number_block(model, parity, cutoff, line), line, room, share, floor)
        for parity in parities
    ]


def _count_numbers(block: FockBlock, line: float, room: float, share: float, floor: float) -> int:
    if not isinstance(block, ParityChain):
        return projected_number_count(block, room, share, floor)
    # one state per layer: going far beyond the cutoff costs less than projecting
    model, cutoff = block.model, 4 * block.cutoff + 40
    longer = ParityChain(model, block.parity, cutoff, line)
    return longer.levels_below(line, room + share * model.mode * (cutoff - block.cutoff))


def levels_inside(blocks: Sequence[Block], line: float) -> list[int]:
    """Number of levels below `line` of each truncated block by itself."""
    out = []
    for block in blocks:
        if isinstance(block, ParityChain):
            out.append(block.levels_below(line, math.inf))
            continue
        band = block.band.copy(order="F")
        band[0] -= line - block.shift
        size = block.half_width if isinstance(block, FockBlock) else block.cutoff + 1
        out.append(count_below_zero(band, size))
    return out
