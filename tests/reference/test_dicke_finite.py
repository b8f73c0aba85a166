"""Dicke model with finite N: table of values, solvable cases, cutoffs, parity of the ground state."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import poisson

from solver import CollectiveModel
from solver.layers import fock_layers, number_amplitudes, shifted_layers
from solver.levels import lowest_levels
from solver.shifted_basis import ShiftedBlock
from tests.reference.asking import ask, dicke, holds, value

# w = w0 = 1: l, N, E0, odd-even gap, <n>, <Jz>, <Jx^2>. Own calculation (plain diagonalisation
# in the number basis, converged); no published table at hand.
TABLE = [
    (0.5, 1, -0.6332942355, 0.5132704016, 0.084638525, -0.433820163, 0.25),
    (0.5, 2, -1.1537028875, 0.4309330830, 0.121212157, -0.898135016, 0.613267274),
    (0.5, 4, -2.1733590686, 0.3577509651, 0.170588821, -1.848815080, 1.501524692),
    (0.5, 10, -5.1971582809, 0.2761249036, 0.261365415, -4.757000374, 4.896583882),
    (0.5, 20, -10.2130298933, 0.2252787741, 0.354826845, -9.662138446, 11.976195820),
    (1.0, 1, -1.1479457293, 0.1377674281, 0.681404794, -0.225260967, 0.25),
    (1.0, 2, -2.1542805452, 0.0232664246, 1.731560987, -0.312895706, 0.944707761),
    (1.0, 10, -10.6384065905, 1.7e-9, 9.338617715, -1.277403658, 23.506771850),
]


@pytest.mark.parametrize("basis", ["fock", "shifted"])
@pytest.mark.parametrize("row", TABLE)
def test_table(row, basis):
    coupling, spins, energy, gap, quanta, jz, jxx = row
    answer = ask(dicke(spins, 1.0, 1.0, coupling), 4, 1e-10, basis)
    assert answer.energy[0] == pytest.approx(energy, abs=2e-10)
    assert answer.parity[:2] == (1, -1)
    assert answer.gap_any == pytest.approx(gap, abs=2e-10)
    assert value(answer, "boson_number") == pytest.approx(quanta, abs=1.5e-9)
    assert 0.5 * spins * value(answer, "inversion") == pytest.approx(jz, abs=1.5e-9)
    assert (0.5 * spins * value(answer, "order_parameter")) ** 2 == pytest.approx(jxx, abs=2e-9)


# error of E0 below 1e-8, N = 4, 10, 20. Own calculation (repeated truncated diagonalisation).
CUTOFFS = [(0.5, (9, 12, 15)), (0.6, (12, 17, 23)), (1.0, (21, 34, 51))]


@pytest.mark.parametrize(("coupling", "cutoffs"), CUTOFFS)
def test_cutoffs_for_a_ground_energy_to_eight_digits(coupling, cutoffs):
    for spins, expected in zip((4, 10, 20), cutoffs, strict=True):
        answer = ask(dicke(spins, 1.0, 1.0, coupling), 1, need=1e-8, tail=0.5)
        assert expected <= answer.cutoff_needed <= expected + 2


@pytest.mark.parametrize("basis", ["fock", "shifted", None])
@pytest.mark.parametrize("spins", [1, 2, 5, 8, 33])
def test_zero_splitting_levels(spins, basis):
    """w0 = 0: E = n w - 4 l^2 m^2/(N w), displaced oscillators (common practice, no source)."""
    mode, coupling = 1.0, 0.45 * min(1.0, math.sqrt(8.0 / spins))
    m = np.arange(spins + 1) - 0.5 * spins
    exact = np.add.outer(mode * np.arange(12), -4.0 * coupling**2 * m**2 / (spins * mode))
    answer = ask(dicke(spins, mode, 0.0, coupling), 9, 1e-11, basis)
    assert holds(answer, sorted(exact.ravel())[:9], 1e-14 * spins)
    assert answer.parity[:2] == (1, -1)
    assert answer.gap_any == pytest.approx(0.0, abs=1e-13 * spins)


def number_distribution(model: CollectiveModel, basis: str) -> np.ndarray:
    """P(n) of the lowest even state."""
    found = lowest_levels(model, 2, 1e-12, basis).sectors[1].ritz  # type: ignore[arg-type]
    block, vectors = found.block, found.vectors[:1]
    if isinstance(block, ShiftedBlock):
        profile = shifted_layers(block, number_amplitudes(block, block.ladders(vectors)))
    else:
        profile = fock_layers(block, vectors)
    return np.concatenate([np.zeros(profile.first), profile.overlaps[:, 0, 0]])


@pytest.mark.parametrize("basis", ["fock", "shifted"])
@pytest.mark.parametrize(("spins", "coupling"), [(1, 0.8), (2, 1.1), (9, 0.7), (40, 0.5)])
def test_zero_splitting_distribution_is_poissonian(spins, coupling, basis):
    """Mean l^2 N/w^2: a coherent state (Glauber, Phys. Rev. 131, 2766 (1963))."""
    found = number_distribution(dicke(spins, 1.0, 0.0, coupling), basis)
    mean = coupling**2 * spins
    assert np.abs(found - poisson.pmf(np.arange(found.size), mean)).max() < 1e-10
    answer = ask(dicke(spins, 1.0, 0.0, coupling), 2, basis=basis)
    assert value(answer, "boson_number") == pytest.approx(mean, rel=1e-8)
    assert value(answer, "boson_variance") == pytest.approx(mean, rel=1e-7)
    assert value(answer, "bunching") == pytest.approx(1.0, abs=1e-7)
    # two coherent states of overlap exp(-2 <n>), tied to orthogonal spin states
    weights = 0.5 * (1.0 + np.array([1.0, -1.0]) * math.exp(-2.0 * mean))
    entropy = -float(np.sum(weights * np.log2(weights)))
    assert value(answer, "entropy") == pytest.approx(entropy, abs=1e-7)


def ground_parities(ratio: float, halves: np.ndarray) -> list[int]:
    """Parity of the ground state of N = 8, w = w0 = 1 against (lr + lc)/2."""
    out = []
    for half in halves:
        rotating = 2.0 * half / (1.0 + ratio)
        model = CollectiveModel(8, 1.0, 1.0, rotating, ratio * rotating)
        out.append(ask(model, 2, 1e-12).parity[0])
    return out


def test_parity_changes_inside_the_superradiant_phase():
    """lc/lr = 0.5: near (lr + lc)/2 = 0.87; lc/lr = 1 or 2: never. Own calculation.

    Further changes follow near 0.92 and 0.97, where the two levels are less than 2e-10 apart.
    """
    halves = np.linspace(0.05, 1.0, 39)
    parities = np.array(ground_parities(0.5, halves))
    changes = np.flatnonzero(parities[1:] != parities[:-1])
    assert parities[0] == 1
    assert halves[changes] == pytest.approx([0.85, 0.9, 0.95])
    assert set(ground_parities(1.0, halves[::4])) == {1}
    assert set(ground_parities(2.0, halves[::4])) == {1}


def test_both_parities_at_one_energy_where_they_cross():
    low, high = 0.8, 0.95
    for _ in range(45):
        middle = 0.5 * (low + high)
        if ground_parities(0.5, np.array([middle]))[0] == 1:
            low = middle
        else:
            high = middle
    answer = ask(CollectiveModel(8, 1.0, 1.0, 4.0 * low / 3.0, 2.0 * low / 3.0), 4, 1e-12)
    assert {answer.parity[0], answer.parity[1]} == {1, -1}
    assert 0.0 <= answer.gap_any < 1e-11
    assert low == pytest.approx(0.87, abs=0.01)
