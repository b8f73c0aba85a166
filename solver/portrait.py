"""The portrait of one point: its answer, and the pictures of its ground state in phase space.

Above the transition the ground doublet closes, and an experiment finds one of the two
symmetry-broken combinations (even +- odd)/sqrt(2) rather than a state of definite parity; either
can be asked for.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from solver.errors import ConvergenceError, QuestionError
from solver.excitation import ExcitationSpectrum, excitation_levels
from solver.fock_basis import FockBlock
from solver.forecast import classical_quanta
from solver.layers import number_amplitudes
from solver.phase_space import (
    HusimiMap,
    SchmidtState,
    WignerMap,
    along_z,
    husimi_map,
    number_distribution,
    schmidt_form,
    spin_coherent_amplitudes,
    wigner_map,
)
from solver.point import PointAnswer, PointQuestion
from solver.shifted_basis import ShiftedBlock
from solver.spectrum import Start
from solver.spin_noise import NoiseEllipse, noise_ellipse
from solver.sweep import solve_chain_with_states

Array = NDArray[np.float64]
StateName = Literal["ground", "plus", "minus"]
STATE_NAMES: tuple[StateName, ...] = ("ground", "plus", "minus")

_LEAST_CLOSED = 1e-9
_PLACES = 7
_BARELY = 1e-9


@dataclass(frozen=True, slots=True)
class Portrait:
    """Answer and pictures of one point.

    state: "ground" (of definite parity without bias), or "plus" / "minus", the symmetry-broken
    combination with positive or negative <a>. closed: whether the ground doublet is closed, so
    that those two exist. distribution: P(n) from n = 0. parity_of_n: <(-1)^n>. noise: of the spin,
    orthogonal to its mean.
    """

    answer: PointAnswer
    state: StateName
    closed: bool
    distribution: Array
    parity_of_n: float
    wigner: WignerMap
    husimi: HusimiMap
    noise: NoiseEllipse

    @property
    def above_needed(self) -> float | None:
        """Weight of this state above the needed cutoff."""
        if self.answer.cutoff_needed is None:
            return None
        return float(self.distribution[self.answer.cutoff_needed + 1 :].sum())

    def pictures(self) -> dict[str, Any]:
        """JSON-able data of the pictures; map values to seven places of their largest."""
        last = int(np.flatnonzero(self.distribution > _BARELY * 1e-6)[-1])
        return {
            "state": self.state,
            "doublet_closed": self.closed,
            "distribution": self.distribution[: last + 1].tolist(),
            "mean": float(self.distribution @ np.arange(self.distribution.size)),
            "above_needed": self.above_needed,
            "parity_of_n": self.parity_of_n,
            "wigner": {
                "x": self.wigner.x.tolist(),
                "p": self.wigner.p.tolist(),
                "values": _rounded(self.wigner.values),
                "resolved": self.wigner.resolved,
            },
            "husimi": {
                "cos_theta": self.husimi.cos_theta.tolist(),
                "phi": self.husimi.phi.tolist(),
                "values": _rounded(self.husimi.values),
            },
            "noise": asdict(self.noise),
        }


def _rounded(values: Array) -> list[list[float]]:
    largest = float(np.abs(values).max())
    places = _PLACES - math.ceil(math.log10(largest))
    out: list[list[float]] = (np.round(values, places) + 0.0).tolist()
    return out


def draw_portrait(questions: Sequence[PointQuestion], state: StateName = "ground") -> Portrait:
    """Portrait of the last of a chain of questions; the answer is that of `solve_chain`, bit for bit.

    After a point that cannot be settled the chain starts anew. Raises QuestionError for a
    symmetry-broken state where the ground doublet is open, and ConvergenceError when the last
    point itself cannot be settled.
    """
    answer, start = _last_of_chain(questions)
    question = questions[-1]
    closed = start is not None and _splitting(question, answer, start) is not None
    if state != "ground" and not closed:
        raise QuestionError("state", state, "ground, because the ground doublet is not closed here")
    if start is None:
        found = _excitation_state(excitation_levels(question.model, question.levels))
    else:
        found = _block_state(start, answer.parity[0], state)
    distribution = number_distribution(found)
    signs = 1.0 - 2.0 * (np.arange(distribution.size) % 2)
    return Portrait(
        answer,
        state,
        closed,
        distribution,
        float(distribution @ signs),
        wigner_map(found),
        husimi_map(found),
        noise_ellipse(found),
    )


def _last_of_chain(questions: Sequence[PointQuestion]) -> tuple[PointAnswer, Start | None]:
    chain = solve_chain_with_states(questions)
    for number in range(len(questions) - 1):
        try:
            next(chain)
        except ConvergenceError:
            chain = solve_chain_with_states(questions[number + 1 :])
    return next(chain)


def portrait_seconds(question: PointQuestion) -> float:
    """Expected time for the pictures alone, on one core."""
    model = question.model
    layers = classical_quanta(model) + 40.0 * math.sqrt(1.0 + classical_quanta(model))
    # a state of sharp excitation number has one boson vector for each j
    each = 3e-5 if model.conserves_excitations else 2e-6
    return 0.03 + each * layers * math.sqrt(model.spins)


def _splitting(question: PointQuestion, answer: PointAnswer, start: Start) -> float | None:
    """Distance of the two lowest levels of opposite parity where it is below what is known; else None."""
    if set(start.sets) != {1, -1}:
        return None
    apart = abs(float(start.sets[1].energies[0] - start.sets[-1].energies[0]))
    widths = [answer.energy[0] - answer.energy_lower[0], _LEAST_CLOSED * question.model.mode]
    return apart if apart <= max(*widths, question.tolerance * question.model.mode) else None


# -- Schmidt forms ---------------------------------------------------------------------------------


def _block_state(start: Start, parity: int, state: StateName) -> SchmidtState:
    """The wanted state from the vectors of the sectors."""
    wanted = [parity] if state == "ground" else [1, -1]
    sets = [start.sets[one] for one in wanted]
    number = [
        found.block.padded(found.vectors[:1])[0] for found in sets if isinstance(found.block, FockBlock)
    ]
    if number:
        return SchmidtState(*schmidt_form(_combined(number, state, 0)))
    blocks = [found.block for found in sets if isinstance(found.block, ShiftedBlock)]
    ladders = [block.ladders(found.vectors[:1]) for block, found in zip(blocks, sets, strict=True)]
    shared = number_amplitudes(blocks[0], np.concatenate(ladders))
    parts = [
        _unfolded(block, values, shared.ladders, shared.first)
        for block, values in zip(blocks, shared.values, strict=True)
    ]
    weights, boson, spin = schmidt_form(_combined(parts, state, shared.first))
    spins = blocks[0].model.spins
    turned = blocks[0].m[shared.ladders] + 0.5 * spins
    if blocks[0].folded:
        turned = np.concatenate((turned, spins - turned[turned > 0.5 * spins]))
    return SchmidtState(weights, boson, along_z(spin, turned, spins), shared.first)


def _unfolded(block: ShiftedBlock, ladders: Array, kept: slice, first: int) -> Array:
    """Number amplitudes of both halves of a folded state, shape (layers, ladders)."""
    if not block.folded:
        return ladders.T
    mirror = block.mirror * (1.0 - 2.0 * ((first + np.arange(ladders.shape[1])) % 2))
    paired = block.m[kept] > 0.0
    halved = np.where(paired, math.sqrt(0.5), 1.0)[:, None] * ladders
    return np.concatenate((halved, mirror * halved[paired])).T


def _combined(parts: list[Array], state: StateName, first: int) -> Array:
    """One state (layers, spin) from one or both parities, with the asked sign of <a>."""
    if len(parts) == 1:
        return parts[0]
    layers = max(part.shape[0] for part in parts)
    even, odd = (np.pad(part, ((0, layers - part.shape[0]), (0, 0))) for part in parts)
    total: Array = math.sqrt(0.5) * (even + odd)
    climb = np.sqrt(first + np.arange(1.0, layers))
    amplitude = float(climb @ np.einsum("nj,nj->n", total[:-1], total[1:]))
    if (amplitude > 0.0) != (state == "plus"):
        total = math.sqrt(0.5) * (even - odd)
    return total


def _excitation_state(spectrum: ExcitationSpectrum) -> SchmidtState:
    """The lowest level of a model that conserves excitations: layer n holds only j = K - n."""
    level, size = spectrum.levels[0], spectrum.model.spins
    if spectrum.tilt[1] != 0.0:
        # uncoupled spins point against their field
        cosine, sine = spectrum.tilt
        spin = spin_coherent_amplitudes(size, np.array([-cosine]))
        if sine > 0.0:
            spin *= 1.0 - 2.0 * (np.arange(size + 1) % 2)
        boson = np.zeros((1, level.block + 1))
        boson[0, level.block] = 1.0
        return SchmidtState(np.ones(1), boson, spin, 0)
    weights = level.amplitudes**2
    busy = np.flatnonzero(weights > _BARELY * 1e-4)
    boson = np.zeros((busy.size, level.block + 1))
    boson[np.arange(busy.size), level.block - busy] = 1.0
    spin = np.zeros((busy.size, size + 1))
    spin[np.arange(busy.size), size - busy if spectrum.turned else busy] = 1.0
    return SchmidtState(weights[busy] / weights[busy].sum(), boson, spin, 0)
