"""Degenerate and extreme models: the answers must be right, not merely there."""

from __future__ import annotations

import math

import numpy as np
import pytest

from solver import CollectiveModel, PointAnswer, PointQuestion, answer_point, solve_chain
from tests.solver.dense import dense_spectrum


def ask(
    model: CollectiveModel, levels: int = 6, tolerance: float = 1e-9, basis: str | None = None
) -> PointAnswer:
    return answer_point(PointQuestion(model, levels, tolerance), basis=basis)[0]  # type: ignore[arg-type]


def assert_bracketed(answer: PointAnswer, expected: list[float], slack: float = 0.0) -> None:
    rows = zip(sorted(answer.energy_lower), sorted(expected), sorted(answer.energy), strict=True)
    for low, energy, up in rows:
        assert low - slack <= energy <= up + slack


def uncoupled(model: CollectiveModel, count: int) -> list[tuple[float, int]]:
    """Energies n w + w0 m and parities of the `count` lowest product states."""
    rows = [
        (model.mode * n + model.splitting * (j - 0.5 * model.spins), (-1) ** (n + j))
        for n in range(count + 1)
        for j in range(model.spins + 1)
    ]
    return sorted(rows)[:count]


@pytest.mark.parametrize("spins", [1, 2, 3, 10, 4000])
@pytest.mark.parametrize("splitting", [0.73, -0.41, 2.9])
def test_zero_coupling(spins, splitting):
    model = CollectiveModel(spins, 1.0, splitting, 0.0, 0.0)
    answer = ask(model, 12)
    expected = uncoupled(model, 12)
    assert_bracketed(answer, [energy for energy, _ in expected], 4e-16 * spins)
    assert answer.parity == tuple(parity for _, parity in expected)
    assert answer.observables["boson_number"] == pytest.approx(0.0, abs=1e-13)
    assert answer.observables["entropy"] == pytest.approx(0.0, abs=1e-12)
    assert answer.observables["inversion"] == pytest.approx(-math.copysign(1.0, splitting), abs=1e-13)
    assert answer.observables["bunching"] is None
    assert answer.observables["squeezing"] == pytest.approx(1.0, abs=1e-11)


@pytest.mark.parametrize("spins", [1, 2, 5])
def test_nothing_but_the_mode(spins):
    """No splitting, no coupling: every level N + 1 times, as many of each parity as there are."""
    answer = ask(CollectiveModel(spins, 1.0, 0.0, 0.0, 0.0), 2 * spins + 2)
    assert_bracketed(answer, [0.0] * (spins + 1) + [1.0] * (spins + 1), 1e-15)
    assert sum(answer.parity[: spins + 1]) == (spins + 1) % 2
    assert answer.gap_any == pytest.approx(0.0, abs=1e-14)


@pytest.mark.parametrize("spins", [1, 2, 6, 20])
@pytest.mark.parametrize("coupling", [1e-9, 1e-4, 0.03])
def test_nearly_everything_degenerate(spins, coupling):
    """w0 = 0 and hardly any coupling: E = n w - 4 l^2 m^2/(N w) still holds."""
    m = np.arange(spins + 1) - 0.5 * spins
    exact = np.add.outer(np.arange(6.0), -4.0 * coupling**2 * m**2 / spins)
    answer = ask(CollectiveModel(spins, 1.0, 0.0, coupling, coupling), 3)
    assert_bracketed(answer, sorted(exact.ravel())[:3], 1e-15 * spins)


@pytest.mark.parametrize("bias", [0.6, -0.6])
@pytest.mark.parametrize("splitting", [0.0, 0.8])
def test_zero_coupling_with_bias(bias, splitting):
    """The spin turns into the total field: n w + sqrt(w0^2 + eps^2) m."""
    answer = ask(CollectiveModel(5, 1.0, splitting, 0.0, 0.0, bias), 10)
    field = math.hypot(splitting, bias)
    exact = np.add.outer(np.arange(11.0), field * (np.arange(6) - 2.5)).ravel()
    assert_bracketed(answer, sorted(exact)[:10], 1e-14)
    assert set(answer.parity) == {0}
    assert answer.observables["inversion"] == pytest.approx(-splitting / field, abs=1e-7)


@pytest.mark.parametrize("spins", [1, 2, 5, 14])
@pytest.mark.parametrize(("rotating", "counter"), [(0.5, 0.5), (0.7, 0.2), (0.0, 0.6), (0.9, 0.0)])
@pytest.mark.parametrize("bias", [0.0, 0.35])
def test_negative_splitting_is_a_turned_spin(spins, rotating, counter, bias):
    """w0 -> -w0 with lr and lc exchanged is a rotation by pi about x."""
    there = ask(CollectiveModel(spins, 1.0, 0.8, rotating, counter, bias), 6)
    back = ask(CollectiveModel(spins, 1.0, -0.8, counter, rotating, bias), 6)
    for first, second in ((there, back), (back, there)):
        for low, up in zip(sorted(first.energy_lower), sorted(second.energy), strict=True):
            assert low <= up
    sign = (-1) ** spins
    assert back.parity[0] == sign * there.parity[0]
    for key, turn in (("inversion", -1.0), ("boson_number", 1.0), ("order_parameter", 1.0), ("entropy", 1.0)):
        errors = [a.observables[f"{key}_error"] for a in (there, back)]
        assert abs(turn * back.observables[key] - there.observables[key]) <= sum(errors), key


@pytest.mark.parametrize("basis", [None, "fock", "shifted"])
@pytest.mark.parametrize(("spins", "coupling"), [(6, 1.4), (10, 1.2), (20, 1.0)])
def test_doublets_below_rounding_stay_two_levels(spins, coupling, basis):
    answer = ask(CollectiveModel(spins, 1.0, 1.0, coupling, coupling), 6, 1e-11, basis)
    for at in (0, 2):
        assert {answer.parity[at], answer.parity[at + 1]} == {1, -1}
        assert abs(answer.energy[at + 1] - answer.energy[at]) < 1e-4
    assert 0.0 <= answer.gap_any < 1e-7
    assert answer.gap > 0.3


def test_near_degenerate_order_is_ascending():
    """Whatever the parities, energies come in order to within their bounds."""
    for tolerance in (1e-2, 1e-5, 1e-9, 1e-12):
        answer = ask(CollectiveModel(8, 1.0, 1.0, 1.2, 0.6), 6, tolerance)
        widths = [up - low for up, low in zip(answer.energy, answer.energy_lower, strict=True)]
        for at in range(5):
            assert answer.energy[at + 1] >= answer.energy[at] - max(widths)
            assert max(widths) <= tolerance


def test_exact_crossing():
    """Judd, J. Phys. C 12, 1685 (1979): E = w - l^2/w for both parities at 4 l^2 + (w0/2)^2 = 1."""
    coupling = 0.5 * math.sqrt(1.0 - 0.25)
    for basis in (None, "fock", "shifted"):
        answer = ask(CollectiveModel(1, 1.0, 1.0, coupling, coupling), 6, 1e-12, basis)
        both = [at for at, up in enumerate(answer.energy) if abs(up - 13.0 / 16.0) < 1e-11]
        assert {answer.parity[at] for at in both} == {1, -1}
        for at in both:
            assert answer.energy_lower[at] - 1e-15 <= 13.0 / 16.0 <= answer.energy[at] + 1e-15


@pytest.mark.parametrize("ratio", [1e3, 1e6])
def test_counter_rotating_part_alone_or_almost(ratio):
    """lc/lr huge: close to lr = 0, where a^dag a - Jz is conserved."""
    counter = 0.8
    pure = ask(CollectiveModel(4, 1.0, 1.0, 0.0, counter), 4)
    mixed = ask(CollectiveModel(4, 1.0, 1.0, counter / ratio, counter), 4)
    assert pure.basis == "excitation"
    assert mixed.basis != "excitation"
    assert mixed.energy == pytest.approx(pure.energy, abs=8.0 / ratio**1)
    assert mixed.meets_tolerance


def test_tiny_mode():
    """w = 1e-3 w0, at the same distance from critical: hundreds of quanta, checked densely."""
    mode = 1e-2
    coupling = 0.5 * math.sqrt(mode) * 1.05
    model = CollectiveModel(1, mode, 1.0, coupling, coupling)
    answer = ask(model, 4, 1e-8)
    reference = dense_spectrum(model, 4, 400)
    assert reference.edge_weight() < 1e-20
    assert_bracketed(answer, [energy for energy, _ in reference.merged()[:4]])
    assert answer.meets_tolerance


@pytest.mark.parametrize("unit", [1e-6, 1e6])
def test_units_do_not_matter(unit):
    plain = ask(CollectiveModel(6, 1.0, 0.9, 0.6, 0.3, 0.1))
    scaled = ask(CollectiveModel(6, unit, 0.9 * unit, 0.6 * unit, 0.3 * unit, 0.1 * unit))
    assert np.array(scaled.energy) / unit == pytest.approx(plain.energy, abs=2e-9)
    for key in ("boson_number", "inversion", "entropy", "squeezing"):
        assert scaled.observables[key] == pytest.approx(plain.observables[key], abs=1e-6)


@pytest.mark.parametrize("levels", [1, 40])
@pytest.mark.parametrize("tolerance", [1e-12, 1e-2])
@pytest.mark.parametrize(
    "model",
    [
        CollectiveModel(1, 1.0, 1.0, 0.6, 0.6),
        CollectiveModel(2, 1.0, 1.0, 0.8, 0.3),
        CollectiveModel(5, 1.0, 1.0, 0.5, 0.0),
        CollectiveModel(4, 1.0, 0.7, 0.5, 0.5, 0.2),
    ],
    ids=str,
)
def test_fewest_and_most_levels_at_both_ends_of_the_tolerance(model, levels, tolerance):
    answer = ask(model, levels, tolerance)
    reference = dense_spectrum(model, 45, 110)
    assert len(answer.energy) == len(answer.parity) == len(answer.energy_status) == levels
    assert_bracketed(answer, [energy for energy, _ in reference.merged()[:levels]])
    assert answer.gap is not None
    widest = max(up - low for up, low in zip(answer.energy, answer.energy_lower, strict=True))
    assert answer.meets_tolerance == (widest <= tolerance)
    if tolerance == 1e-2:
        assert answer.meets_tolerance
    else:
        assert widest < 1e-11


@pytest.mark.slow
@pytest.mark.parametrize("multiple", [0.5, 1.0, 2.0])
def test_largest_number_of_spins(multiple):
    """N = 5000: bounds to 1e-9, close to the large-N limit."""
    coupling = 0.5 * multiple
    answer = ask(CollectiveModel(5000, 1.0, 1.0, coupling, coupling), 2)
    assert answer.meets_tolerance
    expected = -0.5 if multiple <= 1.0 else -(coupling**2) - 1.0 / (16.0 * coupling**2)
    assert answer.energy[0] / 5000 == pytest.approx(expected, abs=1e-4)
    assert answer.parity == (1, -1)
    if multiple == 2.0:
        assert answer.gap == pytest.approx(0.9662437709, abs=1e-4)
        assert answer.observables["inversion"] == pytest.approx(-0.25, abs=1e-3)
        assert answer.gap_any < 1e-8


def test_statuses_are_claims():
    bracketed = ask(CollectiveModel(3, 1.0, 1.0, 0.5, 0.5))
    exact = ask(CollectiveModel(3, 1.0, 1.0, 0.5, 0.0))
    assert set(bracketed.energy_status) == {"bracketed"}
    assert set(exact.energy_status) == {"exact"}
    for answer in (bracketed, exact):
        assert all(low < up for low, up in zip(answer.energy_lower, answer.energy, strict=True))


def test_a_neighbour_never_hides_a_level():
    """A chain through level crossings finds what single points find."""
    questions = [
        PointQuestion(CollectiveModel(1, 1.0, 1.0, 0.02 * k, 0.02 * k), levels=8, tolerance=1e-10)
        for k in range(20, 60)
    ]
    for question, chained in zip(questions, solve_chain(questions), strict=True):
        single = answer_point(question)[0]
        assert sorted(chained.energy) == pytest.approx(sorted(single.energy), abs=2e-10)
        assert sorted(chained.parity) == sorted(single.parity)
