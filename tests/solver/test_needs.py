"""Needed cutoffs against repeated truncated diagonalisation, which is what the asker would do."""

from __future__ import annotations

import json
import math
from dataclasses import replace

import numpy as np
import pytest

from solver import (
    QUANTITIES,
    CollectiveModel,
    CutoffAnswer,
    CutoffQuestion,
    QuestionError,
    Wanted,
    answer_cutoff,
)
from solver.wanted import COMMON
from tests.solver.dense import dense_spectrum
from tests.solver.truncation import Asker

SOLVED = ("energies", "gap", "boson_number", "order_parameter")
BEYOND = (0, 1, 2, 3, 5, 8)


def random_question(seed: int, largest: int = 420) -> CutoffQuestion:
    """A generic member of the family, small enough to be diagonalised again and again."""
    random = np.random.default_rng(seed)
    mode = float(random.choice([1.0, 0.6, 1.7]))
    spins = int(random.choice([1, 2, random.integers(3, 12), random.integers(12, 61)]))
    splitting = mode * float(random.uniform(0.1, 3.0) * random.choice([1.0, 1.0, -1.0]))
    ratio = float(random.choice([1.0, 1.0, 0.0, 0.5, 2.0, random.uniform(-1.0, 2.0)]))
    bias = mode * float(random.choice([0.0, 0.0, random.uniform(0.02, 1.0), 1e-3]))
    multiple = float(random.uniform(0.1, 3.0))
    critical = math.sqrt(mode * abs(splitting)) / (1.0 + abs(ratio))
    while True:
        model = CollectiveModel.from_ratio(spins, mode, splitting, multiple * critical, ratio, bias)
        if multiple < 0.02 or generous(model) * (spins + 1) / (1 if bias else 2) < largest:
            break
        multiple *= 0.85
    log = random.uniform(-6.0, -2.0, 5)
    return CutoffQuestion(model, int(random.choice([1, 2, 4, 6])), Wanted(*(10.0**log).tolist()))


def generous(model: CollectiveModel) -> int:
    """Roughly where everything has converged."""
    reach = (abs(model.rotating) + abs(model.counter)) * math.sqrt(model.spins) / (2.0 * model.mode)
    return int(reach**2 + 7.0 * reach + 12.0)


def asker_for(question: CutoffQuestion, answer: CutoffAnswer) -> Asker:
    """Reference calculations that reach well past everything reported."""
    largest = answer.covering + 12 + answer.covering // 3
    return Asker(question.model, max(2, question.levels) + 1, largest)


def excess(asker: Asker, question: CutoffQuestion, quantity: str, cutoff: int) -> int:
    """How far the reported cutoff lies above the true need; negative: it does not hold."""
    wanted = question.wanted.of(quantity)
    assert wanted is not None
    shown = asker.shown(question.levels)
    slack = 1e-11
    for beyond in BEYOND:
        if asker.error(quantity, cutoff + beyond, shown) > wanted + slack:
            return -beyond - 1
    above = 0
    while cutoff - above > 0 and asker.error(quantity, cutoff - above - 1, shown) <= wanted - slack:
        above += 1
    return above


def measured(seed: int) -> dict[str, int]:
    question = random_question(seed)
    answer = answer_cutoff(question)
    asker = asker_for(question, answer)
    out = {}
    for quantity in SOLVED:
        needed = answer.needed[quantity]
        assert needed is not None
        out[quantity] = excess(asker, question, quantity, needed)
    return out


@pytest.mark.parametrize("seed", range(20))
def test_holds_and_is_hardly_above_the_true_need(seed):
    for quantity, above in measured(seed).items():
        assert 0 <= above <= 3, quantity


@pytest.mark.slow
def test_three_hundred_models():
    """Never below; the middle one at most one above, the worst at most three."""
    every: dict[str, list[int]] = {quantity: [] for quantity in SOLVED}
    for seed in range(1000, 1300):
        for quantity, above in measured(seed).items():
            every[quantity].append(above)
    for quantity, found in every.items():
        assert min(found) >= 0, quantity
        assert sorted(found)[len(found) // 2] <= 1, quantity
        assert max(found) <= 3, quantity


@pytest.mark.parametrize("seed", range(30, 38))
def test_tail_is_the_weight_of_the_exact_states(seed):
    question = random_question(seed, 250)
    model, wanted = question.model, question.wanted.tail
    answer = answer_cutoff(question)
    needed = answer.needed["tail"]
    assert needed is not None
    assert wanted is not None
    reference = dense_spectrum(model, question.levels + 2, answer.covering + 12 + answer.covering // 3)
    shown = [parity for _, parity in reference.merged()[: question.levels]]

    def above(cutoff: int) -> float:
        return max(
            float(np.sum(reference.states[p][: shown.count(p), cutoff + 1 :] ** 2, axis=(1, 2)).max())
            for p in set(shown)
        )

    assert above(needed) <= wanted * (1 + 1e-6)
    assert needed == 0 or above(needed - 1) > wanted * (1 - 1e-6)
    assert answer.error["tail"] == pytest.approx(above(needed), rel=1e-5)


# members of the family where something is degenerate, absent or extreme
CORNERS = {
    "one spin": CollectiveModel(1, 1.0, 1.0, 0.9, 0.9),
    "one spin with bias": CollectiveModel(1, 1.0, 1.0, 0.9, 0.9, 0.3),
    "two spins": CollectiveModel(2, 1.0, 1.0, 1.3, 1.3),
    "no splitting": CollectiveModel(4, 1.0, 0.0, 0.6, 0.6),
    "no splitting, tilted": CollectiveModel(4, 1.0, 0.0, 0.6, 0.6, 0.05),
    "negative splitting": CollectiveModel(5, 1.0, -1.3, 0.8, 0.5),
    "closed doublet": CollectiveModel(10, 1.0, 1.0, 1.0, 1.0),
    "doublet split by a hair": CollectiveModel(8, 1.0, 1.0, 1.0, 1.0, 1e-9),
    "hardly tilted": CollectiveModel(6, 1.0, 1.0, 0.9, 0.9, 1e-5),
    "critical": CollectiveModel(20, 1.0, 1.0, 0.5, 0.5),
    "huge ratio": CollectiveModel(3, 1.0, 1.0, 0.001, 1.0),
    "opposite couplings": CollectiveModel(4, 1.0, 1.0, 0.8, -0.8),
    "excitations conserved, high block": CollectiveModel(4, 1.0, 1.0, 2.3, 0.0),
    "excitations conserved, turned": CollectiveModel(5, 1.0, -1.0, 0.0, 1.9),
    "slow mode": CollectiveModel(3, 0.05, 1.0, 0.15, 0.15),
}


@pytest.mark.parametrize("name", CORNERS)
@pytest.mark.parametrize("levels", [1, 5])
def test_corners(name, levels):
    question = CutoffQuestion(CORNERS[name], levels, Wanted(1e-3, 1e-4, 1e-2, 1e-5, 1e-4), stated=0)
    answer = answer_cutoff(question)
    json.dumps(answer.row(), allow_nan=False)
    asker = asker_for(question, answer)
    for quantity in SOLVED:
        needed = answer.needed[quantity]
        assert needed is not None
        assert 0 <= excess(asker, question, quantity, needed) <= 3, quantity


@pytest.mark.parametrize("spins", [1, 3, 12])
def test_without_coupling(spins):
    """The vacuum needs nothing; the first quantum needs one, and a tilted spin nothing more."""
    answer = answer_cutoff(CutoffQuestion(CollectiveModel(spins, 1.0, 3.0, 0.0, 0.0), levels=1))
    assert answer.needed["boson_number"] == answer.needed["order_parameter"] == 0
    assert answer.needed["energies"] == answer.needed["tail"] == 0
    assert answer.boson_number == pytest.approx(0.0, abs=1e-15)
    tilted = answer_cutoff(CutoffQuestion(CollectiveModel(spins, 1.0, 3.0, 0.0, 0.0, 4.0), levels=2))
    assert tilted.needed["energies"] == tilted.needed["gap"] == 1
    assert tilted.energy == pytest.approx(-2.5 * spins)


def test_all_levels_and_a_single_quantity():
    model = CollectiveModel(6, 1.0, 1.0, 0.7, 0.4)
    whole = answer_cutoff(CutoffQuestion(model, levels=40))
    for quantity in QUANTITIES:
        only = dict.fromkeys(QUANTITIES, None) | {quantity: COMMON.of(quantity)}
        answer = answer_cutoff(CutoffQuestion(model, 40, Wanted(**only)))
        assert answer.needed == dict.fromkeys(QUANTITIES, None) | {quantity: whole.needed[quantity]}
        assert (answer.covering, answer.deciding) == (whole.needed[quantity], quantity)
    assert whole.covering == max(needed for needed in whole.needed.values() if needed is not None)
    assert whole.needed[whole.deciding] == whole.covering


@pytest.mark.parametrize("stated", [0, 3, 9, 14, 30, 100_000])
def test_stated_cutoff_has_the_errors_of_the_truncated_calculation(stated):
    question = CutoffQuestion(CollectiveModel(7, 1.0, 0.8, 0.6, 0.5), 4, stated=stated)
    answer = answer_cutoff(question)
    asker, shown = asker_for(question, answer), None
    shown = asker.shown(4)
    assert answer.stated is not None
    for quantity in SOLVED:
        wanted, error = question.wanted.of(quantity), answer.stated.error[quantity]
        true = asker.error(quantity, stated, shown)
        assert wanted is not None
        if error is None:
            assert true == math.inf
        else:
            assert error == pytest.approx(true, rel=1e-4, abs=0.02 * wanted)
        assert answer.stated.good[quantity] == (true <= wanted)
    assert answer.stated.enough == all(answer.stated.good.values())


def test_an_error_that_passes_through_zero_is_not_good():
    """Below the need the error changes sign and is small at single cutoffs; they are not enough."""
    model = CollectiveModel(4, 0.37, 0.37, 0.404, -0.202, 0.00037)
    question = CutoffQuestion(model, 4, Wanted(order_parameter=1e-3))
    answer = answer_cutoff(question)
    asker = asker_for(question, answer)
    needed = answer.needed["order_parameter"]
    assert needed is not None
    shown = asker.shown(4)
    passing = [m for m in range(needed) if asker.error("order_parameter", m, shown) <= 1e-3]
    assert passing, "this model is here for its change of sign"
    for cutoff in passing:
        stated = answer_cutoff(replace(question, stated=cutoff)).stated
        assert stated is not None
        assert stated.error["order_parameter"] <= 1e-3
        assert not stated.good["order_parameter"]
        assert not stated.enough


@pytest.mark.parametrize(
    ("field", "value"),
    [("energies", 0.0), ("gap", 1.0), ("boson_number", -1.0), ("order_parameter", 1e-13), ("tail", math.nan)],
)
def test_wanted_errors_out_of_range_are_refused(field, value):
    with pytest.raises(QuestionError) as caught:
        Wanted(**{field: value})
    assert caught.value.field == field
    assert "up to below" in caught.value.allowed


def test_questions_out_of_range_are_refused():
    model = CollectiveModel(2, 1.0, 1.0, 0.5, 0.5)
    for levels, stated in [(0, None), (41, None), (6, -1), (6, 100_001)]:
        with pytest.raises(QuestionError):
            CutoffQuestion(model, levels, stated=stated)
    with pytest.raises(QuestionError, match="at least one"):
        Wanted(None, None, None, None, None)


def test_too_large_to_check_falls_back_to_a_bound(monkeypatch):
    """Where no truncated solve fits, the cutoffs come from bounds: larger, and they hold."""
    question = CutoffQuestion(CollectiveModel(6, 1.0, 1.0, 0.8, 0.8))
    checked = answer_cutoff(question)
    monkeypatch.setattr("solver.truncated.LARGEST_BAND", 1)
    bounded = answer_cutoff(question)
    for quantity in ("gap", "boson_number", "order_parameter"):
        assert bounded.status[quantity] == "proven"
        assert checked.status[quantity] == "checked"
        assert bounded.needed[quantity] >= checked.needed[quantity]
        asker = asker_for(question, bounded)
        assert excess(asker, question, quantity, bounded.needed[quantity]) >= 0
    assert bounded.note is not None
    assert "too large" in bounded.note
