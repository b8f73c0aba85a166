"""Rigorous floors: energies below which no state of the model, or of a part of it, can lie.

Completing the square in the boson leaves a spin matrix,

    H = w (a + K)^dag (a + K) + S,   K = (lr J- + lc J+) / (w sqrt(N)),
    S = w0 Jz + eps Jx - w K^dag K,

so that H >= lowest eigenvalue of S. Splitting off a share s of the boson energy first bounds
everything with more than M quanta: H >= s w (M+1) + floor of the model with mode (1-s) w.
(The square is the textbook polaron step, common practice, no source; the floor is also the
ground energy of the model with the boson eliminated, Lipkin, Meshkov, Glick,
Nucl. Phys. 62, 188 (1965).)
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import eig_banded
from scipy.linalg.lapack import dstebz

from solver.model import CollectiveModel
from solver.spin import projections, raising_elements

Array = NDArray[np.float64]

# shares of the boson energy tried when bounding the part above the cutoff
_SHARES = (0.1, 0.25, 0.5, 0.7, 0.85, 0.95)
_ROUNDING = 16.0 * np.finfo(np.float64).eps


def lowest_of_tridiagonal(diagonal: Array, beside: Array) -> float:
    """Lowest eigenvalue of a symmetric tridiagonal matrix (bisection, LAPACK)."""
    if diagonal.size == 1:
        return float(diagonal[0])
    _, values, _, _, info = dstebz(diagonal, beside, 2, 0.0, 0.0, 1, 1, 0.0, "E")
    if info != 0:  # pragma: no cover - LAPACK reports this only for NaN input
        raise ArithmeticError("bisection failed on a tridiagonal matrix")
    return float(values[0])


def spin_floor(model: CollectiveModel, kept_share: float = 1.0, *, shifted: bool = False) -> float:
    """Lowest eigenvalue of the spin matrix left when kept_share of the boson energy is used.

    kept_share: 1 - s in (0, 1]. With shifted=True the split-off share s is counted in quanta
    of the displaced mode b = a + G Jx instead of a. Unit of the model.
    """
    size = model.spins
    if size == 1 and model.bias == 0.0 and not shifted:
        # two levels: spin down pays lc^2, spin up lr^2
        mode, half = model.mode * kept_share, 0.5 * model.splitting
        down, up = -half - model.counter**2 / mode, half - model.rotating**2 / mode
        return min(down, up) - _ROUNDING * max(abs(down), abs(up))
    steps = raising_elements(size)
    total, difference = model.total_coupling, model.coupling_difference
    # in displaced quanta the Jx part needs no share of the boson energy
    along = total * total / (model.mode * (1.0 if shifted else kept_share))
    across = difference * difference / (model.mode * kept_share)
    product = total * difference / model.mode / (1.0 if shifted else kept_share)
    return _lowest(model, steps, along / size, across / size, product / size)


def _lowest(model: CollectiveModel, steps: Array, along: float, across: float, product: float) -> float:
    """Lowest eigenvalue of w0 Jz + eps Jx - along Jx^2 - across Jy^2 + product Jz (less rounding).

    The last term is the commutator part of K^dag K: (t Jx + i d Jy)(t Jx - i d Jy) =
    t^2 Jx^2 + d^2 Jy^2 + t d Jz, entering S with a minus sign.
    """
    size = model.spins
    field = model.splitting - product
    m = projections(size)
    if across == 0.0:
        # along Jx the matrix is tridiagonal, bias or not
        diagonal = model.bias * m - along * m * m
        if model.bias == 0.0 and size > 2:
            value = _lowest_folded(diagonal, field, steps, size)
        else:
            value = lowest_of_tridiagonal(diagonal, 0.5 * field * steps)
        norm = float(np.abs(diagonal).max()) + abs(field) * size
    else:
        before = np.concatenate(([0.0], steps))
        after = np.concatenate((steps, [0.0]))
        ladder_squares = before * before + after * after
        diagonal = field * m - 0.25 * (along + across) * ladder_squares
        second = -0.25 * (along - across) * steps[:-1] * steps[1:]
        norm = float(np.abs(diagonal).max()) + 2.0 * float(np.abs(second).max(initial=0.0))
        if model.bias == 0.0:
            value = min(
                lowest_of_tridiagonal(diagonal[k::2].copy(), second[k::2].copy())
                for k in range(min(2, size + 1))
            )
        else:
            band = np.zeros((3, size + 1))
            band[0] = diagonal
            band[1, :-1] = 0.5 * model.bias * steps
            band[2, :-2] = second
            norm += abs(model.bias) * size
            value = float(eig_banded(band, lower=True, eigvals_only=True, select="i", select_range=(0, 0))[0])
    return value - _ROUNDING * norm


def _lowest_folded(diagonal: Array, field: float, steps: Array, size: int) -> float:
    """Lowest eigenvalue of the m -> -m symmetric tridiagonal matrix from one symmetry block."""
    half = size // 2
    beside = 0.5 * field * steps[half + (size % 2) :]
    part = diagonal[half + (size % 2) :].copy()
    if size % 2:
        part[0] -= abs(0.5 * field * steps[half])
    else:
        beside = beside.copy()
        beside[0] *= np.sqrt(2.0)
    return lowest_of_tridiagonal(part, beside)


class Floors:
    """All floors of one model, computed once each.

    model: whose floors. ground: H >= ground. above(M, shifted): a floor for the part with more than M quanta.
    """

    def __init__(self, model: CollectiveModel) -> None:
        self.model = model
        self.ground = spin_floor(model)
        self._shares: dict[tuple[float, bool], float] = {}

    def above(self, cutoff: int, *, shifted: bool) -> float:
        """Floor of Q H Q, Q the part above the cutoff, in the unit of the model."""
        share, floor = self.best_split(cutoff, shifted=shifted)
        return share * self.model.mode * (cutoff + 1) + floor

    def best_split(self, cutoff: int, *, shifted: bool) -> tuple[float, float]:
        """Share s and floor f with H >= s w n + f, best for n > cutoff (n displaced if shifted)."""
        if shifted and self.model.coupling_difference == 0.0:
            return 1.0, self.ground
        quanta = self.model.mode * (cutoff + 1)
        splits = [(share, self._share_floor(share, shifted=shifted)) for share in _SHARES]
        return max(splits, key=lambda split: split[0] * quanta + split[1])

    def boson_bound(self, energy: float) -> float:
        """Upper bound on <a^dag a> of any state with mean energy `energy`."""
        return min(
            (energy - self._share_floor(share, shifted=False)) / (share * self.model.mode)
            for share in _SHARES
        )

    def share_floor(self, share: float) -> float:
        """Floor f with H >= share * w a^dag a + f."""
        return self._share_floor(share, shifted=False)

    def _share_floor(self, share: float, *, shifted: bool) -> float:
        key = (share, shifted)
        if key not in self._shares:
            self._shares[key] = spin_floor(self.model, 1.0 - share, shifted=shifted)
        return self._shares[key]
