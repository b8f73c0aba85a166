"""Model parameters: derived quantities and refusals."""

from __future__ import annotations

import math
import pickle

import pytest

from solver import LARGEST_SPINS, CollectiveModel, ModelError, SolverError


@pytest.mark.parametrize(
    ("field", "bad"),
    [
        ("spins", 0),
        ("spins", -3),
        ("spins", LARGEST_SPINS + 1),
        ("spins", 2.0),
        ("spins", True),
        ("mode", 0.0),
        ("mode", -1.0),
        ("mode", math.nan),
        ("splitting", math.inf),
        ("rotating", math.nan),
        ("counter", -math.inf),
        ("bias", math.nan),
    ],
)
def test_refusals_name_field_value_and_what_is_allowed(field, bad):
    good = {"spins": 2, "mode": 1.0, "splitting": 1.0, "rotating": 0.1, "counter": 0.1, "bias": 0.0}
    with pytest.raises(ModelError) as caught:
        CollectiveModel(**(good | {field: bad}))
    error = caught.value
    assert isinstance(error, SolverError)
    assert error.field == field
    assert error.value is bad
    assert error.allowed
    assert field in error.message
    assert repr(bad) in error.message


def test_errors_travel_between_processes():
    error = ModelError("mode", -1.0, "greater than 0")
    again = pickle.loads(pickle.dumps(error))
    assert type(again) is ModelError
    assert (again.field, again.value, again.allowed, again.message) == (
        "mode",
        -1.0,
        "greater than 0",
        error.message,
    )


def test_derived_quantities():
    model = CollectiveModel.from_ratio(4, 2.0, 0.5, 0.6, 0.5, 0.1)
    assert model == CollectiveModel(4, 2.0, 0.5, 0.6, 0.3, 0.1)
    assert model.total_coupling == pytest.approx(0.9)
    assert model.coupling_difference == pytest.approx(0.3)
    assert model.displacement_per_quantum == pytest.approx(0.9 / (2.0 * 2.0))
    assert model.critical_coupling == pytest.approx(1.0 / 1.5)
    assert not model.conserves_parity
    assert not model.conserves_excitations
    assert CollectiveModel(1, 1.0, 1.0, 0.0, 0.4).conserves_excitations
    assert CollectiveModel(1, 1.0, 1.0, 0.0, 0.0).is_uncoupled


def test_critical_coupling_ignores_the_sign_of_the_splitting():
    assert CollectiveModel(3, 1.0, -4.0, 0.1, 0.1).critical_coupling == pytest.approx(1.0)
    assert CollectiveModel(3, 1.0, 0.0, 0.1, 0.1).critical_coupling == 0.0
    assert CollectiveModel(3, 1.0, 4.0, 0.0, 0.0).critical_coupling == pytest.approx(1.0)


def test_models_are_values():
    model = CollectiveModel(3, 1.0, 1.0, 0.1, 0.1)
    assert hash(model) == hash(CollectiveModel(3, 1.0, 1.0, 0.1, 0.1))
    assert pickle.loads(pickle.dumps(model)) == model
    with pytest.raises(AttributeError):
        model.mode = 2.0  # type: ignore[misc]
