"""The displaced-ladder basis: |n>_b x |m>_x with b = a + G Jx, G = (lr + lc)/(w sqrt(N)).

Each eigenvalue m of Jx carries its own oscillator ladder, displaced by -G m. With the spin axes
turned so that Jx is diagonal, H has

    w n - w G^2 m^2 + eps m                                    on the diagonal,
    sqrt(J(J+1) - m(m+1)) T from ladder m to m+1,  its transpose back,
    T = [ w0/2 - (lr - lc)/(2 sqrt(N)) (b - b^dag) ] D(G),  D(x) = exp(x (b^dag - b)).

One matrix T serves all ladders. Without bias, parity is (-1)^N times |n, m> -> (-1)^n |n, -m>,
and m >= 0 suffices: m = 0 keeps every other n, and m = 1/2 couples to its own mirror image.

Sources: Chen, Zhang, Liu, Wang, Phys. Rev. A 78, 051801 (2008); Bastarrachea-Magnani, Hirsch,
Phys. Scr. T160, 014005 (2014).
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from solver.blocks import Action, BasisName, Block
from solver.displacement import displacement_matrix
from solver.model import CollectiveModel
from solver.spin import raising_elements

Array = NDArray[np.float64]
_EPS = float(np.finfo(np.float64).eps)


class LadderCoupling:
    """Coupling of neighbouring ladders, kept and discarded part, for one model and cutoff.

    table: <n, m| H |k, m+1> without its spin factor (the transpose of T), n, k < reach; beyond
    `reach` the row tails are below rounding. overlap: <n, m|k, m+1> = <n|D(-G)|k>, one row more.
    """

    def __init__(self, model: CollectiveModel, cutoff: int) -> None:
        self.cutoff = cutoff
        gap = abs(model.displacement_per_quantum)
        spread = 6.0 + 2.0 * gap * math.sqrt(cutoff + 1.0) + gap * gap
        self.reach = cutoff + 1 + math.ceil(spread + 3.0 * math.sqrt(spread))
        full = displacement_matrix(-model.displacement_per_quantum, self.reach + 1)
        table = 0.5 * model.splitting * full[: self.reach, : self.reach]
        if model.coupling_difference != 0.0:
            half = 0.5 * model.coupling_difference / math.sqrt(model.spins)
            root = np.sqrt(np.arange(1.0, self.reach + 1))[:, None]
            # rows of b D and b^dag D
            table = table + half * root * full[1:, : self.reach]
            table[1:] -= half * root[:-1] * full[: self.reach - 1, : self.reach]
        self.table: Array = np.ascontiguousarray(table)
        self.overlap: Array = full
        # norm of the error of the overlaps in units of rounding, as measured against mpmath
        self.precision = 12.0 + 3.0 * math.sqrt(self.reach)
        self.size = 0.5 * abs(model.splitting) + abs(model.coupling_difference) * math.sqrt(
            (self.reach + 1.0) / model.spins
        )


class ShiftedBlock:
    """One parity (+1, -1, or 0 with bias) of the displaced-ladder basis, n <= cutoff.

    Ladders run from m = N/2 downwards, so that the only irregular one comes last.
    """

    basis: BasisName = "shifted"

    def __init__(
        self,
        model: CollectiveModel,
        parity: int,
        cutoff: int,
        shift: float,
        coupling: LadderCoupling | None = None,
    ) -> None:
        self.model, self.parity, self.cutoff, self.shift = model, parity, cutoff, shift
        self.coupling = coupling or LadderCoupling(model, cutoff)
        size, levels = model.spins, cutoff + 1
        self.folded = parity != 0
        count = size // 2 + 1 if self.folded else size + 1
        if self.folded and size % 2:
            count = (size + 1) // 2
        self.m: Array = 0.5 * size - np.arange(count, dtype=np.float64)
        self.steps: Array = raising_elements(size)[::-1][: count - 1].copy()
        # sign of the mirror image: psi[-m, n] = mirror * (-1)^n psi[m, n]
        self.mirror = parity * (-1) ** size
        self.has_centre = self.folded and size % 2 == 0
        if self.has_centre:
            self.steps[-1] *= math.sqrt(2.0)
        n = np.arange(levels)
        self.centre_kept = n[(1 - self.mirror) // 2 :: 2] if self.has_centre else n
        self.dimension = (count - 1) * levels + self.centre_kept.size
        gap = model.displacement_per_quantum
        self.offset: Array = -model.mode * gap * gap * self.m**2 + model.bias * self.m - shift
        self.mirror_step = math.sqrt((size + 1.0) * (size + 1.0) / 4.0)

    @property
    def kept_table(self) -> Array:
        """Coupling table restricted to the levels kept, shape (cutoff+1, cutoff+1)."""
        return self.coupling.table[: self.cutoff + 1, : self.cutoff + 1]

    @property
    def _has_half(self) -> bool:
        return self.folded and not self.has_centre

    @property
    def band(self) -> Array:
        """Lower banded storage of P (H - shift) P, shape (2 (cutoff+1), dimension)."""
        levels, count = self.cutoff + 1, self.m.size
        width = 2 * levels
        store = np.zeros((count, levels, width))
        n = np.arange(levels)
        store[:, :, 0] = self.offset[:, None] + self.model.mode * n
        if count > 1:
            template = np.zeros((levels, width))
            column, row = np.meshgrid(n, n, indexing="ij")
            kept = self.kept_table
            template[column, levels + row - column] = kept.T
            store[: count - 1] += self.steps[:, None, None] * template
        if self._has_half:
            self._add_mirror(store[-1])
        if self.has_centre:
            self._compress_centre(store)
        flat = store.reshape(count * levels, width)[: self.dimension]
        return flat.T

    def mirror_matrix(self, table: Array) -> Array:
        """Coupling of ladder m = 1/2 to its mirror image, shape (cutoff+1, columns of table)."""
        levels = self.cutoff + 1
        sign = self.mirror * (1.0 - 2.0 * (np.arange(levels) % 2))
        out: Array = self.mirror_step * sign[:, None] * table[:levels]
        return out

    def _add_mirror(self, last: Array) -> None:
        levels = self.cutoff + 1
        inner = self.mirror_matrix(self.kept_table)
        for n in range(levels):
            last[n, : levels - n] += inner[n, n:]

    def _compress_centre(self, store: Array) -> None:
        """Drop the missing half of the m = 0 ladder: move its rows and columns together."""
        levels, kept = self.cutoff + 1, self.centre_kept
        if self.m.size > 1:
            previous, n = store[-2], np.arange(levels)[:, None]
            entries = previous[n, levels - n + kept]
            keep_inside = np.arange(2 * levels) < levels - n
            previous *= keep_inside
            previous[n, levels - n + np.arange(kept.size)] = entries
        store[-1, : kept.size] = store[-1, kept]

    def ladders(self, vectors: Array) -> Array:
        """Amplitudes per ladder, shape (q, ladders, cutoff+1); the m = 0 gaps hold zeros."""
        count, levels = self.m.size, self.cutoff + 1
        if not self.has_centre:
            return vectors.reshape(-1, count, levels)
        out = np.zeros((vectors.shape[0], count, levels))
        regular = (count - 1) * levels
        out[:, :-1] = vectors[:, :regular].reshape(-1, count - 1, levels)
        out[:, -1, self.centre_kept] = vectors[:, regular:]
        return out

    def flatten(self, ladders: Array) -> Array:
        """Inverse of `ladders`."""
        if not self.has_centre:
            return ladders.reshape(ladders.shape[0], -1)
        regular = ladders[:, :-1].reshape(ladders.shape[0], -1)
        return np.concatenate((regular, ladders[:, -1, self.centre_kept]), axis=1)

    def neighbours(self, psi: Array, table: Array) -> Array:
        """Sum over both neighbouring ladders of spin factor times table (or its transpose).

        psi: (q, ladders, cutoff+1); table: square, at least cutoff+1. With table = <n|D(-G)|k>/2
        this is Jz. Returns (q, ladders, len(table)).
        """
        levels = self.cutoff + 1
        out = np.zeros((*psi.shape[:2], table.shape[0]))
        if self.m.size > 1:
            out[:, 1:] += (self.steps[:, None] * psi[:, :-1]) @ table[:, :levels].T
            out[:, :-1] += (self.steps[:, None] * psi[:, 1:]) @ table[:levels]
        if self._has_half:
            out[:, -1] += psi[:, -1] @ self.mirror_matrix(table)
        if self.has_centre:
            out[:, -1, (1 + self.mirror) // 2 :: 2] = 0.0
        return out

    def act(self, vectors: Array) -> Action:
        """(H - shift) on vectors of shape (q, dimension)."""
        psi = self.ladders(vectors)
        levels = self.cutoff + 1
        diagonal = self.offset[:, None] + self.model.mode * np.arange(levels)
        out = self.neighbours(psi, self.coupling.table)
        out[:, :, :levels] += diagonal * psi
        outside = out[:, :, levels:].reshape(psi.shape[0], -1)
        norms = np.linalg.norm(psi, axis=2)
        steps = 2.0 * np.sum(self.steps * norms[:, 1:] * norms[:, :-1], axis=1)
        if self._has_half:
            steps = steps + self.mirror_step * norms[:, -1] ** 2
        moved = 4.0 * np.sum(np.abs(diagonal) * psi * psi, axis=(1, 2))
        moved += (4.0 + self.coupling.precision) * self.coupling.size * steps
        roundoff = _EPS * (moved + 2.0 * abs(self.shift))
        return Action(self.flatten(out[:, :, :levels]), outside @ outside.T, roundoff)

    def leaks(self) -> Array:
        """W >= V V^dag, block diagonal in m: shape (ladders, cutoff+1, cutoff+1).

        W is twice the sum of the leak up and the leak down; the m = 0 block is given for all n.
        """
        levels = self.cutoff + 1
        beyond_down = self.coupling.table[levels:, :levels].T
        beyond_up = self.coupling.table[:levels, levels:]
        down, up = beyond_down @ beyond_down.T, beyond_up @ beyond_up.T
        half = 0.5 * self.model.spins
        to_lower = (half + self.m) * (half - self.m + 1.0)
        to_upper = (half - self.m) * (half + self.m + 1.0)
        out: Array = 2.0 * (to_lower[:, None, None] * down + to_upper[:, None, None] * up)
        return out

    def layer_weights(self, vectors: Array) -> Array:
        """Weight in each displaced layer n, shape (q, cutoff+1)."""
        psi = self.ladders(vectors)
        weights: Array = np.einsum("qmn,qmn->qn", psi, psi)
        return weights

    def embed(self, vectors: Array, into: Block) -> Array:
        """The same vectors at another cutoff (same sector; the model may be a neighbour)."""
        if not isinstance(into, ShiftedBlock):
            raise TypeError("a displaced-ladder vector fits displaced ladders only")
        psi = self.ladders(vectors)
        out = np.zeros((psi.shape[0], into.m.size, into.cutoff + 1))
        common = min(self.cutoff, into.cutoff) + 1
        out[:, :, :common] = psi[:, :, :common]
        return into.flatten(out)
