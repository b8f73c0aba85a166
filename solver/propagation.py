"""Evolution of number-basis states under the model, as weights per number layer on a grid of times.

exp(-i H t) is expanded in Chebyshev polynomials; H and the starts are real, so the even terms give the
real part and the odd ones the imaginary part, and one run of the recurrence serves all times.
Source: Tal-Ezer, Kosloff, J. Chem. Phys. 81, 3967 (1984).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array, eye_array

from solver.floor import Floors
from solver.fock_basis import FockBlock
from solver.gibbs import sparse_block
from solver.model import CollectiveModel
from solver.spin import lowered, raised

Array = NDArray[np.float64]

_TERMS_AT_ONCE = 96
_LARGEST_WORK = 12_000_000
_FLUSH_ABOVE = 1e150
# weights below this need double precision
SINGLE_DOWN_TO = 1e-7
# seconds per elementary operation, as measured on the development machine
_STEP_COST = 1e-9
_SUM_COST = 4e-11
_CALL_COST = 2e-5


@dataclass(frozen=True, slots=True)
class Evolution:
    """Weights per layer, summed over the starts with their probabilities, shape (times, cutoff+1).

    escaped: bound on the squared distance between cut and full evolution at the last time, summed
    likewise (Duhamel: the integral of the norm of what H sends above the cutoff).
    """

    layers: Array
    escaped: float


def bessel_table(arguments: Array, orders: int) -> Array:
    """J_k(z) for k < orders and every z >= 0, shape (arguments, orders); backward recurrence (Miller)."""
    out = np.zeros((arguments.size, orders))
    flat = arguments < 1e-8
    z = np.where(flat, 1.0, arguments)
    start = orders + 40 + int(2.0 * math.sqrt(orders))
    start = max(start, int(z.max(initial=0.0) + 12.0 * z.max(initial=1.0) ** (1.0 / 3.0)) + 40)
    above, here, total = np.zeros_like(z), np.full_like(z, 1e-150), np.zeros_like(z)
    for k in range(start, 0, -1):
        above, here = here, (2.0 * k / z) * here - above
        if k - 1 < orders:
            out[:, k - 1] = here
        if (k - 1) % 2 == 0:
            total += (2.0 if k > 1 else 1.0) * here
        large = np.abs(here) > _FLUSH_ABOVE
        if large.any():
            factor = np.where(large, 1.0 / _FLUSH_ABOVE, 1.0)
            above, here, total = above * factor, here * factor, total * factor
            out[large, min(k - 1, orders) :] *= 1.0 / _FLUSH_ABOVE
    out /= total[:, None]
    out[flat] = 0.0
    out[flat, 0] = 1.0
    if orders > 1:
        out[flat, 1] = 0.5 * arguments[flat]
    return out


def terms_needed(argument: float, *, single: bool) -> int:
    """Chebyshev terms after which J_k(argument) is negligible."""
    return int(argument + (7.0 if single else 12.0) * (argument + 1.0) ** (1.0 / 3.0)) + 12


def spectral_width(model: CollectiveModel, cutoff: int) -> float:
    """About what the spectrum of the truncated model spans."""
    reach = (abs(model.rotating) + abs(model.counter)) * math.sqrt((cutoff + 1.0) * model.spins)
    return model.mode * cutoff + math.hypot(model.splitting, model.bias) * model.spins + 1.5 * reach


def evolve(
    model: CollectiveModel, starts: Array, chances: Array, times: Array, *, single: bool = False
) -> Evolution:
    """Evolution of real starts, shape (starts, cutoff+1, N+1), with probabilities `chances`.

    times: ascending from 0 (inverse unit of the model). single: single precision, weights to about
    1e-7 of the larger ones.
    """
    cutoff = starts.shape[1] - 1
    shift = Floors(model).ground
    layers = np.zeros((times.size, cutoff + 1))
    escaped = np.zeros((starts.shape[0], times.size))
    parities = (1, -1) if model.conserves_parity else (0,)
    blocks = [FockBlock(model, parity, cutoff, shift) for parity in parities]
    matrices = [sparse_block(block) for block in blocks]
    upper = max(float(abs(matrix).sum(axis=1).max()) for matrix in matrices) or 1.0
    table = _terms(0.5 * upper * times, single=single)
    for block, matrix in zip(blocks, matrices, strict=True):
        columns = block.flatten(starts)
        busy = np.flatnonzero(np.any(columns != 0.0, axis=1))
        if not busy.size:
            continue
        doubled = matrix * (4.0 / upper) - 2.0 * eye_array(block.dimension, format="csr")
        doubled = csr_array(doubled.astype(table.dtype))
        at_once = max(1, _LARGEST_WORK // (2 * times.size * block.dimension))
        for first in range(0, busy.size, at_once):
            part = busy[first : first + at_once]
            weights, lost = _evolve_block(block, doubled, columns[part].T.copy(), chances[part], table)
            layers += weights
            # both parities of one start leave through different states
            escaped[part] = np.hypot(escaped[part], lost)
    distance = np.trapezoid(escaped, times, axis=1) if times.size > 1 else np.zeros(starts.shape[0])
    return Evolution(layers, float(chances @ distance**2))


def _evolve_block(
    block: FockBlock, doubled: csr_array, columns: Array, chances: Array, table: Array
) -> tuple[Array, Array]:
    """Layer weights (times, cutoff+1), and the norm leaving per column and time."""
    size = max(1, _LARGEST_WORK // (2 * columns.size))
    layers, lost = [], []
    for first in range(0, table.shape[0], size):
        part = table[first : first + size]
        real, imaginary = _amplitudes(doubled, columns, part)
        weights = np.zeros((part.shape[0], block.cutoff + 1))
        leaving = np.zeros((columns.shape[1], part.shape[0]))
        starts = np.searchsorted(block.quanta, np.arange(block.cutoff + 1))
        edge = block.quanta == block.cutoff
        for component in (real, imaginary):
            squares = np.einsum("tdc,tdc,c->td", component, component, chances.astype(component.dtype))
            weights += np.add.reduceat(squares.astype(np.float64), starts, axis=1)
            leaving += _leaving(block, component[:, edge].astype(np.float64))
        layers.append(weights)
        lost.append(np.sqrt(leaving))
    return np.concatenate(layers), np.concatenate(lost, axis=1)


def _leaving(block: FockBlock, edge: Array) -> Array:
    """Squared norm of what H sends above the cutoff, (columns, times); edge: (times, states, columns)."""
    model = block.model
    full = np.zeros((edge.shape[0], edge.shape[2], model.spins + 1))
    full[:, :, block.raised[block.quanta == block.cutoff]] = edge.transpose(0, 2, 1)
    moved = model.rotating * lowered(full, block.steps) + model.counter * raised(full, block.steps)
    out: Array = (block.cutoff + 1.0) / model.spins * np.einsum("tcj,tcj->ct", moved, moved)
    return out


def _terms(arguments: Array, *, single: bool) -> Array:
    """Coefficients of the polynomials per time; even ones real, odd ones times -i."""
    count = terms_needed(float(arguments.max()), single=single)
    table = bessel_table(arguments, count)
    table[:, 1:] *= 2.0
    # (-i)^k: 1, -i, -1, i
    table *= np.where(np.arange(count) % 4 < 2, 1.0, -1.0)
    return np.asarray(table.astype(np.float32 if single else np.float64))


def _amplitudes(doubled: csr_array, columns: Array, table: Array) -> tuple[Array, Array]:
    """Real and imaginary part of the columns at each time, up to a phase: (times, states, columns).

    doubled: twice the variable of the polynomials; table: coefficients (times, terms).
    """
    kind = table.dtype
    negligible = 1e-10 if kind == np.float32 else 1e-17
    count = int(np.flatnonzero(np.abs(table).max(axis=0) > negligible)[-1]) + 1
    flat = (table.shape[0], columns.size)
    parts = (np.zeros(flat, dtype=kind), np.zeros(flat, dtype=kind))
    previous: Array = columns.astype(kind)
    current: Array = 0.5 * (doubled @ previous)
    stack = np.empty((_TERMS_AT_ONCE, columns.size), dtype=kind)
    for first in range(0, count, _TERMS_AT_ONCE):
        used = min(_TERMS_AT_ONCE, count - first)
        for row in range(used):
            stack[row] = previous.reshape(-1)
            following = doubled @ current
            following -= previous
            previous, current = current, following
        for odd in (0, 1):
            weights = table[:, first + odd : first + used : 2]
            # times are ascending: the early ones need no high terms
            busy = np.abs(weights).max(axis=1, initial=0.0) > negligible
            begin = int(np.argmax(busy)) if busy.any() else table.shape[0]
            if begin < table.shape[0]:
                parts[odd][begin:] += weights[begin:] @ stack[odd:used:2]
    shape = (table.shape[0], *columns.shape)
    return parts[0].reshape(shape), parts[1].reshape(shape)


def evolution_seconds(
    model: CollectiveModel, cutoff: int, starts: int, times: Array, *, single: bool
) -> float:
    """Predicted time of `evolve` for starts in one symmetry block each."""
    blocks = 2 if model.conserves_parity else 1
    dimension = (cutoff + 1.0) * (model.spins + 1.0) / blocks
    terms = terms_needed(0.5 * spectral_width(model, cutoff) * float(times.max(initial=0.0)), single=single)
    per_term = dimension * starts * (9.0 * _STEP_COST + times.size * _SUM_COST * (1.0 if single else 2.0))
    return blocks * 1e-3 + terms * (per_term + blocks * _CALL_COST)
