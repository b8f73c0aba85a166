"""How many quanta a calculation in the number basis must carry, from one converged solve.

The states cut at M span a trial space of the calculation truncated at M. Its levels lie no
higher than the generalised eigenvalues of the projected states, where

    <psi_i P_M| H |P_M psi_j> = E_j S_ij - <psi_i, layer M| H |psi_j, layer M+1>,
    S_ij = sum over n <= M of <psi_i, layer n|psi_j, layer n>,

so a cutoff read off from there is never too small.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from solver.layers import LayerProfile

Array = NDArray[np.float64]


class CutStates:
    """The states of a profile, cut at any layer: weights kept, and the levels they span."""

    def __init__(self, profile: LayerProfile, energies: Array) -> None:
        self.profile = profile
        self.kept: Array = np.cumsum(profile.overlaps, axis=0)
        # (E_j - E_0) S_ij keeps the digits that E_j S_ij would lose against a deep ground level
        self.excess = energies - energies[0]

    def errors(self, cutoff: int) -> Array:
        """Upper bounds on the error of each level in a calculation with n <= cutoff, shape (q,).

        Infinite where the cut leaves fewer than q states.
        """
        at = cutoff - self.profile.first
        if at + 1 >= len(self.kept):
            return np.zeros_like(self.excess)
        if at < 0:
            return np.full_like(self.excess, np.inf)
        kept, link, excess = self.kept[at], self.profile.links[at], self.excess
        matrix = 0.5 * kept * (excess[None, :] + excess[:, None]) - 0.5 * (link + link.T)
        scale, turn = np.linalg.eigh(kept)
        if scale[0] < 1e-13:
            return np.full_like(excess, np.inf)
        whiten = turn / np.sqrt(scale)
        values = np.linalg.eigvalsh(whiten.T @ matrix @ whiten)
        out: Array = np.maximum(values - excess, 0.0)
        return out

    def enough(self, cutoff: int, need: float) -> bool:
        """Whether every level errs by at most `need`."""
        return bool(np.all(self.errors(cutoff) <= need))


def weight_above(profile: LayerProfile) -> Array:
    """Largest weight, over the states, in layers above M = first + l; shape (L,)."""
    weights = np.einsum("nii->ni", profile.overlaps)
    above = np.cumsum(weights[::-1], axis=0)[::-1]
    tails = np.zeros(len(weights))
    tails[:-1] = above[1:].max(axis=1)
    return tails


def needed_cutoff(profile: LayerProfile, energies: Array, need: float, tail: float) -> int:
    """Smallest M with every level within `need` and no state with more than `tail` above M."""
    states = CutStates(profile, energies)
    low = profile.first + int(np.argmax(weight_above(profile) <= tail))
    if states.enough(low, need):
        return low
    high = low + 1
    while not states.enough(high, need):
        low, high = high, high + 2 * (high - low)
    while high - low > 1:
        middle = (low + high) // 2
        if states.enough(middle, need):
            high = middle
        else:
            low = middle
    return high
