"""Quantum Rabi model (N = 1) against exact solutions."""

from __future__ import annotations

import math

import mpmath
import numpy as np
import pytest

from solver import CollectiveModel
from tests.reference.asking import ask, dicke, sector, value

# Braak, Phys. Rev. Lett. 107, 100401 (2011): H = w a^dag a + g sx (a + a^dag) + D sz,
# g = l, D = w0/2, w = 1; the regular spectrum is E = x - g^2 at the zeros x of G_+ and G_-
TERMS = 130


def braak(x, coupling, half_splitting, parity):
    """G_-(x) for the even sector (parity +1), G_+(x) for the odd one; mpmath or numpy numbers."""
    before, now = 0 * x, 0 * x + 1
    total, power = 0 * x, 1
    for n in range(TERMS):
        total = total + now * (1 + parity * half_splitting / (x - n)) * power
        factor = 2 * coupling + (n - x + half_splitting**2 / (x - n)) / (2 * coupling)
        before, now = now, (factor * now - before) / (n + 1)
        power = power * coupling
    return total


@pytest.mark.parametrize("coupling", [0.25, 0.6, 0.9, 1.3])
@pytest.mark.parametrize("splitting", [0.8, 2.3])
def test_levels_are_the_zeros_of_the_g_function(coupling, splitting):
    """Twelve digits, both parities, 24 levels per model, and none missed in between."""
    answer = ask(CollectiveModel(1, 1.0, splitting, coupling, coupling), levels=24, tolerance=1e-12)
    mpmath.mp.dps = 40
    for parity in (1, -1):
        found = sector(answer, parity)
        assert len(found) >= 10
        g, half = mpmath.mpf(coupling), mpmath.mpf(splitting) / 2
        for low, up in found:
            sides = [
                mpmath.sign(braak(mpmath.mpf(end) + g**2 + nudge, g, half, parity))
                for end, nudge in ((low, -mpmath.mpf("5e-13")), (up, mpmath.mpf("5e-13")))
            ]
            assert sides[0] * sides[1] == -1
            assert up - low < 1e-12
        # sign changes away from the poles x = 0, 1, 2, ... count the zeros independently
        top = found[-1][1] + coupling**2 + 2e-4
        x = np.arange(-(coupling**2) - splitting, top, 1e-4) + 0.5e-4
        signs = np.sign(braak(x, coupling, 0.5 * splitting, parity))
        pole_between = np.floor(x[1:]) != np.floor(x[:-1])
        pole_between &= x[1:] > 0.0
        assert np.sum((signs[1:] != signs[:-1]) & ~pole_between) == len(found)


def test_published_parameters():
    """w = 1, w0 = 0.8, l = 0.7 (parameters of Braak 2011, Fig. 1): own calculation, two routes."""
    answer = ask(dicke(1, 1.0, 0.8, 0.7), levels=8, tolerance=1e-12)
    expected = [-0.707805064098487, 0.370949763390693, 1.637010370644339, 2.466695702065396]
    for (low, up), energy in zip(sector(answer, 1), expected, strict=False):
        assert low - 1e-14 <= energy <= up + 1e-14


def exceptional_couplings(order: int, half_splitting: float) -> list[float]:
    """Couplings of Kus, J. Math. Phys. 26, 2792 (1985): positive roots X = 4 l^2 of P_order."""
    x, square = np.polynomial.Polynomial([0.0, 1.0]), half_splitting**2
    before, now = np.polynomial.Polynomial([1.0]), x + square - 1.0
    for k in range(2, order + 1):
        before, now = now, (k * x + square - k**2) * now - k * (k - 1) * (order - k + 1) * x * before
    roots = now.roots()
    real = roots[np.abs(roots.imag) < 1e-9].real
    return [math.sqrt(root) / 2.0 for root in sorted(real) if root > 0.0]


def test_judd_closed_forms():
    """Judd, J. Phys. C 12, 1685 (1979): n = 1, 4 g^2 + D^2 = 1; n = 2 own evaluation for w0 = 1."""
    assert exceptional_couplings(1, 0.5) == pytest.approx([0.433012701892], abs=1e-12)
    assert exceptional_couplings(2, 0.5) == pytest.approx([0.332328146391, 0.892080715584], abs=1e-12)
    energies = [2.0 - coupling**2 for coupling in exceptional_couplings(2, 0.5)]
    assert energies == pytest.approx([1.889558003117, 1.204191996883], abs=1e-12)
    for coupling in exceptional_couplings(2, 0.5):
        g, d = coupling, 0.5
        closed = 32 * g**4 + 12 * g**2 * d**2 + d**4 - 32 * g**2 - 5 * d**2 + 4
        assert closed == pytest.approx(0.0, abs=1e-12)


@pytest.mark.parametrize("order", [1, 2, 3, 4, 5])
@pytest.mark.parametrize("splitting", [1.0, 0.6])
def test_even_and_odd_levels_cross_at_exceptional_points(order, splitting):
    """E = n - l^2 belongs to both parities there (Judd 1979; Kus 1985)."""
    couplings = exceptional_couplings(order, 0.5 * splitting)
    assert len(couplings) == order
    for coupling in couplings:
        answer = ask(dicke(1, 1.0, splitting, coupling), levels=2 * order + 6, tolerance=1e-12)
        energy = order - coupling**2
        for parity in (1, -1):
            assert any(low - 1e-11 <= energy <= up + 1e-11 for low, up in sector(answer, parity))
        at = [k for k, up in enumerate(answer.energy) if abs(up - energy) < 1e-10]
        assert {answer.parity[k] for k in at} == {1, -1}


def test_weak_coupling():
    """E0 = -w0/2 - lc^2/(w + w0) to second order (Bloch, Siegert shift; from memory).

    The number for l = 0.05: own calculation.
    """
    assert ask(dicke(1, 1.0, 1.0, 0.05)).energy[0] == pytest.approx(-0.5012507817, abs=1e-10)
    for rotating, counter, splitting in ((1e-3, 2e-3, 1.0), (2e-3, 1e-3, 0.3), (0.0, 2e-3, 1.7)):
        energy = ask(CollectiveModel(1, 1.0, splitting, rotating, counter), tolerance=1e-12).energy[0]
        second = -(counter**2) / (1.0 + splitting)
        assert energy + 0.5 * splitting - second == pytest.approx(0.0, abs=4e-11)
        assert energy + 0.5 * splitting == pytest.approx(second, rel=1e-4)


def large_ratio(ratio: float, g: float) -> CollectiveModel:
    """w = 1, w0 = ratio, g = 2 l / sqrt(w w0)."""
    return dicke(1, 1.0, ratio, 0.5 * g * math.sqrt(ratio))


def test_large_splitting_below_the_transition():
    """Hwang, Puebla, Plenio, Phys. Rev. Lett. 115, 180404 (2015): gap w sqrt(1 - g^2)."""
    gap = ask(large_ratio(1e4, 0.5), levels=3).gap_any
    assert gap == pytest.approx(0.86603165, abs=1e-8)  # own calculation at w0/w = 1e4
    assert gap == pytest.approx(math.sqrt(0.75), abs=1e-4)
    finer = ask(large_ratio(1e5, 0.5), levels=3, tolerance=1e-6).gap_any
    assert abs(finer - math.sqrt(0.75)) < 0.2 * abs(gap - math.sqrt(0.75))


def test_large_splitting_beyond_the_transition():
    """Hwang, Puebla, Plenio (2015); Ashhab, Phys. Rev. A 87, 013826 (2013): g = 1.2."""
    g = 1.2
    for ratio, slack in ((300.0, 3e-2), (3000.0, 3e-3)):
        answer = ask(large_ratio(ratio, g), levels=4, tolerance=1e-7)
        assert answer.gap == pytest.approx(math.sqrt(1.0 - g**-4), rel=slack)
        assert value(answer, "boson_number") == pytest.approx(0.25 * ratio * (g**2 - g**-2), rel=slack)
        assert value(answer, "inversion") == pytest.approx(-(g**-2), rel=slack)


def test_large_splitting_at_the_transition():
    """gap/w -> 1.0870962667 (w/w0)^(1/3) at g = 1: own calculation (quartic oscillator)."""
    ratios = np.array([1e3, 1e4, 1e5])
    scaled = [ask(large_ratio(r, 1.0), levels=2, tolerance=1e-7).gap_any * r ** (1 / 3) for r in ratios]
    x = ratios ** (-1 / 3)
    limit = np.linalg.solve(np.stack([np.ones(3), x, x**2], axis=1), scaled)[0]
    assert limit == pytest.approx(1.0870962667, rel=3e-3)
