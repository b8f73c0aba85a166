"""What a truncated symmetry block offers, whichever basis it is written in.

A block holds the banded matrix of P (H - shift) P, knows how H acts on a vector of the block
(inside and outside), and bounds everything it leaves out. The bases differ only in how they do
that: see `fock_basis` and `shifted_basis`.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, Protocol

import numpy as np
from numpy.typing import NDArray

from solver.model import CollectiveModel

Array = NDArray[np.float64]
BasisName = Literal["fock", "shifted", "excitation"]


@dataclass(frozen=True, slots=True)
class Action:
    """(H - shift) applied to q vectors of a block.

    inside: component within the block, shape (q, dimension);
    leaked: Gram matrix of the components outside, shape (q, q);
    roundoff: bound on the rounding of each <v|H - shift|v>, shape (q,).
    """

    inside: Array
    leaked: Array
    roundoff: Array


class Block(Protocol):
    """One symmetry sector in one basis, truncated at `cutoff`."""

    model: CollectiveModel
    basis: BasisName
    parity: int
    cutoff: int
    dimension: int
    shift: float

    @property
    def band(self) -> Array:
        """Lower banded storage of P (H - shift) P, shape (half_width + 1, dimension)."""
        ...

    def act(self, vectors: Array) -> Action:
        """H - shift on vectors of shape (q, dimension)."""
        ...

    def layer_weights(self, vectors: Array) -> Array:
        """Weight of each vector in each layer n of the block's own ladder, shape (q, cutoff+1)."""
        ...

    def embed(self, vectors: Array, into: Block) -> Array:
        """The same vectors in another truncation of the same sector and basis."""
        ...
