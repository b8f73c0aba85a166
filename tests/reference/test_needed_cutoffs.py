"""Needed cutoffs of the Dicke and the Tavis-Cummings model against values from elsewhere."""

from __future__ import annotations

import math

import pytest
from scipy.stats import poisson

from solver import CollectiveModel, ConvergenceQuestion, CutoffQuestion, Wanted, answer_cutoff, convergence
from tests.reference.asking import dicke

# error of E0 below 1e-8, w = w0 = 1, N = 4, 10, 20. Own calculation (repeated truncated
# diagonalisation in the number basis); no published table at hand.
CUTOFFS = [(0.5, (9, 12, 15)), (0.6, (12, 17, 23)), (1.0, (21, 34, 51))]
GROUND_ENERGY = Wanted(energies=1e-8, gap=None, boson_number=None, order_parameter=None, tail=None)


@pytest.mark.parametrize(("coupling", "cutoffs"), CUTOFFS)
def test_ground_energy_to_eight_digits(coupling, cutoffs):
    for spins, expected in zip((4, 10, 20), cutoffs, strict=True):
        model = dicke(spins, 1.0, 1.0, coupling)
        found = convergence(ConvergenceQuestion(model, 1, wanted=GROUND_ENERGY))
        errors = zip(found.cutoffs, found.error["energies"], strict=True)
        assert next(m for m, error in errors if error is not None and error < 1e-8) == expected
        answer = answer_cutoff(CutoffQuestion(model, 1, GROUND_ENERGY))
        assert answer.status["energies"] == "proven"
        assert expected <= answer.covering <= expected + 2


@pytest.mark.parametrize("spins", [1, 2, 7])
@pytest.mark.parametrize("tail", [1e-2, 1e-5, 1e-9])
def test_tail_without_splitting_is_that_of_a_coherent_state(spins, tail):
    """w0 = 0: the ground state holds (l/w)^2 N quanta, Poissonian (common practice, no source)."""
    mean = 0.8**2 * spins
    model = dicke(spins, 1.0, 0.0, 0.8)
    answer = answer_cutoff(CutoffQuestion(model, 1, Wanted(None, None, None, None, tail)))
    assert answer.covering == poisson.isf(tail, mean)
    assert answer.boson_number == pytest.approx(mean)


@pytest.mark.parametrize("quantum", [1, 2, 3])
def test_resonant_rotating_coupling_needs_as_many_quanta_as_excitations(quantum):
    """N = 1, lc = 0, l between w (sqrt(K) + sqrt(K-1)) and the next: the ground state holds K
    excitations, so n <= K loses nothing and n <= K - 1 is another state.

    Jaynes, Cummings, Proc. IEEE 51, 89 (1963).
    """
    low = math.sqrt(quantum) + math.sqrt(quantum - 1)
    high = math.sqrt(quantum + 1) + math.sqrt(quantum)
    model = CollectiveModel(1, 1.0, 1.0, 0.5 * (low + high), 0.0)
    answer = answer_cutoff(CutoffQuestion(model, 1))
    assert answer.needed["boson_number"] == answer.needed["energies"] == answer.needed["tail"] == quantum
    assert answer.boson_number == pytest.approx(quantum - 0.5)


def test_boson_number_needs_less_than_the_levels():
    """An observable of the ground state converges before six levels do (own, N = 100, 1.5 critical)."""
    answer = answer_cutoff(CutoffQuestion(dicke(100, 1.0, 1.0, 0.75)))
    # own values: truncated diagonalisation, banded LAPACK
    assert answer.needed["boson_number"] == 78
    assert answer.needed["order_parameter"] == 66
    assert answer.needed["gap"] == 80
