"""What one point of a sweep costs in processor time, told before it is solved.

The forms follow the steps of the three ways to solve (number of blocks, band operations, layers); the
constants were fitted to solved sweeps of the whole family. They serve to weigh points against each
other; how fast a machine is in total is measured by whoever asks for seconds.
"""

from __future__ import annotations

import math
from functools import lru_cache

from solver.forecast import PLAIN_COUNT_UP_TO, SOLVES, cheaper_basis, classical_quanta, first_cutoff
from solver.model import CollectiveModel

# general search: a point, a symmetry sector, a band operation, a block and an operation of the
# count, an amplitude of the layers
_POINT = 3.2e-3
_SECTOR = 5.2e-4
_BAND = 5.7e-10
_BLOCK = 3.4e-5
_ELIMINATION = 1.4e-10
_AMPLITUDE = 9.4e-8

# one spin without bias: a point, a link of the chain, a level
_CHAIN_POINT, _LINK, _CHAIN_LEVEL = 3.0e-4, 2.1e-5, 1.7e-5

# conserved excitations: a point, a visited block, a bound, and how both grow with the block
_SEARCH_POINT, _VISIT, _BOUND = 1.35e-3, 4.0e-5, 3.3e-5
_VISIT_GROWTH, _BOUND_GROWTH = 4.3e-3, 2.8e-2
_FEWEST_BOUNDS, _BOUNDS_PER_ROOT = 15.0, 4.8


@lru_cache(maxsize=8192)
def point_seconds(model: CollectiveModel, levels: int) -> float:
    """Expected processor seconds for the lowest `levels` of one model and all that is told of them."""
    if model.conserves_excitations:
        return _by_excitations(model, levels)
    if model.spins == 1 and model.conserves_parity:
        return _CHAIN_POINT + _LINK * (first_cutoff(model, "fock", levels) + 1) + _CHAIN_LEVEL * levels
    return _by_search(model, levels)


def _by_search(model: CollectiveModel, levels: int) -> float:
    size, basis = model.spins, cheaper_basis(model, levels)
    cutoff = first_cutoff(model, basis, levels)
    sectors = 2 if model.conserves_parity else 1
    states = (cutoff + 1.0) * (size + 1.0)
    if basis == "fock":
        inner = size // 2 + 1 if sectors == 2 else size + 2
        half_width, pieces, paired = inner, sectors * (cutoff + 1.0), 2.0
    else:
        inner = cutoff + 1
        half_width, pieces = 2 * cutoff + 1, (size + 1.0) / sectors
        paired = 1.0 if size <= PLAIN_COUNT_UP_TO else 2.0
    band = states * half_width * (half_width + 4.0 * SOLVES)
    count = pieces * (_BLOCK + 3.0 * (paired * inner) ** 3 * _ELIMINATION)
    return _POINT + _SECTOR * sectors + _BAND * band + count + _AMPLITUDE * states * levels


def _by_excitations(model: CollectiveModel, levels: int) -> float:
    """Blocks around the lowest excitation number are visited, bounds exclude the others."""
    strength, splitting = model.rotating, model.splitting
    if strength == 0.0 and model.counter != 0.0:
        strength, splitting = model.counter, -splitting
    size = model.spins
    softened = CollectiveModel(size, model.mode, splitting, strength, 0.0)
    quanta = classical_quanta(softened)
    excited, lowest = quanta > 0.0, quanta
    if excited:
        tilt = model.mode * splitting / (strength * strength)
        lowest += 0.5 * size * (1.0 - min(1.0, max(-1.0, tilt)))
    elif splitting < 0.0:
        lowest += size
    block = min(float(size), lowest + 2.0 * levels)
    bounds = _FEWEST_BOUNDS + (_BOUNDS_PER_ROOT * math.sqrt(size) if excited else 0.0)
    visits = (2.0 * levels + 1.0) * (1.0 + _VISIT_GROWTH * block * levels)
    return _SEARCH_POINT + _VISIT * visits + _BOUND * bounds * (1.0 + _BOUND_GROWTH * block)
