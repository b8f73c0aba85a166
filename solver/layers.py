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

_NEGLIGIBLE = 1e-26
_CHUNK = 3_000_000


@dataclass(frozen=True, slots=True)
class LayerProfile:
    """Layers n = 0..L-1 of q states of one sector.

    overlaps[n]: Gram matrix of the parts in layer n, shape (L, q, q);
    links[n]: <psi_i, layer n| H |psi_j, layer n+1>, shape (L, q, q), zero for the last.
    """

    overlaps: Array
    links: Array


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


def number_amplitudes(block: ShiftedBlock, ladders: Array) -> Array:
    """Displaced-ladder amplitudes (q, ladders, cutoff+1) in number layers: (q, ladders, layers).

    Each ladder is D(-G m) applied to its amplitudes; ladders without weight stay zero.
    """
    levels = block.cutoff + 1
    shift = -block.model.displacement_per_quantum * block.m
    weight = np.einsum("qmn,qmn->m", ladders, ladders)
    busy = np.flatnonzero(weight > _NEGLIGIBLE)
    reach = float(np.abs(shift[busy]).max(initial=0.0))
    # the top displaced level reaches classically to (reach + sqrt(M))^2; beyond, a Gaussian tail
    edge = (reach + math.sqrt(levels)) + 5.0
    layers = max(levels, int(math.ceil(edge * edge))) + 1
    out = np.zeros((ladders.shape[0], block.m.size, layers))
    step = max(1, _CHUNK // (layers * levels))
    for first in range(0, busy.size, step):
        some = busy[first : first + step]
        out[:, some] = displaced(ladders[:, some], shift[some], layers)
    return out


def shifted_layers(block: ShiftedBlock, amplitudes: Array) -> LayerProfile:
    """Profile from `number_amplitudes` (q, ladders, layers) of one block."""
    model, m = block.model, block.m
    overlaps = np.einsum("imn,kmn->nik", amplitudes, amplitudes, optimize=True)
    links = np.zeros_like(overlaps)
    here, above = amplitudes[:, :, :-1], amplitudes[:, :, 1:]
    link = model.total_coupling * np.einsum("imn,kmn->nik", m[:, None] * here, above, optimize=True)
    if model.coupling_difference != 0.0:
        # i d Jy in the turned axes: -(d/2)(J+ - J-), ladders listed from the top down
        steps = block.steps[:, None]
        turn = np.einsum("imn,kmn->nik", steps * here[:, :-1], above[:, 1:], optimize=True)
        turn -= np.einsum("imn,kmn->nik", steps * here[:, 1:], above[:, :-1], optimize=True)
        link -= 0.5 * model.coupling_difference * turn
        if block.folded and not block.has_centre:
            sign = block.mirror * (1.0 - 2.0 * (np.arange(here.shape[2]) % 2))
            edge = np.einsum("in,kn->nik", here[:, -1], above[:, -1])
            strength = 0.5 * model.coupling_difference * block.mirror_step
            link += strength * sign[:, None, None] * edge
    climb = np.sqrt(np.arange(1.0, amplitudes.shape[2]) / model.spins)
    links[:-1] = climb[:, None, None] * link
    return LayerProfile(overlaps, links)
