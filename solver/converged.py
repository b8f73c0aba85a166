"""The converged low levels of one model, ready to be cut at any number of quanta.

Whichever basis the levels were found in, they are offered as number layers n = 0, 1, ... per
sector: with them the truncated calculation of an asker is told in advance, or repeated cheaply.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from solver.bounds import RitzSet
from solver.cutoff import CutStates
from solver.excitation import ExcitationSpectrum, excitation_levels
from solver.fock_basis import FockBlock
from solver.forecast import cheaper_basis
from solver.layer_blocks import LadderLayers, LayerBlock, WholeLayers
from solver.layers import (
    LayerProfile,
    NumberAmplitudes,
    excitation_layers,
    fock_layers,
    number_amplitudes,
    shifted_layers,
)
from solver.levels import lowest_levels
from solver.model import CollectiveModel
from solver.moments import Moments, excitation_moments, fock_moments, shifted_moments
from solver.shifted_basis import ShiftedBlock
from solver.spectrum import Spectrum

Array = NDArray[np.float64]

# parities this close (units of the mode) are one doublet: either may be listed first
DOUBLET = 1e-9


@dataclass(slots=True)
class ConvergedSector:
    """Low levels of one sector: energies (q,) and the profile of as many states.

    shown: how many of them belong to the levels asked for.
    """

    energies: Array
    profile: LayerProfile
    shown: int

    def cut(self, count: int) -> CutStates:
        """The lowest `count` states, to be cut at any layer."""
        profile = self.profile
        if count < len(self.energies):
            profile = LayerProfile(
                profile.overlaps[:, :count, :count], profile.links[:, :count, :count], profile.first
            )
        return CutStates(profile, self.energies[:count])

    @property
    def end(self) -> int:
        """One past the last layer that holds anything."""
        return self.profile.first + len(self.profile.overlaps)


@dataclass(slots=True)
class Converged:
    """What the asker's truncated calculation is compared with (unit of the inputs).

    sectors: by parity, or by excitation number where that is conserved; ground: key of the
    sector of the ground state. gap: to the next level of the same parity (next level with bias).
    """

    model: CollectiveModel
    levels: int
    sectors: dict[int, ConvergedSector]
    ground: int
    energy: float
    gap: float | None
    boson_number: float
    order_parameter: float
    proven: bool
    spectrum: Spectrum | None = None
    blocks: ExcitationSpectrum | None = None
    _states: dict[int, _States] = field(default_factory=dict)

    def layers(self, parity: int, top: int, shift: float, widened: int = 0) -> LayerBlock:
        """Number basis of a parity sector up to `top`, with the levels found in it."""
        return self._states[parity].layers(top, shift, widened)


def converge(model: CollectiveModel, levels: int, tolerance: float, state_accuracy: float) -> Converged:
    """Low levels to `tolerance` (unit of the inputs), ground state to an angle `state_accuracy`.

    Raises ConvergenceError as `lowest_levels` does.
    """
    if model.conserves_excitations:
        return _from_blocks(model, levels)
    spectrum = lowest_levels(
        model, levels, tolerance, cheaper_basis(model, levels), state_accuracy=state_accuracy
    )
    return _from_spectrum(model, levels, spectrum)


def order_parameter_of(moments: Moments) -> float:
    """sqrt(<Jx^2>)/(N/2)."""
    return math.sqrt(max(0.0, 4.0 * moments.jxx)) / moments.spins


def _from_spectrum(model: CollectiveModel, levels: int, spectrum: Spectrum) -> Converged:
    ground = spectrum.levels[0]
    sectors: dict[int, ConvergedSector] = {}
    held: dict[int, _States] = {}
    moments: Moments | None = None
    for parity, found in spectrum.sectors.items():
        shown = sum(level.parity == parity for level in spectrum.levels[:levels])
        known = max(shown, min(2, len(found.lower)))
        ritz = found.ritz
        states = _States(ritz)
        profile = states.profile(known)
        sectors[parity] = ConvergedSector(ritz.energies[:known], profile, shown)
        held[parity] = states
        if parity == ground.parity:
            moments = states.moments()
    if moments is None:
        raise AssertionError("the ground level belongs to a sector")
    own = spectrum.sectors[ground.parity].ritz.energies
    return Converged(
        model=model,
        levels=levels,
        sectors=sectors,
        ground=ground.parity,
        energy=float(own[0]),
        gap=max(0.0, float(own[1] - own[0])) if own.size > 1 else None,
        boson_number=moments.quanta,
        order_parameter=order_parameter_of(moments),
        proven=all(level.status == "bracketed" for level in spectrum.levels[:levels]),
        spectrum=spectrum,
        _states=held,
    )


class _States:
    """The vectors of one sector, whichever basis they are written in."""

    def __init__(self, ritz: RitzSet) -> None:
        self.ritz = ritz

    @cached_property
    def _amplitudes(self) -> NumberAmplitudes:
        block = self.ritz.block
        if not isinstance(block, ShiftedBlock):
            raise TypeError("amplitudes on ladders belong to a displaced block")
        return number_amplitudes(block, block.ladders(self.ritz.vectors))

    def profile(self, count: int) -> LayerProfile:
        """Number layers of the lowest `count` states."""
        block = self.ritz.block
        if isinstance(block, FockBlock):
            return fock_layers(block, self.ritz.vectors[:count])
        if not isinstance(block, ShiftedBlock):
            raise TypeError("unknown basis")
        every = self._amplitudes
        return shifted_layers(block, NumberAmplitudes(every.values[:count], every.ladders, every.first))

    def moments(self) -> Moments:
        """Moments of the lowest state."""
        block = self.ritz.block
        if isinstance(block, FockBlock):
            return fock_moments(block, self.ritz.vectors[0])
        if not isinstance(block, ShiftedBlock):
            raise TypeError("unknown basis")
        return shifted_moments(block, self.ritz.vectors[0], self._amplitudes)

    def layers(self, top: int, shift: float, widened: int) -> LayerBlock:
        """The block n <= top that holds these states; widened: how often its window was too small."""
        block = self.ritz.block
        if isinstance(block, ShiftedBlock):
            return LadderLayers(block, self._amplitudes, top, shift, widened)
        return WholeLayers(self.ritz, top, shift)


def _from_blocks(model: CollectiveModel, levels: int) -> Converged:
    spectrum = excitation_levels(model, levels)
    found = spectrum.levels
    ground = found[0]
    parities = [spectrum.parity(level) for level in found]
    sectors = {}
    for block in {level.block for level in found}:
        same = sorted((level for level in found if level.block == block), key=lambda level: level.place)
        shown = sum(level.block == block for level in found[:levels])
        energies = np.array([level.energy for level in same])
        sectors[block] = ConvergedSector(energies, excitation_layers(spectrum, same), shown)
    following = [level for level, own in zip(found[1:], parities[1:], strict=True) if own == parities[0]]
    moments = excitation_moments(spectrum, ground)
    return Converged(
        model=model,
        levels=levels,
        sectors=sectors,
        ground=ground.block,
        energy=ground.energy,
        gap=max(0.0, following[0].energy - ground.energy) if following else None,
        boson_number=moments.quanta,
        order_parameter=order_parameter_of(moments),
        proven=True,
        blocks=spectrum,
    )
