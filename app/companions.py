"""What is shown beside a point: large-N limit, levels of the boson-eliminated model, uncoupled levels."""

import heapq
import math
from dataclasses import asdict
from typing import Any

from solver import CollectiveModel, PointQuestion, SolverError, effective_spin_levels, large_n_limit

LIMIT_KEYS = (
    "critical_coupling",
    "energy_per_spin",
    "boson_number",
    "inversion",
    "order_parameter",
    "lower_branch",
    "upper_branch",
)


def companions(question: PointQuestion) -> dict[str, Any]:
    """Return the companions of one point as JSON-able data: `limit`, `effective` and `uncoupled`.

    `limit` has LIMIT_KEYS, the boson number in total; `effective` and `uncoupled` list energies from below
    in the unit of the inputs, as many as the question has levels (fewer where the model has fewer). None
    where a model has no such limit.
    """
    model = question.model
    return {
        "limit": _limit(model),
        "effective": _effective(model, question.levels),
        "uncoupled": uncoupled_levels(model, question.levels),
    }


def _limit(model: CollectiveModel) -> dict[str, float | None] | None:
    try:
        limit = asdict(large_n_limit(model))
    except SolverError:
        return None
    limit["boson_number"] = model.spins * limit["boson_number_per_spin"]
    return {key: finite(limit[key]) for key in LIMIT_KEYS}


def _effective(model: CollectiveModel, count: int) -> list[float | None] | None:
    try:
        return [finite(level) for level in effective_spin_levels(model, min(count, model.spins + 1))]
    except SolverError:
        return None


def uncoupled_levels(model: CollectiveModel, count: int) -> list[float]:
    """Return the lowest energies w n + m sqrt(w0^2 + eps^2) of spins and mode without coupling."""
    step = math.hypot(model.splitting, model.bias)
    lowest = -0.5 * model.spins * step
    rungs = min(count, model.spins + 1)
    return heapq.nsmallest(
        count, (lowest + model.mode * n + step * k for n in range(count) for k in range(rungs))
    )


def finite(value: Any) -> float | None:
    """Return a number, or None for what JSON cannot hold."""
    return float(value) if value is not None and math.isfinite(value) else None
