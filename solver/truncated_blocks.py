"""Truncated calculations of a model that conserves excitations, block by block and exactly.

A truncated block keeps j >= K - M of its j = 0..min(N, K). Its levels lie no lower than those of
the whole block, so only blocks whose own lowest level lies below what is already found compete.
"""

from __future__ import annotations

import heapq
import math
from collections.abc import Iterable

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import eigh_tridiagonal
from scipy.linalg.lapack import dstebz

from solver.converged import Converged, order_parameter_of
from solver.excitation import BlockSearch, ExcitationLevel, ExcitationSpectrum
from solver.moments import excitation_moments
from solver.truncated import TruncatedValues, error_of

Array = NDArray[np.float64]
_EPS = float(np.finfo(np.float64).eps)


class BlockTruncations:
    """Truncated calculations where every excitation number K is a tridiagonal block of its own."""

    def __init__(self, converged: Converged) -> None:
        if converged.blocks is None:
            raise TypeError("these truncations need a model that conserves excitations")
        self.converged = converged
        self.spectrum: ExcitationSpectrum = converged.blocks
        self.search = BlockSearch(self.spectrum.model, 2)
        self._below: tuple[float, list[int]] = (-math.inf, [])
        self._known: dict[tuple[int, int], Array] = {}
        self._found: dict[int, tuple[bool, TruncatedValues]] = {}

    def errors(self, name: str) -> dict[int, float]:
        """Signed errors of one quantity at the cutoffs solved so far."""
        return {
            cutoff: error_of(self.converged, values, name)
            for cutoff, (has_gap, values) in self._found.items()
            if has_gap or name != "gap"
        }

    def _parity(self, block: int) -> int:
        return self.spectrum.parity(ExcitationLevel(block, 0, 0.0, 0.0, np.ones(1)))

    def _truncated(self, block: int, cutoff: int) -> tuple[Array, Array]:
        diagonal, beside = self.search.tridiagonal(block, block)
        first = max(0, block - cutoff)
        return diagonal[first:], beside[first:]

    def _lowest(self, block: int, cutoff: int, count: int) -> Array:
        """The `count` lowest levels of a truncated block (fewer where it is smaller)."""
        kept = min(cutoff, block)
        known = self._known.get((block, kept))
        if known is not None and (known.size >= count or known.size == self._size(block, kept)):
            return known[:count]
        diagonal, beside = self._truncated(block, cutoff)
        if diagonal.size <= 1:
            values = diagonal
        else:
            top = min(count, diagonal.size)
            _, found, _, _, _ = dstebz(diagonal, beside, 2, 0.0, 0.0, 1, top, 0.0, "E")
            values = np.sort(found[:top])
        self._known[block, kept] = values
        return values

    def _size(self, block: int, cutoff: int) -> int:
        return min(self.spectrum.model.spins, block) - max(0, block - cutoff) + 1

    def _competing(self, energy: float, cutoff: int) -> list[int]:
        """Blocks with a level at or below `energy` that the cutoff does not empty."""
        if energy > self._below[0]:
            raised = energy + 0.1 * self.spectrum.model.mode
            self._below = (raised, self._blocks_below(raised))
        most = cutoff + self.spectrum.model.spins
        return [block for block in self._below[1] if block <= most]

    def _blocks_below(self, energy: float) -> list[int]:
        """Every block whose own lowest level lies at or below `energy`, by bisection over K."""
        search = self.search
        out = []
        ranges = [(-math.inf, 0, search.highest(energy))]
        while ranges:
            _, low, high = heapq.heappop(ranges)
            if low == high:
                out.append(low)
                continue
            middle = (low + high) // 2
            for first, last in ((low, middle), (middle + 1, high)):
                edge = search.bound(first, last)
                if edge <= energy:
                    heapq.heappush(ranges, (edge, first, last))
        return sorted(out)

    def _ground(self, cutoff: int) -> int:
        """Block of the lowest level of the truncated calculation."""
        own = self.converged.ground
        most = cutoff + self.spectrum.model.spins
        seeds = [own] if own <= most else [most]
        reached = min(float(self._lowest(block, cutoff, 1)[0]) for block in seeds)
        # a first guess far above the rest would make every block compete
        step = max(1, most // 8)
        for block in range(0, most + 1, step):
            reached = min(reached, float(self._lowest(block, cutoff, 1)[0]))
        blocks = self._competing(reached, cutoff)
        lowest = min(blocks, key=lambda block: float(self._lowest(block, cutoff, 1)[0]), default=seeds[0])
        energy = float(self._lowest(lowest, cutoff, 1)[0])
        margin = 64.0 * _EPS * (abs(energy) + self.spectrum.model.mode)
        if own <= most and self._lowest(own, cutoff, 1)[0] <= energy + margin:
            return own
        return lowest

    def _gap(self, ground: int, cutoff: int) -> float | None:
        """Distance to the next level of the same parity."""
        parity = self._parity(ground)
        most = cutoff + self.spectrum.model.spins
        lowest = self._lowest(ground, cutoff, 2)
        energy = float(lowest[0])
        following = float(lowest[1]) if lowest.size > 1 else math.inf
        for apart in (1, 2):
            for block in (ground - apart, ground + apart):
                if 0 <= block <= most and self._parity(block) == parity:
                    following = min(following, float(self._lowest(block, cutoff, 1)[0]))
        if following == math.inf:
            return None
        for block in self._competing(following, cutoff):
            if block != ground and self._parity(block) == parity:
                following = min(following, float(self._lowest(block, cutoff, 1)[0]))
        return max(0.0, following - energy)

    def at(self, cutoff: int, *, gap: bool, levels: bool = False) -> TruncatedValues:
        """What the calculation with n <= cutoff finds."""
        ground = self._ground(cutoff)
        diagonal, beside = self._truncated(ground, cutoff)
        if diagonal.size == 1:
            energy, vector = float(diagonal[0]), np.ones(1)
        else:
            values, vectors = eigh_tridiagonal(diagonal, beside, select="i", select_range=(0, 0))
            energy, vector = float(values[0]), np.array(vectors[:, 0], dtype=np.float64)
        amplitudes = np.zeros(min(self.spectrum.model.spins, ground) + 1)
        amplitudes[max(0, ground - cutoff) :] = vector
        moments = excitation_moments(self.spectrum, ExcitationLevel(ground, 0, energy, 0.0, amplitudes))
        values_found = TruncatedValues(
            energy=energy,
            gap=self._gap(ground, cutoff) if gap else None,
            boson_number=moments.quanta,
            order_parameter=order_parameter_of(moments),
            levels=self._levels(cutoff) if levels else None,
        )
        self._found[cutoff] = (gap, values_found)
        return values_found

    def _levels(self, cutoff: int) -> float:
        """Largest error of a shown level, each compared at its place among those of its parity."""
        exact: dict[int, list[float]] = {}
        for block, sector in self.converged.sectors.items():
            if sector.shown:
                levels = sector.energies[: sector.shown].tolist()
                exact.setdefault(self._parity(block), []).extend(levels)
        worst = 0.0
        for parity, energies in exact.items():
            found = self._lowest_of_parity(parity, cutoff, len(energies))
            if len(found) < len(energies):
                return math.inf
            errors = (high - low for high, low in zip(found, sorted(energies), strict=True))
            worst = max([worst, *errors])
        return worst

    def _lowest_of_parity(self, parity: int, cutoff: int, count: int) -> list[float]:
        """The `count` lowest levels of one parity over all truncated blocks."""
        most = cutoff + self.spectrum.model.spins
        seeds = {block for block in self.converged.sectors if block <= most}
        # an odd stride visits both parities
        seeds.update(range(0, most + 1, max(1, most // 16 | 1)))
        reached = self._merged(seeds, parity, cutoff, count)
        if len(reached) < count:
            return self._merged(range(most + 1), parity, cutoff, count)
        return self._merged(self._competing(reached[-1], cutoff), parity, cutoff, count)

    def _merged(self, blocks: Iterable[int], parity: int, cutoff: int, count: int) -> list[float]:
        levels: list[float] = []
        for block in blocks:
            if self._parity(block) == parity:
                levels.extend(self._lowest(block, cutoff, count).tolist())
        return sorted(levels)[:count]
