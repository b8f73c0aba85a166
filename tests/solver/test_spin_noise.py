"""The noise ellipse of the spin against closed forms and against the squeezing of the whole state."""

from __future__ import annotations

import math

import numpy as np
import pytest

from solver import CollectiveModel, PointQuestion, draw_portrait
from solver.phase_space import SchmidtState, spin_coherent_amplitudes
from solver.spin_noise import noise_ellipse


def pure(spin: np.ndarray) -> SchmidtState:
    return SchmidtState(np.ones(1), np.ones((1, 1)), spin[None] / np.linalg.norm(spin))


@pytest.mark.parametrize("spins", [1, 2, 7, 40])
@pytest.mark.parametrize("cosine", [-1.0, -0.3, 0.0, 0.8])
def test_a_coherent_spin_state_is_a_circle(spins: int, cosine: float) -> None:
    # Arecchi, Courtens, Gilmore, Thomas, Phys. Rev. A 6, 2211 (1972): variance N/4 across the mean
    found = noise_ellipse(pure(spin_coherent_amplitudes(spins, np.array([cosine]))[0]))
    assert found.in_plane == pytest.approx(1.0, abs=1e-12)
    assert found.along_y == pytest.approx(1.0, abs=1e-12)
    assert found.mean_spin == pytest.approx(1.0, abs=1e-12)
    assert math.cos(found.polar) == pytest.approx(cosine, abs=1e-12)


@pytest.mark.parametrize(("spins", "j"), [(4, 1), (9, 3), (10, 5), (6, 6)])
def test_a_state_of_sharp_jz(spins: int, j: int) -> None:
    # <Jx^2> = <Jy^2> = (J(J+1) - m^2)/2, angular momentum algebra
    m = j - 0.5 * spins
    expected = math.sqrt(0.5 * (0.25 * spins * (spins + 2.0) - m * m)) / (0.5 * math.sqrt(spins))
    found = noise_ellipse(pure(np.eye(spins + 1)[j]))
    assert (found.in_plane, found.along_y) == (pytest.approx(expected), pytest.approx(expected))
    assert found.mean_spin == pytest.approx(abs(m) / (0.5 * spins))
    if m == 0.0:
        assert math.cos(found.polar) == -1.0


@pytest.mark.parametrize(
    "model",
    [
        CollectiveModel(1, 1.0, 1.0, 0.3, 0.3),
        CollectiveModel(12, 1.0, 1.0, 0.45, 0.45),
        CollectiveModel(9, 1.0, 0.8, 0.5, 0.2),
        CollectiveModel(10, 1.0, 1.0, 0.4, 0.4, 0.3),
        CollectiveModel(8, 1.0, -1.2, 0.3, 0.5, -0.2),
        CollectiveModel(6, 1.0, 1.0, 1.3, 0.0),
    ],
)
def test_the_short_axis_is_the_squeezing(model: CollectiveModel) -> None:
    # Kitagawa, Ueda, Phys. Rev. A 47, 5138 (1993): xi_S^2 = 4 min Var(J_perp)/N
    found = draw_portrait([PointQuestion(model)])
    short = min(found.noise.in_plane, found.noise.along_y)
    assert short**2 == pytest.approx(found.answer.observables["squeezing"], abs=1e-6)


def test_broken_symmetry_turns_the_mean_spin_and_takes_the_cat_away() -> None:
    question = PointQuestion(CollectiveModel(30, 1.0, 1.0, 1.0, 1.0))
    whole, plus, minus = (draw_portrait([question], name).noise for name in ("ground", "plus", "minus"))
    # both wells at once: the spread along x is that of their distance (large-N order parameter, 1 - mu^2)
    assert whole.in_plane > 0.9 * math.sqrt(30.0 * (1.0 - 0.25**2))
    for one in (plus, minus):
        assert one.in_plane < 1.2
        assert one.mean_spin > 0.95
        # Emary, Brandes, Phys. Rev. E 67, 066203 (2003): <Jz>/(N/2) = -mu, mu = 1/4
        assert math.cos(one.polar) == pytest.approx(-0.25, abs=0.02)
    assert plus.polar == pytest.approx(-minus.polar, abs=1e-6)
