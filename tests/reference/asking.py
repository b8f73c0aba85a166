"""Short ways to ask the solver, used by every reference check."""

from __future__ import annotations

import math

from solver import CollectiveModel, PointAnswer, PointQuestion, answer_point


def dicke(spins: int, mode: float, splitting: float, coupling: float) -> CollectiveModel:
    """Rotating and counter-rotating part equally strong."""
    return CollectiveModel(spins, mode, splitting, coupling, coupling)


def ask(
    model: CollectiveModel, levels: int = 6, tolerance: float = 1e-9, basis: str | None = None, **more: float
) -> PointAnswer:
    """Answer of one point started cold."""
    return answer_point(PointQuestion(model, levels, tolerance, **more), basis=basis)[0]  # type: ignore[arg-type]


def value(answer: PointAnswer, key: str) -> float:
    """One observable that must be defined."""
    found = answer.observables[key]
    assert found is not None
    return found


def holds(answer: PointAnswer, expected: list[float], slack: float) -> bool:
    """Every expected level inside its bracket, widened by the accuracy of the expected number."""
    assert len(answer.energy) == len(expected)
    uppers, lowers = sorted(answer.energy), sorted(answer.energy_lower)
    return all(
        low - slack <= energy <= up + slack
        for low, energy, up in zip(lowers, sorted(expected), uppers, strict=True)
    )


def sector(answer: PointAnswer, parity: int) -> list[tuple[float, float]]:
    """(lower, upper) of the shown levels of one parity."""
    rows = zip(answer.energy_lower, answer.energy, answer.parity, strict=True)
    return sorted((low, up) for low, up, own in rows if own == parity)


def critical(mode: float, splitting: float) -> float:
    """Large-N critical coupling of the Dicke model."""
    return 0.5 * math.sqrt(mode * splitting)
