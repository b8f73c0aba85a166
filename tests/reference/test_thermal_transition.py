"""The thermal transition of N distinguishable spins, and its absence within J = N/2.

Hepp, Lieb, Ann. Phys. 76, 360 (1973); Wang, Hioe, Phys. Rev. A 7, 831 (1973): with equal couplings l,
ordered below w w0 = 4 l^2 tanh(w0/2T); there w E = 2 l^2 tanh(E/T) and, for N -> infinity,
<n>/N = (E^2 - w0^2/4)/(4 l^2). The mean field 2 l sqrt(<n>/N) tilts each spin, so that
2 sqrt(<Jx^2>)/N = (w/(4 l^2)) sqrt(4 E^2 - w0^2) (own derivation from the same saddle point).
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.optimize import brentq, minimize

from solver import (
    CollectiveModel,
    ThermalQuestion,
    Wanted,
    answer_thermal,
    critical_temperature,
    large_n_limit,
    limit_thermal,
)
from tests.reference.asking import dicke

FINE = Wanted(tail=1e-6)


def finite(spins, coupling, temperature, *, distinguishable=True):
    model = dicke(spins, 1.0, 1.0, coupling)
    return answer_thermal(ThermalQuestion(model, temperature, distinguishable, FINE))


def extrapolated(values, sizes):
    """Polynomial in 1/N through all sizes, at 1/N = 0."""
    powers = np.array([[size ** -float(order) for order in range(len(sizes))] for size in sizes])
    return float(np.linalg.solve(powers, values)[0])


def test_critical_temperature():
    """w = w0 = 1, l = 0.8: Tc = 1.21201144 (formula; evaluated for this project)."""
    model = dicke(10, 1.0, 1.0, 0.8)
    assert critical_temperature(model) == pytest.approx(1.21201144, abs=1e-8)
    assert critical_temperature(dicke(10, 1.0, 1.0, 0.5)) is None
    assert critical_temperature(dicke(10, 2.0, 0.0, 0.8)) == pytest.approx(4 * 0.64 / 2 / 2.0)
    assert critical_temperature(CollectiveModel(10, 1.0, 1.0, 0.8, 0.8, 0.1)) is None
    # only lr + lc counts (Hioe 1973), or lr - lc where that is larger
    assert critical_temperature(CollectiveModel(10, 1.0, 1.0, 1.6, 0.0)) == pytest.approx(
        1.21201144, abs=1e-8
    )
    assert critical_temperature(CollectiveModel(10, 1.0, 1.0, 0.8, -0.8)) == pytest.approx(
        1.21201144, abs=1e-8
    )


@pytest.mark.parametrize(("temperature", "expected"), [(0.8, 0.41002), (1.0, 0.24943)])
def test_ordered_boson_number(temperature, expected):
    """Wang, Hioe (1973) at w = w0 = 1, l = 0.8 (values evaluated for this project)."""
    quanta, order = limit_thermal(dicke(3, 1.0, 1.0, 0.8), temperature)
    assert quanta == pytest.approx(expected, abs=1e-5)
    energy = brentq(lambda e: e - 2 * 0.64 * math.tanh(e / temperature), 0.5, 2.0)
    assert order == pytest.approx(math.sqrt(4 * energy**2 - 1) / (4 * 0.64), rel=1e-9)


def test_limit_at_the_transition_and_above():
    model = dicke(3, 1.0, 1.0, 0.8)
    edge = critical_temperature(model)
    assert edge is not None
    assert limit_thermal(model, 1.0001 * edge) == pytest.approx((0.0, 0.0), abs=1e-12)
    quanta, order = limit_thermal(model, 0.999 * edge)
    assert 0.0 < quanta < 0.01
    assert 0.01 < order < 0.2


@pytest.mark.parametrize(
    "model",
    [
        dicke(9, 1.0, 1.0, 0.8),
        dicke(9, 1.0, 1.0, 0.3),
        CollectiveModel(9, 0.7, 1.3, 0.8, 0.3),
        CollectiveModel(9, 1.0, 1.0, 0.9, -0.7),
        CollectiveModel(9, 1.0, 0.5, 0.4, 0.4, 0.3),
    ],
)
def test_limit_at_zero_temperature(model):
    """The classical ground state, as `large_n_limit` finds it (Emary, Brandes 2003)."""
    quanta, order = limit_thermal(model, 1e-3)
    limit = large_n_limit(model)
    assert quanta == pytest.approx(limit.boson_number_per_spin, abs=1e-6)
    assert order == pytest.approx(limit.order_parameter, abs=1e-6)


@pytest.mark.parametrize("difference", [0.4, 1.9])
@pytest.mark.parametrize("bias", [0.0, 0.3])
@pytest.mark.parametrize("temperature", [0.3, 0.9])
def test_limit_minimises_the_free_energy(difference, bias, temperature):
    """Numerical minimum over both transverse fields (own free energy per spin, product states)."""
    total = 1.5
    model = CollectiveModel(9, 1.0, 0.8, 0.5 * (total + difference), 0.5 * (total - difference), bias)

    def free_energy(point):
        x, y = point
        energy = 0.5 * math.sqrt(0.8**2 + (bias - total**2 * x) ** 2 + (difference**2 * y) ** 2)
        stored = ((total * x) ** 2 + (difference * y) ** 2) / 4
        return stored - temperature * math.log(2 * math.cosh(energy / temperature))

    starts = [(x, y) for x in (-0.9, -0.1, 0.1, 0.9) for y in (0.0, 0.1, 0.9)]
    options = {"xatol": 1e-9, "fatol": 1e-15, "maxiter": 4000}
    best = min(
        (minimize(free_energy, start, method="Nelder-Mead", options=options) for start in starts),
        key=lambda found: found.fun,
    )
    x, y = best.x
    quanta, order = limit_thermal(model, temperature)
    assert quanta == pytest.approx(((total * x) ** 2 + (difference * y) ** 2) / 4, abs=1e-6)
    assert order == pytest.approx(abs(x), abs=1e-6)


def test_finite_spins_approach_the_ordered_state():
    """Far below Tc: polynomial in 1/N through N = 8, 12, 18."""
    sizes, temperature = (8, 12, 18), 0.4
    answers = [finite(size, 0.8, temperature) for size in sizes]
    quanta, order = limit_thermal(dicke(1, 1.0, 1.0, 0.8), temperature)
    found = extrapolated([a.boson_number / n for a, n in zip(answers, sizes, strict=True)], sizes)
    assert found == pytest.approx(quanta, rel=0.01)
    found = extrapolated([a.order_parameter**2 for a in answers], sizes)
    assert found == pytest.approx(order**2, rel=0.01)


@pytest.mark.slow
def test_more_spins_come_closer():
    """Nearer to Tc larger N are needed: N = 48 alone is within 4 % at T = 0.8, extrapolated within 1 %."""
    temperature = 0.8
    quanta, order = limit_thermal(dicke(1, 1.0, 1.0, 0.8), temperature)
    sizes = (24, 48)
    answers = [finite(size, 0.8, temperature) for size in sizes]
    numbers = [a.boson_number / n for a, n in zip(answers, sizes, strict=True)]
    assert abs(numbers[1] - quanta) < abs(numbers[0] - quanta)
    assert numbers[1] == pytest.approx(quanta, rel=0.04)
    assert extrapolated(numbers, sizes) == pytest.approx(quanta, rel=0.01)
    assert extrapolated([a.order_parameter**2 for a in answers], sizes) == pytest.approx(order**2, rel=0.01)


def test_disordered_above_the_critical_temperature():
    """<n> stays finite as N grows: per spin it vanishes like 1/N."""
    sizes, temperature = (6, 12, 24), 2.4
    answers = [finite(size, 0.8, temperature) for size in sizes]
    per_spin = [a.boson_number / n for a, n in zip(answers, sizes, strict=True)]
    assert extrapolated(per_spin, sizes) == pytest.approx(0.0, abs=0.01)
    assert per_spin[2] == pytest.approx(0.5 * per_spin[1], rel=0.1)
    assert answers[2].order_parameter < answers[1].order_parameter < answers[0].order_parameter


def test_no_transition_within_one_multiplet():
    """J = N/2 alone, N = 16, T = 2, far above Tc: still <n>/N = 0.541 (evaluated for this project)."""
    alone = finite(16, 0.8, 2.0, distinguishable=False)
    assert alone.boson_number / 16 == pytest.approx(0.541, abs=5e-4)
    assert alone.critical_temperature is None
    assert finite(16, 0.8, 2.0).boson_number / 16 < 0.2
