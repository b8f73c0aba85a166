"""Matrix elements of the collective spin J = N/2 (plain numpy, no model).

Labels: j = m + N/2 = 0..N counts spin excitations along the quantisation axis.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


def projections(spins: int) -> Array:
    """Eigenvalues m = -N/2..N/2 of one spin component, ascending; shape (N+1,)."""
    return np.arange(spins + 1, dtype=np.float64) - 0.5 * spins


def raising_elements(spins: int) -> Array:
    """<m+1| J+ |m> = sqrt(J(J+1) - m(m+1)) = sqrt((j+1)(N-j)), j = 0..N-1; shape (N,)."""
    step = np.arange(spins, dtype=np.float64)
    elements: Array = np.sqrt((step + 1.0) * (spins - step))
    return elements


def raised(amplitudes: Array, elements: Array) -> Array:
    """J+ applied along the last axis (length N+1)."""
    out = np.zeros_like(amplitudes)
    out[..., 1:] = elements * amplitudes[..., :-1]
    return out


def lowered(amplitudes: Array, elements: Array) -> Array:
    """J- applied along the last axis (length N+1)."""
    out = np.zeros_like(amplitudes)
    out[..., :-1] = elements * amplitudes[..., 1:]
    return out
