"""Values against cutoff, in both bases, against plain truncated diagonalisation."""

from __future__ import annotations

import json
from itertools import pairwise

import numpy as np
import pytest

from solver import CollectiveModel, ConvergenceQuestion, QuestionError, Wanted, convergence
from tests.solver.test_needs import random_question
from tests.solver.truncation import Asker

ERRORS = ("energies", "gap", "boson_number", "order_parameter")
# two wells, the deeper one farther out than few quanta reach
TILTED = CollectiveModel(6, 1.0, 1.0, 1.77, 1.77, -0.3)


@pytest.mark.parametrize("seed", [*range(2000, 2012)])
def test_number_basis_is_what_the_asker_finds(seed):
    question = random_question(seed, 300)
    found = convergence(ConvergenceQuestion(question.model, question.levels, wanted=question.wanted))
    last = found.cutoffs[-1] + 10
    asker = Asker(question.model, max(2, question.levels) + 1, last)
    shown = asker.shown(question.levels)
    for at, cutoff in enumerate(found.cutoffs):
        for quantity in ERRORS:
            wanted, error = question.wanted.of(quantity), found.error[quantity][at]
            true = asker.error(quantity, cutoff, shown)
            assert wanted is not None
            if error is None:
                assert not np.isfinite(true)
            else:
                assert error == pytest.approx(true, rel=1e-3, abs=0.02 * wanted), (quantity, cutoff)


@pytest.mark.parametrize("seed", range(2000, 2012))
def test_one_solve_tells_the_errors(seed):
    """Levels never exceed their bound; the estimates of the others are of the right size."""
    question = random_question(seed, 300)
    if question.model.conserves_excitations:
        question = random_question(seed + 100, 300)
    found = convergence(ConvergenceQuestion(question.model, question.levels))
    levels = found.bound["energies"]
    assert levels is not None
    for bound, error in zip(levels, found.error["energies"], strict=True):
        # where next to nothing is left of a state the bound is all rounding
        if bound is not None and bound < 1.0:
            assert error is not None
            assert error <= bound * (1 + 1e-6) + 1e-10
    if question.model.conserves_excitations:
        return
    for quantity, wanted in (("boson_number", 1e-2), ("order_parameter", 1e-3)):
        estimates = found.bound[quantity]
        assert estimates is not None
        for at, (estimate, error) in enumerate(zip(estimates, found.error[quantity], strict=True)):
            settled = at > 0 and error is not None and 1e-7 * wanted < error < 0.1 * wanted
            if settled and estimate is not None:
                assert 0.3 * error <= estimate <= 20.0 * error, (quantity, found.cutoffs[at])


@pytest.mark.parametrize(
    "model",
    [
        CollectiveModel(1, 1.0, 1.0, 0.7, 0.7),
        CollectiveModel(5, 1.0, 0.8, 0.6, 0.3),
        CollectiveModel(6, 1.0, -1.0, 0.8, 0.8, 0.2),
        CollectiveModel(4, 1.0, 1.0, 0.9, 0.0),
    ],
)
def test_both_bases_end_at_the_same_truth(model):
    number = convergence(ConvergenceQuestion(model, 4))
    displaced = convergence(ConvergenceQuestion(model, 4, basis="shifted"))
    for key, truth in number.truth.items():
        assert displaced.truth[key] == pytest.approx(truth, abs=1e-7)
        for found in (number, displaced):
            assert found.value[key][-1] == pytest.approx(truth, abs=1e-5), (key, found.basis)
    for found in (number, displaced):
        energies = [value for value in found.value["energy"] if value is not None]
        assert all(after <= before + 1e-9 for before, after in pairwise(energies))
        assert found.tail == sorted(found.tail, reverse=True)
    assert displaced.bound == dict.fromkeys(ERRORS)


def test_displaced_basis_is_exact_without_splitting():
    """w0 = 0: displaced oscillators, right from the first level on (common practice, no source)."""
    model = CollectiveModel(4, 1.0, 0.0, 0.6, 0.6)
    found = convergence(ConvergenceQuestion(model, 1, basis="shifted"))
    assert found.value["energy"][0] == pytest.approx(-4 * 0.36 * 4 / 4)
    assert found.value["boson_number"][0] == pytest.approx(0.36 * 4)
    assert found.value["order_parameter"][0] == pytest.approx(1.0)


def test_false_plateau_of_the_gap():
    """Tilted wells: while the deeper one is out of reach, the gap settles at a wrong value."""
    found = convergence(ConvergenceQuestion(TILTED, 4))
    stretch = next(plateau for plateau in found.plateaus if plateau.quantity == "gap")
    assert stretch.last - stretch.first >= 3
    asker = Asker(TILTED, 4, found.cutoffs[-1] + 10)
    values = [asker.at(cutoff).gap for cutoff in range(stretch.first, stretch.last + 1)]
    assert max(abs(np.diff(values))) < 1e-3
    assert min(abs(value - asker.exact.gap) for value in values) > 3e-3
    assert stretch.truth == pytest.approx(asker.exact.gap, abs=1e-8)
    assert stretch.value == pytest.approx(values[-1], abs=1e-6)


def test_no_plateau_where_everything_falls_at_once():
    assert convergence(ConvergenceQuestion(CollectiveModel(4, 1.0, 1.0, 0.5, 0.5))).plateaus == ()


def test_long_runs_are_thinned_and_reach_past_the_need():
    found = convergence(ConvergenceQuestion(CollectiveModel(30, 1.0, 1.0, 1.0, 1.0), 3))
    assert len(found.cutoffs) <= 60
    settled = next(
        cutoff
        for cutoff, error in zip(found.cutoffs, found.error["energies"], strict=True)
        if error is not None and error <= 1e-3
    )
    assert found.cutoffs[-1] >= 1.4 * settled
    json.dumps(found.row(), allow_nan=False)


@pytest.mark.parametrize("basis", ["fock", "shifted"])
def test_chosen_cutoffs(basis):
    question = ConvergenceQuestion(CollectiveModel(3, 1.0, 1.0, 0.5, 0.5), 40, (0, 7, 300), basis)
    found = convergence(question)
    assert found.cutoffs == (0, 7, 300)
    assert found.error["energies"][0] is None
    assert found.error["energies"][2] == pytest.approx(0.0, abs=1e-10)
    only = Wanted(None, None, 1e-2, None, None)
    alone = convergence(ConvergenceQuestion(question.model, 1, (2, 3), basis, only))
    assert alone.value["boson_number"][1] is not None


@pytest.mark.parametrize(
    "more", [{"levels": 0}, {"cutoffs": ()}, {"cutoffs": (3, 2)}, {"cutoffs": (-1,)}, {"basis": "other"}]
)
def test_questions_out_of_range_are_refused(more):
    with pytest.raises(QuestionError):
        ConvergenceQuestion(CollectiveModel(2, 1.0, 1.0, 0.5, 0.5), **more)
