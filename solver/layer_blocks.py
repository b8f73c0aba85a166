"""Blocks of the number basis ordered by n, so that every smaller cutoff is a leading part.

Two ways to write the spin: along z, all of it, where the states were found in the number basis;
along x where they come from displaced ladders. There a state lives on few projections m, and a
window of them, checked after every solve, makes the block as narrow as the state.
"""

from __future__ import annotations

import math
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from solver.bounds import RitzSet
from solver.fock_basis import FockBlock
from solver.layers import LayerProfile, NumberAmplitudes, fock_layers, shifted_layers
from solver.parity_chain import number_block
from solver.shifted_basis import ShiftedBlock
from solver.spin import lowered, raised

Array = NDArray[np.float64]
Index = NDArray[np.int64]
Mask = NDArray[np.bool_]

_LEAST_PADDING = 3
_PADDING = 0.25
_HELD = 1e-14


class LayerBlock(Protocol):
    """One sector of the number basis, n <= top, state by state in ascending n.

    layer_start: position of the first state of each layer, and one past the end; present: which
    positions are states at all; states: the converged vectors, cut at top, shape (q, dimension);
    complete: whether no spin state is left out.
    """

    shift: float
    layer_start: Index
    quanta: Index
    present: Mask
    states: Array
    complete: bool

    @property
    def numbers(self) -> int:
        """Numbers in the band."""
        ...

    @property
    def band(self) -> Array:
        """Lower banded storage of H - shift."""
        ...

    def jx_squared(self, vector: Array) -> Array:
        """Jx^2 on a vector of the whole block or of a leading part of it."""
        ...

    def profile(self, vectors: Array) -> LayerProfile:
        """Number layers of vectors (q, dimension)."""
        ...

    def edge_weight(self, vectors: Array) -> float:
        """Largest weight of a vector (of a leading part) on the last spin states kept."""
        ...


class WholeLayers:
    """The spin along z, all of it."""

    complete = True

    def __init__(self, found: RitzSet, top: int, shift: float) -> None:
        known = found.block
        if not isinstance(known, FockBlock):
            raise TypeError("states in the number basis expected")
        self.block = number_block(known.model, known.parity, top, shift)
        self.shift = shift
        self.quanta: Index = self.block.quanta
        self.layer_start: Index = np.searchsorted(self.quanta, np.arange(top + 2))
        self.present: Mask = np.ones(self.quanta.size, dtype=np.bool_)
        self.states: Array = known.embed(found.vectors, self.block)

    @property
    def numbers(self) -> int:
        """Numbers in the band."""
        return self.quanta.size * (self.block.half_width + 1)

    @property
    def band(self) -> Array:
        """Lower banded storage of H - shift."""
        return self.block.band

    def jx_squared(self, vector: Array) -> Array:
        """Jx^2 on a leading part."""
        block, size = self.block, vector.size
        quanta, spins = block.quanta[:size], block.raised[:size]
        grid = np.zeros((int(quanta[-1]) + 1, block.model.spins + 1))
        grid[quanta, spins] = vector
        for _ in range(2):
            grid = 0.5 * (raised(grid, block.steps) + lowered(grid, block.steps))
        out: Array = grid[quanta, spins]
        return out

    def profile(self, vectors: Array) -> LayerProfile:
        """Number layers of vectors (q, dimension)."""
        return fock_layers(self.block, vectors)

    def edge_weight(self, vectors: Array) -> float:  # noqa: ARG002 - nothing is left out
        """Nothing is left out."""
        return 0.0


class LadderLayers:
    """The spin along x, a window of its projections, descending; parity folds m < 0 away.

    Without bias the projection m = 0 exists for every other n only: the gaps are held by
    positions that couple to nothing.
    """

    def __init__(
        self, block: ShiftedBlock, amplitudes: NumberAmplitudes, top: int, shift: float, widened: int
    ) -> None:
        self.block, self.top, self.shift = block, top, shift
        self.kept = self._window(amplitudes, widened)
        self.complete = self.kept.stop - self.kept.start == block.m.size
        self.m: Array = block.m[self.kept]
        self.layer_start: Index = np.arange(top + 2) * self.m.size
        self.quanta: Index = np.repeat(np.arange(top + 1), self.m.size)
        present = np.ones((top + 1, self.m.size), dtype=np.bool_)
        if block.has_centre and self.kept.stop == block.m.size:
            present[:, -1] = np.arange(top + 1) % 2 == (1 - block.mirror) // 2
        self.present: Mask = present.ravel()
        self.states: Array = self._cut(amplitudes)

    @property
    def numbers(self) -> int:
        """Numbers in the band."""
        return self.quanta.size * (self.m.size + 2)

    def _window(self, amplitudes: NumberAmplitudes, widened: int) -> slice:
        """Projections that hold more of a state than its accuracy, and some on either side."""
        weights = np.einsum("qmn,qmn->qm", amplitudes.values, amplitudes.values)
        busy = amplitudes.ladders.start + np.flatnonzero(weights.max(axis=0) > _HELD)
        low, high = int(busy[0]), int(busy[-1]) + 1
        padding = (_LEAST_PADDING + math.ceil(_PADDING * (high - low))) * 2**widened
        return slice(max(0, low - padding), min(self.block.m.size, high + padding))

    def _cut(self, amplitudes: NumberAmplitudes) -> Array:
        """The states inside the window, up to the top layer."""
        held, first = amplitudes.ladders, amplitudes.first
        grid = np.zeros((amplitudes.values.shape[0], self.top + 1, self.m.size))
        low, high = max(held.start, self.kept.start), min(held.stop, self.kept.stop)
        until = min(self.top + 1 - first, amplitudes.values.shape[2])
        if until > 0:
            inside = amplitudes.values[:, low - held.start : high - held.start, :until]
            here = slice(low - self.kept.start, high - self.kept.start)
            grid[:, first : first + until, here] = inside.transpose(0, 2, 1)
        return grid.reshape(len(grid), -1)

    @property
    def band(self) -> Array:
        """Lower banded storage of H - shift."""
        block, model, m = self.block, self.block.model, self.m
        layers, width = self.top + 1, m.size
        n = np.arange(layers)
        turned = model.coupling_difference != 0.0
        store = np.zeros((layers, width, width + 1 + int(turned)))
        store[:, :, 0] = model.mode * n[:, None] + model.bias * m - self.shift
        steps = block.steps[self.kept.start : self.kept.stop - 1]
        store[:, :-1, 1] += 0.5 * model.splitting * steps
        climb = np.sqrt(n[1:] / model.spins)[:, None]
        store[:-1, :, width] += climb * (model.total_coupling * m)
        half = 0.5 * model.coupling_difference
        if turned:
            # a^dag goes with (d/2)(J+ - J-) along these axes
            store[:-1, :-1, width + 1] -= climb * half * steps
            store[:-1, 1:, width - 1] += climb * half * steps
        if block.folded and not block.has_centre and self.kept.stop == block.m.size:
            # m = 1/2 meets its own mirror image
            sign = block.mirror * block.mirror_step * (1.0 - 2.0 * (n % 2))
            store[:, -1, 0] += 0.5 * model.splitting * sign
            store[:-1, -1, width] += climb[:, 0] * half * sign[:-1]
        band = store.reshape(layers * width, -1).T
        self._isolate(band)
        return band

    def _isolate(self, band: Array) -> None:
        """Uncouple the positions that hold no state."""
        gaps = np.flatnonzero(~self.present)
        band[1:, gaps] = 0.0
        for below in range(1, band.shape[0]):
            before = gaps[gaps >= below] - below
            band[below, before] = 0.0

    def jx_squared(self, vector: Array) -> Array:
        """Jx^2 on a leading part."""
        out: Array = (vector.reshape(-1, self.m.size) * (self.m * self.m)).ravel()
        return out

    def profile(self, vectors: Array) -> LayerProfile:
        """Number layers of vectors (q, dimension)."""
        values = vectors.reshape(len(vectors), -1, self.m.size).transpose(0, 2, 1)
        return shifted_layers(self.block, NumberAmplitudes(np.ascontiguousarray(values), self.kept, 0))

    def edge_weight(self, vectors: Array) -> float:
        """Largest weight on the outermost projections that have neighbours left out."""
        grid = vectors.reshape(len(vectors), -1, self.m.size)
        worst = 0.0
        if self.kept.start > 0:
            worst = float(np.sum(grid[:, :, 0] ** 2, axis=1).max())
        if self.kept.stop < self.block.m.size:
            worst = max(worst, float(np.sum(grid[:, :, -1] ** 2, axis=1).max()))
        return worst
