"""Boson eliminated: H = h Jz - (G/N) Jx^2, G = 4 l^2/w.

Lipkin, Meshkov, Glick, Nucl. Phys. 62, 188 (1965).
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from solver import CollectiveModel, effective_spin_levels, large_n_limit
from tests.reference.asking import ask, dicke


def attracting(spins: int, field: float, pull: float, mode: float = 1.0) -> CollectiveModel:
    """Dicke model whose effective spin model has field h and pull G."""
    return dicke(spins, mode, field, 0.5 * math.sqrt(pull * mode))


@pytest.mark.parametrize(("h", "pull"), [(1.0, 0.4), (0.3, 1.7), (2.0, 2.0), (-0.8, 1.1)])
def test_two_and_three_spins(h, pull):
    """N = 2: -G/2, -G/4 -+ sqrt(h^2 + G^2/16); N = 3 likewise: own calculation."""
    root = math.sqrt(h * h + pull * pull / 16.0)
    two = sorted([-pull / 2.0, -pull / 4.0 - root, -pull / 4.0 + root])
    assert effective_spin_levels(attracting(2, h, pull), 3) == pytest.approx(two, abs=1e-13)
    three = []
    for s in (-1.0, 1.0):
        root = math.sqrt((s * h + pull / 6.0) ** 2 + pull * pull / 12.0)
        three += [-5.0 * pull / 12.0 + s * h / 2.0 - root, -5.0 * pull / 12.0 + s * h / 2.0 + root]
    assert effective_spin_levels(attracting(3, h, pull), 4) == pytest.approx(sorted(three), abs=1e-13)


@pytest.mark.parametrize(("e", "v"), [(1.0, 0.3), (0.4, 1.2)])
def test_published_closed_forms(e, v):
    """H = e Jz + (V/2)(J+^2 + J-^2), Lipkin et al. (1965): N = 2: 0, -+sqrt(e^2 + V^2);
    N = 4: 0, -+2 sqrt(e^2 + 3V^2), -+sqrt(e^2 + 9V^2).

    K^dag K with lr, lc gives -(lr lc/(wN)) (J+^2 + J-^2) plus a diagonal part; with V < 0 from
    lr = lc and V > 0 from lr = -lc the diagonal part -+ V (J(J+1) - Jz^2) must be put back.
    """
    closed = {
        2: sorted([0.0, -math.hypot(e, v), math.hypot(e, v)]),
        4: sorted([0.0]
            + [s * 2.0 * math.sqrt(e * e + 3.0 * v * v) for s in (-1, 1)]
            + [s * math.sqrt(e * e + 9.0 * v * v) for s in (-1, 1)]),
    }  # fmt: skip
    for spins, expected in closed.items():
        m = np.arange(spins + 1) - 0.5 * spins
        up = np.diag(np.sqrt(0.25 * spins * (spins + 2) - m[:-1] * (m[:-1] + 1)), -1)
        plain = e * np.diag(m) + 0.5 * v * (up @ up + up.T @ up.T)
        assert np.linalg.eigvalsh(plain) == pytest.approx(expected, abs=1e-12)
    # N = 2: Jx^2 - Jy^2 = 2 Jx^2 - 2 + Jz^2 and Jz^2 is 1 on the even block that V couples
    levels = effective_spin_levels(attracting(2, e, 4.0 * v), 3)
    assert [levels[0] + v, levels[-1] + v] == pytest.approx([closed[2][0], closed[2][-1]], abs=1e-12)


def test_large_number_of_spins():
    """Critical at G = h; gaps sqrt(h (h - G)), beyond it sqrt(G^2 - h^2) within one parity.

    E/N -> -h/2 and -(h^2 + G^2)/(4G).

    Botet, Jullien, Phys. Rev. B 28, 3955 (1983) for the transition; closed forms checked as own
    calculation.
    """
    normal = effective_spin_levels(attracting(5000, 1.0, 0.5), 2)
    assert normal[1] - normal[0] == pytest.approx(math.sqrt(0.5), rel=1e-3)
    assert normal[0] / 5000 == pytest.approx(-0.5, rel=1e-3)
    ordered = effective_spin_levels(attracting(5000, 1.0, 2.0), 4)
    assert ordered[1] - ordered[0] == pytest.approx(0.0, abs=1e-9)
    assert ordered[2] - ordered[0] == pytest.approx(math.sqrt(3.0), rel=2e-3)
    assert ordered[0] / 5000 == pytest.approx(-5.0 / 8.0, rel=1e-3)


@pytest.mark.parametrize("model", [attracting(12, 0.05, 0.08, 40.0), CollectiveModel(9, 50.0, 0.1, 0.9, 0.4)])
def test_fast_mode_reduces_the_full_model(model):
    """w much larger than w0 and l: the low levels of the full model are those of the effective one."""
    full = ask(model, 3)
    effective = effective_spin_levels(model, 3)
    assert full.energy[0] >= effective[0] - 1e-12
    for energy, reduced in zip(full.energy, effective, strict=True):
        assert energy == pytest.approx(reduced, abs=2e-3 * model.splitting)


def test_ground_energy_is_a_floor():
    """H >= lowest level of the effective model, with equality at w0 = 0: own calculation."""
    for spins in (1, 4, 21):
        assert (
            ask(dicke(spins, 1.0, 1.0, 0.8), 1).energy[0]
            >= effective_spin_levels(dicke(spins, 1.0, 1.0, 0.8), 1)[0]
        )
        still = dicke(spins, 1.0, 0.0, 0.5)
        assert effective_spin_levels(still, 1)[0] == pytest.approx(-0.25 * spins, rel=1e-13)
        assert large_n_limit(still).energy_per_spin == pytest.approx(-0.25, rel=1e-13)
