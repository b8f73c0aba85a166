"""Certified counts never undercount, however small the cutoff, and are sharp on a decent one."""

from __future__ import annotations

import numpy as np
import pytest

from solver import CollectiveModel
from solver.certificate import Attempt, counting_attempts, levels_below
from solver.floor import Floors
from tests.solver.dense import dense_spectrum

FAR = 90


def random_model(random: np.random.Generator) -> CollectiveModel:
    spins = int(random.integers(1, 7))
    coupling = float(random.uniform(-1.0, 1.0))
    counter = coupling if random.random() < 0.5 else float(random.uniform(-1.0, 1.0))
    bias = float(random.normal()) if random.random() < 0.4 else 0.0
    return CollectiveModel(
        spins, float(random.uniform(0.5, 2.0)), float(random.normal()), coupling, counter, bias
    )


def true_counts(model: CollectiveModel, parities: tuple[int, ...], line: float) -> list[int]:
    # a plain diagonalisation far beyond the cutoffs under test (common practice, no source)
    levels = dense_spectrum(model, 40, FAR).merged()
    return [sum(energy < line and label == parity for energy, label in levels) for parity in parities]


@pytest.mark.parametrize("seed", range(40))
def test_no_count_is_too_small(seed: int) -> None:
    random = np.random.default_rng(seed)
    model = random_model(random)
    parities = (1, -1) if model.conserves_parity else (0,)
    merged = sorted(energy for energy, _ in dense_spectrum(model, 12, FAR).merged())
    line = 0.5 * (merged[4] + merged[5])
    expected = true_counts(model, parities, line)
    floors = Floors(model)
    tried = 0
    for basis in ("fock", "shifted"):
        ways = [Attempt(cutoff, projected) for cutoff in (1, 3, 8, 20) for projected in (False, True)]
        for way in ways:
            counted = levels_below(model, parities, line, floors, basis, way)
            if counted is not None:
                tried += 1
                assert all(have >= want for have, want in zip(counted, expected, strict=True))
    assert tried > 0


@pytest.mark.parametrize("spins", [1, 2, 5, 12])
@pytest.mark.parametrize("coupling", [0.3, 0.5, 1.0])
@pytest.mark.parametrize("basis", ["fock", "shifted"])
def test_the_count_is_sharp_where_the_levels_have_converged(spins: int, coupling: float, basis: str) -> None:
    model = CollectiveModel.from_ratio(spins, 1.0, 1.0, coupling)
    cutoff = 60 if basis == "fock" else 40
    merged = sorted(energy for energy, _ in dense_spectrum(model, 8, FAR).merged())
    line = 0.5 * (merged[5] + merged[6])
    floors = Floors(model)
    expected = true_counts(model, (1, -1), line)
    for way in counting_attempts(model, basis, cutoff, line, floors):
        if levels_below(model, (1, -1), line, floors, basis, way) == expected:
            return
    pytest.fail("no attempt proves the count")
