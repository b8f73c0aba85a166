"""N -> infinity: Emary, Brandes, Phys. Rev. E 67, 066203 (2003); Hepp, Lieb, Ann. Phys. 76, 360 (1973)."""

from __future__ import annotations

import math

import numpy as np
import pytest

from solver import CollectiveModel, large_n_limit
from tests.reference.asking import ask, critical, dicke, value


def test_superradiant_numbers():
    """Emary, Brandes (2003), formulas; evaluated for two points (own evaluation)."""
    limit = large_n_limit(dicke(100, 1.0, 1.0, 1.0))
    assert limit.energy_per_spin == pytest.approx(-1.0625, abs=1e-14)
    assert 2.0 * limit.boson_number_per_spin == pytest.approx(1.875, abs=1e-14)
    assert limit.inversion == pytest.approx(-0.25, abs=1e-14)
    assert limit.order_parameter**2 == pytest.approx(1.0 - 1.0 / 16.0, abs=1e-14)
    assert limit.lower_branch == pytest.approx(0.9662437709, abs=1e-10)
    assert limit.upper_branch == pytest.approx(4.0082880355, abs=1e-10)
    other = large_n_limit(dicke(100, 2.0, 0.5, 0.75))
    assert other.energy_per_spin == pytest.approx(-0.3368055556, abs=1e-10)
    assert 2.0 * other.boson_number_per_spin == pytest.approx(0.2256944444, abs=1e-10)
    assert other.lower_branch == pytest.approx(0.9689895275, abs=1e-10)
    assert other.upper_branch == pytest.approx(2.0800683392, abs=1e-10)


@pytest.mark.parametrize(("w", "w0"), [(1.0, 1.0), (2.0, 0.5), (0.7, 1.9)])
@pytest.mark.parametrize("multiple", [0.2, 0.9, 1.0, 1.1, 2.0, 3.5])
def test_formulas_in_both_phases(w, w0, multiple):
    """Emary, Brandes (2003), eqs. for the branches and the mean fields."""
    edge = critical(w, w0)
    coupling = multiple * edge
    limit = large_n_limit(dicke(7, w, w0, coupling))
    assert limit.critical_coupling == pytest.approx(edge, rel=1e-14)
    if multiple <= 1.0:
        spread = math.sqrt((w0**2 - w**2) ** 2 + 16.0 * coupling**2 * w * w0)
        squares = [0.5 * (w**2 + w0**2 - spread), 0.5 * (w**2 + w0**2 + spread)]
        expected = [-0.5 * w0, 0.0, -1.0, 0.0]
    else:
        mu = multiple**-2
        spread = math.sqrt((w0**2 / mu**2 - w**2) ** 2 + 4.0 * w**2 * w0**2)
        squares = [0.5 * (w0**2 / mu**2 + w**2 - spread), 0.5 * (w0**2 / mu**2 + w**2 + spread)]
        expected = [
            -(coupling**2) / w - w * w0**2 / (16.0 * coupling**2),
            (coupling / w) ** 2 * (1.0 - mu**2),
            -mu,
            math.sqrt(1.0 - mu**2),
        ]
    found = [limit.energy_per_spin, limit.boson_number_per_spin, limit.inversion, limit.order_parameter]
    assert found == pytest.approx(expected, rel=1e-12, abs=1e-7 if multiple == 1.0 else 1e-14)
    assert limit.lower_branch == pytest.approx(math.sqrt(max(squares[0], 0.0)), rel=1e-9, abs=1e-7)
    assert limit.upper_branch == pytest.approx(math.sqrt(squares[1]), rel=1e-12)


def test_anisotropic_branches():
    """e^2 = eigenvalues of [[w, lr-lc],[lr-lc, w0]] [[w, lr+lc],[lr+lc, w0]] (own derivation)."""
    limit = large_n_limit(CollectiveModel(50, 1.0, 1.0, 0.4, 0.2))
    assert limit.lower_branch == pytest.approx(0.565685, abs=1e-6)
    assert limit.upper_branch == pytest.approx(1.385641, abs=1e-6)
    for w, w0, lr, lc in ((1.3, 0.8, 0.1, 0.35), (0.6, 2.0, 0.7, -0.2)):
        product = np.array([[w, lr - lc], [lr - lc, w0]]) @ np.array([[w, lr + lc], [lr + lc, w0]])
        expected = np.sqrt(np.sort(np.linalg.eigvals(product).real))
        limit = large_n_limit(CollectiveModel(50, w, w0, lr, lc))
        assert [limit.lower_branch, limit.upper_branch] == pytest.approx(expected, rel=1e-10)
        gap = [ask(CollectiveModel(n, w, w0, lr, lc), 2).gap_any for n in (50, 100)]
        assert 2.0 * gap[1] - gap[0] == pytest.approx(expected[0], rel=2e-3)


@pytest.mark.parametrize("ratio", [0.0, 0.25, 0.5, 1.0, 2.0])
def test_critical_line(ratio):
    """lr + lc = sqrt(w w0): Hioe, Phys. Rev. A 8, 1440 (1973).

    Dong, Liang, Chesi, Zhang, arXiv:2511.22230, print 1.322 to 1.323 at w = 3.5, w0 = 0.5 for
    five anisotropies; exact 1.322876.
    """
    model = CollectiveModel.from_ratio(10, 3.5, 0.5, 1.0, ratio)
    total = model.critical_coupling * (1.0 + ratio)
    assert 1.322 < total < 1.323
    assert total == pytest.approx(1.322876, abs=1e-6)
    for factor, ordered in ((0.999, False), (1.001, True)):
        coupling = factor * model.critical_coupling
        limit = large_n_limit(CollectiveModel.from_ratio(10, 3.5, 0.5, coupling, ratio))
        assert (limit.order_parameter > 0.01) == ordered
        assert limit.lower_branch < 0.04


@pytest.mark.parametrize(
    ("w", "w0", "multiple"), [(1.0, 1.0, 0.6), (1.0, 1.0, 2.0), (2.0, 0.5, 1.5), (2.0, 0.5, 0.7)]
)
def test_limit_is_approached_as_one_over_n(w, w0, multiple):
    """Leading order, its next order E0 = N e + c (own derivation), and everything else as 1/N."""
    coupling = multiple * critical(w, w0)
    limit = large_n_limit(dicke(1, w, w0, coupling))
    answers = {n: ask(dicke(n, w, w0, coupling), 4, 1e-10) for n in (100, 200, 400)}

    def extrapolated(numbers: list[float]) -> float:
        """Quadratic in 1/N through three sizes that double."""
        first, second, third = numbers
        return (first - 6.0 * second + 8.0 * third) / 3.0

    beyond = [answers[n].energy[0] - n * limit.energy_per_spin for n in answers]
    mu = min(1.0, multiple**-2)
    branches = limit.lower_branch + limit.upper_branch
    constant = 0.5 * (branches - w - 0.5 * w0 * (1.0 + mu) / mu) - coupling**2 / w * (1.0 - mu) * (mu < 1.0)
    if mu == 1.0:
        assert constant == pytest.approx(0.5 * (branches - w - w0), rel=1e-12)
    assert extrapolated(beyond) == pytest.approx(constant, abs=2e-5)
    for key, expected in (
        ("inversion", limit.inversion),
        ("order_parameter", limit.order_parameter),
        ("boson_number", limit.boson_number_per_spin),
    ):
        scale = {"boson_number": lambda n: n}.get(key, lambda _: 1.0)
        numbers = [value(answers[n], key) / scale(n) for n in answers]
        if key == "order_parameter":
            numbers = [number**2 for number in numbers]
            expected = expected**2  # noqa: PLW2901 - the square is what has an expansion in 1/N
        assert extrapolated(numbers) == pytest.approx(expected, abs=2e-4)
        assert abs(numbers[-1] - expected) < 0.02
    # beyond the transition both parities coincide, the branch is the gap within one of them
    gaps = [answers[n].gap if mu < 1.0 else answers[n].gap_any for n in answers]
    assert extrapolated(gaps) == pytest.approx(limit.lower_branch, rel=1e-3)


def test_next_order_number():
    """c = -0.0127340968 at w = w0 = l = 1: own calculation."""
    beyond = [ask(dicke(n, 1.0, 1.0, 1.0), 2, 1e-10).energy[0] + 1.0625 * n for n in (100, 200)]
    assert 2.0 * beyond[1] - beyond[0] == pytest.approx(-0.0127340968, abs=2e-6)


@pytest.mark.parametrize(("coupling", "expected"), [(0.25, 0.13617954), (0.4, 0.40141355)])
def test_entropy_of_the_normal_phase(coupling, expected):
    """Bits, w = w0 = 1: Lambert, Emary, Brandes, Phys. Rev. Lett. 92, 073602 (2004); own evaluation."""
    entropies = [value(ask(dicke(n, 1.0, 1.0, coupling), 2, 1e-10), "entropy") for n in (100, 200, 400)]
    limit = (entropies[0] - 6.0 * entropies[1] + 8.0 * entropies[2]) / 3.0
    assert limit == pytest.approx(expected, abs=2e-5)


def test_values_near_a_thousand_spins():
    """Same-parity gap at N = 1000, w = w0 = 1: own calculation, agrees with the branches."""
    assert ask(dicke(1000, 1.0, 1.0, 1.0), 2).gap == pytest.approx(0.966203, abs=1e-6)
    assert ask(dicke(1000, 1.0, 1.0, 0.3), 2).gap_any == pytest.approx(0.63257, abs=6e-6)
