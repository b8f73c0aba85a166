"""Gibbs state of one spin sector in the number basis n <= cutoff, block by block.

Only two lists per symmetry block are needed: the diagonal of exp(-beta H) and its elements between
states two spin excitations apart in the same layer; boson number, weights per layer, <Jz> and <Jx^2>
follow. Three routes to them, chosen by predicted cost: all eigenpairs of a small block; the lowest
eigenpairs, counted by inertia, where the temperature is low; the Chebyshev series of
exp(-beta H / 2) on sparse columns, where it is high.

Source of the series: Tal-Ezer, Kosloff, J. Chem. Phys. 81, 3967 (1984); imaginary time, common practice.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.linalg.blas import daxpy
from scipy.sparse import csr_array, dia_array, eye_array
from scipy.special import ive, logsumexp

from solver.eigen import count_below_zero, dense_from_band, lowest_of_band
from solver.floor import Floors
from solver.fock_basis import FockBlock
from solver.model import CollectiveModel

Array = NDArray[np.float64]
Route = Literal["dense", "lowest", "series"]

# beyond this many mode quanta per temperature the series loses the ground state in rounding
_COLDEST_SERIES = 8.0
_SMALL = 120
_SERIES_END = 1e-17
_COLUMNS = 192
# seconds per elementary operation, as measured on the development machine
_DENSE_COST = 6e-10
_SERIES_COST = 2e-10
_LOWEST_COST = 1.1e-9


@dataclass(frozen=True, slots=True)
class SectorTrace:
    """Gibbs averages of one sector of S spins with n <= cutoff.

    log_partition: ln Tr exp(-beta H), over the levels kept. layers: probability of each n,
    shape (cutoff+1,). jz, jxx: <Jz> and <Jx^2>. omitted: bound on the Boltzmann weight of the
    levels left out, as a part of the partition function.
    """

    log_partition: float
    layers: Array
    jz: float
    jxx: float
    omitted: float

    @property
    def cutoff(self) -> int:
        """Largest n kept."""
        return self.layers.size - 1

    @property
    def edge(self) -> float:
        """Larger weight of the last two layers: what the truncation presses against."""
        return float(self.layers[-2:].max())


def bare_mode_trace(mode: float, beta: float, cutoff: int) -> SectorTrace:
    """The sector J = 0: the mode alone, a truncated geometric distribution."""
    logs = -beta * mode * np.arange(cutoff + 1.0)
    total = float(logsumexp(logs))
    return SectorTrace(total, np.exp(logs - total), 0.0, 0.0, 0.0)


def sector_trace(model: CollectiveModel, beta: float, cutoff: int, ceiling: float) -> SectorTrace:
    """Gibbs averages of the truncated sector; levels above `ceiling` (unit of the model) may be left out."""
    floors = Floors(model)
    shift = floors.ground - 0.05 * model.mode
    parities = (1, -1) if model.conserves_parity else (0,)
    parts = []
    for parity in parities:
        block = FockBlock(model, parity, cutoff, shift)
        if block.dimension:
            parts.append((block, *_block_diagonals(block, beta, ceiling)))
    top = max(part[1] for part in parts)
    layers, jz, jxx, total, cut = np.zeros(cutoff + 1), 0.0, 0.0, 0.0, False
    if top == -math.inf:
        # nothing below the ceiling: all the weight there is lies in what was left out
        return SectorTrace(-math.inf, layers, 0.0, 0.0, 1.0)
    for block, scale, diagonal, beside, complete in parts:
        cut = cut or not complete
        factor = math.exp(scale - top) if scale > -math.inf else 0.0
        if factor == 0.0:
            continue
        j = block.raised
        total += factor * float(diagonal.sum())
        layers += factor * np.bincount(block.quanta, diagonal, cutoff + 1)
        jz += factor * float(diagonal @ (j - 0.5 * model.spins))
        jxx += factor * _along_square(block, diagonal, beside)
    log_partition = math.log(total) + top
    omitted = _omitted(model, beta, ceiling, floors, log_partition) if cut else 0.0
    return SectorTrace(log_partition, layers / total, jz / total, jxx / total, omitted)


def _along_square(block: FockBlock, diagonal: Array, beside: Array) -> float:
    """Trace with Jx^2 = (J+J+ + J-J- + J+J- + J-J+)/4."""
    j, steps = block.raised, block.steps
    before = np.concatenate(([0.0], steps))
    after = np.concatenate((steps, [0.0]))
    trace = 0.25 * float(diagonal @ (before * before + after * after)[j])
    hop = np.zeros(block.model.spins + 1)
    hop[:-2] = steps[:-1] * steps[1:]
    return trace + 0.5 * float(beside @ hop[j])


def _omitted(
    model: CollectiveModel, beta: float, ceiling: float, floors: Floors, log_partition: float
) -> float:
    """Bound on the Boltzmann weight above the ceiling, relative to the partition function.

    Each level lies above the one of s w n + floor((1-s) w) with the same number, and above the ceiling.
    """
    best = math.inf
    for share in (0.25, 0.5, 0.7, 0.85):
        step, bottom = share * model.mode, floors.share_floor(share)
        layers = max(0, math.ceil((ceiling - bottom) / step))
        logs = [
            math.log(max(layers, 1)) - beta * ceiling,
            -beta * (bottom + step * layers) - math.log(-math.expm1(-beta * step)),
        ]
        best = min(best, float(logsumexp(logs)))
    return math.exp(min(0.0, best + math.log(model.spins + 1.0) - log_partition))


def _stride(block: FockBlock) -> int:
    """Distance in the block between (n, j) and (n, j+2)."""
    return 2 if block.parity == 0 else 1


def _block_diagonals(block: FockBlock, beta: float, ceiling: float) -> tuple[float, Array, Array, bool]:
    """Logarithm of a scale, diagonal and next diagonal of exp(-beta H)/scale, and whether all is in."""
    width = block.half_width
    cold = beta * block.model.mode > _COLDEST_SERIES
    if block.dimension <= _SMALL:
        return _from_all(block, beta)
    dense = _DENSE_COST * block.dimension**3
    series = math.inf if cold else _SERIES_COST * series_operations(block.model, block.cutoff, beta)
    blocks = 2 if block.parity else 1
    likely = int(levels_within(block.model, ceiling - block.shift) / blocks)
    # counting costs too: only where the levels may be few
    if lowest_seconds(block.dimension, width, likely // 2) < min(dense, series):
        count = count_below_zero(_lowered(block.band, ceiling - block.shift), width)
        few = count + 3 < block.dimension // 3
        if few and lowest_seconds(block.dimension, width, count) < min(dense, series):
            found = _from_lowest(block, beta, ceiling, count)
            if found is not None:
                return found
    return _from_all(block, beta) if dense < series else _from_series(block, beta)


def levels_within(model: CollectiveModel, room: float) -> float:
    """About how many levels lie within `room` of the ground state: one oscillator and the spin."""
    room = max(room, 0.0)
    field = max(
        math.hypot(model.splitting, model.bias), model.total_coupling**2 / model.mode, 1e-6 * model.mode
    )
    ladders = min(model.spins + 1.0, 1.0 + room / field)
    return 1.0 + ladders * (1.0 + 0.5 * room / model.mode)


def lowest_seconds(dimension: int, width: int, count: int) -> float:
    """Predicted time for the lowest `count` levels of one block."""
    steps = 20.0 + 2.5 * count
    return _LOWEST_COST * dimension * steps * (6.0 * width + 2.0 * steps) + 2e-4


def block_seconds(model: CollectiveModel, cutoff: float, beta: float, room: float) -> float:
    """Predicted time for one symmetry block; room: what lies between ground state and ceiling."""
    blocks = 2 if model.conserves_parity else 1
    dimension = (cutoff + 1.0) * (model.spins + 1.0) / blocks
    width = (model.spins + 1.0) / blocks + 1.0
    times = [_DENSE_COST * dimension**3 + 3e-4]
    if dimension > _SMALL:
        if beta * model.mode <= _COLDEST_SERIES:
            times.append(_SERIES_COST * series_operations(model, cutoff, beta) + 2e-3)
        count = 2.0 * levels_within(model, room) / blocks
        if count < dimension / 3.0:
            times.append(lowest_seconds(int(dimension), int(width), int(count)))
    return min(times)


def _lowered(band: Array, line: float) -> Array:
    moved = band.copy(order="F")
    moved[0] -= line
    return moved


def _upper_edge(matrix: csr_array) -> float:
    """Gershgorin bound on the spectrum of H - shift."""
    return float(abs(matrix).sum(axis=1).max())


def series_degree(width: float, beta: float) -> int:
    """Terms of the series for a spectrum `width` wide (unit of the model)."""
    strength = 0.25 * beta * width
    return int(math.sqrt(2.0 * strength * 40.0) + 14.0 + 12.0 / (1.0 + strength))


def series_operations(model: CollectiveModel, cutoff: float, beta: float) -> float:
    """Elementary operations of the series for one symmetry block."""
    blocks = 2 if model.conserves_parity else 1
    dimension = (cutoff + 1.0) * (model.spins + 1.0) / blocks
    reach = (abs(model.rotating) + abs(model.counter)) * math.sqrt(cutoff * model.spins)
    span = model.mode * cutoff + (abs(model.splitting) + abs(model.bias)) * model.spins + 1.5 * reach
    degree = series_degree(span, beta)
    rows = min(dimension, 2.0 * degree * (model.spins + 1.0) / blocks)
    return degree * 9.0 * dimension * rows


def _weighted(block: FockBlock, weights: Array, vectors: Array) -> tuple[Array, Array]:
    """Diagonal and next diagonal of sum_k weights_k |k><k|, vectors as rows."""
    stride = _stride(block)
    scaled = np.sqrt(weights)[:, None] * vectors
    beside = np.zeros(block.dimension)
    beside[:-stride] = np.einsum("ki,ki->i", scaled[:, :-stride], scaled[:, stride:])
    return np.einsum("ki,ki->i", scaled, scaled), beside


def _from_all(block: FockBlock, beta: float) -> tuple[float, Array, Array, bool]:
    values, columns = np.linalg.eigh(dense_from_band(block.band))
    weights = np.exp(-beta * (values - values[0]))
    kept = weights > 1e-34
    scale = -beta * (float(values[0]) + block.shift)
    return (scale, *_weighted(block, weights[kept], columns[:, kept].T), True)


def _from_lowest(
    block: FockBlock, beta: float, ceiling: float, count: int
) -> tuple[float, Array, Array, bool] | None:
    """The `count` levels below the ceiling; None when the iteration did not find them all."""
    nothing = np.zeros(block.dimension)
    if count == 0:
        return -math.inf, nothing, nothing, False
    found = lowest_of_band(block.band, count, 2, None, 1e-9)
    images = block.act(found.vectors[:count]).inside - found.values[:count, None] * found.vectors[:count]
    if found.values[count - 1] > ceiling - block.shift or np.abs(images).max() > 1e-5 * block.model.mode:
        return None
    values = found.values[:count]
    weights = np.exp(-beta * (values - values[0]))
    scale = -beta * (float(values[0]) + block.shift)
    return (scale, *_weighted(block, weights, found.vectors[:count]), False)


def sparse_block(block: FockBlock) -> csr_array:
    """H - shift of a number-basis block, compressed rows."""
    band = block.band
    used = [k for k in range(band.shape[0]) if k == 0 or np.any(band[k])]
    size = block.dimension
    data = np.zeros((2 * len(used) - 1, size))
    offsets = np.zeros(2 * len(used) - 1, dtype=np.int64)
    for at, k in enumerate(used):
        data[at], offsets[at] = band[k], -k
        if k:
            mirrored = len(used) + at - 1
            data[mirrored, k:], offsets[mirrored] = band[k, : size - k], k
    matrix = csr_array(dia_array((data, offsets), shape=(size, size)))
    matrix.eliminate_zeros()
    return matrix


def _from_series(block: FockBlock, beta: float) -> tuple[float, Array, Array, bool]:
    """Columns of exp(-beta (H - shift)/2), each only as far as the series can carry it."""
    matrix = sparse_block(block)
    upper = _upper_edge(matrix)
    strength = 0.25 * beta * upper
    orders = np.arange(series_degree(upper, beta) + 40)
    terms = np.where(orders == 0, 1.0, 2.0) * (1.0 - 2.0 * (orders % 2)) * ive(orders, strength)
    terms = terms[: int(np.flatnonzero(np.abs(terms) > _SERIES_END)[-1]) + 1]
    size, stride, quanta = block.dimension, _stride(block), block.quanta
    diagonal, beside = np.zeros(size), np.zeros(size)
    # twice the variable of the polynomials, -1 taken in: one product per term of the recurrence
    doubled = csr_array(matrix * (4.0 / upper) - 2.0 * eye_array(size, format="csr"))
    first = 0
    while first < size:
        last = min(size, first + _COLUMNS)
        low = int(np.searchsorted(quanta, quanta[first] - terms.size))
        high = int(np.searchsorted(quanta, quanta[last - 1] + terms.size, side="right"))
        columns = _series_columns(doubled[low:high, low:high], terms, first - low, last - first)
        diagonal[low:high] += np.einsum("ik,ik->i", columns, columns)
        beside[low : high - stride] += np.einsum("ik,ik->i", columns[:-stride], columns[stride:])
        first = last
    return -beta * block.shift, diagonal, beside, True


def _series_columns(doubled: csr_array, terms: Array, first: int, count: int) -> Array:
    """Sum of terms_k T_k(x) on the unit columns first, first + 1, ...; doubled: the matrix 2 x."""
    previous = np.zeros((doubled.shape[0], count))
    previous[first + np.arange(count), np.arange(count)] = 1.0
    current = 0.5 * (doubled @ previous)
    total: Array = terms[0] * previous
    flat = total.reshape(-1)
    if terms.size > 1:
        flat = daxpy(current.reshape(-1), flat, a=terms[1])
    for term in terms[2:]:
        following = doubled @ current
        following -= previous
        previous, current = current, following
        flat = daxpy(current.reshape(-1), flat, a=term)
    return flat.reshape(total.shape)
