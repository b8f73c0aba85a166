"""Random requests of the whole sweep family, and what they take beside what was predicted."""

from __future__ import annotations

import math
import random
from collections.abc import Sequence
from dataclasses import dataclass

from app import plan
from app.calibration import Calibration, measured
from app.errors import SheetError
from app.sheets import Sheet, critical_coupling
from app.workers import answer

MOST_SECONDS = 3.0
LARGEST_BYTES = 2**30


@dataclass(frozen=True)
class Spent:
    """A request with its predicted and its actual processor time in seconds."""

    sheet: Sheet
    predicted: float
    actual: float

    @property
    def ratio(self) -> float:
        """Predicted over actual."""
        return self.predicted / self.actual


def random_sheet(draw: random.Random) -> Sheet:
    """One request: any N, axis, anisotropy, bias and number of levels, as far as the sheet allows it."""
    while True:
        try:
            return Sheet.model_validate(_random_keys(draw))
        except SheetError:
            continue


def _random_keys(draw: random.Random) -> dict[str, object]:
    spins = round(math.exp(draw.uniform(0.0, math.log(2000.0))))
    mode = draw.choice((1.0, 1.0, 1.0, math.exp(draw.uniform(-2.0, 2.0))))
    splitting = mode * draw.choice(
        (1.0, 1.0, -1.0, draw.uniform(-4.0, 4.0), math.exp(draw.uniform(-3.0, 3.0)))
    )
    ratio = draw.choice((1.0, 1.0, 1.0, 0.0, draw.uniform(0.0, 1.0), draw.uniform(1.0, 3.0)))
    bias = draw.choice((0.0, 0.0, 0.0, mode * draw.uniform(0.01, 1.0)))
    critical = critical_coupling(mode, splitting, ratio) or mode
    keys: dict[str, object] = {
        "spins": spins,
        "mode": mode,
        "splitting": splitting,
        "coupling": critical * draw.uniform(0.2, 2.0),
        "ratio": ratio,
        "bias": bias,
        "levels": draw.choice((6, 6, 6, draw.randint(1, 20))),
        "tol": draw.choice((1e-9, 1e-9, 10.0 ** draw.uniform(-11.0, -4.0))),
        "points": draw.choice((11, 25, 51, 101)),
    }
    along = draw.choice(
        ("coupling", "coupling", "coupling", "detuning", "splitting", "mode", "ratio", "bias", "spins")
    )
    if along == "coupling":
        keys["to"] = critical * draw.uniform(0.5, 2.5)
    elif along == "detuning":
        keys["from"], keys["to"] = -mode * draw.uniform(0.2, 3.0), mode * draw.uniform(0.2, 3.0)
        keys["detuning"] = 0.0
        del keys["splitting"]
    keys["along"] = along
    if along == "spins":
        keys["points"] = min(spins, 11)
    return keys


def affordable_sheets(seed: int, count: int) -> list[Sheet]:
    """As many requests as asked for that are predicted to fit into a few seconds."""
    draw = random.Random(seed)  # noqa: S311 - not a secret
    found: list[Sheet] = []
    while len(found) < count:
        sheet = random_sheet(draw)
        made = plan.make(sheet)
        if made.seconds <= MOST_SECONDS and made.peak_bytes <= LARGEST_BYTES:
            found.append(sheet)
    return found


def machine() -> Calibration:
    """How fast this process is, found as a server finds it."""
    return measured(lambda one: answer(one.questions, one.work, "ground", lambda: False).seconds)


def spent_on(sheet: Sheet, found: Calibration) -> Spent:
    """Compute a request in this process, chunk by chunk as a worker does."""
    made = found.priced(plan.make(sheet))
    actual = 0.0
    for chunk in made.chunks:
        outcome = answer(made.chunk_questions(chunk), made.work, "ground", lambda: False)
        assert outcome.kind == "done", outcome
        actual += outcome.seconds
    return Spent(sheet, made.seconds, actual)


def share_within(spent: Sequence[Spent], factor: float) -> float:
    """Share of the requests whose price is right within a factor."""
    return sum(1.0 / factor <= one.ratio <= factor for one in spent) / len(spent)
