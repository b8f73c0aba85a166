"""Starts of the mode and their evolution against scipy, closed forms, and dense propagation."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest
from scipy import stats
from scipy.linalg import expm
from scipy.special import jv

from solver import CollectiveModel, QuestionError, StartQuestion, answer_start, predicted_start_seconds
from solver.propagation import bessel_table, evolve
from solver.start import lowest_spin_state, start_cutoff, weight_above_start
from tests.solver.dense import hamiltonian, spin_matrices


def start_amplitudes(kind, quanta, cutoff):
    """Probabilities and amplitudes (starts, cutoff+1) of the mode, from scipy.stats."""
    n = np.arange(cutoff + 1)
    if kind == "fock":
        return np.ones(1), (n == quanta).astype(float)[None]
    if kind == "coherent":
        return np.ones(1), np.sqrt(stats.poisson.pmf(n, quanta))[None]
    return stats.geom.pmf(n + 1, 1 / (1 + quanta)), np.eye(cutoff + 1)


def dense_layers(question, cutoff, times):
    """P(n) at each time by diagonalising H densely; spins start in the lowest state of their own."""
    model = question.model
    values, states = np.linalg.eigh(hamiltonian(model, cutoff))
    jz, up = spin_matrices(model.spins)
    spin = np.linalg.eigh(model.splitting * jz + 0.5 * model.bias * (up + up.T))[1][:, 0]
    if model.splitting == 0.0 and model.bias == 0.0:
        spin = np.eye(model.spins + 1)[0]
    chances, amplitudes = start_amplitudes(question.kind, question.quanta, cutoff)
    columns = states.T @ np.einsum("sn,j->njs", amplitudes, spin).reshape(-1, chances.size)
    out = []
    for time in times:
        psi = states @ (np.exp(-1j * values * time)[:, None] * columns)
        weights = (np.abs(psi) ** 2 @ chances).reshape(cutoff + 1, model.spins + 1)
        out.append(weights.sum(axis=1))
    return np.array(out)


def true_need(question, cutoff, points=600):
    """Smallest cutoff that keeps the weight above it within `tail` at all times, densely."""
    times = np.linspace(0.0, 2 * math.pi * question.periods / question.model.mode, points)
    layers = dense_layers(question, cutoff, times)
    above = 1.0 - np.cumsum(layers, axis=1) - (1.0 - layers.sum(axis=1))[:, None]
    most = above.max(axis=0)
    return int(np.argmax(most <= question.tail)), most, float((layers @ np.arange(cutoff + 1)).max())


@pytest.mark.parametrize("quanta", [1e-3, 0.3, 4.0, 47.5, 900.0])
@pytest.mark.parametrize("tail", [0.3, 1e-4, 1e-11])
def test_closed_weights(quanta, tail):
    """Survival functions of scipy.stats."""
    poisson, geometric = stats.poisson(quanta), stats.geom(1 / (1 + quanta))
    for kind, above in (
        ("coherent", poisson.sf),
        ("thermal", lambda cutoff: geometric.sf(cutoff + 1)),
    ):
        found = start_cutoff(kind, quanta, tail)
        assert above(found) <= tail * (1 + 1e-9)
        assert found == 0 or above(found - 1) > tail * (1 - 1e-9)
        assert weight_above_start(kind, quanta, found) == pytest.approx(above(found), rel=1e-9)


def test_closed_weights_of_number_states():
    assert start_cutoff("fock", 7, 1e-3) == 7
    assert start_cutoff("fock", 0, 1e-3) == 0
    assert start_cutoff("thermal", 0.0, 1e-3) == 0
    assert start_cutoff("coherent", 0.0, 1e-3) == 0


@pytest.mark.parametrize("top", [1e-9, 1e-7, 0.3, 20.0, 1400.0])
def test_bessel_functions(top):
    """scipy.special.jv."""
    arguments = np.array([0.0, 0.1 * top, 0.77 * top, top])
    table = bessel_table(arguments, int(top) + 30)
    assert np.abs(table - jv(np.arange(int(top) + 30), arguments[:, None])).max() < 1e-12


@pytest.mark.parametrize(
    "model",
    [
        CollectiveModel(1, 1.0, 0.7, 0.6, 0.6),
        CollectiveModel(3, 1.0, 1.0, 0.5, 0.2, 0.4),
        CollectiveModel(4, 0.7, -1.2, 0.3, 0.6),
    ],
)
@pytest.mark.parametrize("single", [True, False])
def test_propagation_against_expm(model, single):
    """scipy.linalg.expm of the same cut H; in single precision to its rounding."""
    cutoff, times = 14, np.array([0.0, 0.3, 1.7, 6.1])
    rng = np.random.default_rng(2)
    starts = rng.standard_normal((3, cutoff + 1, model.spins + 1))
    starts /= np.linalg.norm(starts, axis=(1, 2))[:, None, None]
    chances = np.array([0.5, 0.3, 0.2])
    found = evolve(model, starts, chances, times, single=single)
    for time, layers in zip(times, found.layers, strict=True):
        moved = expm(-1j * time * hamiltonian(model, cutoff)) @ starts.reshape(3, -1).T
        weights = (np.abs(moved) ** 2 @ chances).reshape(cutoff + 1, -1).sum(axis=1)
        assert np.abs(layers - weights).max() < (1e-5 if single else 1e-12)


def test_escaped_bounds_the_distance():
    """Cut evolution against one with a far larger cutoff: squared distance of the states."""
    model, small, large = CollectiveModel(3, 1.0, 1.0, 0.6, 0.6), 12, 40
    times = np.linspace(0.0, 5.0, 400)
    starts = np.zeros((1, small + 1, 4))
    starts[0, 2, 0] = 1.0
    found = evolve(model, starts, np.ones(1), times)
    far = np.zeros((large + 1) * 4)
    far[8] = 1.0
    near = far[: (small + 1) * 4]
    one = expm(-5j * hamiltonian(model, large)) @ far
    other = expm(-5j * hamiltonian(model, small)) @ near
    one[: other.size] -= other
    assert np.linalg.norm(one) ** 2 <= found.escaped * 1.01
    assert found.escaped < 1e4 * np.linalg.norm(one) ** 2


@pytest.mark.parametrize("kind", ["fock", "coherent", "thermal"])
@pytest.mark.parametrize(
    "model",
    [
        CollectiveModel(1, 1.0, 1.0, 0.5, 0.5),
        CollectiveModel(4, 1.0, 1.0, 0.5, 0.5),
        CollectiveModel(3, 0.5, -1.5, 0.4, 0.1),
        CollectiveModel(4, 1.0, 1.0, 0.7, 0.0),
        CollectiveModel(3, 1.0, 0.6, 0.4, 0.4, -0.5),
        CollectiveModel(2, 1.0, 0.0, 0.6, 0.6),
    ],
)
def test_needed_cutoff_against_dense_evolution(model, kind):
    """Never below the truth, at most one above."""
    question = StartQuestion(model, kind, 2, 1.5, 1e-3)
    answer = answer_start(question)
    needed, most, quanta = true_need(question, 60)
    assert 0 <= answer.needed - needed <= 1
    assert answer.mean_bosons_most == pytest.approx(quanta, rel=2e-3)
    stated = answer_start(StartQuestion(model, kind, 2, 1.5, 1e-3, needed - 1)).stated
    assert stated is not None
    assert stated["weight_most"] == pytest.approx(most[needed - 1], rel=0.03)
    assert not stated["enough"]


@pytest.mark.slow
def test_needed_cutoff_of_random_models():
    """The same over random members of the family, starts and times."""
    rng = np.random.default_rng(8)
    found = []
    for _ in range(60):
        spins, mode = int(rng.integers(1, 7)), float(rng.choice([1.0, 0.4, 2.5]))
        splitting = mode * float(rng.choice([1.0, -1.0, 0.0, rng.uniform(-5, 5)]))
        coupling, ratio = mode * float(rng.uniform(0.0, 0.9)), float(rng.choice([1.0, 0.0, 0.5, -1.0]))
        bias = mode * float(rng.choice([0.0, 0.0, 0.4]))
        model = CollectiveModel(spins, mode, splitting, coupling, ratio * coupling, bias)
        kind = str(rng.choice(["fock", "coherent", "thermal"]))
        question = StartQuestion(
            model, kind, float(rng.integers(0, 4)), float(rng.uniform(0, 3)), float(10 ** rng.uniform(-5, -1))
        )
        answer = answer_start(question)
        cutoff = 2 * answer.needed + 30
        if cutoff * (spins + 1) > 500:
            continue
        found.append(answer.needed - true_need(question, cutoff, 250)[0])
    assert len(found) > 30
    assert min(found) >= 0
    assert max(found) <= 1
    assert np.mean(found) < 0.1


@pytest.mark.parametrize("periods", [0.2, 0.5, 2.25])
def test_displaced_by_a_spin_along_x(periods):
    """w0 = 0: each m of Jx drives the mode to -(G m)(1 - e^(-i w t)) (closed form; Poisson tail).

    With bias the spins start with m = -+N/2 alone: a coherent state of up to (N G)^2 quanta.
    """
    spins, mode, coupling = 4, 0.8, 0.5
    model = CollectiveModel(spins, mode, 0.0, coupling, coupling, 0.3)
    answer = answer_start(StartQuestion(model, "fock", 0, periods, 1e-5, 3))
    reach = 2 * coupling / (mode * math.sqrt(spins)) * spins / 2
    furthest = 2 * reach * math.sin(math.pi * min(periods, 0.5))
    assert answer.mean_bosons_most == pytest.approx(furthest**2, rel=1e-4)
    assert answer.needed == start_cutoff("coherent", furthest**2, 1e-5)
    assert answer.stated is not None
    assert answer.stated["weight_most"] == pytest.approx(stats.poisson.sf(3, furthest**2), rel=1e-3)


def test_superposed_drives():
    """w0 = 0, spins along -z: binomial mixture over m of the same displaced states (closed form)."""
    spins, mode, coupling = 5, 1.0, 0.6
    model = CollectiveModel(spins, mode, 0.0, coupling, coupling)
    answer = answer_start(StartQuestion(model, "fock", 0, 0.5, 1e-4, 6))
    m = np.arange(spins + 1) - spins / 2
    quanta = (2 * 2 * coupling / (mode * math.sqrt(spins)) * m) ** 2
    chances = stats.binom.pmf(np.arange(spins + 1), spins, 0.5)
    assert answer.stated is not None
    assert answer.stated["weight_most"] == pytest.approx(chances @ stats.poisson.sf(6, quanta), rel=1e-3)
    assert answer.mean_bosons_most == pytest.approx(chances @ quanta, rel=1e-4)
    assert answer.note is not None


def test_jaynes_cummings_oscillation():
    """|n, down> -> |n-1, up> with 4 l^2 n/(d^2 + 4 l^2 n) sin^2 (Proc. IEEE 51, 89 (1963))."""
    coupling, detuning, n = 0.3, 0.5, 6
    model = CollectiveModel(1, 1.0, 1.0 + detuning, 0.0, coupling)
    turned = CollectiveModel(1, 1.0, -(1.0 + detuning), coupling, 0.0)
    rate = 4 * coupling**2 * (n + 1)
    raised = rate / (rate + (2.0 + detuning) ** 2)
    for own in (model, turned):
        answer = answer_start(StartQuestion(own, "fock", n, 4.0, 1e-6, n))
        assert answer.needed == n + 1
        assert answer.stated is not None
        assert answer.stated["weight_most"] == pytest.approx(raised, rel=2e-3)
    down = answer_start(
        StartQuestion(CollectiveModel(1, 1.0, 1.5, coupling, 0.0), "fock", n, 4.0, 1e-6, n - 1)
    )
    assert down.needed == n
    assert down.stated is not None
    assert down.stated["weight_most"] == pytest.approx(1.0, abs=1e-6)


def test_conserved_energy_and_norm():
    """<H> at all times equals that of the start: boson number, Jz and coupling by dense matrices."""
    model, cutoff = CollectiveModel(3, 1.0, 0.8, 0.4, 0.4), 40
    question = StartQuestion(model, "fock", 3, 2.0, 1e-6)
    times = np.linspace(0, 12.0, 40)
    starts = np.zeros((1, cutoff + 1, 4))
    starts[0, 3, 0] = 1.0
    layers = evolve(model, starts, np.ones(1), times).layers
    assert layers.sum(axis=1) == pytest.approx(np.ones(40), abs=1e-12)
    matrix = hamiltonian(model, cutoff)
    psi = expm(-1j * times[-1] * matrix) @ starts.reshape(-1)
    assert (psi.conj() @ matrix @ psi).real == pytest.approx(3.0 - 1.2, abs=1e-10)
    assert layers[-1] == pytest.approx((np.abs(psi) ** 2).reshape(cutoff + 1, 4).sum(axis=1), abs=1e-11)
    assert layers == pytest.approx(dense_layers(question, cutoff, times), abs=1e-11)


def test_nothing_happens_without_coupling_or_time():
    """The start alone."""
    still = CollectiveModel(5, 1.0, 1.0, 0.0, 0.0)
    coupled = CollectiveModel(5, 1.0, 1.0, 0.5, 0.5)
    for model, periods in ((still, 3.0), (coupled, 0.0)):
        for kind, quanta in (("thermal", 2.3), ("coherent", 2.3), ("fock", 4)):
            answer = answer_start(StartQuestion(model, kind, quanta, periods, 1e-4))
            assert answer.needed == answer.at_start
            assert answer.mean_bosons_most == pytest.approx(quanta, rel=1e-5)


@pytest.mark.parametrize("splitting", [0.7, -0.7, 0.0])
@pytest.mark.parametrize("bias", [0.5, -0.5])
def test_lowest_spin_state(splitting, bias):
    """Eigenvector of w0 Jz + eps Jx with energy -N/2 sqrt(w0^2 + eps^2)."""
    spins = 6
    state = lowest_spin_state(CollectiveModel(spins, 1.0, splitting, 0.1, 0.1, bias))
    jz, up = spin_matrices(spins)
    field = splitting * jz + 0.5 * bias * (up + up.T)
    assert field @ state == pytest.approx(-0.5 * spins * math.hypot(splitting, bias) * state, abs=1e-12)


def test_row_is_json_and_deterministic():
    question = StartQuestion(CollectiveModel(4, 1.0, 1.0, 0.5, 0.5), "thermal", 1.0, 1.0, 1e-3, 30)
    rows = [json.dumps(answer_start(question).row(), allow_nan=False) for _ in range(2)]
    assert rows[0] == rows[1]
    assert predicted_start_seconds(question) > 0.0


@pytest.mark.parametrize(
    ("change", "field"),
    [
        ({"kind": "cat"}, "kind"),
        ({"quanta": -1.0}, "quanta"),
        ({"quanta": 2.5}, "quanta"),
        ({"quanta": float("inf")}, "quanta"),
        ({"periods": -1.0}, "periods"),
        ({"periods": 1e9}, "periods"),
        ({"tail": 0.0}, "tail"),
        ({"tail": 1.0}, "tail"),
        ({"stated": 2.0}, "stated"),
        ({"stated": -3}, "stated"),
    ],
)
def test_questions_out_of_range(change, field):
    given = {
        "model": CollectiveModel(2, 1.0, 1.0, 0.5, 0.5),
        "kind": "fock",
        "quanta": 2,
        "periods": 1.0,
        "tail": 1e-3,
        **change,
    }
    with pytest.raises(QuestionError) as caught:
        StartQuestion(**given)
    assert caught.value.field == field
