"""Truncated solves from one factorisation, in a window of spin projections, against ARPACK."""

from __future__ import annotations

import pytest

from solver import CollectiveModel
from solver.converged import Converged, converge
from solver.truncated import Accuracy, FockTruncations
from tests.solver.truncation import Asker

MODELS = {
    "two wells": CollectiveModel(60, 1.0, 1.0, 1.0, 1.0),
    "unequal couplings": CollectiveModel(61, 1.0, 0.4, 1.0, 0.8),
    "negative splitting": CollectiveModel(60, 1.0, -0.3, 0.8, 0.9),
    "tilted": CollectiveModel(40, 1.0, 0.8, 0.9, 0.8, 0.1),
}


def solved(model: CollectiveModel) -> Converged:
    return converge(model, 4, 1e-10, 1e-9)


@pytest.mark.parametrize("name", MODELS)
def test_window_gives_what_the_whole_spin_gives(name):
    model = MODELS[name]
    exact = solved(model)
    assert not exact.layers(exact.ground, 3, 0.0).complete, "a window smaller than the spin is under test"
    last = max(sector.end for sector in exact.sectors.values())
    asker = Asker(model, 4, last)
    assert exact.energy == pytest.approx(asker.exact.levels[exact.ground][0], abs=1e-8)
    truncations = FockTruncations(exact, last // 2, Accuracy(1e-10, 1e-6), 1e-6)
    # from far above the need down to where the state has left the window
    for cutoff in (last * 2 // 3, last // 2, last // 3, last // 5, 6, 1):
        found, true = truncations.at(cutoff, gap=True), asker.at(cutoff)
        assert found.energy == pytest.approx(min(v[0] for v in true.levels.values()), abs=1e-8)
        assert found.gap == pytest.approx(true.gap, abs=1e-7), cutoff
        assert found.boson_number == pytest.approx(true.boson_number, abs=1e-6), cutoff
        assert found.order_parameter == pytest.approx(true.order_parameter, abs=1e-7), cutoff


@pytest.mark.parametrize("name", MODELS)
def test_estimates_approach_the_errors(name):
    """The response to a field tells the error of quanta and order parameter within a small factor."""
    model = MODELS[name]
    exact = solved(model)
    last = max(sector.end for sector in exact.sectors.values())
    truncations = FockTruncations(exact, last, Accuracy(1e-10, 1e-6), 1e-6)
    estimates = truncations.estimates(last)
    for cutoff in (last // 2, last * 3 // 5):
        found = truncations.at(cutoff, gap=False)
        for quantity in ("boson_number", "order_parameter"):
            error = getattr(found, quantity) - getattr(exact, quantity)
            if 1e-8 < abs(error) < 1e-2:
                assert 0.5 < estimates[quantity][cutoff] / error < 8.0, (quantity, cutoff)
