"""Overlaps <n| D(x) |k> of displaced number states, D(x) = exp(x (b^dag - b)), x real.

Write D[n,k] = x^(n-k) exp(-x^2/2) E[n,k]. From D^dag b^dag b D = (b^dag + x)(b + x) follows,
for fixed n, the three-term recurrence

    sqrt(k+1) E[n,k+1] = (n - k - x^2) E[n,k] - x^2 sqrt(k) E[n,k-1],   E[n,0] = 1/sqrt(n!).

For k <= n it runs from the forbidden region into the oscillating one, which is its stable
direction; the rest follows from D[k,n] = (-1)^(n-k) D[n,k].
(Closed form: Cahill, Glauber, Phys. Rev. 177, 1857 (1969).)

Where many ladders share a modest size there is a shorter way: b + b^dag, truncated well above the
levels in use, is diagonalised once, and D(x) acts as a phase on its eigenvectors (Gauss-Hermite
quadrature; Golub, Welsch, Math. Comp. 23, 221 (1969)).
"""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import eigh_tridiagonal
from scipy.special import gammaln

Array = NDArray[np.float64]

_RESCALE_ABOVE = 1e100
# below these n! and exp(-x^2/2) x^n stay inside double precision: no logarithms needed
_PLAIN_ROWS = 140
_PLAIN_SQUARE = 120.0


def displaced_overlaps(shift: float | Array, rows: int, columns: int) -> Array:
    """Overlaps <n|D(shift)|k> for n < rows, k < columns.

    shift: a number or an array of shape S; returns shape S + (rows, columns), absolute error
    around 1e-14. Needs rows >= columns (for the other case transpose with alternating signs).
    """
    if rows < columns:
        raise ValueError("displaced_overlaps needs rows >= columns")
    shifts = np.asarray(shift, dtype=np.float64)
    largest = float(np.max(shifts * shifts, initial=0.0))
    if rows <= _PLAIN_ROWS and largest <= _PLAIN_SQUARE:
        table = _plain_lower(shifts, rows, columns)
    else:
        table = _scaled_lower(shifts, rows, columns)
    out: Array = np.moveaxis(table, 0, -1)
    corner = out[..., :columns, :]
    row, column = np.triu_indices(columns, 1)
    sign = 1.0 - 2.0 * ((column - row) % 2)
    corner[..., row, column] = sign * corner[..., column, row]
    return out


def _plain_lower(shifts: Array, rows: int, columns: int) -> Array:
    """table[k, ..., n] = D[n, k] for n >= k, everything within range of a double."""
    n = np.arange(rows, dtype=np.float64)
    square = (shifts * shifts)[..., None]
    start = np.cumprod(1.0 / np.sqrt(np.maximum(n, 1.0)))
    table = np.empty((columns, *shifts.shape, rows))
    table[0] = start
    diagonal = n - square
    if columns > 1:
        table[1] = diagonal * table[0]
    for k in range(1, columns - 1):
        np.multiply(diagonal - k, table[k], out=table[k + 1])
        table[k + 1] -= (square * np.sqrt(k)) * table[k - 1]
        table[k + 1] *= 1.0 / np.sqrt(k + 1.0)
    order = np.arange(columns)
    exponent = np.maximum(n[None, :] - order[:, None], 0.0)
    middle = (columns,) + (1,) * shifts.ndim + (rows,)
    table *= np.power(shifts[..., None], exponent.reshape(middle))
    table *= np.exp(-0.5 * square)
    return table


def _scaled_lower(shifts: Array, rows: int, columns: int) -> Array:
    """As _plain_lower, with a logarithm of scale kept per row."""
    n = np.arange(rows, dtype=np.float64)
    size = np.abs(shifts)[..., None]
    square = size * size
    with np.errstate(divide="ignore"):
        log_size = np.where(size > 0.0, np.log(np.where(size > 0.0, size, 1.0)), -np.inf)
    scale = np.broadcast_to(-0.5 * square - 0.5 * gammaln(n + 1.0), (*shifts.shape, rows)).copy()
    previous = np.zeros_like(scale)
    current = np.ones_like(scale)
    table = np.zeros((columns, *shifts.shape, rows))
    for k in range(columns):
        steps = n - k
        with np.errstate(invalid="ignore"):
            power = np.where(steps > 0, steps * log_size, 0.0)
        table[k] = current * np.exp(np.where(steps >= 0, scale + power, -np.inf))
        following = (steps - square) * current - square * np.sqrt(k) * previous
        following /= np.sqrt(k + 1.0)
        previous, current = current, following
        large = np.abs(current) > _RESCALE_ABOVE
        if large.any():
            factor = np.where(large, np.abs(current), 1.0)
            current = current / factor
            previous = previous / factor
            scale += np.log(factor)
    if np.any(shifts < 0.0):
        order = np.arange(columns)[(...,) + (None,) * (shifts.ndim + 1)]
        flip = 1.0 - 2.0 * ((n - order) % 2)
        table *= np.where(shifts[None, ..., None] < 0.0, flip, 1.0)
    return table


LARGEST_QUADRATURE = 400
# from this shift on the overlaps are computed without scaling
_FAR = 2.0


@lru_cache(maxsize=64)
def _position_basis(size: int) -> tuple[Array, Array]:
    """Eigenvalues of b + b^dag on `size` levels, and eigenvectors with the signs of i^n taken in.

    With these D(x)[n, k] = sum_q vectors[n, q] vectors[k, q] c(x values[q]), where c is the
    cosine for n - k even, the sine for n odd and k even, and minus the sine for n even, k odd.
    """
    values, vectors = eigh_tridiagonal(np.zeros(size), np.sqrt(np.arange(1.0, size)))
    signs = 1.0 - 2.0 * ((np.arange(size) // 2) % 2)
    return np.asarray(values, dtype=np.float64), np.array(signs[:, None] * vectors, dtype=np.float64)


def _padded(size: int, shift: float) -> int:
    """Levels needed so that displacing `size` of them by `shift` never feels the end."""
    steps = 8
    while True:
        reach = abs(shift) * math.sqrt(size + 0.5 * steps) + 1e-300
        if steps * (math.log(steps / reach) - 1.0) > 38.0:
            return size + steps // 2 + 1
        steps += 4


def quadrature_size(size: int, shift: float) -> int:
    """Size of the quadrature that displaces `size` levels by up to |shift|."""
    # multiples of eight, so that neighbouring sweeps share one eigenbasis
    return -(-_padded(size, shift) // 8) * 8


def displacement_matrix(shift: float, size: int) -> Array:
    """<n|D(shift)|k> for n, k < size; absolute error around 1e-14."""
    nodes = quadrature_size(size, shift)
    if nodes > LARGEST_QUADRATURE:
        return displaced_overlaps(shift, size, size)
    values, vectors = _position_basis(nodes)
    part = vectors[:size]
    out = np.empty((size, size))
    even, odd = part[::2], part[1::2]
    cosine, sine = np.cos(shift * values), np.sin(shift * values)
    out[::2, ::2] = (even * cosine) @ even.T
    out[1::2, 1::2] = (odd * cosine) @ odd.T
    mixed = (odd * sine) @ even.T
    out[1::2, ::2] = mixed
    out[::2, 1::2] = -mixed.T
    return out


def displaced(amplitudes: Array, shifts: Array, first: int, rows: int) -> Array:
    """D(shift) applied to number amplitudes, each ladder by its own shift.

    amplitudes: (q, ladders, levels); shifts: (ladders,). Returns the levels first <= n < first +
    rows of the result, shape (q, ladders, rows); first is even.
    """
    levels = amplitudes.shape[2]
    furthest = float(np.abs(shifts).max(initial=0.0))
    nodes = quadrature_size(max(first + rows, levels), furthest)
    if nodes <= LARGEST_QUADRATURE:
        return _displaced_by_quadrature(amplitudes, shifts, first, rows, nodes)
    out = np.empty((*amplitudes.shape[:2], rows))
    far = np.abs(shifts) >= _FAR
    near = ~far
    if far.any():
        table = _far_table(shifts[far], first, rows, levels)
        turned = amplitudes[:, far].transpose(1, 0, 2) @ table.transpose(1, 0, 2)
        out[:, far] = turned.transpose(1, 0, 2)
    if near.any():
        full = displaced_overlaps(shifts[near], max(first + rows, levels), levels)
        out[:, near] = np.einsum("qmk,mnk->qmn", amplitudes[:, near], full[:, first : first + rows])
    return out


def _far_table(shifts: Array, first: int, rows: int, columns: int) -> Array:
    """table[k, ladder, n - first] for |shift| >= _FAR: the recurrence on D itself, unscaled.

    What underflows at k = 0 stays negligible for the few columns in use.
    """
    n = np.arange(first, first + rows, dtype=np.float64)
    size = np.abs(shifts)[:, None]
    table = np.empty((columns, shifts.size, rows))
    np.exp(-0.5 * size * size + n * np.log(size) - 0.5 * gammaln(n + 1.0), out=table[0])
    diagonal = n / size - size
    for k in range(columns - 1):
        np.multiply(diagonal - k / size, table[k], out=table[k + 1])
        if k:
            table[k + 1] -= math.sqrt(k) * table[k - 1]
        table[k + 1] *= 1.0 / math.sqrt(k + 1.0)
    if first < columns:
        # below the diagonal the recurrence is not stable: D[n, k] = (-1)^(k-n) D[k, n]
        for k in range(first + 1, columns):
            for low in range(first, min(k, first + rows)):
                mirrored = table[low, :, k - first] if k < first + rows else 0.0
                table[k, :, low - first] = (-1.0) ** (k - low) * mirrored
    if np.any(shifts < 0.0):
        flip = 1.0 - 2.0 * ((n[None, :] - np.arange(columns)[:, None]) % 2)
        table *= np.where(shifts[None, :, None] < 0.0, flip[:, None, :], 1.0)
    return table


def _displaced_by_quadrature(amplitudes: Array, shifts: Array, first: int, rows: int, nodes: int) -> Array:
    levels = amplitudes.shape[2]
    values, vectors = _position_basis(nodes)
    phase = shifts[:, None] * values
    cosine, sine = np.cos(phase), np.sin(phase)
    from_even = amplitudes[:, :, ::2] @ vectors[:levels:2]
    from_odd = amplitudes[:, :, 1::2] @ vectors[1:levels:2]
    wanted = vectors[first : first + rows]
    out = np.empty((*amplitudes.shape[:2], rows))
    out[:, :, ::2] = (cosine * from_even - sine * from_odd) @ wanted[::2].T
    out[:, :, 1::2] = (sine * from_even + cosine * from_odd) @ wanted[1::2].T
    return out
