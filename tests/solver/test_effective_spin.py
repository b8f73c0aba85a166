"""Effective spin model against the matrix it stands for."""

from __future__ import annotations

import numpy as np
import pytest

from solver import CollectiveModel, effective_spin_levels
from tests.solver.dense import spin_matrices


@pytest.mark.parametrize("spins", [1, 2, 3, 8, 31])
@pytest.mark.parametrize("bias", [0.0, 0.4])
@pytest.mark.parametrize(
    ("rotating", "counter"), [(0.5, 0.5), (0.9, 0.2), (0.0, 0.7), (0.6, -0.6), (0.0, 0.0)]
)
def test_levels(spins, bias, rotating, counter):
    model = CollectiveModel(spins, 1.4, 0.8, rotating, counter, bias)
    jz, up = spin_matrices(spins)
    k = (rotating * up.T + counter * up) / (model.mode * np.sqrt(spins))
    matrix = 0.8 * jz + 0.5 * bias * (up + up.T) - model.mode * k.T @ k
    expected = np.linalg.eigvalsh(matrix)
    for count in (1, 2, 100):
        found = effective_spin_levels(model, count)
        assert len(found) == min(count, spins + 1)
        assert found == pytest.approx(expected[:count], abs=1e-12)


def test_largest_number_of_spins():
    levels = effective_spin_levels(CollectiveModel(5000, 1.0, 1.0, 1.0, 1.0), 6)
    assert list(levels) == sorted(levels)
    assert levels[0] / 5000 == pytest.approx(-17.0 / 16.0, abs=1e-3)
