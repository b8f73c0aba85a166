"""Plain dense diagonalisation on |n> x |m>_z, sharing nothing with the solver: kron and little else.

Energies are refined by a Rayleigh quotient in extended precision, which leaves the square of the
residual as error: good to about 1e-18 of the norm of H, below every rounding bound under test.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.linalg import eigh

from solver import CollectiveModel

EPS = float(np.finfo(np.float64).eps)
Long = np.longdouble


def spin_matrices(spins: int) -> tuple[np.ndarray, np.ndarray]:
    """Jz and J+ of N spins, states m = -N/2..N/2."""
    j, m = 0.5 * spins, np.arange(spins + 1) - 0.5 * spins
    return np.diag(m), np.diag(np.sqrt(j * (j + 1) - m[:-1] * (m[:-1] + 1)), -1)


def generous_cutoff(model: CollectiveModel) -> int:
    """Well past the farthest classical displacement: (|lr| + |lc|) sqrt(N) / (2 w), squared."""
    reach = (abs(model.rotating) + abs(model.counter)) * math.sqrt(model.spins) / (2.0 * model.mode)
    return int(reach**2 + 10.0 * reach + 28.0)


def hamiltonian(model: CollectiveModel, cutoff: int) -> np.ndarray:
    """H on the product basis, index n (N+1) + j."""
    a = np.diag(np.sqrt(np.arange(1.0, cutoff + 1)), 1)
    jz, up = spin_matrices(model.spins)
    one_boson, one_spin = np.eye(cutoff + 1), np.eye(model.spins + 1)
    down = up.T
    matrix = model.mode * np.kron(a.T @ a, one_spin) + model.splitting * np.kron(one_boson, jz)
    matrix += 0.5 * model.bias * np.kron(one_boson, up + down)
    link = model.rotating * np.kron(a, up) + model.counter * np.kron(a, down)
    return matrix + (link + link.T) / math.sqrt(model.spins)


def sector_indices(model: CollectiveModel, cutoff: int) -> dict[int, np.ndarray]:
    """Product-basis indices of each parity (+1, -1), or of everything (0) with bias."""
    n, j = np.divmod(np.arange((cutoff + 1) * (model.spins + 1)), model.spins + 1)
    if model.bias != 0.0:
        return {0: np.arange(n.size)}
    return {1: np.flatnonzero((n + j) % 2 == 0), -1: np.flatnonzero((n + j) % 2 == 1)}


def extended_energy(model: CollectiveModel, psi: np.ndarray) -> float:
    """<psi|H|psi>/<psi|psi> in extended precision; psi (cutoff+1, N+1)."""
    state = psi.astype(Long)
    n, j = np.arange(psi.shape[0], dtype=Long), np.arange(psi.shape[1], dtype=Long)
    climb, step = np.sqrt(n[1:])[:, None], np.sqrt((j[:-1] + 1) * (model.spins - j[:-1]))
    higher, lower = np.zeros_like(state), np.zeros_like(state)
    higher[:, 1:], lower[:, :-1] = step * state[:, :-1], step * state[:, 1:]
    weights = state * state
    total = Long(model.mode) * np.sum(n[:, None] * weights)
    total += Long(model.splitting) * np.sum((j - Long(model.spins) / 2) * weights)
    total += Long(model.bias) * np.sum(state * higher)
    pulled = Long(model.rotating) * higher + Long(model.counter) * lower
    total += 2 / np.sqrt(Long(model.spins)) * np.sum(state[:-1] * climb * pulled[1:])
    return total / np.sum(weights)


@dataclass(frozen=True)
class DenseSpectrum:
    """Per parity: energies (k,), and states (k, cutoff+1, N+1)."""

    model: CollectiveModel
    cutoff: int
    energies: dict[int, np.ndarray]
    states: dict[int, np.ndarray]
    norm: float

    def merged(self) -> list[tuple[float, int]]:
        """All levels as (energy, parity), ascending."""
        return sorted((float(e), p) for p, values in self.energies.items() for e in values)

    def edge_weight(self) -> float:
        """Largest weight of any state in the last three layers: how converged this reference is."""
        return max(float(np.sum(psi[:, -3:] ** 2, axis=(1, 2)).max()) for psi in self.states.values())


def dense_spectrum(model: CollectiveModel, count: int, cutoff: int | None = None) -> DenseSpectrum:
    """The `count` lowest levels of every sector."""
    cutoff = generous_cutoff(model) if cutoff is None else cutoff
    matrix = hamiltonian(model, cutoff)
    energies, states = {}, {}
    for parity, at in sector_indices(model, cutoff).items():
        _, columns = eigh(matrix[np.ix_(at, at)], subset_by_index=(0, min(count, at.size) - 1))
        full = np.zeros((columns.shape[1], (cutoff + 1) * (model.spins + 1)))
        full[:, at] = columns.T
        states[parity] = full.reshape(-1, cutoff + 1, model.spins + 1)
        energies[parity] = np.array([extended_energy(model, psi) for psi in states[parity]])
    return DenseSpectrum(model, cutoff, energies, states, float(np.abs(matrix).sum(axis=1).max()))


def truncated_levels(model: CollectiveModel, cutoff: int, parity: int) -> np.ndarray:
    """All levels of the user's own calculation: n <= cutoff, one parity block."""
    at = sector_indices(model, cutoff)[parity]
    return np.linalg.eigvalsh(hamiltonian(model, cutoff)[np.ix_(at, at)])


def observables(psi: np.ndarray) -> dict[str, float | None]:
    """Every number-valued observable of a real state psi (cutoff+1, N+1), by its definition."""
    spins = psi.shape[1] - 1
    n = np.arange(psi.shape[0])
    a = np.diag(np.sqrt(n[1:].astype(float)), 1)
    layers = np.sum(psi**2, axis=1)
    quanta, squared = float(layers @ n), float(layers @ n.astype(float) ** 2)
    position, momentum = (a + a.T) / 2, (a - a.T) / 2j
    jz, up = spin_matrices(spins)
    parts = [(up + up.T) / 2, (up - up.T) / 2j, jz]
    density = psi.T @ psi
    mean = np.array([np.trace(density @ part).real for part in parts])
    second = np.array([[np.trace(density @ (p @ q + q @ p)).real / 2 for q in parts] for p in parts])
    singular = np.linalg.svd(psi, compute_uv=False) ** 2
    weights = singular[singular > 1e-25]
    field = psi @ psi.T
    out: dict[str, float | None] = {
        "boson_number": quanta,
        "boson_variance": squared - quanta**2,
        "bunching": float(layers @ (n * (n - 1.0))) / quanta**2 if quanta > 1e-12 else None,
        "inversion": 2 * mean[2] / spins,
        "order_parameter": 2 * math.sqrt(second[0, 0]) / spins,
        "entropy": float(-np.sum(weights * np.log2(weights))),
        "squeezing": None,
        "squeezing_ramsey": None,
    }
    for key, operator in (("quadrature_x", position), ("quadrature_p", momentum)):
        # the last layer of a finite matrix breaks the commutator; the state has no weight there
        out[key] = float((np.trace(field @ operator @ operator) - np.trace(field @ operator) ** 2).real)
    length = float(np.linalg.norm(mean))
    if length > 1e-12 * spins:
        along = mean / length
        across = np.linalg.svd(along[None])[2][1:]
        least = float(np.linalg.eigvalsh(across @ (second - np.outer(mean, mean)) @ across.T)[0])
        out["squeezing"] = 4 * least / spins
        out["squeezing_ramsey"] = spins * least / length**2
    return out
