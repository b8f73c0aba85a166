"""Conserved excitation number: completeness of the search over blocks, and the turned case."""

from __future__ import annotations

import numpy as np
import pytest

from solver import CollectiveModel
from solver.excitation import excitation_levels
from tests.solver.dense import dense_spectrum


def every_block(model: CollectiveModel, largest: int) -> list[float]:
    """Levels of all blocks K <= largest of a model with lc = 0, by brute force."""
    out: list[float] = []
    for k in range(largest + 1):
        j = np.arange(min(model.spins, k) + 1)
        beside = model.rotating / np.sqrt(model.spins) * np.sqrt((k - j) * (j + 1.0) * (model.spins - j))
        matrix = np.diag(model.mode * (k - j) + model.splitting * (j - 0.5 * model.spins))
        matrix = matrix + np.diag(beside[:-1], 1) + np.diag(beside[:-1], -1)
        out.extend(np.linalg.eigvalsh(matrix))
    return sorted(out)


@pytest.mark.parametrize("spins", [1, 3, 12, 40])
@pytest.mark.parametrize(
    ("splitting", "coupling"), [(1.0, 0.3), (1.0, 1.4), (-0.6, 0.9), (0.0, 1.1), (2.5, 2.9)]
)
def test_no_block_is_overlooked(spins, splitting, coupling):
    model = CollectiveModel(spins, 1.0, splitting, coupling, 0.0)
    expected = every_block(model, int(spins * (coupling**2 + 2.0)) + 40)[:15]
    found = excitation_levels(model, 15).levels
    for level, energy in zip(found, expected, strict=False):
        assert abs(level.energy - energy) <= level.roundoff + 1e-13 * (1.0 + spins)


@pytest.mark.parametrize("spins", [1, 2, 5, 6])
@pytest.mark.parametrize("splitting", [0.8, -0.8])
@pytest.mark.parametrize(("rotating", "counter"), [(1.2, 0.0), (0.0, 1.2), (0.0, -0.4)])
def test_energies_and_parities_against_the_product_basis(spins, splitting, rotating, counter):
    model = CollectiveModel(spins, 1.0, splitting, rotating, counter)
    reference = dense_spectrum(model, 6).merged()
    spectrum = excitation_levels(model, 6)
    found = sorted((level.energy, spectrum.parity(level)) for level in spectrum.levels[:6])
    assert [energy for energy, _ in found] == pytest.approx([e for e, _ in reference[:6]], abs=1e-12)
    assert [parity for _, parity in found] == [parity for _, parity in reference[:6]]


def test_states_are_eigenvectors():
    for level in excitation_levels(CollectiveModel(7, 1.0, 0.9, 0.8, 0.0), 8).levels:
        assert np.sum(level.amplitudes**2) == pytest.approx(1.0, abs=1e-14)
        assert level.amplitudes.size == min(7, level.block) + 1


def test_many_spins_far_beyond_the_transition():
    """The ground state sits in block K of a few thousand: its neighbours must lie higher."""
    model = CollectiveModel(600, 1.0, 1.0, 2.0, 0.0)
    spectrum = excitation_levels(model, 3)
    # classical optimum: N (l^2/(4 w) (1 - x^2) + (1 - x)/2), x = w w0/l^2
    assert spectrum.levels[0].block == pytest.approx(600 * (1.0 - 1.0 / 16.0 + 0.375), rel=2e-3)
    energies = [level.energy for level in spectrum.levels]
    assert energies == sorted(energies)
    blocks = sorted(level.block for level in spectrum.levels)
    assert blocks == list(range(blocks[0], blocks[0] + len(blocks)))
