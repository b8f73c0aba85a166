"""Truncated blocks of both bases against plain matrices: layout, action, and what they leave out."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import expm

from solver import CollectiveModel
from solver.eigen import dense_from_band
from solver.fock_basis import FockBlock
from solver.shifted_basis import ShiftedBlock
from tests.solver.dense import hamiltonian, spin_matrices

SHIFT = -7.25
MODELS = [
    CollectiveModel(1, 1.0, 0.8, 0.4, 0.4),
    CollectiveModel(2, 0.7, -0.8, 0.3, 0.5),
    CollectiveModel(3, 1.0, 1.3, 0.5, 0.2),
    CollectiveModel(6, 1.5, 0.9, 0.6, 0.6),
    CollectiveModel(7, 1.0, 0.0, 0.4, 0.1),
    CollectiveModel(1, 1.0, 0.8, 0.4, 0.4, 0.3),
    CollectiveModel(4, 1.0, -0.5, 0.5, 0.1, -0.7),
    CollectiveModel(5, 1.0, 0.6, -0.2, 0.4, 0.2),
]


def parities(model: CollectiveModel) -> tuple[int, ...]:
    return (1, -1) if model.conserves_parity else (0,)


@pytest.mark.parametrize("cutoff", [0, 1, 2, 7, 8])
@pytest.mark.parametrize("model", MODELS, ids=str)
def test_number_basis_is_a_submatrix(model, cutoff):
    full = hamiltonian(model, cutoff + 1)
    for parity in parities(model):
        block = FockBlock(model, parity, cutoff, SHIFT)
        at = block.quanta * (model.spins + 1) + block.raised
        outside = np.setdiff1d(np.arange(full.shape[0]), at)
        expected = full[np.ix_(at, at)] - SHIFT * np.eye(at.size)
        assert dense_from_band(block.band) == pytest.approx(expected, abs=1e-13)
        across = full[np.ix_(outside, at)]
        vectors = np.random.default_rng(1).standard_normal((3, at.size))
        action = block.act(vectors)
        assert action.inside == pytest.approx(vectors @ expected, abs=1e-11)
        gone = vectors @ across.T
        assert action.leaked == pytest.approx(gone @ gone.T, abs=1e-11)
    if model.conserves_parity:
        sizes = [FockBlock(model, parity, cutoff, SHIFT).dimension for parity in (1, -1)]
        assert sum(sizes) == (cutoff + 1) * (model.spins + 1)


def displaced_states(model: CollectiveModel, cutoff: int, room: int) -> np.ndarray:
    """Columns |n>_b x |m>_x, n <= cutoff, in the product basis with n <= room."""
    a = np.diag(np.sqrt(np.arange(1.0, room + 1)), 1)
    _, up = spin_matrices(model.spins)
    values, along_x = np.linalg.eigh(0.5 * (up + up.T))
    columns = []
    for m, spin_state in zip(values, along_x.T, strict=True):
        displaced = expm(-model.displacement_per_quantum * m * (a.T - a))[:, : cutoff + 1]
        columns += [np.kron(ladder, spin_state) for ladder in displaced.T]
    return np.array(columns).T


@pytest.mark.parametrize("cutoff", [2, 5, 6])
@pytest.mark.parametrize("model", MODELS, ids=str)
def test_displaced_basis_is_a_projection(model, cutoff):
    """Both parities together have the levels of H projected onto the displaced states."""
    room = 60
    kept = displaced_states(model, cutoff, room)
    full = hamiltonian(model, room)
    expected = np.linalg.eigvalsh(kept.T @ full @ kept) - SHIFT
    blocks = [ShiftedBlock(model, parity, cutoff, SHIFT) for parity in parities(model)]
    found = np.concatenate([np.linalg.eigvalsh(dense_from_band(block.band)) for block in blocks])
    assert np.sort(found) == pytest.approx(expected, abs=1e-11)


@pytest.mark.parametrize("model", MODELS, ids=str)
def test_displaced_basis_acts_like_its_matrix_and_knows_what_leaves(model):
    """The part that leaves is what a much larger block of the same basis adds."""
    for parity in parities(model):
        block, large = ShiftedBlock(model, parity, 5, SHIFT), ShiftedBlock(model, parity, 45, SHIFT)
        vectors = np.random.default_rng(2).standard_normal((3, block.dimension))
        action = block.act(vectors)
        assert action.inside == pytest.approx(vectors @ dense_from_band(block.band), abs=1e-11)
        whole = block.embed(vectors, large) @ dense_from_band(large.band)
        back = large.embed(whole, block)
        assert back == pytest.approx(action.inside, abs=1e-11)
        assert action.leaked == pytest.approx(whole @ whole.T - back @ back.T, abs=1e-9)
        assert large.embed(block.embed(vectors, large), block) == pytest.approx(vectors, abs=1e-15)


@pytest.mark.parametrize("basis", [FockBlock, ShiftedBlock])
@pytest.mark.parametrize("model", MODELS, ids=str)
def test_layer_weights_add_up(model, basis):
    for parity in parities(model):
        block = basis(model, parity, 6, SHIFT)
        vectors = np.random.default_rng(3).standard_normal((2, block.dimension))
        weights = block.layer_weights(vectors)
        assert weights.shape == (2, 7)
        assert weights.sum(axis=1) == pytest.approx(np.sum(vectors**2, axis=1), rel=1e-13)
