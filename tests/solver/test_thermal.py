"""Thermal equilibrium against dense matrices, closed forms, and calculations cut like an asker's own."""

from __future__ import annotations

import json
import math
from itertools import pairwise

import numpy as np
import pytest

from solver import (
    CollectiveModel,
    PointQuestion,
    QuestionError,
    ThermalQuestion,
    Wanted,
    answer_point,
    answer_thermal,
    predicted_thermal_seconds,
    temperature_of_quanta,
)
from solver.ensemble import log_multiplicity, sector_model
from solver.floor import Floors
from solver.fock_basis import FockBlock
from solver.gibbs import _from_all, _from_lowest, _from_series, sector_trace
from solver.thermal import last_crossing
from tests.solver.equilibrium import gibbs_by_sectors, gibbs_of_all_product_states

ALL = Wanted(boson_number=1e-2, order_parameter=1e-3, tail=1e-4)
FINE = Wanted(boson_number=1e-7, order_parameter=1e-7, tail=1e-8)


def ask(model, temperature, *, distinguishable=True, wanted=ALL, stated=None):
    return answer_thermal(ThermalQuestion(model, temperature, distinguishable, wanted, stated))


def random_question(rng, most_spins):
    """A member of the family with a temperature and wanted errors."""
    mode = float(rng.choice([1.0, 0.4, 2.5]))
    splitting = mode * float(rng.choice([1.0, -1.0, 0.0, rng.uniform(-6.0, 6.0)]))
    ratio = float(rng.choice([1.0, 1.0, 0.0, 0.5, -1.0, 2.0]))
    critical = math.sqrt(mode * max(abs(splitting), 0.2 * mode)) / (1.0 + abs(ratio))
    coupling = critical * float(rng.choice([0.0, 0.5, 1.0, 1.5, 2.0, 3.0]))
    bias = mode * float(rng.choice([0.0, 0.0, 0.05, -0.6]))
    spins = int(rng.integers(1, most_spins + 1))
    model = CollectiveModel(spins, mode, splitting, coupling, ratio * coupling, bias)
    wanted = Wanted(
        boson_number=float(10 ** rng.uniform(-3, -1)),
        order_parameter=float(10 ** rng.uniform(-4, -2)),
        tail=float(10 ** rng.uniform(-5, -2)),
    )
    temperature = mode * float(10 ** rng.uniform(-2.5, 0.5))
    return ThermalQuestion(model, temperature, bool(rng.integers(2)), wanted)


def true_needs(question, full, top):
    """Smallest cutoffs good from there on, by dense calculations cut at `top` and below."""
    needs, keys = {}, {"boson_number": "quanta", "order_parameter": "order"}
    for cutoff in range(top, -1, -1):
        cut = gibbs_by_sectors(
            question.model, question.temperature, cutoff, distinguishable=question.distinguishable
        )
        for key, name in keys.items():
            error = abs(getattr(cut, name) - getattr(full, name))
            if key not in needs and error > getattr(question.wanted, key):
                needs[key] = cutoff + 1
        if len(needs) == len(keys):
            break
    found = {key: needs.get(key, 0) for key in keys}
    found["tail"] = next(m for m in range(full.layers.size) if full.above(m) <= question.wanted.tail)
    return found


def excesses(seed, count, most_spins, largest):
    """Reported minus true cutoffs; checks values against their error estimates on the way."""
    rng, out = np.random.default_rng(seed), []
    while len(out) < 3 * count:
        question = random_question(rng, most_spins)
        answer = answer_thermal(question)
        cutoff = len(answer.layers) + 8
        if cutoff * (question.model.spins + 1) > largest:
            continue
        full = gibbs_by_sectors(
            question.model, question.temperature, cutoff, distinguishable=question.distinguishable
        )
        assert abs(answer.boson_number - full.quanta) <= answer.boson_number_error, question
        assert abs(answer.order_parameter - full.order) <= answer.order_parameter_error, question
        assert answer.inversion == pytest.approx(full.inversion, abs=1e-5), question
        needed = {key: value for key, value in answer.needed.items() if value is not None}
        top = min(max(needed["boson_number"], needed["order_parameter"]) + 8, cutoff)
        true = true_needs(question, full, top)
        for key, value in true.items():
            assert needed[key] >= value, (key, value, needed[key], question)
        out += [needed[key] - true[key] for key in true]
    return np.array(out)


def test_needed_cutoff_against_cut_calculations():
    """Never below the truth; the truth by dense diagonalisation of every J at every cutoff."""
    found = excesses(5, 40, 5, 500)
    assert np.median(found) <= 1
    assert found.max() <= 3


@pytest.mark.slow
def test_needed_cutoff_against_many_cut_calculations():
    found = excesses(6, 250, 8, 1000)
    assert np.median(found) <= 1
    assert found.max() <= 3


@pytest.mark.parametrize(
    ("model", "temperature", "cutoff"),
    [
        (CollectiveModel(1, 1.0, 0.8, 0.9, 0.9), 0.6, 40),
        (CollectiveModel(2, 0.5, 1.0, 0.5, 0.0), 0.3, 26),
        (CollectiveModel(3, 1.0, 1.0, 0.6, 0.6), 0.7, 30),
        (CollectiveModel(3, 1.0, 1.0, 0.2, 0.7), 0.2, 30),
        (CollectiveModel(4, 1.0, -0.7, 0.5, 0.2, 0.3), 1.1, 32),
        pytest.param(CollectiveModel(6, 1.0, 1.0, 0.6, 0.6), 0.6, 26, marks=pytest.mark.slow),
    ],
)
def test_all_product_states(model, temperature, cutoff):
    """All 2^N product states: no symmetry, no multiplicities."""
    truth = gibbs_of_all_product_states(model, temperature, cutoff)
    assert truth.above(cutoff - 3) < 1e-10
    answer = ask(model, temperature, wanted=FINE)
    assert answer.boson_number == pytest.approx(truth.quanta, abs=1e-8)
    assert answer.order_parameter == pytest.approx(truth.order, abs=1e-8)
    assert answer.inversion == pytest.approx(truth.inversion, abs=1e-8)
    shared = min(len(answer.layers), cutoff // 2)
    assert answer.layers[:shared] == pytest.approx(truth.layers[:shared].tolist(), abs=1e-8)


@pytest.mark.parametrize("spins", [1, 2, 7, 20, 61])
def test_multiplicities(spins):
    """Whole numbers: C(N, k) - C(N, k-1) copies of J = N/2 - k, and 2^N states in all."""
    total = 0.0
    for flipped in range(spins // 2 + 1):
        copies = math.comb(spins, flipped) - (math.comb(spins, flipped - 1) if flipped else 0)
        sector = spins - 2 * flipped
        assert log_multiplicity(spins, sector) == pytest.approx(math.log(copies), abs=1e-12 * spins)
        total += copies * (sector + 1)
    assert total == 2**spins


def test_sector_keeps_coupling_per_flip():
    model = CollectiveModel(9, 1.0, 0.4, 0.8, -0.3, 0.1)
    own = sector_model(model, 4)
    assert own.rotating / math.sqrt(4) == pytest.approx(0.8 / math.sqrt(9), rel=1e-15)
    assert own.counter / math.sqrt(4) == pytest.approx(-0.3 / math.sqrt(9), rel=1e-15)
    assert (own.splitting, own.bias) == (model.splitting, model.bias)


@pytest.mark.parametrize("quanta", [0.02, 0.7, 6.0])
def test_uncoupled(quanta):
    """Planck and N independent spins; the tail is geometric (textbook closed forms)."""
    model = CollectiveModel(7, 0.9, 0.6, 0.0, 0.0, 0.35)
    temperature = temperature_of_quanta(model.mode, quanta)
    answer = ask(model, temperature, wanted=FINE)
    assert answer.boson_number == pytest.approx(quanta, abs=1e-7)
    field = math.hypot(0.6, 0.35)
    polarised = math.tanh(0.5 * field / temperature)
    along_x, along_z = -polarised * 0.35 / field, -polarised * 0.6 / field
    assert answer.inversion == pytest.approx(along_z, abs=1e-9)
    assert answer.order_parameter**2 == pytest.approx(1 / 7 + 6 / 7 * along_x**2, abs=1e-9)
    # layers exp(-w n / T): the smallest M with exp(-w (M+1)/T) <= tail
    assert answer.needed["tail"] == max(0, math.ceil(-math.log(1e-8) * temperature / 0.9) - 1)
    assert answer.needed["order_parameter"] == 0


@pytest.mark.parametrize("distinguishable", [True, False])
@pytest.mark.parametrize("temperature", [0.05, 0.5, 2.5])
def test_without_splitting(distinguishable, temperature):
    """Each m is an oscillator displaced by 2 l m/(w sqrt N) (closed form, polaron)."""
    spins, mode, coupling, bias = 5, 0.8, 0.45, 0.1
    model = CollectiveModel(spins, mode, 0.0, coupling, coupling, bias)
    answer = ask(model, temperature, distinguishable=distinguishable, wanted=FINE)
    m = np.arange(spins + 1) - spins / 2
    copies = [math.comb(spins, k) if distinguishable else 1 for k in range(spins + 1)]
    energies = bias * m - 4 * coupling**2 * m**2 / (spins * mode)
    chances = copies * np.exp(-(energies - energies.min()) / temperature)
    chances /= chances.sum()
    moved = (2 * coupling * m / (mode * math.sqrt(spins))) ** 2
    quanta = 1 / math.expm1(mode / temperature) + chances @ moved
    assert answer.boson_number == pytest.approx(quanta, abs=1e-7)
    assert answer.order_parameter == pytest.approx(2 * math.sqrt(chances @ m**2) / spins, abs=1e-8)


def test_jaynes_cummings():
    """Levels w (K - 1/2) -+ sqrt(d^2 + 4 l^2 K)/2 (Proc. IEEE 51, 89 (1963)); <n> from ln Z by w and w0."""
    w, w0, coupling, temperature = 1.0, 1.3, 0.6, 0.7

    def log_partition(mode, splitting):
        k = np.arange(1.0, 400.0)
        middle, half = mode * (k - 0.5), 0.5 * np.sqrt((splitting - mode) ** 2 + 4 * coupling**2 * k)
        levels = np.concatenate(([-splitting / 2], middle - half, middle + half))
        return float(np.log(np.sum(np.exp(-levels / temperature))))

    step = 1e-4
    quanta = -temperature * (log_partition(w + step, w0) - log_partition(w - step, w0)) / (2 * step)
    spin = -temperature * (log_partition(w, w0 + step) - log_partition(w, w0 - step)) / (2 * step)
    answer = ask(CollectiveModel(1, w, w0, coupling, 0.0), temperature, wanted=FINE)
    assert answer.boson_number == pytest.approx(quanta, abs=1e-6)
    assert answer.inversion == pytest.approx(2 * spin, abs=1e-6)


@pytest.mark.parametrize(
    "model", [CollectiveModel(6, 1.0, 1.0, 0.4, 0.4), CollectiveModel(5, 1.0, 1.0, 0.6, 0.3)]
)
@pytest.mark.parametrize("distinguishable", [True, False])
def test_towards_zero_temperature(model, distinguishable):
    """The ground state, as the levels of a point give it."""
    point, _ = answer_point(PointQuestion(model))
    answer = ask(model, 1e-3, distinguishable=distinguishable, wanted=FINE)
    for key in ("boson_number", "order_parameter", "inversion"):
        assert getattr(answer, key) == pytest.approx(point.observables[key], abs=1e-7)


def test_closed_doublet_is_weighted_equally():
    """Both parities of a doublet split below rounding: W P(n even) = 1/2 (own argument)."""
    model = CollectiveModel(20, 1.0, 1.0, 1.2, 1.2)
    answer = ask(model, 1e-6, distinguishable=False)
    even = sum(answer.layers[::2])
    assert even == pytest.approx(0.5, abs=1e-6)
    coldest = ask(model, 1e-14, distinguishable=False)
    assert coldest.boson_number == pytest.approx(answer.boson_number, abs=1e-5)
    assert coldest.note is not None


def test_very_hot():
    """Spins at random: <Jx^2> = N/4, or J(J+1)/3 within J = N/2; the mode as if alone."""
    model = CollectiveModel(3, 1.0, 1.0, 0.3, 0.3)
    for distinguishable, square in ((True, 3 / 4), (False, 1.5 * 2.5 / 3)):
        answer = ask(model, 40.0, distinguishable=distinguishable, wanted=Wanted(tail=1e-3))
        assert answer.order_parameter == pytest.approx(math.sqrt(square) / 1.5, rel=3e-3)
        assert answer.boson_number == pytest.approx(1 / math.expm1(1 / 40), rel=1e-2)


def test_negative_splitting_is_a_turned_spin():
    """A rotation by pi about x: Jz -> -Jz, lr <-> lc, everything else alike."""
    one = ask(CollectiveModel(5, 1.0, 0.8, 0.6, 0.2), 0.5)
    other = ask(CollectiveModel(5, 1.0, -0.8, 0.2, 0.6), 0.5)
    assert one.boson_number == pytest.approx(other.boson_number, abs=1e-9)
    assert one.inversion == pytest.approx(-other.inversion, abs=1e-9)
    assert one.needed == other.needed


@pytest.mark.parametrize("parity", [1, -1])
@pytest.mark.parametrize("temperature", [0.4, 1.5])
def test_routes_agree(parity, temperature):
    """All eigenpairs, the lowest ones, and the series on the same block."""
    model = CollectiveModel(11, 1.0, 0.9, 0.7, 0.4)
    block = FockBlock(model, parity, 30, Floors(model).ground - 0.05)
    ceiling = block.shift + 32.0 * temperature
    reference = _from_all(block, 1.0 / temperature)
    count = int(np.sum(np.linalg.eigvalsh(_dense(block)) < ceiling - block.shift))
    lowest = _from_lowest(block, 1.0 / temperature, ceiling, count)
    assert lowest is not None
    series = _from_series(block, 1.0 / temperature)
    for scale, diagonal, beside, _ in (lowest, series):
        factor = math.exp(scale - reference[0])
        assert factor * diagonal == pytest.approx(reference[1], abs=1e-10)
        assert factor * beside == pytest.approx(reference[2], abs=1e-10)


def _dense(block):
    full = np.zeros((block.dimension, block.dimension))
    for below, row in enumerate(block.band):
        at = np.arange(block.dimension - below)
        full[at + below, at] = full[at, at + below] = row[: at.size]
    return full


def test_what_is_left_out_is_bounded():
    """Weight above a low ceiling, all levels by dense diagonalisation at a larger cutoff."""
    model, beta = CollectiveModel(12, 1.0, 1.0, 0.6, 0.6), 9.0
    ceiling = Floors(model).ground + 2.2
    trace = sector_trace(model, beta, 24, ceiling)
    assert 0.0 < trace.omitted < 1.0
    total = gibbs_by_sectors(model, 1.0 / beta, 40, distinguishable=False).log_partition
    assert 0.0 <= 1.0 - math.exp(trace.log_partition - total) <= trace.omitted


def test_stated_cutoff():
    model = CollectiveModel(6, 1.0, 1.0, 0.7, 0.7)
    free = ask(model, 0.8)
    enough = ask(model, 0.8, stated=free.covering).stated
    short = ask(model, 0.8, stated=free.covering - 1).stated
    assert enough is not None
    assert short is not None
    assert enough["enough"]
    assert not short["enough"]
    assert not short["good"][free.deciding]
    tiny = ask(model, 0.8, stated=0).stated
    assert tiny is not None
    truth = gibbs_by_sectors(model, 0.8, 0, distinguishable=True)
    assert tiny["error"]["boson_number"] == pytest.approx(free.boson_number - truth.quanta, abs=1e-6)
    assert tiny["error"]["order_parameter"] == pytest.approx(
        abs(free.order_parameter - truth.order), abs=1e-5
    )
    far = ask(model, 0.8, stated=100_000).stated
    assert far is not None
    assert far["enough"]


def test_stated_cutoff_far_too_small_and_cold():
    """The cut Gibbs state then lives in other sectors and at other energies."""
    model = CollectiveModel(8, 1.0, 1.0, 1.0, 1.0)
    free = ask(model, 0.05)
    for cutoff in (0, 1, 3):
        stated = ask(model, 0.05, stated=cutoff).stated
        assert stated is not None
        truth = gibbs_by_sectors(model, 0.05, cutoff, distinguishable=True)
        error = stated["error"]
        assert error["boson_number"] == pytest.approx(abs(free.boson_number - truth.quanta), abs=1e-4)
        assert error["order_parameter"] == pytest.approx(abs(free.order_parameter - truth.order), abs=1e-4)


def test_row_is_json_and_deterministic():
    model = CollectiveModel(4, 1.0, 1.0, 0.6, 0.3, 0.1)
    rows = [json.dumps(ask(model, 0.5, stated=3).row(), allow_nan=False) for _ in range(2)]
    assert rows[0] == rows[1]


def test_only_what_is_asked_is_judged():
    answer = ask(CollectiveModel(4, 1.0, 1.0, 0.6, 0.6), 0.5, wanted=Wanted(tail=1e-3))
    assert answer.needed["boson_number"] is None
    assert answer.deciding == "tail"
    assert answer.covering == answer.needed["tail"]


def test_price_grows_with_the_work():
    """Ordering only: more spins and more temperature cost more."""
    prices = [
        predicted_thermal_seconds(ThermalQuestion(CollectiveModel(n, 1.0, 1.0, 0.8, 0.8), 1.0, True, ALL))
        for n in (4, 12, 30, 60)
    ]
    assert all(low < high for low, high in pairwise(prices))


def test_change_of_sign_is_not_taken_for_accuracy():
    """An error that passes through zero at 10 and is large again at 11."""
    errors = np.array([1.0] * 10 + [0.0, -0.5, 0.01, 0.001, 1e-4, 1e-5, 1e-6, 0.0])
    curve = np.abs(errors) + 1e-9
    assert last_crossing(lambda cutoff: float(errors[cutoff]), curve, 0.1, [10]) == 12


@pytest.mark.parametrize(
    ("change", "field"),
    [
        ({"temperature": 0.0}, "temperature"),
        ({"temperature": float("nan")}, "temperature"),
        ({"temperature": 1e9}, "temperature"),
        ({"stated": -1}, "stated"),
        ({"stated": True}, "stated"),
        ({"wanted": Wanted(energies=1e-3)}, "wanted"),
        ({"model": CollectiveModel(5000, 1.0, 1.0, 0.1, 0.1)}, "spins"),
    ],
)
def test_questions_out_of_range(change, field):
    given = {
        "model": CollectiveModel(3, 1.0, 1.0, 0.5, 0.5),
        "temperature": 1.0,
        "distinguishable": True,
        "wanted": ALL,
        **change,
    }
    with pytest.raises(QuestionError) as caught:
        ThermalQuestion(**given)
    assert caught.value.field == field


@pytest.mark.parametrize("field", ["energies", "gap", "boson_number", "order_parameter", "tail"])
@pytest.mark.parametrize("value", [0.0, -1.0, float("nan"), float("inf"), 1e-13, 1e7])
def test_wanted_out_of_range(field, value):
    with pytest.raises(QuestionError) as caught:
        Wanted(**{field: value})
    assert caught.value.field == field


def test_temperature_of_quanta():
    """Planck: mean number 1/(exp(w/T) - 1)."""
    for quanta in (1e-3, 0.5, 20.0):
        temperature = temperature_of_quanta(0.7, quanta)
        assert 1 / math.expm1(0.7 / temperature) == pytest.approx(quanta, rel=1e-12)
    with pytest.raises(QuestionError):
        temperature_of_quanta(1.0, 0.0)
