"""What a question will need before it is asked: cutoffs, basis, time and memory.

The forms follow the physics (mean quanta and their spread in the number basis; displacement and
kinetic coupling in the displaced one), the constants were fitted to solved models. A poor
forecast costs time, never correctness: the search goes on until the bounds hold.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

from solver.blocks import BasisName
from solver.model import CollectiveModel

# seconds per floating point operation in the banded kernels, and fixed costs
_SECONDS_PER_OPERATION = 5.0e-10
_SECONDS_PER_SECTOR = 1.5e-3
_SECONDS_PER_BLOCK = 4.0e-5
_SECONDS_PER_AMPLITUDE = 5.0e-8
SOLVES = 28.0
PLAIN_COUNT_UP_TO = 100


def classical_quanta(model: CollectiveModel) -> float:
    """Boson number of the classical ground state, (t/2w)^2 N (1 - (w w0/t^2)^2)."""
    pull = _pull(model)
    field = abs(model.splitting)
    if pull == 0.0 or (pull <= field and model.bias == 0.0):
        return 0.0
    tilt = min(1.0, field / pull) if model.bias == 0.0 else 0.0
    return model.spins * pull / (4.0 * model.mode) * (1.0 - tilt * tilt)


def levels_per_sector(model: CollectiveModel, levels: int) -> int:
    """How many levels to ask of each sector first: above the transition parities pair up."""
    if not model.conserves_parity:
        return levels
    if _pull(model) > abs(model.splitting) and levels > 1:
        return (levels + 1) // 2
    return levels // 2 + 1


def _pull(model: CollectiveModel) -> float:
    """(lr + lc)^2 / w, to be compared with w0."""
    strongest = max(abs(model.total_coupling), abs(model.coupling_difference))
    return strongest * strongest / model.mode


def first_cutoff(model: CollectiveModel, basis: BasisName, levels: int) -> int:
    """Cutoff to begin with, for `levels` levels at a tolerance near 1e-9 of the mode."""
    share = levels_per_sector(model, levels)
    pull = _pull(model)
    if basis == "fock" and model.spins == 1:
        reach = 0.5 * max(abs(model.total_coupling), abs(model.coupling_difference)) / model.mode
        bow = (9.5 + levels / 3.0) * reach**0.7
        return int(0.5 * levels + 5.5 + 1.4 * reach * reach + bow)
    if basis == "fock":
        mean = classical_quanta(model)
        softness = min(1.0, pull / (abs(model.splitting) + abs(model.bias) + 1e-300))
        spread = math.sqrt(mean + softness**2 * (1.0 + model.spins ** (1.0 / 3.0)))
        return int(share + 7 + mean + (6.0 + 0.5 * share) * spread)
    gap = abs(model.displacement_per_quantum)
    kinetic = max(abs(model.splitting), abs(model.coupling_difference)) / model.mode
    onset = min(1.0, pull / (abs(model.splitting) + 1e-300))
    near = (2.0 + 3.0 * onset + gap) * min(kinetic, 2.0)
    near += (4.0 + 8.0 * onset) * max(0.0, kinetic - 2.0)
    # the spin also leans towards y, where this basis carries no displacement
    aside = model.spins * (0.5 * model.coupling_difference / model.mode) ** 2
    total = abs(model.total_coupling)
    lean = min(1.0, abs(model.coupling_difference) / total) if total > 0.0 else 1.0
    turned = onset**4 * (1.2 * aside * lean**4 + 2.0 * math.sqrt(aside) * lean)
    return int(share + 7 + 22.0 * gap * max(1.0, kinetic) ** 0.8 + near + turned)


def predicted_cost(model: CollectiveModel, basis: BasisName, levels: int) -> float:
    """Seconds on one core for all sectors of one model, started cold."""
    size, cutoff = model.spins, first_cutoff(model, basis, levels)
    sectors = 2 if model.conserves_parity else 1
    dimension = (cutoff + 1.0) * (size + 1.0) / sectors
    if basis == "fock":
        inner = size // 2 + 1 if sectors == 2 else size + 2
        half_width, pieces, paired = inner, sectors * (cutoff + 1.0), 2.0
    else:
        inner = cutoff + 1
        # the parities share the elimination
        half_width, pieces = 2 * cutoff + 1, (size + 1.0) / sectors
        paired = 1.0 if size <= PLAIN_COUNT_UP_TO else 2.0
    work = sectors * dimension * half_width * (half_width + 4.0 * SOLVES)
    count = pieces * (_SECONDS_PER_BLOCK + 3.0 * (paired * inner) ** 3 * _SECONDS_PER_OPERATION)
    layers = sectors * dimension * levels * _SECONDS_PER_AMPLITUDE
    return sectors * _SECONDS_PER_SECTOR + work * _SECONDS_PER_OPERATION + count + layers


@dataclass(frozen=True, slots=True)
class Forecast:
    """Cheaper basis of a model, with its seconds on one core and its basis states per sector."""

    basis: BasisName
    seconds: float
    dimension: float


@lru_cache(maxsize=8192)
def forecast(model: CollectiveModel, levels: int) -> Forecast:
    """What the lowest `levels` of a model will need, in the basis expected to take less time."""
    fock = predicted_cost(model, "fock", levels)
    chosen: BasisName = "fock"
    seconds = fock
    leans_aside = abs(model.coupling_difference) > abs(model.total_coupling)
    if model.spins > 1 and not leans_aside:
        shifted = predicted_cost(model, "shifted", levels)
        if shifted <= fock:
            chosen, seconds = "shifted", shifted
    sectors = 2 if model.conserves_parity else 1
    dimension = (first_cutoff(model, chosen, levels) + 1.0) * (model.spins + 1.0) / sectors
    return Forecast(chosen, seconds, dimension)


def cheaper_basis(model: CollectiveModel, levels: int) -> BasisName:
    """The basis expected to take less time."""
    return forecast(model, levels).basis
