"""Classical minimum and normal modes for every member of the family, bias included."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import minimize

from solver import CollectiveModel, answer_point, large_n_limit
from solver.point import PointQuestion


def classical_energy(angles: np.ndarray, model: CollectiveModel) -> float:
    """Energy per spin of the product state, boson at its optimum.

    <K> = (lr J- + lc J+)/(w sqrt(N)), energy S = w0 Jz + eps Jx - w |<K>|^2.
    """
    theta, phi = angles
    x, y, z = np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta)
    pull = (model.total_coupling * x) ** 2 + (model.coupling_difference * y) ** 2
    return 0.5 * (model.splitting * z + model.bias * x) - pull / (4.0 * model.mode)


MODELS = [
    CollectiveModel(1, 1.0, 1.0, 0.3, 0.3),
    CollectiveModel(1, 1.0, 1.0, 0.9, 0.4),
    CollectiveModel(1, 1.3, -0.7, 0.9, 0.4),
    CollectiveModel(1, 1.0, 1.0, 1.3, -0.5),
    CollectiveModel(1, 1.0, 1.0, 0.4, 0.4, 0.3),
    CollectiveModel(1, 0.8, 0.5, 0.9, 0.4, -0.2),
    CollectiveModel(1, 1.0, 0.0, 0.5, 0.2, 0.4),
    CollectiveModel(1, 1.0, -1.0, 0.8, 0.8, 1e-3),
    CollectiveModel(1, 1.0, 1.0, 0.0, 0.0, 0.5),
]


@pytest.mark.parametrize("model", MODELS, ids=str)
def test_energy_is_the_classical_minimum(model):
    starts = [(t, p) for t in np.linspace(0.1, 3.0, 7) for p in (0.05, 1.5, 3.1)]
    best = min(minimize(classical_energy, s, args=(model,), tol=1e-14).fun for s in starts)
    assert large_n_limit(model).energy_per_spin == pytest.approx(best, abs=1e-9)


@pytest.mark.parametrize("model", MODELS, ids=str)
def test_lower_branch_is_the_gap_of_many_spins(model):
    """N = 60 and 120, extrapolated in 1/N; with two equal minima the gap of the same parity."""
    limit = large_n_limit(model)
    gaps = []
    for spins in (60, 120):
        large = CollectiveModel(spins, model.mode, model.splitting, model.rotating, model.counter, model.bias)
        answer = answer_point(PointQuestion(large, levels=4, tolerance=1e-6))[0]
        doubled = model.conserves_parity and abs(limit.inversion) < 0.999
        gaps.append(answer.gap if doubled else answer.gap_any)
        if model.bias == 1e-3:
            return  # the bias splits the two wells by N times its size: another level lies between
    assert 2.0 * gaps[1] - gaps[0] == pytest.approx(limit.lower_branch, rel=2e-2)


def test_nothing_depends_on_the_number_of_spins():
    few, many = (large_n_limit(CollectiveModel(n, 1.0, 1.0, 0.7, 0.3, 0.1)) for n in (1, 5000))
    assert few == many


def test_without_any_field():
    limit = large_n_limit(CollectiveModel(3, 1.0, 0.0, 0.0, 0.0))
    assert limit.energy_per_spin == 0.0
    assert limit.critical_coupling == 0.0
    assert limit.upper_branch == pytest.approx(1.0)
