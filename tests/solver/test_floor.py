"""Floors lie below what they claim to bound, for random members of the family."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import eigh

from solver import CollectiveModel, effective_spin_levels
from solver.floor import Floors
from tests.solver.dense import EPS, dense_spectrum, generous_cutoff, hamiltonian, observables, spin_matrices

SHARES = (0.25, 0.5, 0.85)


def random_models(count: int, seed: int, most_spins: int = 8) -> list[CollectiveModel]:
    """Couplings, splitting and bias of either sign."""
    random = np.random.default_rng(seed)
    return [
        CollectiveModel(
            int(random.integers(1, most_spins + 1)),
            float(random.uniform(0.5, 2.0)),
            *(float(random.uniform(-scale, scale)) for scale in (2.0, 1.2, 1.2)),
            float(random.choice([0.0, random.uniform(-1.0, 1.0)])),
        )
        for _ in range(count)
    ]


def check_floors(model: CollectiveModel) -> None:
    reference = dense_spectrum(model, 1)
    rounding = 4.0 * EPS * reference.norm
    floors = Floors(model)
    lowest, parity = reference.merged()[0]
    assert floors.ground <= lowest + rounding
    assert lowest - floors.ground < 6.0 * model.mode
    psi = reference.states[parity][0]
    quanta = observables(psi)["boson_number"]
    assert floors.boson_bound(lowest) >= quanta - 1e-10
    full = hamiltonian(model, reference.cutoff)
    n = np.repeat(np.arange(reference.cutoff + 1), model.spins + 1)
    for share in SHARES:
        rest = eigh(full - share * model.mode * np.diag(n), eigvals_only=True, subset_by_index=(0, 0))[0]
        assert floors.share_floor(share) <= rest + rounding
    for cutoff in (0, 3, 9):
        above = n > cutoff
        part = eigh(full[np.ix_(above, above)], eigvals_only=True, subset_by_index=(0, 0))[0]
        assert floors.above(cutoff, shifted=False) <= part + rounding


@pytest.mark.parametrize("model", random_models(20, 1), ids=str)
def test_floors(model):
    check_floors(model)


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(9))
def test_floors_of_many_models(seed):
    for model in random_models(20, 100 + seed):
        check_floors(model)


@pytest.mark.parametrize("model", random_models(12, 7, 4), ids=str)
def test_floor_above_a_cutoff_of_displaced_quanta(model):
    """Eigenvectors of (a + G Jx)^dag (a + G Jx) with eigenvalue above M span the discarded part."""
    cutoff = generous_cutoff(model) + 30
    _, up = spin_matrices(model.spins)
    a = np.kron(np.diag(np.sqrt(np.arange(1.0, cutoff + 1)), 1), np.eye(model.spins + 1))
    b = a + model.displacement_per_quantum * np.kron(np.eye(cutoff + 1), 0.5 * (up + up.T))
    counts, vectors = np.linalg.eigh(b.T @ b)
    full = hamiltonian(model, cutoff)
    floors = Floors(model)
    for kept in (1, 4):
        # the top of a finite number basis holds no displaced states: use the converged ones
        part = vectors[:, (counts > kept + 0.5) & (counts < kept + 12.5)]
        lowest = np.linalg.eigvalsh(part.T @ full @ part)[0]
        assert floors.above(kept, shifted=True) <= lowest + 1e-8


def test_ground_floor_is_the_effective_spin_model():
    for model in random_models(20, 3):
        assert Floors(model).ground == pytest.approx(effective_spin_levels(model, 1)[0], abs=1e-12)
        assert Floors(model).ground <= effective_spin_levels(model, 1)[0] + 1e-14


def test_floor_is_exact_without_splitting():
    model = CollectiveModel(50, 1.0, 0.0, 0.7, 0.7)
    assert Floors(model).ground == pytest.approx(-4.0 * 0.49 * 25.0**2 / 50.0, rel=1e-13)
