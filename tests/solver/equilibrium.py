"""Thermal equilibrium by plain dense matrices: the reference for the thermal tests."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import reduce

import numpy as np

from solver import CollectiveModel
from tests.solver.dense import hamiltonian, sector_indices, spin_matrices


@dataclass(frozen=True)
class Gibbs:
    """<n>, order parameter, inversion, P(n) and ln Z."""

    quanta: float
    order: float
    inversion: float
    layers: np.ndarray
    log_partition: float

    def above(self, cutoff: int) -> float:
        return float(self.layers[cutoff + 1 :].sum())


def gibbs_of_all_product_states(model: CollectiveModel, temperature: float, cutoff: int) -> Gibbs:
    """All 2^N product states, no symmetry used."""
    spins, a = model.spins, np.diag(np.sqrt(np.arange(1.0, cutoff + 1)), 1)

    def total(single: np.ndarray) -> np.ndarray:
        return sum(
            reduce(np.kron, [single if at == own else np.eye(2) for at in range(spins)])
            for own in range(spins)
        )

    up = total(np.array([[0.0, 1.0], [0.0, 0.0]]))
    jz, jx = total(np.diag([0.5, -0.5])), 0.5 * (up + up.T)
    matrix = model.mode * np.kron(a.T @ a, np.eye(2**spins))
    matrix += np.kron(np.eye(cutoff + 1), model.splitting * jz + model.bias * jx)
    link = model.rotating * np.kron(a, up) + model.counter * np.kron(a, up.T)
    matrix += (link + link.T) / math.sqrt(spins)
    values, states = np.linalg.eigh(matrix)
    chances = np.exp(-(values - values[0]) / temperature)
    total_chance = chances.sum()
    density = (states * (chances / total_chance)) @ states.T
    blocks = density.reshape(cutoff + 1, 2**spins, cutoff + 1, 2**spins)
    layers = np.einsum("nsns->n", blocks)
    spin = np.einsum("nsnt->st", blocks)
    return Gibbs(
        float(layers @ np.arange(cutoff + 1)),
        2 * math.sqrt(float(np.trace(spin @ jx @ jx))) / spins,
        2 * float(np.trace(spin @ jz)) / spins,
        layers,
        math.log(total_chance) - values[0] / temperature,
    )


def gibbs_by_sectors(
    model: CollectiveModel, temperature: float, cutoff: int, *, distinguishable: bool
) -> Gibbs:
    """Every J with its multiplicity (counted with whole numbers), dense."""
    spins = model.spins
    rows = []
    for sector in range(spins, -1, -2) if distinguishable else (spins,):
        flipped = (spins - sector) // 2
        copies = math.comb(spins, flipped) - (math.comb(spins, flipped - 1) if flipped else 0)
        rows.append(_sector(model, sector, copies if distinguishable else 1, temperature, cutoff))
    lowest = min(row[0] for row in rows)
    layers, jz, jxx = np.zeros(cutoff + 1), 0.0, 0.0
    for energy, weights, own_jz, own_jxx in rows:
        factor = math.exp(-(energy - lowest) / temperature)
        layers += factor * weights
        jz += factor * own_jz
        jxx += factor * own_jxx
    total = float(layers.sum())
    layers = layers / total
    return Gibbs(
        float(layers @ np.arange(cutoff + 1)),
        2 * math.sqrt(jxx / total) / spins,
        2 * jz / total / spins,
        layers,
        math.log(total) - lowest / temperature,
    )


def _sector(model, sector, copies, temperature, cutoff):
    """Lowest energy, and copies * Boltzmann sums relative to it of P(n), Jz, Jx^2."""
    if sector == 0:
        return 0.0, copies * np.exp(-model.mode * np.arange(cutoff + 1) / temperature), 0.0, 0.0
    scale = math.sqrt(sector / model.spins)
    own = CollectiveModel(
        sector, model.mode, model.splitting, scale * model.rotating, scale * model.counter, model.bias
    )
    matrix = hamiltonian(own, cutoff)
    jz, up = spin_matrices(sector)
    jx = 0.5 * (up + up.T)
    pairs = []
    for at in sector_indices(own, cutoff).values():
        values, columns = np.linalg.eigh(matrix[np.ix_(at, at)])
        full = np.zeros((matrix.shape[0], at.size))
        full[at] = columns
        pairs.append((values, full.reshape(cutoff + 1, sector + 1, at.size)))
    lowest = min(float(values[0]) for values, _ in pairs)
    layers, own_jz, own_jxx = np.zeros(cutoff + 1), 0.0, 0.0
    for values, states in pairs:
        chances = copies * np.exp(-(values - lowest) / temperature)
        squares = states**2 @ chances
        layers += squares.sum(axis=1)
        own_jz += float(squares.sum(axis=0) @ np.diag(jz))
        turned = np.einsum("ij,njk->nik", jx, states)
        own_jxx += float(np.einsum("njk,njk,k->", turned, turned, chances))
    return lowest, layers, own_jz, own_jxx
