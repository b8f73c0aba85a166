"""Chains of neighbouring points, what they will cost, and the list of series they deliver."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Literal

from solver.forecast import forecast
from solver.observables import REGISTRY
from solver.point import PointAnswer, PointQuestion, answer_point
from solver.price import point_seconds
from solver.spectrum import Start


@dataclass(frozen=True, slots=True)
class SeriesSpec:
    """One series of a sweep: its key, how it is shown, and where it comes from.

    unit: "mode" (an energy, unit of the inputs), "1" or "bits". kind: one number, one per level,
    a label, an integer or a flag. error_key: the series holding its error, if any. claim: what
    that error is.
    """

    key: str
    title: str
    symbol: str
    unit: Literal["mode", "1", "bits"]
    kind: Literal["number", "levels", "label", "integer", "flag"]
    error_key: str | None
    formula: str
    source: str
    claim: Literal["bound", "estimate", ""] = ""


_PRACTICE = "common practice, no source"

SERIES: tuple[SeriesSpec, ...] = (
    SeriesSpec(
        "energy",
        "Energy",
        "E",
        "mode",
        "levels",
        "energy_lower",
        "lowest levels, upper bounds",
        _PRACTICE,
        "bound",
    ),
    SeriesSpec(
        "energy_lower",
        "Energy, lower bound",
        "E",
        "mode",
        "levels",
        None,
        "lower bounds of the same levels",
        "Lehmann, Z. angew. Math. Mech. 29, 341 (1949)",
    ),
    SeriesSpec("energy_status", "Claim", "", "1", "label", None, "bracketed, exact or estimated", _PRACTICE),
    SeriesSpec("parity", "Parity", "Π", "1", "levels", None, "(-1)^(n + Jz + N/2); 0 with bias", _PRACTICE),
    SeriesSpec(
        "gap",
        "Gap, same parity",
        "Δ",
        "mode",
        "number",
        "gap_error",
        "ground to next level of its parity",
        _PRACTICE,
        "bound",
    ),
    SeriesSpec(
        "gap_any",
        "Gap, any parity",
        "Δ′",
        "mode",
        "number",
        "gap_any_error",
        "ground to next level",
        _PRACTICE,
        "bound",
    ),
    *(
        SeriesSpec(
            entry.key,
            entry.title,
            entry.symbol,
            entry.unit,
            "number",
            f"{entry.key}_error",
            entry.formula,
            entry.source,
            entry.claim,
        )
        for entry in REGISTRY
    ),
    SeriesSpec(
        "cutoff_needed",
        "Cutoff needed",
        "M",
        "1",
        "integer",
        None,
        "highest number state to carry for need and tail",
        _PRACTICE,
        "bound",
    ),
    SeriesSpec(
        "cutoff_used",
        "Cutoff used",
        "M",
        "1",
        "integer",
        None,
        "highest level of the basis solved in",
        _PRACTICE,
    ),
    SeriesSpec("basis", "Basis", "", "1", "label", None, "fock, shifted or excitation", _PRACTICE),
    SeriesSpec(
        "meets_tolerance", "Good to tol", "", "1", "flag", None, "every shown level bounded to tol", _PRACTICE
    ),
    SeriesSpec("note", "Note", "", "1", "label", None, "why a value is missing", _PRACTICE),
)


def solve_chain(questions: Sequence[PointQuestion]) -> Iterator[PointAnswer]:
    """Answer the questions in order; neighbours reuse cutoff, basis and vectors.

    The chain starts cold, so its answers depend on the sequence alone, bit for bit.
    """
    return (answer for answer, _ in solve_chain_with_states(questions))


def solve_chain_with_states(
    questions: Sequence[PointQuestion],
) -> Iterator[tuple[PointAnswer, Start | None]]:
    """The same chain, each answer with the vectors behind it (None where blocks are exact)."""
    start: Start | None = None
    for question in questions:
        reusable = start
        if start is not None and next(iter(start.sets.values())).block.model.spins != question.model.spins:
            reusable = None
        answer, start = answer_point(question, reusable)
        yield answer, start


def predicted_seconds(question: PointQuestion) -> float:
    """Expected processor seconds for one point, on a machine of no particular speed."""
    return point_seconds(question.model, question.levels)


def predicted_bytes(question: PointQuestion) -> int:
    """Expected peak memory for one point."""
    vectors = 160.0 + question.levels
    return int(8.0 * vectors * forecast(question.model, question.levels).dimension) + 20_000_000
