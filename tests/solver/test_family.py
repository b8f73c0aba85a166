"""Every member of the family, both bases, against a plain dense diagonalisation."""

from __future__ import annotations

import math

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from solver import REGISTRY, CollectiveModel, PointAnswer, PointQuestion, answer_point
from tests.solver.dense import EPS, DenseSpectrum, dense_spectrum, observables
from tests.solver.family import models

QUICK = settings(
    max_examples=40,
    deadline=None,
    database=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.data_too_large],
)
THOROUGH = settings(QUICK, max_examples=200)
UNDEFINED_BELOW = 1e-9


def usable_bases(model: CollectiveModel) -> list[str | None]:
    """The chosen route, and both bases where they make sense.

    The displaced basis follows Jx; where the momentum coupling is the stronger one it is never
    chosen. Uncoupled models are products, solved block by block.
    """
    if model.is_uncoupled:
        return [None]
    along_x = abs(model.coupling_difference) < abs(model.total_coupling)
    return [None, "fock", "shifted"] if along_x else [None, "fock"]


def check_levels(answer: PointAnswer, reference: DenseSpectrum) -> None:
    """Bounds of the ordered levels, and of each level within its sector."""
    truth = reference.merged()
    uppers, lowers = sorted(answer.energy), sorted(answer.energy_lower)
    for (energy, _), low, up in zip(truth, lowers, uppers, strict=False):
        assert low <= energy <= up
    for parity in set(answer.parity):
        own = [k for k, other in enumerate(answer.parity) if other == parity]
        for place, at in enumerate(own):
            assert answer.energy_lower[at] <= reference.energies[parity][place] <= answer.energy[at]


def check_gaps(answer: PointAnswer, reference: DenseSpectrum) -> None:
    own, every = reference.energies[answer.parity[0]], reference.merged()
    assert answer.gap_any >= 0.0
    assert abs(answer.gap_any - (every[1][0] - every[0][0])) <= answer.gap_any_error
    if answer.gap is None:
        # allowed only when the computed levels hold no second one of the parity, and it says so
        assert answer.parity.count(answer.parity[0]) == 1
        assert "gap" in (answer.note or "")
        return
    assert abs(answer.gap - float(own[1] - own[0])) <= answer.gap_error


def meaningful(key: str, reference: dict[str, float | None]) -> bool:
    """Ratios to a mean spin or a boson number that is zero up to rounding say nothing."""
    if key == "bunching":
        return reference["boson_number"] > UNDEFINED_BELOW
    if key.startswith("squeezing"):
        ramsey = reference["squeezing_ramsey"]
        return ramsey is not None and reference["squeezing"] / ramsey > UNDEFINED_BELOW
    return True


def check_observables(answer: PointAnswer, reference: DenseSpectrum) -> None:
    parity = answer.parity[0]
    gap = float(reference.energies[parity][1] - reference.energies[parity][0])
    if gap < 1e-9 * reference.norm:
        return  # two ground states of one sector: no state to compare with
    blur = 30.0 * EPS * reference.norm / gap
    expected = observables(reference.states[parity][0])
    for entry in REGISTRY:
        if not meaningful(entry.key, expected):
            continue
        found, error = answer.observables[entry.key], answer.observables[f"{entry.key}_error"]
        true = expected[entry.key]
        assert found is not None, entry.key
        if error is not None:
            enlarged = 1.0 + abs(true)
            if entry.key == "bunching":
                enlarged *= 1.0 + 1.0 / expected["boson_number"]
            elif entry.key == "squeezing_ramsey":
                enlarged *= 1.0 + true / expected["squeezing"]
            assert abs(found - true) <= error + blur * enlarged, entry.key


def check_agreement(first: PointAnswer, second: PointAnswer, reference: DenseSpectrum) -> None:
    for at in range(len(first.energy)):
        assert sorted(first.energy_lower)[at] <= sorted(second.energy)[at]
        assert sorted(second.energy_lower)[at] <= sorted(first.energy)[at]
    if first.parity[0] != second.parity[0]:
        assert first.gap_any <= first.gap_any_error
        return
    expected = observables(reference.states[first.parity[0]][0])
    for entry in REGISTRY:
        one, other = first.observables[entry.key], second.observables[entry.key]
        errors = [answer.observables[f"{entry.key}_error"] for answer in (first, second)]
        if meaningful(entry.key, expected) and None not in errors:
            assert abs(one - other) <= sum(errors), entry.key


def check(model: CollectiveModel, levels: int, tolerance: float) -> None:
    reference = dense_spectrum(model, levels + 3)
    assert reference.edge_weight() < 1e-14
    question = PointQuestion(model, levels=levels, tolerance=tolerance)
    answers = [answer_point(question, basis=basis)[0] for basis in usable_bases(model)]  # type: ignore[arg-type]
    for answer in answers:
        assert answer.meets_tolerance or tolerance < 1e-10
        assert all(math.isfinite(v) for v in answer.observables.values() if v is not None)
        check_levels(answer, reference)
        check_gaps(answer, reference)
        check_observables(answer, reference)
        check_agreement(answers[0], answer, reference)
    check_agreement(answers[-2 if len(answers) > 1 else 0], answers[-1], reference)


COUNTS = st.sampled_from((1, 3, 6))
TOLERANCES = st.sampled_from((1e-9, 1e-9, 1e-5, 1e-12))


@QUICK
@given(models(), COUNTS, TOLERANCES)
def test_both_bases_and_dense_diagonalisation_agree(model, levels, tolerance):
    check(model, levels, tolerance)


@pytest.mark.slow
@THOROUGH
@given(models(), COUNTS, TOLERANCES)
def test_both_bases_and_dense_diagonalisation_agree_at_length(model, levels, tolerance):
    check(model, levels, tolerance)


@pytest.mark.parametrize(
    "model",
    [
        CollectiveModel(5, 1.0, 0.0, 0.31622776601683794, 0.31622776601683794),
        CollectiveModel(2, 1.0, 0.0, 0.15811388300841897, 0.15811388300841897, -1.1971057650768775),
        CollectiveModel(3, 1.0, 1.1678986322845564, 0.11044018815193955, -0.11044018815193955),
        CollectiveModel(7, 1.0, -1.6702777007109226, 0.8615948263310371, 1.7231896526620742),
        CollectiveModel(30, 1.0, 1.0, 0.5, 0.5),
    ],
    ids=str,
)
@pytest.mark.parametrize("tolerance", [1e-9, 1e-12])
def test_brackets_hold_to_the_last_digit(model, tolerance):
    """Models on which rounding is what decides."""
    check(model, 8, tolerance)
