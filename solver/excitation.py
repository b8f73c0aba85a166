"""Conserved excitation number: Tavis-Cummings, Jaynes-Cummings and the uncoupled model, exactly.

With lc = 0 the number K = n + j (quanta plus spin excitations) is conserved and each K is one
tridiagonal block of at most N+1 states: no truncation inside a block. The lowest levels may sit
in a high block, so blocks are searched until a bound excludes the rest: for K between K1 and K2
the lowest eigenvalue is at least that of the matrix with the diagonal of K1 and the couplings of
K2 (Perron-Frobenius), and beyond some K the floor of the model is above everything found.
The case lr = 0 is the same after a rotation of the spin by pi about x.

Sources: Jaynes, Cummings, Proc. IEEE 51, 89 (1963); Tavis, Cummings, Phys. Rev. 170, 379 (1968).
"""

from __future__ import annotations

import heapq
import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import eigh_tridiagonal
from scipy.linalg.lapack import dstebz

from solver.errors import ConvergenceError
from solver.floor import Floors, lowest_of_tridiagonal
from solver.model import CollectiveModel
from solver.spin import raising_elements

Array = NDArray[np.float64]

_MOST_BLOCKS = 200_000
_EPS = float(np.finfo(np.float64).eps)


@dataclass(frozen=True, slots=True)
class ExcitationLevel:
    """One level: its block K, place in it, energy with rounding bound, and state.

    amplitudes: over j = 0..min(N, K), with n = K - j, in the frame of `ExcitationSpectrum.model`.
    """

    block: int
    place: int
    energy: float
    roundoff: float
    amplitudes: Array


@dataclass(frozen=True, slots=True)
class ExcitationSpectrum:
    """Lowest levels of a model that conserves excitations.

    model: the one solved, with counter = 0; turned: it is the original rotated by pi about x,
    so that Jz changes sign and j becomes N - j. tilt: (w0, eps)/W where an uncoupled spin was
    solved along its field of size W.
    """

    model: CollectiveModel
    turned: bool
    levels: tuple[ExcitationLevel, ...]
    tilt: tuple[float, float] = (1.0, 0.0)

    def parity(self, level: ExcitationLevel) -> int:
        """Parity of a level in the original frame; 0 where the field is tilted."""
        if self.tilt[1] != 0.0:
            return 0
        sign = 1 if level.block % 2 == 0 else -1
        return sign * (-1) ** self.model.spins if self.turned else sign


def excitation_levels(model: CollectiveModel, count: int) -> ExcitationSpectrum:
    """The `count` lowest levels of a model with lr = 0 or lc = 0 (and no bias unless both are 0).

    At least two levels of the ground state's parity are included, so that the gap exists.
    Raises ConvergenceError when the search would visit too many blocks.
    """
    tilt = (1.0, 0.0)
    if model.bias != 0.0:
        field = math.hypot(model.splitting, model.bias)
        tilt = (model.splitting / field, model.bias / field)
        model = CollectiveModel(model.spins, model.mode, field, 0.0, 0.0)
    turned = model.rotating == 0.0 and model.counter != 0.0
    if turned:
        model = CollectiveModel(model.spins, model.mode, -model.splitting, model.counter, 0.0, 0.0)
    wanted = max(count, 2)
    while True:
        search = BlockSearch(model, wanted)
        rows = search.run()
        same = [row for row in rows if tilt[1] != 0.0 or (row[1] - rows[0][1]) % 2 == 0]
        if len(same) >= 2:
            break
        wanted += 2
    return ExcitationSpectrum(model, turned, tuple(search.level(row[1], row[2]) for row in rows), tilt)


class BlockSearch:
    """Branch and bound over K for the lowest levels."""

    def __init__(self, model: CollectiveModel, wanted: int) -> None:
        self.model, self.wanted = model, wanted
        self.steps = raising_elements(model.spins)
        self.floors = Floors(model)
        self.seen: dict[int, Array] = {}

    def tridiagonal(self, low: int, high: int) -> tuple[Array, Array]:
        """Diagonal of block `low` and couplings of block `high`, over j = 0..min(N, high)."""
        model = self.model
        size = min(model.spins, high)
        j = np.arange(size + 1)
        diagonal = model.mode * np.maximum(low - j, 0) + model.splitting * (j - 0.5 * model.spins)
        beside = model.rotating / math.sqrt(model.spins) * np.sqrt(high - j[:-1]) * self.steps[:size]
        return diagonal, beside

    def _block(self, excitations: int) -> Array:
        """Lowest levels of one block."""
        if excitations not in self.seen:
            if len(self.seen) > _MOST_BLOCKS:
                raise ConvergenceError(
                    "coupling",
                    self.model.rotating,
                    "less coupling or fewer spins: too many excitation numbers compete",
                )
            diagonal, beside = self.tridiagonal(excitations, excitations)
            if diagonal.size == 1:
                self.seen[excitations] = diagonal
            else:
                top = min(self.wanted, diagonal.size)
                _, values, _, _, _ = dstebz(diagonal, beside, 2, 0.0, 0.0, 1, top, 0.0, "E")
                self.seen[excitations] = np.sort(values[:top])
        return self.seen[excitations]

    def _target(self) -> float:
        """The wanted-th lowest energy found so far."""
        values = np.sort(np.concatenate(list(self.seen.values())))
        return float(values[self.wanted - 1]) if values.size >= self.wanted else math.inf

    def _probe(self) -> None:
        """Visit the neighbourhood of the classical optimum to have a good target early."""
        model = self.model
        total, field = model.rotating**2, model.mode * abs(model.splitting)
        guess = 0
        if total > field and total > 0.0:
            tilt = field / total
            quanta = model.spins * total / (4.0 * model.mode**2) * (1.0 - tilt * tilt)
            up = 0.5 * model.spins * (1.0 - math.copysign(tilt, model.splitting))
            guess = round(quanta + up)
        elif model.splitting < 0.0:
            guess = model.spins
        best, step = guess, max(1, int(math.sqrt(guess)))
        while True:
            around = [best, best + step, max(0, best - step)]
            lowest = min(around, key=lambda k: float(self._block(k)[0]))
            if lowest != best:
                best = lowest
            elif step > 1:
                step //= 2
            else:
                break
        reach = self.wanted
        for k in range(max(0, best - reach), best + reach + 1):
            self._block(k)

    def run(self) -> list[tuple[float, int, int]]:
        """Lowest levels as (energy, K, place), ascending, complete by the bounds."""
        self._probe()
        target = self._target()
        heap = [(-math.inf, 0, max(self.highest(target), *self.seen))]
        margin = 64.0 * _EPS * (abs(target) + self.model.mode)
        while heap:
            bound, low, high = heapq.heappop(heap)
            if bound > target + margin:
                break
            if low == high:
                self._block(low)
                target = min(target, self._target()) if bound < target else target
                continue
            middle = (low + high) // 2
            for first, last in ((low, middle), (middle + 1, high)):
                edge = self.bound(first, last)
                if edge <= target + margin:
                    heapq.heappush(heap, (edge, first, last))
        rows = [
            (float(energy), k, place)
            for k, values in self.seen.items()
            for place, energy in enumerate(values)
        ]
        rows.sort(key=lambda row: (row[0], row[1]))
        return rows[: self.wanted]

    def highest(self, energy: float) -> int:
        """Excitation number beyond which every block lies above `energy`."""
        return self.model.spins + min(
            int((energy - self.floors.share_floor(share)) / (share * self.model.mode)) + 1
            for share in (0.25, 0.5, 0.7, 0.85, 0.95)
        )

    def bound(self, low: int, high: int) -> float:
        """Lower bound on every level of the blocks low..high; the lowest level itself for one block."""
        if low == high and low in self.seen:
            return float(self.seen[low][0])
        diagonal, beside = self.tridiagonal(low, high)
        return lowest_of_tridiagonal(diagonal, beside)

    def level(self, excitations: int, place: int) -> ExcitationLevel:
        """Energy and vector of one found level."""
        diagonal, beside = self.tridiagonal(excitations, excitations)
        scale = float(np.abs(diagonal).max()) + 2.0 * float(np.abs(beside).max(initial=0.0))
        if diagonal.size == 1:
            return ExcitationLevel(excitations, 0, float(diagonal[0]), 2 * _EPS * scale, np.ones(1))
        values, vectors = eigh_tridiagonal(diagonal, beside, select="i", select_range=(0, place))
        return ExcitationLevel(
            excitations,
            place,
            float(values[place]),
            8.0 * _EPS * scale,
            np.array(vectors[:, place], dtype=np.float64),
        )
