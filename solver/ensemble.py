"""Thermal equilibrium of all spin sectors of a model: which matter, how large, and their average.

The collective ensemble holds the sector J = N/2 alone. N distinguishable spins hold every J = N/2,
N/2 - 1, ... with multiplicity C(N, N/2-J) (2J+1)/(N/2+J+1); a sector of spin J is the same family with
2J spins and couplings times sqrt(2J/N), and J = 0 is the bare mode.

What matters is foreseen with the boson displaced by the spin (the square completed, spin and
displacement taken as commuting): the spin matrix S of `floor` for the energies, a displaced thermal
distribution for the quanta.
Sources: Hepp, Lieb, Ann. Phys. 76, 360 (1973); multiplicities: Arecchi, Courtens, Gilmore, Thomas,
Phys. Rev. A 6, 2211 (1972).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln, logsumexp

from solver.eigen import lowest_of_band
from solver.errors import QuestionError
from solver.floor import Floors
from solver.fock_basis import FockBlock
from solver.gibbs import (
    SectorTrace,
    bare_mode_trace,
    block_seconds,
    sector_trace,
)
from solver.model import CollectiveModel
from solver.spin import projections, raising_elements

Array = NDArray[np.float64]

LARGEST_BLOCK = 12_000
LARGEST_BAND = 30_000_000
_MOST_GROWTH = 30
_EPS = float(np.finfo(np.float64).eps)


def log_multiplicity(spins: int, sector: int) -> float:
    """Logarithm of the number of copies of the sector of `sector` = 2J spins among N = `spins`."""
    flipped = (spins - sector) // 2
    return float(
        gammaln(spins + 1.0)
        - gammaln(flipped + 1.0)
        - gammaln(spins - flipped + 1.0)
        + math.log(sector + 1.0)
        - math.log(spins - flipped + 1.0)
    )


def sector_model(model: CollectiveModel, sector: int) -> CollectiveModel:
    """The sector of `sector` = 2J >= 1 spins as a member of the family."""
    scale = math.sqrt(sector / model.spins)
    return CollectiveModel(
        sector, model.mode, model.splitting, scale * model.rotating, scale * model.counter, model.bias
    )


@dataclass(slots=True)
class SectorPlan:
    """What is foreseen of one sector: logarithm of its multiplicity and partition function, cutoff, ceiling.

    model is None for J = 0. squares, chances: displacements squared and their probabilities. ceiling:
    energy above which its levels may be left out.
    """

    sector: int
    model: CollectiveModel | None
    log_copies: float
    log_partition: float
    squares: Array
    chances: Array
    cutoff: int = 0
    ceiling: float = math.inf

    @property
    def log_weight(self) -> float:
        """Logarithm of the Boltzmann weight foreseen, all copies together."""
        return self.log_copies + self.log_partition


@dataclass(frozen=True, slots=True)
class Averages:
    """Equilibrium averages over all sectors and estimates of their errors.

    layers: P(n), shape (cutoff+1,). leaked: weight that the truncation may have displaced; quanta_error,
    along_error: what that means for <n> and <Jx^2>.
    """

    log_partition: float
    layers: Array
    quanta: float
    jz: float
    jxx: float
    leaked: float
    quanta_error: float
    along_error: float

    def weight_above(self) -> Array:
        """Weight of n > M for M = 0..cutoff."""
        above = np.cumsum(self.layers[::-1])[::-1]
        return np.append(above[1:], 0.0)


class Ensemble:
    """Equilibrium of one model at inverse temperature beta, to a probability of about `small`.

    small: probability that may be lost or displaced; quanta_small: error of <n> aimed at.
    """

    def __init__(
        self, model: CollectiveModel, beta: float, *, distinguishable: bool, small: float, quanta_small: float
    ) -> None:
        self.model, self.beta, self.small, self.quanta_small = model, beta, small, quanta_small
        lowest = model.spins % 2 if distinguishable else model.spins
        self.sectors = [
            self._foreseen(sector, log_multiplicity(model.spins, sector) if distinguishable else 0.0)
            for sector in range(model.spins, lowest - 1, -2)
        ]
        self._total = float(logsumexp([plan.log_weight for plan in self.sectors]))
        for plan in self.sectors:
            # a rare sector may be cut earlier
            small = 0.1 * self.small * math.exp(min(60.0, self._total - plan.log_weight))
            plan.cutoff = _reach(plan.squares, plan.chances, beta * model.mode, min(small, 0.1))
        self._settled = False
        self.traces: dict[int, SectorTrace] = {}

    def _foreseen(self, sector: int, log_copies: float) -> SectorPlan:
        """Semiclassical partition function and reach in n of one sector."""
        beta, mode = self.beta, self.model.mode
        free = -math.log(-math.expm1(-beta * mode))
        squares, chances = np.zeros(1), np.ones(1)
        own = sector_model(self.model, sector) if sector else None
        if own is not None:
            energies, squares, chances = _spin_gibbs(own, beta)
            free += float(logsumexp(-beta * energies))
        return SectorPlan(sector, own, log_copies, free, squares, chances)

    def _margin(self) -> float:
        """How far off the foreseen logarithms may be."""
        return 4.0 + 0.6 * min(self.beta * self.model.mode, 400.0)

    def kept(self, deficit: float = 0.0) -> list[SectorPlan]:
        """Sectors that hold more than a negligible part of the weight.

        deficit: by how much the logarithm of the partition function lies below the foreseen one.
        """
        edge = self._total - deficit + math.log(self.small) - self._margin()
        return [plan for plan in self.sectors if plan.log_weight > edge]

    def settle(self) -> None:
        """Ceilings for the levels; where it is cold, from ground energies actually computed."""
        if self._settled:
            return
        waiting = self.kept() if self.beta * self.model.mode > 0.5 else []
        corrected: set[int] = set()
        while waiting:
            for plan in waiting:
                corrected.add(plan.sector)
                if plan.model is not None:
                    floor, lowest = Floors(plan.model).ground, _ground_energy(plan.model, plan.cutoff)
                    plan.log_partition -= self.beta * max(0.0, lowest - floor)
            self._total = float(
                logsumexp([plan.log_weight for plan in self.sectors if plan.sector in corrected])
            )
            # a lower total lets further sectors matter
            waiting = [plan for plan in self.kept() if plan.sector not in corrected]
        room = -math.log(self.small) + 10.0
        for plan in self.sectors:
            plan.ceiling = (plan.log_copies - self._total + room) / self.beta
        self._settled = True

    def exact(self) -> Averages:
        """Averages with every sector as large as it has to be."""
        self.settle()
        for plan in self.kept():
            self.traces[plan.sector] = self._converged(plan)
        return self._average(self.traces)

    def _converged(self, plan: SectorPlan) -> SectorTrace:
        for _ in range(_MOST_GROWTH):
            trace = self._trace(plan, plan.cutoff, 0.0)
            share = math.exp(min(0.0, plan.log_copies + trace.log_partition - self._total))
            allowed = min(self.small, self.quanta_small / (plan.cutoff + 1.0))
            spill = share * self._spill(plan, trace)
            if spill <= allowed:
                return trace
            slope = _slope(trace.layers)
            plan.cutoff += max(2, math.ceil(1.1 * math.log(spill / allowed) / slope) + 1)
        raise QuestionError("temperature", 1.0 / self.beta, "a lower temperature or less coupling")

    def _trace(self, plan: SectorPlan, cutoff: int, raised: float) -> SectorTrace:
        if plan.model is None:
            return bare_mode_trace(self.model.mode, self.beta, cutoff)
        blocks = 2 if plan.model.conserves_parity else 1
        size = (cutoff + 1) * (plan.sector + 1) // blocks
        hot = self.beta * self.model.mode < 1.0
        if (hot and size > LARGEST_BLOCK) or size * (plan.sector + 1) // blocks > LARGEST_BAND:
            raise QuestionError(
                "temperature" if hot else "spins",
                1.0 / self.beta if hot else self.model.spins,
                f"fewer states per symmetry block than these {size}: fewer spins, less coupling or colder",
            )
        return sector_trace(plan.model, self.beta, cutoff, plan.ceiling + raised)

    def _spill(self, plan: SectorPlan, trace: SectorTrace) -> float:
        """Probability displaced by the cutoff of a sector.

        What lies in the last layer leaks on by the coupling there, which changes energies by
        coupling times weight and Boltzmann factors by beta times that.
        """
        return trace.edge * self._pressure(plan, trace.cutoff)

    def _pressure(self, plan: SectorPlan, cutoff: int) -> float:
        own = plan.model
        if own is None:
            return 1.0 / -math.expm1(-self.beta * self.model.mode)
        size = (abs(own.rotating) + abs(own.counter)) * 0.5 * (own.spins + 1.0) / math.sqrt(own.spins)
        return 1.0 / -math.expm1(-self.beta * self.model.mode) + self.beta * size * math.sqrt(cutoff + 1.0)

    def truncated(self, cutoff: int) -> Averages:
        """The Gibbs state of H cut at n <= cutoff: what an asker's own calculation holds."""
        reference = self._total
        raised, deficit = 0.0, 0.0
        for _ in range(60):
            traces = {}
            for plan in self.kept(deficit):
                known = self.traces.get(plan.sector)
                if known is not None and cutoff >= known.cutoff:
                    traces[plan.sector] = known
                else:
                    traces[plan.sector] = self._trace(plan, cutoff, raised)
            total = logsumexp(
                [plan.log_copies + traces[plan.sector].log_partition for plan in self.kept(deficit)]
            )
            if total == -math.inf:
                raised = 2.0 * raised + max(20.0 / self.beta, self.model.mode)
                deficit = self.beta * raised
                continue
            short = max(0.0, reference - float(total))
            if short <= deficit + 2.0:
                break
            # the cut state lies higher: sectors and levels left out of the full one count again
            deficit, raised = short, short / self.beta
        return self._average(traces)

    def _average(self, traces: dict[int, SectorTrace]) -> Averages:
        plans = [plan for plan in self.sectors if plan.sector in traces]
        logs = np.array([plan.log_copies + traces[plan.sector].log_partition for plan in plans])
        total = float(logsumexp(logs))
        longest = max(traces[plan.sector].layers.size for plan in plans)
        layers, jz, jxx, leaked, quanta_error, along_error = np.zeros(longest), 0.0, 0.0, 0.0, 0.0, 0.0
        for plan, log in zip(plans, logs, strict=True):
            trace, share = traces[plan.sector], math.exp(log - total)
            layers[: trace.layers.size] += share * trace.layers
            jz += share * trace.jz
            jxx += share * trace.jxx
            lost = share * (self._spill(plan, trace) + trace.omitted) if share else 0.0
            leaked += lost
            quanta_error += lost * (trace.cutoff + 1.0)
            along_error += lost * 0.25 * plan.sector * (plan.sector + 2.0)
        skipped = self._skipped(plans, total)
        n = np.arange(longest)
        quanta = float(layers @ n)
        rounding = 64.0 * _EPS * longest
        largest_square = 0.25 * self.model.spins * (self.model.spins + 2.0)
        return Averages(
            log_partition=total,
            layers=layers,
            quanta=quanta,
            jz=jz,
            jxx=jxx,
            leaked=leaked + skipped + rounding,
            quanta_error=quanta_error + skipped * longest + rounding * (quanta + 1.0),
            along_error=along_error + (skipped + rounding) * largest_square,
        )

    def _skipped(self, plans: list[SectorPlan], total: float) -> float:
        """Weight foreseen for the sectors that were not computed, with the margin on top."""
        present = {plan.sector for plan in plans}
        absent = [plan.log_weight for plan in self.sectors if plan.sector not in present]
        if not absent:
            return 0.0
        return math.exp(min(0.0, float(logsumexp(absent)) + 0.5 * self._margin() - total))

    def pressure_curve(self, exact: Averages) -> Array:
        """Foreseen displaced probability of a calculation cut at M = 0..cutoff."""
        curve = np.zeros(exact.layers.size)
        for plan in self.sectors:
            trace = self.traces.get(plan.sector)
            if trace is None or trace.log_partition == -math.inf:
                continue
            share = math.exp(plan.log_copies + trace.log_partition - exact.log_partition)
            beyond = np.append(np.cumsum(trace.layers[::-1])[::-1][1:], 0.0)
            at = np.arange(trace.layers.size)
            curve[: at.size] += share * beyond * np.sqrt(at + 1.0)
        return curve

    def seconds(self, cutoff_factor: float = 1.0) -> float:
        """Predicted time of one pass over all sectors, cutoffs times cutoff_factor."""
        total = 0.0
        for plan in self.kept():
            own = plan.model
            if own is None:
                continue
            blocks = 2 if own.conserves_parity else 1
            room = (-math.log(self.small) + 10.0 - (self._total - plan.log_weight)) / self.beta
            cutoff = max(2.0, cutoff_factor * plan.cutoff)
            total += blocks * (block_seconds(own, cutoff, self.beta, room) + 6e-4)
        return total


def _spin_gibbs(model: CollectiveModel, beta: float) -> tuple[Array, Array, Array]:
    """Energies of the spin matrix S, squared displacements K^dag K, and their probabilities."""
    steps = raising_elements(model.spins)
    up = np.diag(steps, -1)
    pull = (model.rotating * up.T + model.counter * up) / (model.mode * math.sqrt(model.spins))
    square = pull.T @ pull
    matrix = np.diag(model.splitting * projections(model.spins)) + 0.5 * model.bias * (up + up.T)
    energies, states = np.linalg.eigh(matrix - model.mode * square)
    weights = np.exp(-beta * (energies - energies[0]))
    squares, axes = np.linalg.eigh(square)
    overlap = axes.T @ states
    chances = (overlap * overlap) @ (weights / weights.sum())
    return energies, np.maximum(squares, 0.0), chances


def _reach(squares: Array, chances: Array, quantum: float, small: float) -> int:
    """Smallest cutoff with less than `small` above it for displaced thermal distributions.

    squares: displacements squared; chances: their probabilities; quantum: beta w. Chernoff bound with
    <exp(x n)> = exp(d (e^x - 1)/(1 + q (1 - e^x))) / (1 + q (1 - e^x)), q the mean thermal number.
    """
    rates = min(quantum, 6.0) * np.linspace(0.02, 0.98, 49)
    grown = np.expm1(rates)
    # q = 1/(e^quantum - 1), written so that neither end overflows
    thermal = math.exp(-quantum) / -math.expm1(-quantum)
    room = 1.0 - thermal * grown
    usable = room > 0.0
    rates, grown, room = rates[usable], grown[usable], room[usable]
    busy = chances >= min(small, float(chances.max()))
    logs = squares[busy, None] * grown / room - np.log(room) + np.log(chances[busy, None] / small)
    return max(2, math.ceil(max(0.0, float(np.min(logs / rates, axis=1).max()))) - 1)


def _ground_energy(model: CollectiveModel, cutoff: int) -> float:
    """Lowest level of the truncated model over its symmetry blocks."""
    shift = Floors(model).ground - 0.05 * model.mode
    best = math.inf
    for parity in (1, -1) if model.conserves_parity else (0,):
        block = FockBlock(model, parity, cutoff, shift)
        best = min(best, float(lowest_of_band(block.band, 1, 1, None, 1e-6).values[0]) + shift)
    return best


def _slope(layers: Array) -> float:
    """Natural logarithms of weight lost per layer near the cutoff."""
    span = min(6, layers.size - 2)
    if span < 1:
        return 0.5
    last, earlier = float(layers[-2:].max()), float(layers[-2 - span : -span].max())
    if last <= 0.0 or earlier <= last:
        return 0.3
    return min(max(math.log(earlier / last) / span, 0.02), 5.0)
