"""cutoff_needed against repeated truncated diagonalisation, which is what the asker would do."""

from __future__ import annotations

import numpy as np
import pytest

from solver import CollectiveModel, PointQuestion, answer_point
from tests.solver.dense import DenseSpectrum, dense_spectrum, truncated_levels
from tests.solver.family import affordable

NEEDS = (1e-2, 1e-3, 1e-5, 1e-8)
TAILS = (1e-2, 1e-4, 1e-7)


def random_question(seed: int) -> PointQuestion:
    """A generic model (no exact degeneracy between blocks) and what is asked of it."""
    random = np.random.default_rng(seed)
    mode = float(random.choice([1.0, 0.6, 1.7]))
    model = affordable(
        int(random.integers(1, 25)),
        mode,
        mode * float(random.uniform(0.2, 2.5) * random.choice([1.0, 1.0, -1.0])),
        float(random.uniform(0.1, 3.0)),
        ratio=float(random.choice([1.0, 1.0, 0.0, 0.5, 2.0, random.uniform(-1.0, 2.0)])),
        bias=mode * float(random.choice([0.0, 0.0, random.uniform(0.05, 1.0)])),
        largest=420,
    )
    return PointQuestion(
        model,
        levels=int(random.choice([1, 2, 4, 6])),
        tolerance=1e-10,
        need=float(random.choice(NEEDS)),
        tail=float(random.choice(TAILS)),
    )


def shown_places(question: PointQuestion, reference: DenseSpectrum) -> dict[int, int]:
    """How many of the shown levels each sector holds."""
    shown = [parity for _, parity in reference.merged()[: question.levels]]
    return {parity: shown.count(parity) for parity in set(shown)}


def suffices(question: PointQuestion, reference: DenseSpectrum, cutoff: int) -> bool:
    """Whether a calculation with n <= cutoff meets both demands."""
    model = question.model
    for parity, count in shown_places(question, reference).items():
        exact = reference.energies[parity][:count].astype(float)
        found = truncated_levels(model, cutoff, parity)[:count]
        if found.size < count or np.any(found - exact > question.need * model.mode):
            return False
        if np.any(np.sum(reference.states[parity][:count, cutoff + 1 :] ** 2, axis=(1, 2)) > question.tail):
            return False
    return True


def check(question: PointQuestion, basis: str | None) -> None:
    reference = dense_spectrum(question.model, question.levels + 2)
    assert reference.edge_weight() < 1e-14
    needed = answer_point(question, basis=basis)[0].cutoff_needed  # type: ignore[arg-type]
    assert suffices(question, reference, needed), f"too low: {needed}"
    assert needed < 3 or not suffices(question, reference, needed - 3), f"too high: {needed}"


@pytest.mark.parametrize("seed", range(20))
def test_never_below_and_at_most_two_above_the_true_need(seed):
    question = random_question(seed)
    for basis in (None, "fock"):
        check(question, basis)


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(1000, 1200))
def test_many_models(seed):
    check(random_question(seed), None)


@pytest.mark.parametrize("spins", [1, 3, 12])
def test_vacuum_needs_nothing(spins):
    """Uncoupled ground state: no quanta at all; the first quantum needs one."""
    model = CollectiveModel(spins, 1.0, 3.0, 0.0, 0.0)
    assert answer_point(PointQuestion(model, levels=1))[0].cutoff_needed == 0
    assert answer_point(PointQuestion(model, levels=2))[0].cutoff_needed == 1


def test_need_grows_with_the_demand():
    model = CollectiveModel(6, 1.0, 1.0, 0.8, 0.8)
    answers = [
        answer_point(PointQuestion(model, need=need, tail=0.5))[0].cutoff_needed
        for need in (1e-1, 1e-3, 1e-5, 1e-7, 1e-9)
    ]
    assert answers == sorted(answers)
    assert answers[0] < answers[-1]
    loose = answer_point(PointQuestion(model, need=1e-1, tail=1e-10))[0].cutoff_needed
    assert loose > answers[0]
