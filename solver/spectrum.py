"""What a level search returns: levels with two-sided bounds, and the vectors behind them."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from solver.blocks import BasisName
from solver.bounds import RitzSet
from solver.floor import Floors

Array = NDArray[np.float64]
Status = Literal["bracketed", "estimated", "exact"]


class Level(NamedTuple):
    """One level: upper and lower bound, its sector, its place in the sector, and the claim."""

    upper: float
    lower: float
    parity: int
    place: int
    status: Status


@dataclass(slots=True)
class Spectrum:
    """The lowest levels of a model and the vectors behind them.

    levels: ascending by energy, over all sectors. sectors: per parity the Ritz set, lower bounds
    of its certified levels, and `line`, below which the sector holds no more than those.
    """

    levels: tuple[Level, ...]
    sectors: dict[int, SectorLevels]
    basis: BasisName
    cutoff: int
    met: bool
    floors: Floors

    def as_estimate(self) -> Spectrum:
        """The same numbers where the count below the lines could not be proven."""
        levels = tuple(level._replace(status="estimated") for level in self.levels)
        return replace(self, levels=levels)

    def as_start(self) -> Start:
        """What a neighbouring point can begin from."""
        counts = {
            parity: max(1, sum(level.parity == parity for level in self.levels)) for parity in self.sectors
        }
        sets = {parity: sector.ritz for parity, sector in self.sectors.items()}
        return Start(self.basis, self.cutoff, counts, sets)


class SectorLevels(NamedTuple):
    """Certified content of one sector: no more than len(lower) levels lie below `line`."""

    ritz: RitzSet
    lower: Array
    line: float


@dataclass(slots=True)
class Start:
    """What a solved neighbour offers: cutoff and vectors per parity, and how many to ask for."""

    basis: BasisName
    cutoff: int
    counts: dict[int, int] = field(default_factory=dict)
    sets: dict[int, RitzSet] = field(default_factory=dict)


def in_order(levels: list[Level], rounding: float) -> list[Level]:
    """Ascending in energy; levels closer than their rounding are listed even parity first."""
    levels.sort(key=lambda level: level.upper)
    for at in range(1, len(levels)):
        first, second = levels[at - 1], levels[at]
        if second.upper - first.upper < rounding and second.parity > first.parity:
            levels[at - 1], levels[at] = second, first
    return levels
