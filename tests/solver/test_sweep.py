"""Chains, the list of series, forecasts, and the public interface."""

from __future__ import annotations

import json
import math
import pickle

import pytest

import solver
from solver import (
    REGISTRY,
    SERIES,
    CollectiveModel,
    PointQuestion,
    QuestionError,
    answer_point,
    predicted_bytes,
    predicted_seconds,
    solve_chain,
)

MODEL = CollectiveModel(6, 1.0, 1.0, 0.5, 0.4)


def test_public_names_exist_and_are_sorted_by_kind():
    assert len(set(solver.__all__)) == len(solver.__all__)
    for name in solver.__all__:
        assert getattr(solver, name) is not None
    promised = {
        "CollectiveModel", "PointQuestion", "PointAnswer", "solve_chain", "SERIES", "SOLVER_DIGEST",
        "predicted_seconds", "predicted_bytes", "large_n_limit", "effective_spin_levels", "SolverError",
    }  # fmt: skip
    assert promised <= set(solver.__all__)
    assert len(solver.SOLVER_DIGEST) == 64


def test_series_are_the_keys_of_a_row():
    """With the error keys, nothing missing and nothing undeclared."""
    row = answer_point(PointQuestion(MODEL))[0].row()
    declared = {spec.key for spec in SERIES} | {spec.error_key for spec in SERIES if spec.error_key}
    assert declared == set(row)
    assert len({spec.key for spec in SERIES}) == len(SERIES)
    for spec in SERIES:
        assert spec.title
        assert spec.source
        shown = row[spec.key]
        if spec.kind == "levels":
            assert len(shown) == 6
        elif spec.kind == "integer":
            assert isinstance(shown, int)
        elif spec.kind == "flag":
            assert isinstance(shown, bool)
        elif spec.kind == "number":
            assert isinstance(shown, float)
    json.dumps(row, allow_nan=False)


ZEROED = ["splitting", "rotating", "counter", "bias", ("rotating", "counter"), ("splitting", "bias")]


@pytest.mark.parametrize("spins", [1, 2, 5])
@pytest.mark.parametrize("names", ZEROED, ids=str)
def test_every_number_is_finite_or_absent_with_parameters_at_zero(spins, names):
    values = {"splitting": 0.9, "rotating": 0.5, "counter": 0.3, "bias": 0.2}
    values |= dict.fromkeys([names] if isinstance(names, str) else names, 0.0)
    for levels in (1, 5):
        answer = answer_point(PointQuestion(CollectiveModel(spins, 1.0, **values), levels=levels))[0]
        for entry in REGISTRY:
            found, error = answer.observables[entry.key], answer.observables[f"{entry.key}_error"]
            assert (found is None) or math.isfinite(found)
            assert (error is None) or (math.isfinite(error) and error >= 0.0)
            if found is None:
                assert entry.undefined
                assert entry.undefined in answer.note
        json.dumps(answer.row(), allow_nan=False)


def test_chain_follows_single_answers_within_their_bounds():
    questions = [
        PointQuestion(CollectiveModel(12, 1.0, 1.0, 0.05 * k, 0.05 * k), tolerance=1e-9) for k in range(25)
    ]
    for question, chained in zip(questions, solve_chain(questions), strict=True):
        single = answer_point(question)[0]
        assert chained.meets_tolerance
        for at in range(6):
            assert sorted(chained.energy_lower)[at] <= sorted(single.energy)[at]
            assert sorted(single.energy_lower)[at] <= sorted(chained.energy)[at]
        assert chained.cutoff_needed == pytest.approx(single.cutoff_needed, abs=1)
        for entry in REGISTRY:
            one, other = chained.observables[entry.key], single.observables[entry.key]
            assert (one is None) == (other is None)
            errors = [a.observables[f"{entry.key}_error"] for a in (chained, single)]
            if one is not None and None not in errors:
                assert abs(one - other) <= sum(errors), entry.key


def test_chain_is_repeatable_to_the_last_bit():
    questions = [PointQuestion(CollectiveModel(9, 1.0, 0.8, 0.1 * k, 0.1 * k, 0.05)) for k in range(8)]
    assert list(solve_chain(questions)) == list(solve_chain(questions))


def test_chain_may_change_everything_on_the_way():
    questions = [
        PointQuestion(CollectiveModel(spins, 1.0, 1.0, rotating, counter, bias), levels=levels)
        for spins, rotating, counter, bias, levels in (
            (4, 0.5, 0.5, 0.0, 6),
            (5, 0.5, 0.5, 0.0, 2),
            (5, 0.5, 0.5, 0.3, 8),
            (5, 0.5, 0.0, 0.0, 8),
            (5, 1.4, 1.3, 0.0, 3),
            (1, 0.2, 0.1, 0.0, 12),
            (40, 0.5, 0.5, 0.0, 1),
        )
    ]
    for question, chained in zip(questions, solve_chain(questions), strict=True):
        single = answer_point(question)[0]
        assert chained.energy == pytest.approx(single.energy, abs=2e-9)
        assert len(chained.energy) == question.levels


def test_answers_are_plain_data():
    answer = answer_point(PointQuestion(MODEL))[0]
    assert pickle.loads(pickle.dumps(answer)) == answer
    assert all(type(energy) is float for energy in answer.energy)
    assert all(v is None or type(v) is float for v in answer.observables.values())


@pytest.mark.parametrize(
    ("field", "bad"),
    [
        ("levels", 0),
        ("levels", 41),
        ("tolerance", 1e-13),
        ("tolerance", 0.1),
        ("tolerance", math.nan),
        ("need", 0.0),
        ("need", 1.0),
        ("tail", -1.0),
        ("tail", math.nan),
    ],
)
def test_bad_questions_are_refused(field, bad):
    with pytest.raises(QuestionError) as caught:
        PointQuestion(MODEL, **{field: bad})
    assert caught.value.field == field
    assert repr(caught.value.value) == repr(bad)
    assert caught.value.allowed
    assert caught.value.message


def test_forecasts_grow_with_the_size():
    costs, sizes = [], []
    for spins in (1, 20, 300, 5000):
        question = PointQuestion(CollectiveModel(spins, 1.0, 1.0, 1.0, 1.0))
        costs.append(predicted_seconds(question))
        sizes.append(predicted_bytes(question))
    assert costs == sorted(costs)
    assert costs[0] > 0.0
    assert sizes == sorted(sizes)
    assert all(isinstance(size, int) for size in sizes)
    assert predicted_seconds(PointQuestion(CollectiveModel(50, 1.0, 1.0, 0.4, 0.0))) > 0.0
