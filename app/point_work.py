"""How truncated calculations of one point converge: the question, its price, and what a worker answers."""

from dataclasses import dataclass
from typing import Any

from app.cutoff_sheets import CUTOFF_KEYS
from app.places import Place
from app.plan import model_at
from solver import (
    CollectiveModel,
    ConvergenceQuestion,
    PointQuestion,
    SolverError,
    Wanted,
    convergence,
    predicted_bytes,
    predicted_convergence_seconds,
)

WORK = "convergence"


@dataclass(frozen=True)
class PointConvergence:
    """Truncated calculations of one point in both bases."""

    fock: ConvergenceQuestion
    shifted: ConvergenceQuestion

    @property
    def model(self) -> CollectiveModel:
        """The model of the point."""
        return self.fock.model

    @property
    def seconds(self) -> float:
        """Predicted processor time."""
        return predicted_convergence_seconds(self.fock) + predicted_convergence_seconds(self.shifted)

    @property
    def most_bytes(self) -> int:
        """Predicted memory."""
        return predicted_bytes(PointQuestion(model=self.model, levels=self.fock.levels))


def convergence_at(place: Place) -> PointConvergence:
    """Return what is asked about a place: errors wanted as in its sheet, the others as on the cutoff desk."""
    sheet = place.sheet
    wanted = Wanted(
        energies=sheet.need,
        gap=CUTOFF_KEYS["need-gap"].default,
        boson_number=CUTOFF_KEYS["need-bosons"].default,
        order_parameter=CUTOFF_KEYS["need-order"].default,
        tail=sheet.tail,
    )
    model = model_at(sheet, place.at, place.member)
    return PointConvergence(
        ConvergenceQuestion(model, sheet.levels, None, "fock", wanted),
        ConvergenceQuestion(model, sheet.levels, None, "shifted", wanted),
    )


def answer_convergence(question: PointConvergence) -> dict[str, Any]:
    """Return a row for each basis that can answer, and `notes` of those that cannot."""
    found: dict[str, Any] = {"notes": []}
    for basis, one in (("fock", question.fock), ("shifted", question.shifted)):
        try:
            found[basis] = convergence(one).row()
        except SolverError as error:
            found["notes"].append(f"{basis} basis: {error.message}")
    return found
