"""The number basis |n> x |m>_z, the one an experiment counts in.

Ordered by n, a parity block is banded: n only couples to n +- 1. Labels: n quanta,
j = m + N/2 spin excitations; parity +1 keeps n + j even.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from solver.blocks import Action, BasisName, Block
from solver.model import CollectiveModel
from solver.spin import lowered, projections, raised, raising_elements

Array = NDArray[np.float64]
Index = NDArray[np.int64]
_EPS = float(np.finfo(np.float64).eps)


class FockBlock:
    """One parity (+1, -1, or 0 with bias) of the number basis, n <= cutoff."""

    basis: BasisName = "fock"

    def __init__(self, model: CollectiveModel, parity: int, cutoff: int, shift: float) -> None:
        self.model, self.parity, self.cutoff, self.shift = model, parity, cutoff, shift
        self._root = math.sqrt(model.spins)
        self.dimension = self.quanta.size

    @cached_property
    def steps(self) -> Array:
        """Raising elements of the spin, shape (N,)."""
        return raising_elements(self.model.spins)

    @cached_property
    def quanta(self) -> Index:
        """n of each state, shape (dimension,)."""
        return self._labels[0]

    @cached_property
    def raised(self) -> Index:
        """j = m + N/2 of each state, shape (dimension,)."""
        return self._labels[1]

    @cached_property
    def _labels(self) -> tuple[Index, Index]:
        size, cutoff, parity = self.model.spins + 1, self.cutoff, self.parity
        if parity == 0:
            return np.repeat(np.arange(cutoff + 1), size), np.tile(np.arange(size), cutoff + 1)
        # two layers in a row hold all j once: build one pair and repeat it
        first = np.arange((1 - parity) // 2, size, 2)
        second = np.arange((1 + parity) // 2, size, 2)
        pairs = cutoff // 2 + 1
        levels = np.repeat(np.tile([0, 1], pairs), np.tile([first.size, second.size], pairs))
        quanta = levels + 2 * np.repeat(np.arange(pairs), size)
        spins = np.tile(np.concatenate((first, second)), pairs)
        kept = quanta <= cutoff
        return quanta[kept], spins[kept]

    def diagonal(self) -> Array:
        """Diagonal of P (H - shift) P."""
        half = 0.5 * self.model.spins
        out: Array = self.model.mode * self.quanta + self.model.splitting * (self.raised - half) - self.shift
        return out

    def _layer_start(self) -> Index:
        """Position of the first state of each layer, and one past the end."""
        return np.searchsorted(self.quanta, np.arange(self.cutoff + 2))

    def _position(self, quanta: Index, spins: Index) -> Index:
        start = self._layer_start()[quanta]
        if self.parity == 0:
            return start + spins
        return start + spins // 2

    @property
    def half_width(self) -> int:
        """Number of sub-diagonals of the banded matrix."""
        size = self.model.spins + 1
        return size + 1 if self.parity == 0 else size // 2 + 1

    @property
    def band(self) -> Array:
        """Lower banded storage of P (H - shift) P."""
        store = np.zeros((self.dimension, self.half_width + 1))
        store[:, 0] = self.diagonal()
        for at, to, element in self.couplings():
            store[at, to - at] += element
        return store.T

    def couplings(self) -> Iterator[tuple[Index, Index, Array]]:
        """Non-zero elements below the diagonal of P H P: columns, rows and values."""
        here = np.arange(self.dimension)
        n, j = self.quanta, self.raised
        root = np.sqrt(n + 1.0) / self._root
        down = (n < self.cutoff) & (j > 0)
        up = (n < self.cutoff) & (j < self.model.spins)
        for mask, change, strength in (
            (down, -1, self.model.rotating),
            (up, 1, self.model.counter),
        ):
            at = here[mask]
            element = strength * root[at] * self.steps[np.minimum(j[at], j[at] + change)]
            yield at, self._position(n[at] + 1, j[at] + change), element
        if self.model.bias != 0.0:
            at = here[j < self.model.spins]
            yield at, at + 1, 0.5 * self.model.bias * self.steps[j[at]]

    def padded(self, vectors: Array) -> Array:
        """Amplitudes on the full grid, shape (q, cutoff+1, N+1), zeros where parity forbids."""
        out = np.zeros((vectors.shape[0], self.cutoff + 1, self.model.spins + 1))
        out[:, self.quanta, self.raised] = vectors
        return out

    def flatten(self, grid: Array) -> Array:
        """Inverse of `padded`."""
        out: Array = grid[:, self.quanta, self.raised]
        return out

    def act(self, vectors: Array) -> Action:
        """(H - shift) on vectors of shape (q, dimension)."""
        model, psi = self.model, self.padded(vectors)
        n = np.arange(self.cutoff + 2.0)
        climb = np.sqrt(n[1:])[:, None] / self._root
        higher, lower = raised(psi, self.steps), lowered(psi, self.steps)
        out = np.zeros((psi.shape[0], self.cutoff + 2, psi.shape[2]))
        out[:, 1:] += climb * (model.rotating * lower + model.counter * higher)
        out[:, : self.cutoff] += climb[:-1] * (model.rotating * higher + model.counter * lower)[:, 1:]
        spin_part = model.splitting * projections(model.spins) - self.shift
        diagonal = model.mode * n[:-1, None] + spin_part
        out[:, :-1] += diagonal * psi
        if model.bias != 0.0:
            out[:, :-1] += 0.5 * model.bias * (higher + lower)
        outside = out[:, -1]
        return Action(self.flatten(out[:, :-1]), outside @ outside.T, self._roundoff(psi, diagonal))

    def _roundoff(self, psi: Array, diagonal: Array) -> Array:
        norms = np.sqrt(np.einsum("qnj,qnj->qn", psi, psi))
        half = 0.5 * (self.model.spins + 1.0)
        strength = (abs(self.model.rotating) + abs(self.model.counter)) * half / self._root
        climb = np.sqrt(np.arange(1.0, self.cutoff + 1.0))
        moved = np.einsum("nj,qnj,qnj->q", np.abs(diagonal), psi, psi)
        moved += 2.0 * strength * np.sum(climb * norms[:, 1:] * norms[:, :-1], axis=1)
        moved += abs(self.model.bias) * half
        out: Array = _EPS * (4.0 * moved + 2.0 * abs(self.shift))
        return out

    def layer_weights(self, vectors: Array) -> Array:
        """Weight in each layer n, shape (q, cutoff+1)."""
        out: Array = np.add.reduceat(vectors * vectors, self._layer_start()[:-1], axis=1)
        return out

    def embed(self, vectors: Array, into: Block) -> Array:
        """The same vectors at another cutoff (same sector; the model may be a neighbour)."""
        out = np.zeros((vectors.shape[0], into.dimension))
        common = min(self.dimension, into.dimension)
        out[:, :common] = vectors[:, :common]
        return out
