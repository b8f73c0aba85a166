"""Pictures in phase space against closed forms, and against each other across bases and sectors."""

import math

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.special import eval_laguerre, gammaln

from solver import CollectiveModel, PointQuestion, QuestionError, draw_portrait, solve_chain
from solver.phase_space import (
    SchmidtState,
    along_z,
    husimi_function,
    husimi_map,
    number_distribution,
    schmidt_form,
    spin_coherent_amplitudes,
    wigner_function,
    wigner_map,
)
from solver.point import answer_point
from solver.portrait import _block_state
from solver.spin import raised, raising_elements

Array = NDArray[np.float64]
GRID = np.linspace(-4.0, 4.0, 81)
X, P = np.meshgrid(GRID, GRID)


def boson(*amplitudes: float, first: int = 0) -> SchmidtState:
    vector = np.array(amplitudes)[None]
    return SchmidtState(np.ones(1), vector / np.linalg.norm(vector), np.array([[1.0, 0.0]]), first)


def coherent(alpha: float, count: int = 60) -> Array:
    n = np.arange(count)
    size = np.exp(-0.5 * alpha**2 + n * math.log(abs(alpha)) - 0.5 * gammaln(n + 1.0))
    return size * np.sign(alpha) ** n


@pytest.mark.parametrize("n", [0, 1, 2, 7, 40])
def test_wigner_of_a_number_state(n: int) -> None:
    # Cahill, Glauber, Phys. Rev. 177, 1882 (1969): (2/pi) (-1)^n exp(-2 |alpha|^2) L_n(4 |alpha|^2)
    square = X**2 + P**2
    expected = 2.0 / math.pi * (-1.0) ** n * np.exp(-2.0 * square) * eval_laguerre(n, 4.0 * square)
    assert np.abs(wigner_function(boson(1.0, first=n), GRID, GRID) - expected).max() < 1e-12


@pytest.mark.parametrize("alpha", [0.3, -1.7, 2.5])
def test_wigner_of_a_coherent_state(alpha: float) -> None:
    # Cahill, Glauber (1969): (2/pi) exp(-2 |alpha - beta|^2)
    expected = 2.0 / math.pi * np.exp(-2.0 * ((X - alpha) ** 2 + P**2))
    assert np.abs(wigner_function(boson(*coherent(alpha)), GRID, GRID) - expected).max() < 1e-12


@pytest.mark.parametrize("sign", [1.0, -1.0])
@pytest.mark.parametrize("alpha", [0.8, 2.0])
def test_wigner_of_a_cat(alpha: float, sign: float) -> None:
    # superposition of two coherent states: two Gaussians and fringes cos(4 alpha p) between them
    # (Cahill, Glauber (1969), applied to D(alpha)|0> + sign D(-alpha)|0>)
    parts = np.exp(-2.0 * ((X - alpha) ** 2 + P**2)) + np.exp(-2.0 * ((X + alpha) ** 2 + P**2))
    fringes = 2.0 * sign * np.exp(-2.0 * (X**2 + P**2)) * np.cos(4.0 * alpha * P)
    expected = (parts + fringes) / (math.pi * (1.0 + sign * math.exp(-2.0 * alpha**2)))
    found = wigner_function(boson(*(coherent(alpha) + sign * coherent(-alpha))), GRID, GRID)
    assert np.abs(found - expected).max() < 1e-12


def test_wigner_far_out_is_that_of_the_displaced_vacuum() -> None:
    # |alpha|^2 = 3600: the vacuum's tail there is below the smallest double
    alpha, count = 60.0, 4500
    state = boson(*coherent(alpha, count)[3000:], first=3000)
    x = np.linspace(-62.0, 62.0, 249)
    p = np.linspace(-2.0, 2.0, 21)
    expected = 2.0 / math.pi * np.exp(-2.0 * ((x - alpha) ** 2 + p[:, None] ** 2))
    assert np.abs(wigner_function(state, x, p) - expected).max() < 1e-9


@pytest.mark.parametrize("count", [1, 2, 9, 30])
def test_wigner_map_is_normalised_and_its_centre_is_the_parity_of_n(count: int) -> None:
    # Royer, Phys. Rev. A 15, 449 (1977): W(0) = (2/pi) <(-1)^n>
    random = np.random.default_rng(count)
    matrix = random.normal(size=(count, 4))
    weights, vectors, spins = schmidt_form(matrix / np.linalg.norm(matrix))
    state = SchmidtState(weights, vectors, spins)
    found = wigner_map(state)
    total = found.values.sum() * (found.x[1] - found.x[0]) * (found.p[1] - found.p[0])
    assert total == pytest.approx(1.0, abs=2e-6)
    parity = float(number_distribution(state) @ (1.0 - 2.0 * (np.arange(count) % 2)))
    assert found.values[100, 100] == pytest.approx(2.0 / math.pi * parity, abs=1e-12)


@pytest.mark.parametrize("spins", [1, 6, 25, 400])
@pytest.mark.parametrize("theta", [0.0, 0.4, 2.0, math.pi])
def test_husimi_of_a_spin_coherent_state(spins: int, theta: float) -> None:
    # Arecchi et al., Phys. Rev. A 6, 2211 (1972): |<n|n0>|^2 = ((1 + n.n0)/2)^N
    spin = spin_coherent_amplitudes(spins, np.array([math.cos(theta)]))
    state = SchmidtState(np.ones(1), np.ones((1, 1)), spin)
    found = husimi_map(state, 31, 48)
    across = np.sqrt(1.0 - found.cos_theta[:, None] ** 2) * np.cos(found.phi)
    cosine = found.cos_theta[:, None] * math.cos(theta) + across * math.sin(theta)
    assert np.abs(found.values - (0.5 * (1.0 + cosine)) ** spins).max() < 1e-11


@pytest.mark.parametrize("spins", [1, 4, 9])
def test_husimi_is_normalised(spins: int) -> None:
    # Arecchi et al. (1972): (N+1)/(4 pi) times the integral of |theta, phi><theta, phi| is 1;
    # Gauss nodes and N+1 angles integrate it exactly
    random = np.random.default_rng(spins)
    weights, left, right = schmidt_form(random.normal(size=(12, spins + 1)))
    nodes, shares = np.polynomial.legendre.leggauss(spins + 2)
    columns = 2 * spins + 1
    values = husimi_function(SchmidtState(weights, left, right), nodes, columns)
    total = (spins + 1) / (4.0 * math.pi) * (shares @ values).sum() * 2.0 * math.pi / columns
    assert total == pytest.approx(1.0, abs=1e-13)


@pytest.mark.parametrize("spins", [1, 2, 7, 20, 301])
def test_turning_the_spin_axes(spins: int) -> None:
    turned = np.arange(spins + 1.0)
    table = along_z(np.eye(spins + 1), turned, spins)
    assert np.abs(table @ table.T - np.eye(spins + 1)).max() < 1e-11
    steps = raising_elements(spins)
    along_x = np.zeros((spins + 1, spins + 1))
    along_x[1:, :-1] = along_x.T[1:, :-1] = 0.0
    along_x += 0.5 * (raised(np.eye(spins + 1), steps) + raised(np.eye(spins + 1), steps).T)
    m = turned - 0.5 * spins
    # each row is an eigenvector of Jx, and Jz has positive elements between neighbours
    assert np.abs(table @ along_x - m[:, None] * table).max() < 1e-10 * spins
    assert np.diag(table @ np.diag(m) @ table.T, 1) == pytest.approx(0.5 * steps, abs=1e-10 * spins)


MODELS = {
    "isotropic": CollectiveModel.from_ratio(6, 1.0, 1.0, 0.7),
    "anisotropic": CollectiveModel.from_ratio(5, 1.0, 1.0, 0.7, 0.4),
    "even spins": CollectiveModel.from_ratio(4, 1.0, 0.8, 0.9, 0.4),
    "inverted": CollectiveModel.from_ratio(6, 1.0, -1.0, 0.6),
    "bias": CollectiveModel.from_ratio(5, 1.0, 1.0, 0.7, 1.0, 0.2),
    "one spin": CollectiveModel.from_ratio(1, 1.0, 0.8, 0.7),
}


@pytest.mark.parametrize("model", MODELS.values(), ids=MODELS)
def test_both_bases_give_the_same_pictures(model: CollectiveModel) -> None:
    question = PointQuestion(model)
    pictures = []
    for basis in ("fock", "shifted"):
        answer, start = answer_point(question, None, basis)
        assert start is not None
        state = _block_state(start, answer.parity[0], "ground")
        pictures.append((wigner_function(state, GRID, GRID), husimi_function(state, GRID / 4.0, 24)))
    for first, second in zip(*pictures, strict=True):
        assert np.abs(first - second).max() < 1e-6


@pytest.mark.parametrize(
    "model",
    [
        *MODELS.values(),
        CollectiveModel.from_ratio(8, 1.0, 1.0, 1.4, 0.0),
        CollectiveModel(8, 1.0, 1.0, 0.0, 1.4),
        CollectiveModel(5, 1.0, 0.7, 0.0, 0.0, 0.4),
        CollectiveModel(5, 1.0, 0.0, 0.0, 0.0, -0.4),
        CollectiveModel.from_ratio(100, 1.0, 1.0, 1.5),
        CollectiveModel.from_ratio(3, 1.0, 0.0, 1.0),
    ],
)
def test_pictures_agree_with_the_observables(model: CollectiveModel) -> None:
    question = PointQuestion(model)
    found = draw_portrait([question])
    assert found.answer == next(iter(solve_chain([question])))
    observed = found.answer.observables
    n = np.arange(found.distribution.size)
    assert found.distribution.sum() == pytest.approx(1.0, abs=1e-12)
    assert found.distribution @ n == pytest.approx(observed["boson_number"], abs=1e-6)
    assert found.above_needed is not None
    assert found.above_needed <= question.tail
    x, p, values = found.wigner.x, found.wigner.p, found.wigner.values
    area = (x[1] - x[0]) * (p[1] - p[0])
    mean = (values * x).sum() * area
    assert values.sum() * area == pytest.approx(1.0, abs=1e-5)
    assert (values * x**2).sum() * area - mean**2 == pytest.approx(observed["quadrature_x"], rel=1e-3)
    assert values[100, 100] == pytest.approx(2.0 / math.pi * found.parity_of_n, abs=1e-9)
    # <Jz> = (N/2) (N+2)/N times the mean of cos(theta) over the Husimi function
    # (Arecchi et al. (1972), antinormal symbol of Jz)
    shares = found.husimi.values.sum(axis=1)
    cosine = float(shares @ found.husimi.cos_theta / shares.sum())
    spins = model.spins
    assert cosine * (spins + 2.0) / spins == pytest.approx(observed["inversion"], abs=5e-4)


def test_broken_states_are_where_the_doublet_closes() -> None:
    closed = PointQuestion(CollectiveModel.from_ratio(40, 1.0, 1.0, 1.0))
    plus, minus = (draw_portrait([closed], state) for state in ("plus", "minus"))
    # the mode of an ordered state sits near sqrt(N) (l/w) sqrt(1 - mu^2), mu = 1/4
    # (Emary, Brandes, Phys. Rev. E 67, 066203 (2003))
    place = math.sqrt(40.0 * (1.0 - 1.0 / 16.0))
    means = []
    for found in (plus, minus):
        weight = found.wigner.values.sum(axis=0)
        means.append(float(weight @ found.wigner.x / weight.sum()))
        assert found.wigner.values.min() > -1e-6
    assert means == pytest.approx([place, -place], rel=0.02)
    # the spin leans the other way
    columns = plus.husimi.values.sum(axis=0)
    assert abs(plus.husimi.phi[int(np.argmax(columns))]) == pytest.approx(math.pi, abs=0.1)
    # the spin tells the two apart, so the mode alone is their mixture: no fringes
    assert draw_portrait([closed]).closed
    answer, start = answer_point(closed)
    assert start is not None
    x = np.linspace(-9.0, 9.0, 121)
    mixed, right, left = (
        wigner_function(_block_state(start, answer.parity[0], name), x, GRID)
        for name in ("ground", "plus", "minus")
    )
    assert np.abs(mixed - 0.5 * (right + left)).max() < 1e-6
    assert mixed.max() > 0.3
    with pytest.raises(QuestionError, match="doublet"):
        draw_portrait([PointQuestion(CollectiveModel.from_ratio(4, 1.0, 1.0, 0.3))], "plus")


def test_the_same_chain_gives_the_same_answer() -> None:
    chain = [PointQuestion(CollectiveModel.from_ratio(9, 1.0, 1.0, 0.1 * step)) for step in range(1, 6)]
    assert draw_portrait(chain).answer == list(solve_chain(chain))[-1]
