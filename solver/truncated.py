"""Calculations truncated in the number basis, repeated cheaply for many cutoffs of one model.

Ordered by n, the block with n <= M is a leading part of every larger one, and so is its Cholesky
factor: one factorisation, just below the ground level, serves all cutoffs. The converged states
cut at M are good starting vectors, so a few solves give what an asker's own diagonalisation with
that cutoff would find.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from typing import Protocol

import numpy as np
from numpy.typing import NDArray
from scipy.linalg.lapack import dpbtrf, dpbtrs

from solver.converged import DOUBLET, Converged
from solver.eigen import dense_from_band
from solver.errors import ConvergenceError
from solver.fock_basis import FockBlock
from solver.layers import fock_layers
from solver.model import CollectiveModel
from solver.parity_chain import number_block
from solver.spin import lowered, raised

Array = NDArray[np.float64]

# numbers in one band; beyond, a truncated solve is not worth its memory
LARGEST_BAND = 40_000_000
_SHIFT = 1e-3
_DENSE_BELOW = 60
_DENSE_SHOWN = 160
_MOST_STEPS = 24
# relative residual of levels that are shown as numbers: its square is their error
_SHOWN = 1e-6
_WIDEST = 48


def largest_affordable(model: CollectiveModel) -> int:
    """Largest cutoff whose truncated block still fits the memory given to it."""
    states = model.spins + 1
    width = states + 2 if not model.conserves_parity else states // 2 + 2
    per_layer = states if not model.conserves_parity else (states + 1) // 2
    return LARGEST_BAND // (width * per_layer) - 1


@dataclass(frozen=True, slots=True)
class TruncatedValues:
    """What a calculation with one cutoff finds (unit of the inputs).

    gap: None where its block holds no second level; levels: errors of the levels shown, where
    they were asked for.
    """

    energy: float
    gap: float | None
    boson_number: float
    order_parameter: float
    levels: float | None = None


def error_of(exact: Converged, values: TruncatedValues, name: str) -> float:
    """Signed error of one quantity of a truncated calculation; levels and gap in units of the mode.

    Infinite where the calculation does not hold enough levels.
    """
    if name == "energies":
        return math.inf if values.levels is None else values.levels / exact.model.mode
    if name == "gap":
        if values.gap is None or exact.gap is None:
            return math.inf
        return (values.gap - exact.gap) / exact.model.mode
    if name == "boson_number":
        return values.boson_number - exact.boson_number
    return values.order_parameter - exact.order_parameter


class Truncations(Protocol):
    """Truncated calculations of one model at any cutoff."""

    def at(self, cutoff: int, *, gap: bool, levels: bool = False) -> TruncatedValues:
        """What the calculation with n <= cutoff finds."""
        ...

    def errors(self, name: str) -> dict[int, float]:
        """Signed errors of one quantity at the cutoffs solved so far."""
        ...


@dataclass(frozen=True, slots=True)
class Accuracy:
    """Residuals aimed at: of the ground state (observables are linear in it) and of other levels."""

    ground: float
    others: float


class _Sector:
    """One parity: its Cholesky factor up to the largest cutoff used, and the states to start from."""

    def __init__(self, converged: Converged, parity: int, top: int) -> None:
        self.energies = converged.sectors[parity].energies
        model = converged.model
        self.top = top
        self.block: FockBlock = number_block(
            model, parity, top, float(self.energies[0]) - _SHIFT * model.mode
        )
        self.layer_start = np.searchsorted(self.block.quanta, np.arange(top + 2))
        grid = converged.grid(parity)[:, : top + 1]
        padded = np.zeros((grid.shape[0], top + 1, model.spins + 1))
        padded[:, : grid.shape[1]] = grid
        self.states = self.block.flatten(padded)
        self.band = self.block.band
        self.factor, info = dpbtrf(self.band, lower=1)
        if info != 0:
            raise ConvergenceError("shift", int(info), "a ground level known to better than 1e-3 of the mode")

    def lowest(self, cutoff: int, count: int, accuracy: Accuracy, *, noisy: bool) -> tuple[Array, Array]:
        """The `count` lowest levels with n <= cutoff (fewer where there are fewer), and vectors."""
        size = int(self.layer_start[cutoff + 1])
        guards = 1 if count > 1 else 0
        width = min(max(count + guards, 1), len(self.states), size)
        if size <= max(_DENSE_BELOW, 12 * count, _DENSE_SHOWN if noisy else 0):
            values, columns = np.linalg.eigh(dense_from_band(self.band[:, :size]))
            some = min(count, size)
            return values[:some] + self.block.shift, np.ascontiguousarray(columns[:, :some].T)
        start = self.states[:width, :size]
        if noisy or width < count:
            start = _with_noise(start, max(width, count))
        goal = np.full(count, min(accuracy.others, _SHOWN) if noisy else accuracy.others)
        goal[0] = accuracy.ground
        values, vectors = _inverse_krylov(self.factor[:, :size], start, goal)
        return values + self.block.shift, vectors


@lru_cache(maxsize=8)
def _noise(width: int, size: int) -> Array:
    noise: Array = np.random.default_rng(size).standard_normal((width, size)) / math.sqrt(size)
    return noise


def _with_noise(start: Array, width: int) -> Array:
    """Starting rows with a little of every direction, and as many as asked for."""
    out = 1e-3 * _noise(width, start.shape[1])
    out[: len(start)] += start
    return out


def _inverse_krylov(factor: Array, start: Array, goal: Array) -> tuple[Array, Array]:
    """Lowest eigenpairs of the factored matrix: Rayleigh-Ritz for its inverse on a block Krylov space.

    start: rows to begin with; goal: relative residual of the inverse aimed at, one per level.
    """
    width, size = start.shape
    count = goal.size
    basis, _ = np.linalg.qr(start.T)
    images = np.empty((size, 0))
    last = basis
    projected = np.zeros((0, 0))
    for step in range(_MOST_STEPS):
        image, _ = dpbtrs(factor, last, lower=1)
        images = np.concatenate((images, image), axis=1)
        overlap = basis.T @ image
        grown = np.zeros((basis.shape[1], basis.shape[1]))
        grown[: len(projected), : len(projected)] = projected
        grown[:, -width:] = overlap
        grown[-width:, :] = overlap.T
        projected = grown
        values, weights = np.linalg.eigh(projected)
        values, weights = values[::-1][:count], weights[:, ::-1][:, :count]
        rest = image - basis @ overlap
        rest -= basis @ (basis.T @ rest)
        following, beyond = np.linalg.qr(rest)
        if len(values) == count:
            residual = np.linalg.norm(beyond @ weights[-width:], axis=0) / values
            if np.all(residual < goal):
                break
        if basis.shape[1] + width > size or step + 1 == _MOST_STEPS:
            break
        last = following
        basis = np.concatenate((basis, following), axis=1)
    rows = np.linalg.qr(images @ weights)[0].T
    return 1.0 / values, np.ascontiguousarray(rows)


class FockTruncations:
    """Truncated calculations of a model solved by parity sectors.

    top: largest cutoff expected; negligible: difference of no consequence between the parities
    of a closed doublet.
    """

    def __init__(self, converged: Converged, top: int, accuracy: Accuracy, negligible: float) -> None:
        self.converged, self.accuracy, self.top = converged, accuracy, top
        self.negligible = negligible
        self._made: dict[int, _Sector] = {}
        self._known: dict[int, tuple[bool, bool, TruncatedValues]] = {}

    def _sector(self, parity: int, cutoff: int) -> _Sector:
        known = self._made.get(parity)
        if known is None or known.top < cutoff:
            self.top = max(self.top, cutoff if known is None else cutoff + 4)
            self._made[parity] = _Sector(self.converged, parity, self.top)
        return self._made[parity]

    def at(self, cutoff: int, *, gap: bool, levels: bool = False) -> TruncatedValues:
        """What the calculation with n <= cutoff finds."""
        has_gap, has_levels, found = self._known.get(cutoff, (False, False, None))
        if found is None or (gap and not has_gap) or (levels and not has_levels):
            found = self._solve(cutoff, gap=gap, levels=levels)
            self._known[cutoff] = (gap, levels, found)
        return found

    def errors(self, name: str) -> dict[int, float]:
        """Signed errors of one quantity at the cutoffs solved so far."""
        return {
            cutoff: error_of(self.converged, values, name)
            for cutoff, (has_gap, _, values) in self._known.items()
            if has_gap or name != "gap"
        }

    def estimates(self, top: int) -> dict[str, Array]:
        """Errors of quanta and order parameter at every cutoff 0..top-1, without a truncated solve.

        By Hellmann and Feynman the error of <O> is the derivative of the error of the ground
        level with respect to a field on O, and the latter is known for every cutoff from the
        converged state: its response to such a field is all that has to be solved for.
        """
        exact = self.converged
        sector = self._sector(exact.ground, top)
        block, psi = sector.block, sector.states[0]
        grid = block.padded(psi[None])[0]
        along = _jx(grid, block.steps)
        fields = {
            "boson_number": block.quanta * psi,
            "order_parameter": block.flatten(_jx(along, block.steps)[None])[0],
        }
        scale = {
            "boson_number": 1.0,
            "order_parameter": 2.0 / (exact.model.spins**2 * max(exact.order_parameter, 1e-300)),
        }
        out = {}
        for name, pulled in fields.items():
            pushed = pulled - (pulled @ psi) * psi
            response, _ = dpbtrs(sector.factor, pushed, lower=1)
            response -= (response @ psi) * psi
            profile = fock_layers(block, np.array([psi, response]))
            kept = np.cumsum(profile.overlaps, axis=0)[:top]
            link = profile.links[:top]
            least = np.maximum(kept[:, 0, 0], 1e-13)
            lifted = -link[:, 0, 0] / least
            moved = (link[:, 0, 1] + link[:, 1, 0] + 2.0 * lifted * kept[:, 0, 1]) / least
            out[name] = scale[name] * moved
        return out

    def _solve(self, cutoff: int, *, gap: bool, levels: bool) -> TruncatedValues:
        exact = self.converged
        ground = exact.ground
        least = 2 if gap else 1
        solved: dict[int, tuple[Array, Array]] = {}
        for parity, sector in exact.sectors.items():
            count = max(least, sector.shown) if levels else self._count(parity, least)
            if parity == ground or levels or self._may_be_lower(parity, cutoff):
                solved[parity] = self._sector(parity, cutoff).lowest(
                    cutoff, count, self.accuracy, noisy=levels
                )
        lowest = min(solved, key=lambda parity: float(solved[parity][0][0]))
        if solved[ground][0][0] - solved[lowest][0][0] < DOUBLET * exact.model.mode:
            lowest = ground
        energies, vectors = solved[lowest]
        quanta, order = self._observables(lowest, cutoff, vectors[0])
        worst: float | None = None
        if levels:
            worst = 0.0
            for parity, sector in exact.sectors.items():
                values = solved[parity][0][: sector.shown]
                if values.size < sector.shown:
                    worst = math.inf
                elif sector.shown:
                    worst = max(worst, float(np.max(values - sector.energies[: sector.shown])))
        return TruncatedValues(
            energy=float(energies[0]),
            gap=float(energies[1] - energies[0]) if energies.size > 1 else None,
            boson_number=quanta,
            order_parameter=order,
            levels=worst,
        )

    def _count(self, parity: int, least: int) -> int:
        """Levels to follow: those of the quantity, and what lies within reach above them."""
        energies = self.converged.sectors[parity].energies
        if energies.size < least:
            return least
        close = energies[least - 1] + 0.02 * self.converged.model.mode
        return max(least, int(np.searchsorted(energies, close)))

    def _may_be_lower(self, parity: int, cutoff: int) -> bool:
        """Whether the truncated ground state can lie in this sector instead of the true one."""
        exact = self.converged
        own, other = exact.sectors[exact.ground], exact.sectors[parity]
        raised_by = float(own.cut(1).errors(cutoff)[0])
        apart = float(other.energies[0] - own.energies[0])
        if apart > raised_by:
            return False
        closed = apart < self.negligible and raised_by < 0.1 * exact.model.mode
        return not (closed and self._alike(parity))

    def _alike(self, parity: int) -> bool:
        """A closed doublet: both parities give the same gap and the same quanta."""
        exact = self.converged
        own, other = exact.sectors[exact.ground], exact.sectors[parity]
        if own.energies.size > 1 and other.energies.size > 1:
            moved = (other.energies[1] - other.energies[0]) - (own.energies[1] - own.energies[0])
            if abs(moved) > self.negligible:
                return False
        quanta = []
        for sector in (own, other):
            weights = sector.profile.overlaps[:, 0, 0]
            quanta.append(float(weights @ (sector.profile.first + np.arange(len(weights)))))
        return abs(quanta[0] - quanta[1]) < self.negligible

    def _observables(self, parity: int, cutoff: int, vector: Array) -> tuple[float, float]:
        """<a^dag a> and sqrt(<Jx^2>)/(N/2) of a truncated state."""
        block = self._made[parity].block
        size = vector.size
        quanta = float((vector * vector) @ block.quanta[:size])
        grid = np.zeros((cutoff + 1, block.model.spins + 1))
        grid[block.quanta[:size], block.raised[:size]] = vector
        along = _jx(grid, block.steps)
        return quanta, 2.0 * math.sqrt(float(np.sum(along * along))) / block.model.spins


def _jx(grid: Array, steps: Array) -> Array:
    """Jx on amplitudes (..., N+1)."""
    return 0.5 * (raised(grid, steps) + lowered(grid, steps))
