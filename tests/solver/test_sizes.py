"""Exact sizes against matrices that are really built."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.sparse as sp

from solver import CollectiveModel, QuestionError, calculation_size
from tests.solver.truncation import sparse_hamiltonian

# irrational-looking numbers: no entry cancels and none of the diagonal vanishes
GENERAL = {"mode": 1.0371, "splitting": 0.5193, "rotating": 0.7717, "counter": 0.3391, "bias": 0.2113}


def general(spins: int, **without: float) -> CollectiveModel:
    return CollectiveModel(spins, **(GENERAL | without))


def product_hamiltonian(model: CollectiveModel, cutoff: int) -> sp.csr_matrix:
    """H of N separate spins, each with its own Pauli matrices; index (n, s1, ..., sN)."""
    raising = sp.csr_matrix([[0.0, 0.0], [1.0, 0.0]])
    inversion = sp.csr_matrix([[-0.5, 0.0], [0.0, 0.5]])

    def of_all(single: sp.csr_matrix) -> sp.csr_matrix:
        return sum(
            sp.kron(sp.kron(sp.identity(2**k), single), sp.identity(2 ** (model.spins - 1 - k)))
            for k in range(model.spins)
        )

    up, jz = of_all(raising), of_all(inversion)
    a = sp.diags(np.sqrt(np.arange(1.0, cutoff + 1)), 1, shape=(cutoff + 1, cutoff + 1))
    link = model.rotating * sp.kron(a, up) + model.counter * sp.kron(a, up.T)
    matrix = model.mode * sp.kron(a.T @ a, sp.identity(2**model.spins))
    matrix = matrix + sp.kron(sp.identity(cutoff + 1), model.splitting * jz + 0.5 * model.bias * (up + up.T))
    return sp.csr_matrix(matrix + (link + link.T) / np.sqrt(model.spins))


def entries(matrix: sp.csr_matrix) -> int:
    """Stored entries with the whole diagonal stored, vanishing or not."""
    off = matrix - sp.diags(matrix.diagonal())
    off.eliminate_zeros()
    return off.nnz + matrix.shape[0]


@pytest.mark.parametrize("spins", [1, 2, 3, 6, 9])
@pytest.mark.parametrize("cutoff", [0, 1, 2, 7, 12])
@pytest.mark.parametrize("without", [{}, {"bias": 0.0}, {"counter": 0.0}, {"rotating": 0.0}])
def test_collective(spins, cutoff, without):
    model = general(spins, **without)
    matrix = sparse_hamiltonian(model, cutoff)
    size = calculation_size(spins, cutoff, "collective", model)
    assert (size.dimension, size.nonzeros) == (matrix.shape[0], entries(matrix))


@pytest.mark.parametrize("spins", [1, 2, 3, 6, 9])
@pytest.mark.parametrize("cutoff", [0, 1, 2, 7, 12])
@pytest.mark.parametrize("without", [{}, {"counter": 0.0}, {"rotating": 0.0}])
def test_larger_parity_block(spins, cutoff, without):
    model = general(spins, bias=0.0, **without)
    matrix = sparse_hamiltonian(model, cutoff)
    n, j = np.divmod(np.arange(matrix.shape[0]), spins + 1)
    blocks = [np.flatnonzero((n + j) % 2 == odd) for odd in (0, 1)]
    assert abs(blocks[0].size - blocks[1].size) <= 1
    larger = max((at.size, entries(matrix[at][:, at])) for at in blocks)
    size = calculation_size(spins, cutoff, "parity", model)
    assert (size.dimension, size.nonzeros) == larger


@pytest.mark.parametrize("spins", [1, 2, 3, 6])
@pytest.mark.parametrize("cutoff", [0, 1, 6])
@pytest.mark.parametrize("without", [{}, {"bias": 0.0}, {"counter": 0.0}])
def test_product_space(spins, cutoff, without):
    model = general(spins, **without)
    matrix = product_hamiltonian(model, cutoff)
    size = calculation_size(spins, cutoff, "product", model)
    assert (size.dimension, size.nonzeros) == (matrix.shape[0], entries(matrix))


def test_general_model_counts_every_term():
    for treatment in ("collective", "product"):
        assert calculation_size(5, 8, treatment) == calculation_size(5, 8, treatment, general(5))
    assert calculation_size(5, 8, "parity") == calculation_size(5, 8, "parity", general(5))


def test_bytes_are_those_of_real_arrays():
    matrix = sparse_hamiltonian(general(4), 9)
    size = calculation_size(4, 9, "collective")
    dense = matrix.toarray()
    assert size.dense_bytes == dense.nbytes
    assert size.density_matrix_bytes == dense.astype(complex).nbytes
    stored = matrix + sp.diags(np.full(matrix.shape[0], 1.0))
    assert stored.nnz == size.nonzeros
    assert stored.indices.dtype == np.int32
    assert size.sparse_bytes == stored.data.nbytes + stored.indices.nbytes + stored.indptr.nbytes


def test_huge_calculations_are_exact_integers():
    size = calculation_size(5000, 100_000, "product")
    assert size.dimension == 100_001 * 2**5000
    assert size.dense_bytes == 8 * size.dimension**2
    # past 2^31 entries the indices take eight bytes each
    assert size.sparse_bytes == 16 * size.nonzeros + 8 * (size.dimension + 1)
    small, large = calculation_size(20, 60, "parity"), calculation_size(20, 60, "collective")
    assert large.dimension == 2 * small.dimension - 1


@pytest.mark.parametrize(
    ("spins", "cutoff", "treatment", "field"),
    [(0, 3, "parity", "spins"), (2, -1, "parity", "cutoff"), (2, 3, "tensor", "treatment")],
)
def test_refusals_name_the_field(spins, cutoff, treatment, field):
    with pytest.raises(QuestionError) as caught:
        calculation_size(spins, cutoff, treatment)
    assert caught.value.field == field
