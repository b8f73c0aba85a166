"""Expectation values of one state from which every number-valued observable follows.

Three ways in, one per basis; all states are real in their basis, so <Jy> = <p> = 0 and the
covariances of Jy with Jx and Jz vanish.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from solver.excitation import ExcitationLevel, ExcitationSpectrum
from solver.fock_basis import FockBlock
from solver.layers import NumberAmplitudes
from solver.shifted_basis import ShiftedBlock
from solver.spin import lowered, projections, raised

Array = NDArray[np.float64]

_NEGLIGIBLE = 1e-20


@dataclass(frozen=True, slots=True)
class Moments:
    """Expectation values of one state.

    quanta <a^dag a>, pairs <a^dag a^dag a a>, amplitude <a>, square <a a>; jx, jz, and the
    second moments jxx, jyy, jzz, jxz (symmetrised); schmidt: weights of the spin-boson Schmidt
    decomposition, descending.
    """

    spins: int
    quanta: float
    pairs: float
    amplitude: float
    square: float
    jx: float
    jz: float
    jxx: float
    jyy: float
    jzz: float
    jxz: float
    schmidt: Array


def _schmidt_weights(*parts: Array) -> Array:
    """Squared singular values of a direct sum of matrices, descending."""
    weights = []
    for part in parts:
        squares = part * part
        busy = part[squares.sum(axis=1) > _NEGLIGIBLE][:, squares.sum(axis=0) > _NEGLIGIBLE]
        if busy.size:
            small = busy if busy.shape[0] <= busy.shape[1] else busy.T
            weights.append(np.linalg.eigvalsh(small @ small.T))
    merged = np.maximum(np.concatenate(weights), 0.0)
    return np.sort(merged)[::-1]


def fock_moments(block: FockBlock, vector: Array) -> Moments:
    """Moments of one vector (dimension,) of a number-basis block."""
    psi = block.padded(vector[None])[0]
    size = block.model.spins
    n = np.arange(block.cutoff + 1.0)
    m = projections(size)
    weights = psi * psi
    per_layer, per_spin = weights.sum(axis=1), weights.sum(axis=0)
    higher = raised(psi, block.steps)
    along_x = 0.5 * (higher + lowered(psi, block.steps))
    jxx = float(np.sum(along_x * along_x))
    jzz = float(per_spin @ (m * m))
    total = 0.25 * size * (size + 2.0)
    if block.parity == 0:
        schmidt = _schmidt_weights(psi)
    else:
        odd = (1 - block.parity) // 2
        schmidt = _schmidt_weights(psi[::2, odd::2], psi[1::2, 1 - odd :: 2])
    return Moments(
        spins=size,
        quanta=float(per_layer @ n),
        pairs=float(per_layer @ (n * (n - 1.0))),
        amplitude=float(np.sum(np.sqrt(n[1:, None]) * psi[:-1] * psi[1:])),
        square=float(np.sum(np.sqrt(n[2:, None] * (n[2:, None] - 1.0)) * psi[:-2] * psi[2:])),
        jx=float(np.sum(psi * along_x)),
        jz=float(per_spin @ m),
        jxx=jxx,
        jyy=total - jxx - jzz,
        jzz=jzz,
        jxz=float(np.sum(along_x * m * psi)),
        schmidt=schmidt,
    )


def excitation_moments(spectrum: ExcitationSpectrum, level: ExcitationLevel) -> Moments:
    """Moments of a level with a definite excitation number."""
    size = spectrum.model.spins
    weights = level.amplitudes**2
    j = np.arange(weights.size)
    n = level.block - j
    m = j - 0.5 * size
    if spectrum.turned:
        m = -m
    along = float(weights @ m)
    along_square = float(weights @ (m * m))
    across_square = 0.5 * (0.25 * size * (size + 2.0) - along_square)
    cosine, sine = spectrum.tilt
    return Moments(
        spins=size,
        quanta=float(weights @ n),
        pairs=float(weights @ (n * (n - 1.0))),
        amplitude=0.0,
        square=0.0,
        jx=sine * along,
        jz=cosine * along,
        jxx=sine**2 * along_square + cosine**2 * across_square,
        jyy=across_square,
        jzz=cosine**2 * along_square + sine**2 * across_square,
        jxz=sine * cosine * (along_square - across_square),
        schmidt=np.sort(weights)[::-1],
    )


def shifted_moments(block: ShiftedBlock, vector: Array, layers: NumberAmplitudes) -> Moments:
    """Moments of one vector of a displaced-ladder block.

    layers: the same state (its first) in number layers; used for the Schmidt weights only.
    """
    psi = block.ladders(vector[None])
    size = block.model.spins
    shift = block.model.displacement_per_quantum * block.m[:, None]
    root = np.sqrt(np.arange(1.0, block.cutoff + 1.0))
    once = _annihilated(psi[0], shift, root)
    twice = _annihilated(once, shift, root)
    m = block.m
    along_z = block.neighbours(psi, 0.5 * block.coupling.overlap)[0]
    inside = along_z[:, : block.cutoff + 1]
    per_ladder = np.sum(psi[0] * psi[0], axis=1)
    jxx, jzz = float(per_ladder @ (m * m)), float(np.sum(along_z * along_z))
    total = 0.25 * size * (size + 2.0)
    with_bias = block.parity == 0
    if with_bias:
        schmidt = _schmidt_weights(layers.values[0])
    else:
        schmidt = _schmidt_weights(layers.values[0, :, ::2], layers.values[0, :, 1::2])
    return Moments(
        spins=size,
        quanta=float(np.sum(once * once)),
        pairs=float(np.sum(twice * twice)),
        amplitude=float(np.sum(psi[0] * once)) if with_bias else 0.0,
        square=float(np.sum(psi[0] * twice)),
        jx=float(per_ladder @ m) if with_bias else 0.0,
        jz=float(np.sum(psi[0] * inside)),
        jxx=jxx,
        jyy=total - jxx - jzz,
        jzz=jzz,
        jxz=float(np.sum(m[:, None] * psi[0] * inside)) if with_bias else 0.0,
        schmidt=schmidt,
    )


def _annihilated(psi: Array, shift: Array, root: Array) -> Array:
    """A psi = (b - G m) psi on every ladder; stays inside the truncation."""
    out = -shift * psi
    out[:, :-1] += root * psi[:, 1:]
    return out
