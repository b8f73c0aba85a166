"""How accurate an asker's own calculation has to be, quantity by quantity."""

from __future__ import annotations

import math
from dataclasses import dataclass

from solver.errors import QuestionError

SMALLEST, LARGEST = 1e-12, 1e6


@dataclass(frozen=True, slots=True)
class Wanted:
    """Errors allowed; None leaves a quantity unasked.

    energies, gap: in units of the mode frequency; boson_number: quanta; order_parameter: absolute;
    tail: weight above the cutoff, below 1. Raises QuestionError naming the field out of range.
    """

    energies: float | None = None
    gap: float | None = None
    boson_number: float | None = None
    order_parameter: float | None = None
    tail: float | None = None

    def __post_init__(self) -> None:
        for name in ("energies", "gap", "boson_number", "order_parameter"):
            value = getattr(self, name)
            if value is not None and not (math.isfinite(value) and SMALLEST <= value <= LARGEST):
                raise QuestionError(name, value, f"{SMALLEST:g} to {LARGEST:g}")
        if self.tail is not None and not (math.isfinite(self.tail) and SMALLEST <= self.tail < 1.0):
            raise QuestionError("tail", self.tail, f"{SMALLEST:g} to below 1")
