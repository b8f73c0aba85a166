"""One spin without bias: each parity is a chain with one state per quantum.

The same number basis as `fock_basis`, cut down to what a tridiagonal matrix needs: with one spin
the whole solve costs less than the general bookkeeping would.
"""

from __future__ import annotations

from functools import cached_property, lru_cache

import numpy as np
from numpy.typing import NDArray

from solver.blocks import Action
from solver.fock_basis import FockBlock
from solver.model import CollectiveModel

Array = NDArray[np.float64]
_EPS = float(np.finfo(np.float64).eps)


@lru_cache(maxsize=256)
def _ladder(length: int) -> tuple[Array, Array, Array]:
    """n, sqrt(n+1) and (-1)^n for n < length."""
    n = np.arange(length, dtype=np.float64)
    return n, np.sqrt(n + 1.0), 1.0 - 2.0 * (n % 2.0)


class ParityChain(FockBlock):
    """One parity of the number basis for N = 1, n <= cutoff; j alternates along the chain."""

    def __init__(self, model: CollectiveModel, parity: int, cutoff: int, shift: float) -> None:
        self.model, self.parity, self.cutoff, self.shift = model, parity, cutoff, shift
        self.dimension = cutoff + 1
        n, root, sign = _ladder(cutoff + 1)
        # parity +1 starts with the spin down
        self.along: Array = model.mode * n - (0.5 * parity * model.splitting) * sign - shift
        # raising the spin with n goes with lc, lowering it with lr
        if model.rotating == model.counter:
            climb = model.rotating * root
        else:
            middle, apart = 0.5 * model.total_coupling, 0.5 * parity * model.coupling_difference
            climb = root * (middle - apart * sign)
        self.beside: Array = climb[:-1]
        self.leak = float(climb[-1])
        # size of the largest coupling, for rounding
        self.reach = (abs(model.rotating) + abs(model.counter)) * float(root[-1])

    @cached_property
    def quanta(self) -> NDArray[np.int64]:
        """Quanta of each state of the chain."""
        return np.arange(self.dimension)

    @cached_property
    def raised(self) -> NDArray[np.int64]:
        """Spin excitations of each state: they alternate."""
        return (self.quanta + (1 - self.parity) // 2) % 2

    @cached_property
    def steps(self) -> Array:
        """The one raising element of a single spin."""
        return np.ones(1)

    @property
    def band(self) -> Array:
        """Lower banded storage, shape (2, cutoff+1)."""
        store = np.zeros((self.dimension, 2))
        store[:, 0] = self.along
        store[:-1, 1] = self.beside
        return store.T

    def act(self, vectors: Array) -> Action:
        """H - shift on vectors of shape (q, cutoff+1)."""
        inside = self.along * vectors
        inside[:, 1:] += self.beside * vectors[:, :-1]
        inside[:, :-1] += self.beside * vectors[:, 1:]
        last = vectors[:, -1] * self.leak
        weights = vectors * vectors
        moved = weights @ np.abs(self.along) + 2.0 * np.abs(self.beside).max(initial=0.0)
        roundoff = _EPS * (4.0 * moved + 2.0 * abs(self.shift))
        return Action(inside, last[:, None] * last, roundoff)

    def levels_below(self, line: float, room: float) -> int:
        """Levels of the untruncated chain below `line` (Sturm count with the leak folded in).

        room: lower bound on (energy of the discarded part) - line; infinite for the block alone.
        """
        along = (self.along + (self.shift - line)).tolist()
        along[-1] -= self.leak * self.leak / room
        squares = (self.beside * self.beside).tolist()
        pivot = along[0]
        negative = int(pivot < 0.0)
        tiny = _EPS * (abs(line) + self.model.mode) ** 2
        for diagonal, square in zip(along[1:], squares, strict=True):
            if pivot == 0.0:
                pivot = tiny
            pivot = diagonal - square / pivot
            negative += pivot < 0.0
        return negative


def number_block(model: CollectiveModel, parity: int, cutoff: int, shift: float) -> FockBlock:
    """The block of the number basis in its cheapest form."""
    if model.spins == 1 and parity != 0:
        return ParityChain(model, parity, cutoff, shift)
    return FockBlock(model, parity, cutoff, shift)
