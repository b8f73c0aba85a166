"""N -> infinity at finite temperature, N distinguishable spins.

Per spin, with s = (x, y) the mean of the two transverse Pauli components and t = lr + lc, d = lr - lc,

    f = (t^2 x^2 + d^2 y^2) / (4 w) - T ln 2 cosh(E / T),
    E = sqrt( w0^2 + (eps - t^2 x / w)^2 + (d^2 y / w)^2 ) / 2,

is stationary; the boson number per spin is (t^2 x^2 + d^2 y^2) / (4 w^2).
Sources: Hepp, Lieb, Ann. Phys. 76, 360 (1973); Wang, Hioe, Phys. Rev. A 7, 831 (1973); Hioe,
Phys. Rev. A 8, 1440 (1973). With bias: own derivation, the same saddle point.
"""

from __future__ import annotations

import math

import numpy as np
from scipy.optimize import brentq

from solver.errors import QuestionError
from solver.model import CollectiveModel

_GRID = 801


def critical_temperature(model: CollectiveModel) -> float | None:
    """Temperature of the transition for N -> infinity; None where there is none.

    Solves w |w0| = c^2 tanh(|w0| / 2T), c = max(|lr + lc|, |lr - lc|) (4 l^2 for equal couplings).
    """
    if model.bias != 0.0:
        return None
    square = max(abs(model.total_coupling), abs(model.coupling_difference)) ** 2
    field = abs(model.splitting)
    ratio = model.mode * field / square if square > 0.0 else math.inf
    if ratio >= 1.0:
        return None
    if ratio < 1e-9:
        return 0.5 * square / model.mode
    return 0.5 * field / math.atanh(ratio)


def limit_thermal(model: CollectiveModel, temperature: float) -> tuple[float, float]:
    """Boson number per spin and order parameter sqrt(<Jx^2>)/(N/2), leading order for N -> infinity.

    temperature: k_B T / hbar > 0 in the unit of the model. Raises QuestionError otherwise.
    """
    if not (math.isfinite(temperature) and temperature > 0.0):
        raise QuestionError("temperature", temperature, "greater than 0")
    candidates = [(x, 0.0) for x in _along_x(model, temperature)]
    candidates += _tilted(model, temperature)
    x, y = min(candidates, key=lambda point: _free_energy(model, temperature, *point))
    t, d = model.total_coupling, model.coupling_difference
    return (t * t * x * x + d * d * y * y) / (4.0 * model.mode**2), abs(x)


def _half_splitting(model: CollectiveModel, x: float, y: float) -> float:
    along = model.bias - model.total_coupling**2 * x / model.mode
    across = model.coupling_difference**2 * y / model.mode
    return 0.5 * math.hypot(model.splitting, along, across)


def _free_energy(model: CollectiveModel, temperature: float, x: float, y: float) -> float:
    energy = _half_splitting(model, x, y)
    stored = (model.total_coupling * x) ** 2 + (model.coupling_difference * y) ** 2
    entropy = temperature * math.log1p(math.exp(-2.0 * energy / temperature))
    return stored / (4.0 * model.mode) - energy - entropy


def _along_x(model: CollectiveModel, temperature: float) -> list[float]:
    """Solutions of x = -(eps - t^2 x/w) tanh(E/T) / 2E in [-1, 1] with y = 0."""
    pull = model.total_coupling**2 / model.mode

    def excess(x: float) -> float:
        field = model.bias - pull * x
        energy = _half_splitting(model, x, 0.0)
        slope = math.tanh(energy / temperature) / energy if energy > 0.0 else 1.0 / temperature
        return -0.5 * field * slope - x

    # finer near zero, where the ordered solution starts
    half = np.linspace(0.0, 1.0, _GRID) ** 2
    grid = np.concatenate((-half[:0:-1], half))
    values = [excess(float(x)) for x in grid]
    roots = [float(x) for x, value in zip(grid, values, strict=True) if value == 0.0]
    for left, right, low, high in zip(grid[:-1], grid[1:], values[:-1], values[1:], strict=True):
        if low * high < 0.0:
            roots.append(float(brentq(excess, float(left), float(right), xtol=1e-15, rtol=1e-14)))
    return roots or [0.0]


def _tilted(model: CollectiveModel, temperature: float) -> list[tuple[float, float]]:
    """The solution with y != 0, where w 2E = d^2 tanh(E/T)."""
    t2, d2 = model.total_coupling**2, model.coupling_difference**2
    pull = d2 / model.mode
    if d2 <= t2 or pull <= 2.0 * temperature:
        return []
    energy = float(
        brentq(
            lambda e: 2.0 * e - pull * math.tanh(e / temperature),
            1e-3 * math.sqrt(max(0.0, 1.0 - 2.0 * temperature / pull)) * temperature,
            pull,
            xtol=1e-15,
        )
    )
    x = -model.bias * model.mode / (d2 - t2)
    along = model.bias - t2 * x / model.mode
    left = 4.0 * energy * energy - model.splitting**2 - along * along
    if left <= 0.0:
        return []
    return [(x, math.sqrt(left) / pull)]
