"""Two-sided bounds: from trial vectors and one certified count to rigorous intervals.

Upper bounds are Rayleigh-Ritz values U_k. For lower bounds let rho be a number with at most c
eigenvalues of H below it, R the Gram matrix of the residuals H psi_k - U_k psi_k of the c lowest
Ritz vectors and D = rho - diag(U) > 0. Then E_k >= the k-th eigenvalue of
diag(U) - D^(-1/2) R D^(-1/2), quadratic in the residual.

The count is certified with the Schur complement: with Q the discarded part, V = P H Q,
W >= V V^dag and Q H Q >= mu > rho, H has no more eigenvalues below rho than
P H P - W/(mu - rho).

Sources: Lehmann, Z. angew. Math. Mech. 29, 341 (1949), and Maehly, Helv. Phys. Acta 25, 547
(1952), for the matrix of lower bounds; Temple, Proc. R. Soc. A 119, 276 (1928), for c = 1;
Davis, Kahan, SIAM J. Numer. Anal. 7, 1 (1970), for the angle.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from solver.blocks import Block
from solver.eigen import lowest_of_band

Array = NDArray[np.float64]
_EPS = float(np.finfo(np.float64).eps)


class RitzSet(NamedTuple):
    """Lowest Ritz pairs of one block (q of them, ascending).

    energies (q,); vectors (q, dimension); residuals: Gram matrix (q, q) of H psi - U psi,
    inside and outside the block; leaked: the outside part alone; roundoff (q,).
    """

    block: Block
    energies: Array
    vectors: Array
    residuals: Array
    leaked: Array
    roundoff: Array


def ritz_set(
    block: Block,
    count: int,
    guards: int,
    start: Array | None,
    accuracy: float,
    *,
    blockwise: bool = False,
) -> RitzSet:
    """Solve a block for its count lowest levels (and guards, only located) and their residuals."""
    found = lowest_of_band(block.band, count, guards, start, accuracy, blockwise=blockwise)
    action = block.act(found.vectors)
    projected = found.vectors @ action.inside.T
    values, turn = np.linalg.eigh(0.5 * (projected + projected.T))
    vectors = turn.T @ found.vectors
    rest = turn.T @ action.inside - values[:, None] * vectors
    leaked = turn.T @ action.leaked @ turn
    return RitzSet(
        block=block,
        energies=values + block.shift,
        vectors=vectors,
        residuals=rest @ rest.T + leaked,
        leaked=leaked,
        # the small eigenproblem errs by its own norm, whichever value one looks at
        roundoff=(turn.T**2) @ action.roundoff + 8.0 * _EPS * abs(values[-1]),
    )


def lower_bounds(energies: Array, residuals: Array, line: float) -> Array:
    """Lower bounds on the lowest levels, given that no more levels than these lie below `line`.

    energies (c,) Ritz values below line; residuals (c, c) their residual Gram matrix.
    """
    root = 1.0 / np.sqrt(line - energies)
    correction = root[:, None] * residuals * root[None, :]
    # the correction alone keeps its relative precision where it is far below the energies
    if energies.size == 1:
        only: Array = energies - correction[0]
        return only
    centre = energies[0]
    out: Array = np.linalg.eigvalsh(np.diag(energies - centre) - correction) + centre
    return out


def sine_of_angle(residual: float, energy: float, next_lower: float) -> float:
    """Bound on sin(angle) between a Ritz vector and the ground state of its sector.

    residual: norm of H psi - U psi; next_lower: lower bound on the next level of the sector.
    Capped at 1. (Davis, Kahan 1970.)
    """
    gap = next_lower - energy
    return min(1.0, residual / gap) if gap > 0.0 else 1.0
