"""The plain ways to get levels, as they would be written in a notebook, for comparison."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.linalg import eigh_tridiagonal
from scipy.sparse.linalg import eigsh

from solver import CollectiveModel

Array = NDArray[np.float64]


def product_matrix(model: CollectiveModel, cutoff: int) -> sparse.csr_array:
    """H on the full product basis |n> x |m>, n <= cutoff, sparse."""
    size = model.spins
    n = np.arange(cutoff + 1.0)
    j = np.arange(size + 1.0)
    lower = sparse.diags_array(np.sqrt(n[1:]), offsets=1)
    climb = sparse.diags_array(np.sqrt((j[:-1] + 1.0) * (size - j[:-1])), offsets=-1)
    quanta, spin = sparse.diags_array(n), sparse.diags_array(j - 0.5 * size)
    one_boson, one_spin = sparse.eye_array(cutoff + 1), sparse.eye_array(size + 1)
    rotating = sparse.kron(lower, climb)
    counter = sparse.kron(lower.T, climb)
    coupled = model.rotating * (rotating + rotating.T) + model.counter * (counter + counter.T)
    total = (
        model.mode * sparse.kron(quanta, one_spin)
        + model.splitting * sparse.kron(one_boson, spin)
        + 0.5 * model.bias * sparse.kron(one_boson, climb + climb.T)
        + coupled / np.sqrt(size)
    )
    return sparse.csr_array(total)


def sparse_levels(model: CollectiveModel, cutoff: int, count: int) -> Array:
    """Lowest levels by the general sparse solver, matrix construction included."""
    values = eigsh(product_matrix(model, cutoff), k=count, which="SA", return_eigenvectors=True)[0]
    return np.sort(values)


def dense_levels(model: CollectiveModel, cutoff: int, count: int) -> Array:
    """Lowest levels by the dense solver on the same matrix."""
    return np.asarray(np.linalg.eigh(product_matrix(model, cutoff).toarray())[0][:count])


def chain_levels(model: CollectiveModel, cutoff: int, count: int) -> Array:
    """One spin: both parities as bare tridiagonal eigenproblems."""
    n = np.arange(cutoff + 1.0)
    found = []
    for sign in (-1.0, 1.0):
        diagonal = model.mode * n + sign * 0.5 * model.splitting * (-1.0) ** n
        beside = model.rotating * np.sqrt(n[1:])
        found.append(eigh_tridiagonal(diagonal, beside)[0][:count])
    return np.sort(np.concatenate(found))[:count]
