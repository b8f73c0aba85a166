"""Every registered observable against its definition, evaluated on a plain dense ground state."""

from __future__ import annotations

import math

import pytest

from solver import REGISTRY, CollectiveModel, PointQuestion, answer_point
from tests.solver.dense import dense_spectrum, observables

MODELS = [
    CollectiveModel(1, 1.0, 1.0, 0.4, 0.4),
    CollectiveModel(2, 1.0, 0.7, 0.5, 0.9),
    CollectiveModel(7, 1.0, 1.0, 0.5, 0.5),
    CollectiveModel(8, 0.7, -1.1, 0.6, 0.3),
    CollectiveModel(12, 1.0, 1.0, 0.9, 0.9),
    CollectiveModel(6, 1.0, 1.0, 1.6, 0.0),
    CollectiveModel(5, 1.0, 1.0, 0.0, 1.3),
    CollectiveModel(1, 1.0, 1.0, 0.5, 0.5, 0.4),
    CollectiveModel(6, 1.0, 0.8, 0.5, 0.2, -0.3),
    CollectiveModel(9, 1.0, -0.8, 0.6, 0.6, 0.7),
    CollectiveModel(4, 1.0, 0.0, 0.6, 0.6, 0.5),
]


@pytest.mark.parametrize("basis", [None, "fock", "shifted"])
@pytest.mark.parametrize("model", MODELS, ids=str)
def test_against_the_definition(model, basis):
    if basis == "shifted" and abs(model.total_coupling) <= abs(model.coupling_difference):
        basis = "fock"
    answer = answer_point(PointQuestion(model, tolerance=1e-11), basis=basis)[0]
    reference = dense_spectrum(model, 2)
    expected = observables(reference.states[answer.parity[0]][0])
    for entry in REGISTRY:
        found, error = answer.observables[entry.key], answer.observables[f"{entry.key}_error"]
        true = expected[entry.key]
        if true is None:
            assert found is None, entry.key
            continue
        assert error is not None, entry.key
        assert abs(found - true) <= error + 1e-10 * (1.0 + abs(true)), entry.key
        assert error < 1e-3 * (1.0 + abs(true)), entry.key


def test_registry_covers_what_the_reference_knows():
    psi = dense_spectrum(MODELS[0], 1).states[1][0]
    assert {entry.key for entry in REGISTRY} == set(observables(psi))
    for entry in REGISTRY:
        assert entry.title
        assert entry.symbol
        assert entry.formula
        assert entry.source
        assert entry.claim in ("bound", "estimate")


def test_errors_shrink_with_the_tolerance_and_stay_honest():
    model = MODELS[2]
    reference = observables(dense_spectrum(model, 2).states[1][0])
    for tolerance in (1e-2, 1e-4, 1e-6, 1e-8, 1e-10):
        answer = answer_point(PointQuestion(model, tolerance=tolerance, need=0.5))[0]
        for entry in REGISTRY:
            found, error = answer.observables[entry.key], answer.observables[f"{entry.key}_error"]
            assert abs(found - reference[entry.key]) <= error + 1e-10, (tolerance, entry.key)


def test_uncertainty_relation():
    for model in MODELS:
        answer = answer_point(PointQuestion(model))[0].observables
        assert answer["quadrature_x"] * answer["quadrature_p"] >= 1.0 / 16.0 - 1e-8
        assert 0.0 <= answer["entropy"] <= math.log2(model.spins + 1) + 1e-9
        assert answer["squeezing_ramsey"] >= answer["squeezing"] - 1e-9
        assert abs(answer["inversion"]) <= 1.0 + 1e-12
        assert 0.0 <= answer["order_parameter"] <= 1.0 + 1e-12


def test_no_squeezing_without_a_mean_spin():
    """w0 = 0: the ground state is a superposition of opposite spin directions."""
    answer = answer_point(PointQuestion(CollectiveModel(8, 1.0, 0.0, 0.8, 0.8)))[0]
    for key in ("squeezing", "squeezing_ramsey"):
        assert answer.observables[key] is None
        assert answer.observables[f"{key}_error"] is None
    assert "mean spin" in answer.note
