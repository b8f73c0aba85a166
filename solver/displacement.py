"""Overlaps <n| D(x) |k> of displaced number states, D(x) = exp(x (b^dag - b)), x real.

Write D[n,k] = x^(n-k) exp(-x^2/2) E[n,k]. From D^dag b^dag b D = (b^dag + x)(b + x) follows,
for fixed n, the three-term recurrence

    sqrt(k+1) E[n,k+1] = (n - k - x^2) E[n,k] - x^2 sqrt(k) E[n,k-1],   E[n,0] = 1/sqrt(n!).

For k <= n it runs from the forbidden region into the oscillating one, which is its stable
direction; the rest follows from D[k,n] = (-1)^(n-k) D[n,k].
(Closed form: Cahill, Glauber, Phys. Rev. 177, 1857 (1969).)
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
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
