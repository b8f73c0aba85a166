"""Number-valued observables of the ground state: one pure function each, in one registry.

Every function takes the moments of the state and the accuracy of the state and returns value and
error. The error is a bound where `claim` says so, an estimate otherwise; None means undefined,
with the reason in `undefined`.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np

from solver.moments import Moments

Pair = tuple[float | None, float | None]
_TINY = 1e-12


@dataclass(frozen=True, slots=True)
class StateAccuracy:
    """How far a computed state can be from the exact one.

    sine: bound on the sine of the angle between them. admixed_quanta: bound on sin^2 times the
    mean quanta of the admixture, which is what an unbounded observable feels. quanta_rounding:
    relative rounding of sums over the state.
    """

    sine: float
    admixed_quanta: float
    rounding: float

    def shift_of(self, value: float, extra: float = 0.0) -> float:
        """Bound on the change of <A>, 0 <= A <= a^dag a + extra, with computed <A> = value."""
        admixed = max(0.0, self.admixed_quanta) + extra * self.sine**2
        cosine = math.sqrt(max(1e-300, 1.0 - self.sine**2))
        root = (math.sqrt(max(value, 0.0)) + math.sqrt(admixed)) / cosine
        moved = self.sine**2 * root**2 + 2.0 * root * math.sqrt(admixed) + admixed
        return moved + self.rounding * (value + extra)


@dataclass(frozen=True, slots=True)
class Observable:
    """One ground-state number: how it is called, computed, and how far it can be trusted."""

    key: str
    title: str
    symbol: str
    unit: Literal["1", "bits"]
    formula: str
    source: str
    claim: Literal["bound", "estimate"]
    undefined: str
    compute: Callable[[Moments, StateAccuracy], Pair]


def _bounded(value: float, spread: float, accuracy: StateAccuracy) -> Pair:
    """|<O>_psi - <O>_phi| <= (Omax - Omin) sin(angle)."""
    return value, spread * (min(1.0, accuracy.sine) + accuracy.rounding)


def boson_number(moments: Moments, accuracy: StateAccuracy) -> Pair:
    """<a^dag a>."""
    return moments.quanta, accuracy.shift_of(moments.quanta)


def boson_variance(moments: Moments, accuracy: StateAccuracy) -> Pair:
    """<n^2> - <n>^2."""
    square = moments.pairs + moments.quanta
    value = max(0.0, square - moments.quanta**2)
    reach = square + 1.0
    error = 4.0 * accuracy.sine * reach + 2.0 * moments.quanta * accuracy.shift_of(moments.quanta)
    return value, error + 4.0 * accuracy.rounding * reach


def bunching(moments: Moments, accuracy: StateAccuracy) -> Pair:
    """g2(0) = <a^dag a^dag a a> / <a^dag a>^2."""
    if moments.quanta < _TINY:
        return None, None
    value = moments.pairs / moments.quanta**2
    relative = accuracy.shift_of(moments.quanta) / moments.quanta
    pairs_error = 4.0 * accuracy.sine * (moments.pairs + moments.quanta)
    rounding = 8.0 * accuracy.rounding * (value + 1.0)
    return value, 2.0 * value * relative + pairs_error / moments.quanta**2 + rounding


def inversion(moments: Moments, accuracy: StateAccuracy) -> Pair:
    """<Jz> / (N/2)."""
    return _bounded(2.0 * moments.jz / moments.spins, 2.0, accuracy)


def order_parameter(moments: Moments, accuracy: StateAccuracy) -> Pair:
    """sqrt(<Jx^2>) / (N/2)."""
    square = max(0.0, 4.0 * moments.jxx / moments.spins**2)
    moved = min(1.0, accuracy.sine) + 4.0 * accuracy.rounding
    value = math.sqrt(square)
    below = value - math.sqrt(max(0.0, square - moved))
    return value, max(below, math.sqrt(square + moved) - value)


def _quadrature(moments: Moments, accuracy: StateAccuracy, sign: float) -> Pair:
    mean = moments.amplitude if sign > 0 else 0.0
    square = 0.25 * (2.0 * moments.quanta + 1.0 + 2.0 * sign * moments.square)
    admixed = accuracy.admixed_quanta + 0.5 * accuracy.sine**2
    moved = accuracy.sine**2 * abs(mean) + (2.0 + accuracy.sine) * math.sqrt(admixed)
    # x^2 <= a^dag a + 1/2, and the state may hold more of that than of x^2 itself
    error = accuracy.shift_of(moments.quanta + 0.5, 0.5)
    if mean != 0.0:
        error += moved * (2.0 * abs(mean) + moved)
    return max(0.0, square - mean * mean), error


def quadrature_x(moments: Moments, accuracy: StateAccuracy) -> Pair:
    """Variance of x = (a + a^dag)/2."""
    return _quadrature(moments, accuracy, 1.0)


def quadrature_p(moments: Moments, accuracy: StateAccuracy) -> Pair:
    """Variance of p = (a - a^dag)/(2i)."""
    return _quadrature(moments, accuracy, -1.0)


def _least_transverse_variance(moments: Moments) -> tuple[float, float] | None:
    """Smallest variance orthogonal to the mean spin, and the length of the mean spin."""
    length = math.hypot(moments.jx, moments.jz)
    if length < _TINY * moments.spins:
        return None
    sine, cosine = moments.jx / length, moments.jz / length
    # e1 = (cos, 0, -sin) lies in the plane of the mean spin, e2 = y; <e1.J> = 0 by construction
    in_plane = cosine**2 * moments.jxx + sine**2 * moments.jzz - 2.0 * sine * cosine * moments.jxz
    return min(in_plane, moments.jyy), length


def squeezing(moments: Moments, accuracy: StateAccuracy) -> Pair:
    """xi_S^2 = 4 min Var(J_perp) / N."""
    found = _least_transverse_variance(moments)
    if found is None:
        return None, None
    variance, length = found
    error = moments.spins * (min(1.0, accuracy.sine) + 4.0 * accuracy.rounding)
    if moments.jx != 0.0:
        turned = min(1.0, accuracy.sine * moments.spins / length)
        error += 4.0 * turned * moments.spins
    return max(0.0, 4.0 * variance / moments.spins), error


def squeezing_ramsey(moments: Moments, accuracy: StateAccuracy) -> Pair:
    """xi_R^2 = N min Var(J_perp) / |<J>|^2."""
    value, error = squeezing(moments, accuracy)
    if value is None or error is None:
        return None, None
    length = 2.0 * math.hypot(moments.jx, moments.jz) / moments.spins
    moved = 2.0 * math.sqrt(2.0) * (min(1.0, accuracy.sine) + accuracy.rounding)
    shortest = length - moved
    if shortest <= 0.0:
        # the mean spin is not told from zero
        return None, None
    return value / length**2, (value + error) / shortest**2 - value / length**2


def entropy(moments: Moments, accuracy: StateAccuracy) -> Pair:
    """-sum p log2 p over the Schmidt weights."""
    weights = moments.schmidt[moments.schmidt > 1e-18]
    value = max(0.0, float(-np.sum(weights * np.log2(weights))))
    if accuracy.sine > 0.5:
        # the continuity bound is no bound there; between none and the most there can be
        return value, math.log2(moments.spins + 1.0)
    distance = accuracy.sine
    error = distance * math.log2(max(moments.spins, 1))
    if distance > 0.0:
        error += -distance * math.log2(distance) - (1.0 - distance) * math.log2(1.0 - distance)
    return value, error + 64.0 * accuracy.rounding * (weights.size + 1.0)


_LAMBERT = "Lambert, Emary, Brandes, Phys. Rev. Lett. 92, 073602 (2004)"
_AUDENAERT = "error: Audenaert, J. Phys. A 40, 8127 (2007)"

REGISTRY: tuple[Observable, ...] = (
    Observable(
        "boson_number",
        "Boson number",
        "⟨n⟩",
        "1",
        "<a^dag a>",
        "Emary, Brandes, Phys. Rev. E 67, 066203 (2003)",
        "bound",
        "",
        boson_number,
    ),
    Observable(
        "boson_variance",
        "Boson number variance",
        "Var n",
        "1",
        "<n^2> - <n>^2",
        "common practice, no source",
        "estimate",
        "",
        boson_variance,
    ),
    Observable(
        "bunching",
        "Boson bunching",
        "g₂(0)",
        "1",
        "<a^dag a^dag a a>/<a^dag a>^2",
        "Glauber, Phys. Rev. 130, 2529 (1963)",
        "estimate",
        "g2(0) is undefined without quanta",
        bunching,
    ),
    Observable(
        "inversion",
        "Inversion",
        "⟨Jz⟩/(N/2)",
        "1",
        "<Jz>/(N/2)",
        "Emary, Brandes, Phys. Rev. E 67, 066203 (2003)",
        "bound",
        "",
        inversion,
    ),
    Observable(
        "order_parameter",
        "Order parameter",
        "√⟨Jx²⟩/(N/2)",
        "1",
        "sqrt(<Jx^2>)/(N/2)",
        "Emary, Brandes, Phys. Rev. E 67, 066203 (2003)",
        "bound",
        "",
        order_parameter,
    ),
    Observable(
        "quadrature_x",
        "Variance of x",
        "Var x",
        "1",
        "Var((a + a^dag)/2), vacuum 1/4",
        "common practice, no source",
        "bound",
        "",
        quadrature_x,
    ),
    Observable(
        "quadrature_p",
        "Variance of p",
        "Var p",
        "1",
        "Var((a - a^dag)/(2i)), vacuum 1/4",
        "common practice, no source",
        "bound",
        "",
        quadrature_p,
    ),
    Observable(
        "squeezing",
        "Spin squeezing",
        "ξ²",
        "1",
        "4 min Var(J_perp)/N",
        "Kitagawa, Ueda, Phys. Rev. A 47, 5138 (1993)",
        "estimate",
        "spin squeezing is undefined without a mean spin",
        squeezing,
    ),
    Observable(
        "squeezing_ramsey",
        "Spin squeezing (Ramsey)",
        "ξ²_R",
        "1",
        "N min Var(J_perp)/|<J>|^2",
        "Wineland et al., Phys. Rev. A 50, 67 (1994)",
        "estimate",
        "spin squeezing is undefined without a mean spin",
        squeezing_ramsey,
    ),
    Observable(
        "entropy",
        "Spin-boson entanglement",
        "S",
        "bits",
        "-sum p log2 p, Schmidt weights p",
        f"{_LAMBERT}; {_AUDENAERT}",
        "bound",
        "",
        entropy,
    ),
)
