"""What an asker does: diagonalise with n <= M, again and again. Kron products and LAPACK or ARPACK.

Shares nothing with the solver but the model's parameters.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np
import scipy.sparse as sp
from scipy.linalg import eigh
from scipy.sparse.linalg import eigsh

from solver import CollectiveModel
from tests.solver.dense import spin_matrices

DENSE_UP_TO = 180
SAME = 1e-9


def sparse_hamiltonian(model: CollectiveModel, cutoff: int) -> sp.csr_matrix:
    """H on the product basis, index n (N+1) + j: every smaller cutoff is its leading part."""
    a = sp.diags(np.sqrt(np.arange(1.0, cutoff + 1)), 1, shape=(cutoff + 1, cutoff + 1))
    jz, up = (sp.csr_matrix(part) for part in spin_matrices(model.spins))
    one_boson, one_spin = sp.identity(cutoff + 1), sp.identity(model.spins + 1)
    link = model.rotating * sp.kron(a, up) + model.counter * sp.kron(a, up.T)
    matrix = model.mode * sp.kron(a.T @ a, one_spin) + model.splitting * sp.kron(one_boson, jz)
    matrix = matrix + 0.5 * model.bias * sp.kron(one_boson, up + up.T)
    return sp.csr_matrix(matrix + (link + link.T) / math.sqrt(model.spins))


@dataclass
class Sector:
    """One parity (or everything, with bias) of the largest calculation."""

    quanta: np.ndarray
    spins_up: np.ndarray
    matrix: sp.csr_matrix


@dataclass
class Found:
    """Lowest levels per parity and what follows of the lowest state."""

    levels: dict[int, np.ndarray]
    parity: int
    gap: float
    boson_number: float
    order_parameter: float


@dataclass
class Asker:
    """Calculations at every cutoff up to `largest`, whose results count as exact."""

    model: CollectiveModel
    count: int
    largest: int
    sectors: dict[int, Sector] = field(default_factory=dict)
    known: dict[int, Found] = field(default_factory=dict)

    def __post_init__(self) -> None:
        model = self.model
        whole = sparse_hamiltonian(model, self.largest)
        n, j = np.divmod(np.arange(whole.shape[0]), model.spins + 1)
        rest = (n + j) % 2
        masks = {0: rest >= 0} if model.bias != 0.0 else {1: rest == 0, -1: rest == 1}
        for parity, mask in masks.items():
            at = np.flatnonzero(mask)
            self.sectors[parity] = Sector(n[at], j[at], sp.csr_matrix(whole[at][:, at]))
        reach = abs(model.rotating) + abs(model.counter)
        self.below = -(0.25 * model.spins * reach**2 / model.mode) - 1.5 * model.mode
        self.below -= 0.5 * model.spins * (abs(model.splitting) + abs(model.bias))
        self.exact = self._solve(self.largest, 1)
        self.below = min(float(values[0]) for values in self.exact.levels.values()) - 0.3 * model.mode

    def at(self, cutoff: int) -> Found:
        if cutoff not in self.known:
            self.known[cutoff] = self._solve(cutoff, self.exact.parity)
        return self.known[cutoff]

    def _lowest(self, sector: Sector, cutoff: int) -> tuple[np.ndarray, np.ndarray]:
        size = int(np.searchsorted(sector.quanta, cutoff + 1))
        part = sector.matrix[:size, :size]
        few = min(size, self.count)
        if size <= max(DENSE_UP_TO, few + 4):
            return eigh(part.toarray(), subset_by_index=(0, few - 1))
        start = np.ones(size) + 0.1 * np.sin(np.arange(size))
        values, vectors = eigsh(
            part.tocsc(), few, sigma=self.below, v0=start, ncv=max(30, 3 * few), tol=1e-14
        )
        order = np.argsort(values)
        return values[order], vectors[:, order]

    def _solve(self, cutoff: int, preferred: int) -> Found:
        found = {parity: self._lowest(sector, cutoff) for parity, sector in self.sectors.items()}
        lowest = min(found, key=lambda parity: found[parity][0][0])
        if preferred in found and found[preferred][0][0] - found[lowest][0][0] < SAME * self.model.mode:
            lowest = preferred
        values, vectors = found[lowest]
        sector, ground = self.sectors[lowest], vectors[:, 0]
        size = ground.size
        grid = np.zeros((cutoff + 1, self.model.spins + 1))
        grid[sector.quanta[:size], sector.spins_up[:size]] = ground
        _, up = spin_matrices(self.model.spins)
        along = grid @ (up + up.T)
        return Found(
            levels={parity: pair[0] for parity, pair in found.items()},
            parity=lowest,
            gap=float(values[1] - values[0]) if values.size > 1 else math.inf,
            boson_number=float(np.sum(grid**2, axis=1) @ np.arange(cutoff + 1)),
            order_parameter=float(np.linalg.norm(along)) / self.model.spins,
        )

    def error(self, quantity: str, cutoff: int, shown: dict[int, int]) -> float:
        """|error| of a calculation with n <= cutoff; levels and gap in units of the mode."""
        if cutoff >= self.largest:
            return 0.0
        found, mode = self.at(cutoff), self.model.mode
        if quantity == "energies":
            worst = 0.0
            for parity, count in shown.items():
                if found.levels[parity].size < count:
                    return math.inf
                apart = found.levels[parity][:count] - self.exact.levels[parity][:count]
                worst = max(worst, float(apart.max(initial=0.0)))
            return worst / mode
        if quantity == "gap":
            return abs(found.gap - self.exact.gap) / mode
        return abs(getattr(found, quantity) - getattr(self.exact, quantity))

    def shown(self, levels: int) -> dict[int, int]:
        """How many of the lowest `levels` levels each parity holds."""
        merged = sorted((float(e), p) for p, values in self.exact.levels.items() for e in values)[:levels]
        return {parity: sum(own == parity for _, own in merged) for parity in self.sectors}
