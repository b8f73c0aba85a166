"""Needed cutoffs against repeated truncated diagonalisation, which is what the asker would do."""

from __future__ import annotations

import math

import numpy as np

from solver import CollectiveModel, CutoffAnswer, CutoffQuestion, Wanted, answer_cutoff
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
