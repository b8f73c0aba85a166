"""Certified ground states and low levels of N spins coupled to one bosonic mode."""

from __future__ import annotations

import hashlib
from pathlib import Path

from solver.convergence import (
    Convergence,
    ConvergenceQuestion,
    Plateau,
    convergence,
    predicted_convergence_seconds,
)
from solver.effective_spin import effective_spin_levels
from solver.errors import ConvergenceError, ModelError, QuestionError, SolverError
from solver.model import LARGEST_SPINS, CollectiveModel
from solver.needs import (
    CutoffAnswer,
    CutoffQuestion,
    Stated,
    answer_cutoff,
    predicted_cutoff_seconds,
)
from solver.observables import REGISTRY, Observable
from solver.point import PointAnswer, PointQuestion, answer_point
from solver.portrait import STATE_NAMES, Portrait, StateName, draw_portrait, portrait_seconds
from solver.sizes import CalculationSize, calculation_size
from solver.sweep import SERIES, SeriesSpec, predicted_bytes, predicted_seconds, solve_chain
from solver.thermodynamic import LargeNLimit, large_n_limit
from solver.wanted import QUANTITIES, Wanted


def _digest_of_source() -> str:
    """Hash of every module of this package: results of different sources never mix."""
    total = hashlib.sha256()
    for path in sorted(Path(__file__).parent.glob("*.py")):
        total.update(path.name.encode())
        total.update(path.read_bytes())
    return total.hexdigest()


SOLVER_DIGEST = _digest_of_source()

__all__ = [
    "LARGEST_SPINS",
    "QUANTITIES",
    "REGISTRY",
    "SERIES",
    "SOLVER_DIGEST",
    "STATE_NAMES",
    "CalculationSize",
    "CollectiveModel",
    "Convergence",
    "ConvergenceError",
    "ConvergenceQuestion",
    "CutoffAnswer",
    "CutoffQuestion",
    "LargeNLimit",
    "ModelError",
    "Observable",
    "Plateau",
    "PointAnswer",
    "PointQuestion",
    "Portrait",
    "QuestionError",
    "SeriesSpec",
    "SolverError",
    "StateName",
    "Stated",
    "Wanted",
    "answer_cutoff",
    "answer_point",
    "calculation_size",
    "convergence",
    "draw_portrait",
    "effective_spin_levels",
    "large_n_limit",
    "portrait_seconds",
    "predicted_bytes",
    "predicted_convergence_seconds",
    "predicted_cutoff_seconds",
    "predicted_seconds",
    "solve_chain",
]
