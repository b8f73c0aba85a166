"""What a truncated calculation is judged by, and how far off it may be."""

from __future__ import annotations

from dataclasses import dataclass

from solver.errors import QuestionError

QUANTITIES = ("energies", "gap", "boson_number", "order_parameter", "tail")
# tightest and widest error that can be asked for; below them rounding would decide
RANGES: dict[str, tuple[float, float]] = {
    "energies": (1e-12, 1.0),
    "gap": (1e-9, 1.0),
    "boson_number": (1e-9, 1e3),
    "order_parameter": (1e-9, 1.0),
    "tail": (1e-12, 1.0),
}


@dataclass(frozen=True, slots=True)
class Wanted:
    """Errors a truncated calculation may have; None: not asked.

    energies, gap in units of the mode; boson_number in quanta; order_parameter and tail are
    plain numbers. Raises QuestionError outside RANGES (upper end excluded), or if nothing is
    asked.
    """

    energies: float | None = None
    gap: float | None = None
    boson_number: float | None = None
    order_parameter: float | None = None
    tail: float | None = None

    def __post_init__(self) -> None:
        for name in QUANTITIES:
            value, (low, high) = self.of(name), RANGES[name]
            if value is not None and not low <= value < high:
                raise QuestionError(name, value, f"{low:g} up to below {high:g}, or None")
        if not self.asked:
            raise QuestionError("wanted", None, f"an error for at least one of {', '.join(QUANTITIES)}")

    @property
    def asked(self) -> tuple[str, ...]:
        """The quantities asked for, in the order of QUANTITIES."""
        return tuple(name for name in QUANTITIES if self.of(name) is not None)

    def of(self, quantity: str) -> float | None:
        """Wanted error of one quantity."""
        value: float | None = getattr(self, quantity)
        return value

    def least(self, *quantities: str) -> float | None:
        """The smallest error wanted of these quantities; None where none of them is asked."""
        return min((w for name in quantities if (w := self.of(name)) is not None), default=None)


# what most calculations are content with
COMMON = Wanted(energies=1e-3, gap=1e-3, boson_number=1e-2, order_parameter=1e-3, tail=1e-4)
