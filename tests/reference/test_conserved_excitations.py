"""Jaynes-Cummings and Tavis-Cummings closed forms.

Jaynes, Cummings, Proc. IEEE 51, 89 (1963); Tavis, Cummings, Phys. Rev. 170, 379 (1968). The
cubic and the roots for N = 2, 3 follow from the 3 x 3 and 4 x 4 blocks: own calculation.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from solver import CollectiveModel
from tests.reference.asking import ask, holds, value

BASES = [None, "fock", "shifted"]


def one_spin(mode: float, splitting: float, coupling: float) -> list[float]:
    """-w0/2 and w (n - 1/2) -+ sqrt(d^2 + 4 l^2 n)/2."""
    out, detuning = [-0.5 * splitting], splitting - mode
    for n in range(1, 40):
        root = 0.5 * math.sqrt(detuning**2 + 4.0 * coupling**2 * n)
        out += [mode * (n - 0.5) - root, mode * (n - 0.5) + root]
    return sorted(out)


def two_spins(mode: float, splitting: float, coupling: float) -> list[float]:
    """K = 0, the 2 x 2 block K = 1, and the cubic y^3 - y (d^2 + l^2 (2K-1)) + d l^2 = 0."""
    detuning = splitting - mode
    root = 0.5 * math.sqrt(detuning**2 + 4.0 * coupling**2)
    out = [-splitting, -0.5 * detuning - root, -0.5 * detuning + root]
    for k in range(2, 40):
        cubic = [1.0, 0.0, -(detuning**2 + coupling**2 * (2 * k - 1)), detuning * coupling**2]
        out += [mode * (k - 1) + y for y in np.roots(cubic).real]
    return sorted(out)


def three_spins_resonant(mode: float, coupling: float) -> list[float]:
    """K >= 3: w (K - 3/2) -+ l sqrt((5 (K-1) -+ sqrt(16 (K-1)^2 + 9))/3); K < 3 own calculation."""
    out = [-1.5 * mode, -0.5 * mode - coupling, -0.5 * mode + coupling]
    out += [0.5 * mode + s * coupling * math.sqrt(10.0 / 3.0) for s in (-1.0, 0.0, 1.0)]
    for k in range(3, 40):
        inner = math.sqrt(16.0 * (k - 1) ** 2 + 9.0)
        for s in (-1.0, 1.0):
            root = coupling * math.sqrt((5.0 * (k - 1) + s * inner) / 3.0)
            out += [mode * (k - 1.5) - root, mode * (k - 1.5) + root]
    return sorted(out)


@pytest.mark.parametrize("basis", BASES)
@pytest.mark.parametrize("coupling", [0.05, 0.4, 1.1, 1.7])
@pytest.mark.parametrize("splitting", [1.0, 0.6, 1.9, -0.7])
def test_one_spin(basis, coupling, splitting):
    answer = ask(CollectiveModel(1, 1.0, splitting, coupling, 0.0), 12, basis=basis)
    assert holds(answer, one_spin(1.0, splitting, coupling)[:12], 1e-13)


@pytest.mark.parametrize("basis", BASES)
@pytest.mark.parametrize("coupling", [0.05, 0.4, 1.1, 1.7])
@pytest.mark.parametrize("splitting", [1.0, 0.6, 1.9])
def test_two_spins(basis, coupling, splitting):
    answer = ask(CollectiveModel(2, 1.0, splitting, coupling, 0.0), 12, basis=basis)
    assert holds(answer, two_spins(1.0, splitting, coupling)[:12], 1e-12)


@pytest.mark.parametrize("basis", BASES)
@pytest.mark.parametrize("coupling", [0.05, 0.4, 1.1, 1.7])
def test_three_spins_in_resonance(basis, coupling):
    answer = ask(CollectiveModel(3, 1.0, 1.0, coupling, 0.0), 12, basis=basis)
    assert holds(answer, three_spins_resonant(1.0, coupling)[:12], 1e-12)


def test_statement_holds_in_other_units():
    """All energies scale with the unit."""
    answer = ask(CollectiveModel(3, 2500.0, 2500.0, 1000.0, 0.0), 12)
    assert holds(answer, three_spins_resonant(2500.0, 1000.0)[:12], 1e-9)


@pytest.mark.parametrize("spins", [1, 2, 7, 60, 1000])
def test_single_excitation_splits_by_twice_the_coupling(spins):
    """K = 1 in resonance: w (1 - N/2) -+ l for every N (Tavis, Cummings 1968)."""
    answer = ask(CollectiveModel(spins, 1.0, 1.0, 0.03, 0.0), 3)
    lowest = [-0.5 * spins, 1.0 - 0.5 * spins - 0.03, 1.0 - 0.5 * spins + 0.03]
    assert holds(answer, lowest, 1e-12 * spins)


@pytest.mark.parametrize("spins", [1, 2, 5, 30, 400])
@pytest.mark.parametrize("splitting", [1.0, 0.3])
def test_ground_state_changes_first_at_the_geometric_mean(spins, splitting):
    """The vacuum stops being the ground state at l = sqrt(w w0) for every N: own calculation."""
    edge = math.sqrt(splitting)
    below = ask(CollectiveModel(spins, 1.0, splitting, 0.9999 * edge, 0.0), 2)
    beyond = ask(CollectiveModel(spins, 1.0, splitting, 1.0001 * edge, 0.0), 2)
    assert value(below, "boson_number") == 0.0
    assert value(below, "inversion") == pytest.approx(-1.0, abs=1e-14)
    assert below.energy[0] == pytest.approx(-0.5 * spins * splitting, rel=1e-13)
    assert value(beyond, "boson_number") > 0.1
    assert beyond.parity[0] == -1


@pytest.mark.parametrize("excitations", [1, 2, 3, 4])
def test_further_changes_with_one_spin(excitations):
    """Resonant N = 1: K - 1 gives way to K at l = w (sqrt(K) + sqrt(K-1)): own calculation."""
    edge = math.sqrt(excitations) + math.sqrt(excitations - 1)
    for factor, expected in ((0.999, excitations - 1), (1.001, excitations)):
        answer = ask(CollectiveModel(1, 1.0, 1.0, factor * edge, 0.0), 2)
        count = value(answer, "boson_number") + 0.5 * value(answer, "inversion") + 0.5
        assert count == pytest.approx(expected, abs=1e-12)
        assert answer.parity[0] == (-1) ** expected
