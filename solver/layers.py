"""Number layers of converged states: what each count n of quanta holds, and how layers couple.

From one solve they give the error of every smaller truncation in the number basis.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from solver.displacement import displaced
from solver.excitation import ExcitationLevel, ExcitationSpectrum
from solver.fock_basis import FockBlock
from solver.shifted_basis import ShiftedBlock
from solver.spin import lowered, raised

Array = NDArray[np.float64]

_NEGLIGIBLE = 1e-21
_TAIL = 4.3
_CHUNK = 500_000


@dataclass(frozen=True, slots=True)
class LayerProfile:
    """Layers n = first .. first+L-1 of q states of one sector; below and above is nothing.

    overlaps[l]: Gram matrix of the parts in layer first + l, shape (L, q, q);
    links[l]: <psi_i, layer first+l| H |psi_j, next layer>, shape (L, q, q), zero for the last.
    """

    overlaps: Array
    links: Array
    first: int = 0


@dataclass(frozen=True, slots=True)
class NumberAmplitudes:
    """Displaced-ladder states in number layers, without the parts that hold nothing.

    values: (q, ladders, layers) for the ladders ladders.start..ladders.stop-1 of the block and
    the layers n = first, first+1, ...; first is even.
    """

    values: Array
    ladders: slice
    first: int


def fock_layers(block: FockBlock, vectors: Array) -> LayerProfile:
    """Profile of vectors (q, dimension) of a number-basis block."""
    psi = block.padded(vectors)
    model = block.model
    overlaps = np.einsum("inj,knj->nik", psi, psi)
    pulled = model.rotating * raised(psi, block.steps) + model.counter * lowered(psi, block.steps)
    climb = np.sqrt(np.arange(1.0, block.cutoff + 1.0) / model.spins)
    links = np.zeros_like(overlaps)
    links[:-1] = climb[:, None, None] * np.einsum("inj,knj->nik", psi[:, :-1], pulled[:, 1:])
    return LayerProfile(overlaps, links)


def excitation_layers(spectrum: ExcitationSpectrum, levels: list[ExcitationLevel]) -> LayerProfile:
    """Profile of levels with one common excitation number K: layer n holds only j = K - n."""
    block, model = levels[0].block, spectrum.model
    states = np.array([level.amplitudes for level in levels])
    j = np.arange(states.shape[1])
    overlaps = np.zeros((block + 2, len(levels), len(levels)))
    overlaps[block - j] = np.einsum("ij,kj->jik", states, states)
    links = np.zeros_like(overlaps)
    # layer n = K - j - 1 holds j + 1, the one above it j
    element = np.sqrt((block - j[:-1]) * (j[:-1] + 1.0) * (model.spins - j[:-1]) / model.spins)
    pairs = np.einsum("ij,kj->jik", states[:, 1:], states[:, :-1])
    links[block - j[1:]] = model.rotating * element[:, None, None] * pairs
    return LayerProfile(overlaps, links)


def number_amplitudes(block: ShiftedBlock, ladders: Array) -> NumberAmplitudes:
    """Displaced-ladder amplitudes (q, ladders, cutoff+1) in number layers.

    Each ladder is D(-G m) applied to its amplitudes.
    """
    weights = ladders * ladders
    busy = np.flatnonzero(weights.sum(axis=(0, 2)) > _NEGLIGIBLE)
    kept = slice(int(busy[0]), int(busy[-1]) + 1)
    top = int(np.flatnonzero(weights.sum(axis=(0, 1)) > _NEGLIGIBLE)[-1]) + 1
    shift = -block.model.displacement_per_quantum * block.m[kept]
    first, end = _window(shift, top)
    layers = max(end, top) - first
    out = np.zeros((ladders.shape[0], shift.size, layers))
    step = max(1, _CHUNK // (layers * top))
    for start in range(0, shift.size, step):
        some = slice(start, start + step)
        part = ladders[:, kept][:, some, :top]
        low, high = _window(shift[some], top)
        low, high = max(low, first), min(high, first + layers)
        out[:, some, low - first : high - first] = displaced(part, shift[some], low, high - low)
    return NumberAmplitudes(out, kept, first)


def _window(shifts: Array, levels: int) -> tuple[int, int]:
    """Layers that displaced levels below `levels` reach: an even first one, and one past the end.

    Level k reaches classically to (|shift| +- sqrt(k))^2; beyond are Gaussian tails.
    """
    size = np.abs(shifts)
    upper = float(size.max()) + math.sqrt(levels) + _TAIL
    lower = max(0.0, float(size.min()) - math.sqrt(levels) - _TAIL)
    return int(lower * lower) // 2 * 2, max(levels, math.ceil(upper * upper) + 1)


def shifted_layers(block: ShiftedBlock, amplitudes: NumberAmplitudes) -> LayerProfile:
    """Profile of the states behind `amplitudes`."""
    model, values = block.model, amplitudes.values
    # layers first: (layers, q, ladders)
    psi = np.ascontiguousarray(values.transpose(2, 0, 1))
    overlaps = psi @ psi.transpose(0, 2, 1)
    links = np.zeros_like(overlaps)
    here, above = psi[:-1], psi[1:].transpose(0, 2, 1)
    pulled = model.total_coupling * block.m[amplitudes.ladders] * here
    if model.coupling_difference != 0.0:
        pulled += _turned(block, amplitudes, here)
    link = pulled @ above
    first = amplitudes.first
    climb = np.sqrt((first + np.arange(1.0, psi.shape[0])) / model.spins)
    links[:-1] = climb[:, None, None] * link
    return LayerProfile(overlaps, links, first)


def _turned(block: ShiftedBlock, amplitudes: NumberAmplitudes, here: Array) -> Array:
    """-(d/2)(J+ - J-) applied to the left of a link, in the turned axes i d Jy.

    here: (layers, q, ladders), ladders from the top down.
    """
    half = 0.5 * block.model.coupling_difference
    kept = amplitudes.ladders
    steps = block.steps[kept.start : kept.stop - 1]
    out = np.zeros_like(here)
    out[..., 1:] -= half * steps * here[..., :-1]
    out[..., :-1] += half * steps * here[..., 1:]
    if block.folded and not block.has_centre and kept.stop == block.m.size:
        n = amplitudes.first + np.arange(here.shape[0])
        sign = block.mirror * (1.0 - 2.0 * (n % 2))
        out[..., -1] += half * block.mirror_step * sign[:, None] * here[..., -1]
    return out
