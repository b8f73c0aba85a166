"""Lowest eigenpairs of a positive definite banded matrix, and how many lie below a line.

Krylov iteration on the inverse (one banded Cholesky factor, few solves): the shift sits just
below a rigorous floor of the spectrum, so the wanted states dominate the inverse. One starting
vector is enough for distinct levels; when a count by inertia says that a level was missed
(exactly degenerate states), a block as wide as the wanted set finds it.

Sources: Ericsson, Ruhe, Math. Comp. 35, 1251 (1980), for the inverse; Golub, Underwood,
Mathematical Software III, 361 (1977), for blocks; Bunch, Kaufman, Math. Comp. 31, 163 (1977),
for inertia.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.linalg.lapack import dpbtrf, dpbtrs, dpotrf, dpotrs, dstebz, dstein, dstevd, dsytrf, dsytrs

from solver.errors import ConvergenceError

Array = NDArray[np.float64]

_DENSE_BELOW = 40
_CHAIN_BELOW = 48
_LONGEST_KRYLOV = 40
_STEPS_PER_LEVEL = 4
_MOST_SHIFTS = 5
_LONGEST_BLOCK = 40
_LOOSE = 1e-3


@dataclass(frozen=True, slots=True)
class Subspace:
    """Approximate lowest eigenvectors, orthonormal rows (q, dimension), with their values."""

    values: Array
    vectors: Array


def dense_from_band(band: Array) -> Array:
    """Full symmetric matrix from lower banded storage (half_width+1, n)."""
    width, size = band.shape
    full = np.zeros((size, size))
    for k in range(min(width, size)):
        at = np.arange(size - k)
        full[at + k, at] = band[k, : size - k]
        full[at, at + k] = band[k, : size - k]
    return full


def lowest_of_band(
    band: Array,
    count: int,
    guards: int,
    start: Array | None,
    accuracy: float,
    *,
    blockwise: bool = False,
) -> Subspace:
    """The count + guards lowest eigenpairs of a positive definite banded matrix.

    band: lower banded storage (half_width+1, n), column-major. start: rows to begin from, or
    None. accuracy: residual norm relative to the eigenvalue aimed at for the first `count`;
    guards are only located. blockwise: resolve exactly degenerate levels too. Raises
    ConvergenceError when the matrix is not positive definite.
    """
    size = band.shape[1]
    wanted = min(size, count + guards)
    if band.shape[0] == 2:
        return Subspace(*lowest_of_chain(band[0], band[1, :-1], wanted))
    if size <= max(_DENSE_BELOW, 2 * wanted):
        values, columns = np.linalg.eigh(dense_from_band(band))
        return Subspace(values[:wanted], np.ascontiguousarray(columns[:, :wanted].T))
    factor, info = dpbtrf(band, lower=1)
    if info != 0:
        raise ConvergenceError("shift", int(info), "a shift below the spectrum")
    if blockwise:
        return _block_krylov(factor, size, wanted, start, accuracy)
    moved = 0.0
    for _ in range(_MOST_SHIFTS):
        found, settled = _krylov(factor, size, count, wanted, start, accuracy)
        if settled:
            break
        # levels crowd far above the shift: move it up, as far as the matrix stays definite
        nearer = _shift_up(band, found.values, moved)
        if nearer is None:
            break
        factor, moved = nearer
        start = found.vectors
    return Subspace(found.values + moved, found.vectors)


def _shift_up(band: Array, values: Array, moved: float) -> tuple[Array, float] | None:
    """Cholesky factor after a larger shift below the lowest value found, and that shift.

    values: distances of the found levels from the present shift `moved`.
    """
    spread = float(values[-1] - values[0])
    for margin in (0.3, 1.0, 3.0):
        further = float(values[0]) - margin * spread
        if further <= 0.1 * values[0]:
            return None
        trial = band.copy(order="F")
        trial[0] -= moved + further
        factor, info = dpbtrf(trial, lower=1)
        if info == 0:
            return factor, moved + further
    return None


def lowest_of_chain(along: Array, beside: Array, wanted: int) -> tuple[Array, Array]:
    """Lowest eigenvalues (wanted,) and vectors (wanted, n) of a symmetric tridiagonal matrix."""
    if along.size <= _CHAIN_BELOW:
        values, columns, info = dstevd(along, beside if along.size > 1 else np.zeros(1))
    else:
        count, values, blocks, splits, info = dstebz(along, beside, 2, 0.0, 0.0, 1, wanted, 0.0, "B")
        columns, info = dstein(along, beside, values[:count], blocks, splits)
        order = np.argsort(values[:count], kind="stable")
        values, columns = values[order], columns[:, order]
    if info != 0:  # pragma: no cover - only for NaN input
        raise ConvergenceError("levels", wanted, "finite parameters")
    return values[:wanted], columns[:, :wanted].T


def _krylov(
    factor: Array, size: int, count: int, wanted: int, start: Array | None, accuracy: float
) -> tuple[Subspace, bool]:
    """Lanczos on the inverse with full reorthogonalisation, and whether it reached its goal."""
    longest = min(_LONGEST_KRYLOV + _STEPS_PER_LEVEL * wanted, size - 1)
    basis = np.empty((longest + 1, size))
    vector = _starting_rows(size, 1, None if start is None else start.sum(axis=0)[None])[0]
    basis[0] = vector / np.linalg.norm(vector)
    along, beside = np.zeros(longest), np.zeros(longest)
    goal = np.full(wanted, _LOOSE)
    goal[:count] = accuracy
    check = min(longest, 2 * wanted + 4)
    settled = False
    for step in range(longest):
        image, _ = dpbtrs(factor, basis[step], lower=1)
        # three terms first, then one pass against everything: what is left is rounding
        along[step] = image @ basis[step]
        image -= along[step] * basis[step]
        if step:
            image -= beside[step - 1] * basis[step - 1]
        known = basis[: step + 1]
        image -= (known @ image) @ known
        beside[step] = math.sqrt(image @ image)
        if beside[step] < 1e-14 * along[0]:
            check = step + 1
        else:
            basis[step + 1] = image / beside[step]
        if step + 1 == check or step + 1 == longest:
            values, weights, _ = dstevd(along[: step + 1], beside[: max(step, 1)])
            top = slice(None, -wanted - 1, -1)
            left = beside[step] * np.abs(weights[-1, top]) / values[top]
            settled = bool(np.all(left < goal)) or beside[step] < 1e-14 * along[0]
            if settled or step + 1 == longest:
                break
            check += 3
    used = step + 1
    chosen = weights[:, top]
    # one inverse step more costs nothing: the images are known from the recurrence
    mixed = (chosen * values[top]).T
    improved = mixed @ basis[:used]
    if beside[step] >= 1e-14 * along[0]:
        improved += (beside[step] * chosen[-1])[:, None] * basis[used]
    rows = np.linalg.qr(improved.T)[0].T
    return Subspace(1.0 / values[top], np.ascontiguousarray(rows)), settled


def _block_krylov(factor: Array, size: int, count: int, start: Array | None, accuracy: float) -> Subspace:
    """Rayleigh-Ritz for the inverse on the block Krylov space of `start`."""
    width = count
    steps = max(2, min(_LONGEST_BLOCK, size // width - 1))
    basis = np.empty((size, width * (steps + 1)), order="F")
    images = np.empty((size, width * steps), order="F")
    projected = np.zeros((width * steps, width * steps))
    basis[:, :width] = np.linalg.qr(_starting_rows(size, width, start).T)[0]
    used = 0
    for step in range(steps):
        here = slice(used, used + width)
        image, _ = dpbtrs(factor, basis[:, here], lower=1)
        images[:, here] = image
        used += width
        known = basis[:, :used]
        overlap = known.T @ image
        projected[:used, here] = overlap
        projected[here, :used] = overlap.T
        values, weights = np.linalg.eigh(projected[:used, :used])
        rest = image - known @ overlap
        rest -= known @ (known.T @ rest)
        following, beyond = np.linalg.qr(rest)
        leading = weights[here.start :, : -count - 1 : -1]
        residual = np.linalg.norm(beyond @ leading, axis=0) / values[: -count - 1 : -1]
        if (step > 0 and np.all(residual < accuracy)) or step + 1 == steps:
            break
        basis[:, used : used + width] = following
    improved = images[:, :used] @ weights[:, : -count - 1 : -1]
    rows = np.linalg.qr(improved)[0].T
    return Subspace(1.0 / values[: -count - 1 : -1], np.ascontiguousarray(rows))


@lru_cache(maxsize=32)
def _noise(width: int, size: int) -> Array:
    noise: Array = np.random.default_rng(size).standard_normal((width, size)) / np.sqrt(size)
    return noise


def _starting_rows(size: int, width: int, start: Array | None) -> Array:
    """Rows to begin with: what is known, plus a little fixed pseudo-noise in every direction."""
    rows = _noise(width, size).copy()
    if start is not None and start.shape[0]:
        known = start[:width]
        rows *= 1e-3
        rows[: known.shape[0]] += known
    return np.asarray(rows, dtype=np.float64)


def block_pairs(band: Array, block: int) -> Iterator[tuple[Array, Array | None]]:
    """Cut a banded matrix into block tridiagonal form: (diagonal block, block below it).

    block: rows per block, such that no entry reaches past the next block.
    """
    width, size = band.shape
    rows = np.arange(block)
    lower = rows[:, None] - rows[None, :]
    for first in range(0, size, block):
        here = min(block, size - first)
        columns = first + rows[:here]
        offset = lower[:here, :here]
        diagonal = band[np.clip(offset, 0, width - 1), columns[None, :]]
        diagonal = np.where((offset >= 0) & (offset < width), diagonal, 0.0)
        following = min(block, size - first - here)
        if following <= 0:
            yield diagonal, None
            return
        reach = here + lower[:following, :here]
        below = band[np.clip(reach, 0, width - 1), columns[None, :]]
        yield diagonal, np.where((reach >= 0) & (reach < width), below, 0.0)


def count_below_zero(band: Array, block: int) -> int:
    """Number of negative eigenvalues of a symmetric banded matrix, by block elimination.

    Sylvester's law: the inertia is the sum over the Schur complements met on the way.
    """
    negative = 0
    carried: Array | None = None
    for diagonal, below in block_pairs(band, block):
        pivot = diagonal if carried is None else diagonal - carried
        if below is None:
            return negative + eliminate(pivot, None)[0]
        fewer, solved = eliminate(pivot, below.T)
        negative += fewer
        carried = below @ solved
    return negative


def eliminate(pivot: Array, right: Array | None, *, likely_definite: bool = True) -> tuple[int, Array]:
    """Negative eigenvalues of a symmetric matrix (lower part given), and pivot^(-1) right."""
    nothing = np.empty((0, 0))
    factor, info = dpotrf(pivot, lower=1, clean=0) if likely_definite else (pivot, 1)
    if info == 0:
        return 0, nothing if right is None else dpotrs(factor, right, lower=1)[0]
    factor, exchanged, _ = dsytrf(pivot, lower=1)
    negative = _negative_pivots(factor, exchanged)
    return negative, nothing if right is None else dsytrs(factor, exchanged, right, lower=1)[0]


def _negative_pivots(factor: Array, exchanged: NDArray[np.int32]) -> int:
    """Negative eigenvalues of the block diagonal factor: every 2 x 2 pivot has exactly one."""
    single = exchanged > 0
    ones = np.count_nonzero(factor.diagonal()[single] < 0.0)
    return int(ones) + (exchanged.size - int(np.count_nonzero(single))) // 2
