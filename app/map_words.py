"""What a map is called, and what its quantities are called."""

import contextlib
from dataclasses import dataclass

from app.errors import SheetError
from app.keys import number_text
from app.map_sheets import SHOWN, MapSheet
from app.sheets import Sheet
from app.symbols import energy_unit, sheet_title, symbol, with_unit
from solver import SERIES


@dataclass(frozen=True)
class Told:
    """A quantity that a map can draw: its title, symbol, unit behind a value, and what its bound claims."""

    title: str
    symbol: str
    unit: str
    claim: str


def shown_sheet(question: MapSheet) -> Sheet:
    """Return the sheet with the second axis as a family: for words that say what varies."""
    low, high = question["low"], question["high"]
    for value in (high, low):
        # a multiple of the critical coupling needs one: not every value can stand for the axis
        with contextlib.suppress(SheetError):
            return question.sheet.changed(each={"name": question["across"], "values": [value]})
    return question.sheet


def map_title(question: MapSheet) -> str:
    """Return the title of a map: its own, or one that says what is swept."""
    title = sheet_title(shown_sheet(question))
    if question.sheet.title:
        return title
    written = symbol(question["across"], question.sheet.frame)
    return f"{title}, {written.plain} from {_number(question['low'])} to {_number(question['high'])}"


def told(question: MapSheet, name: str | None = None) -> Told:
    """Return the words for a quantity; for the one drawn without a name."""
    name = name or question["show"]
    unit = energy_unit(question.sheet)
    if name == "energy":
        return Told("Ground level", "E₀", unit, "bound")
    if name == "error":
        return Told("Largest bound on a level", "ΔE", unit, "")
    spec = next(spec for spec in SERIES if spec.key == SHOWN[name])
    units = {"mode": unit, "bits": "bits"}
    title, sign = spec.title, spec.symbol
    if name == "boson-number" and question.sheet.bosons == "per-spin":
        title, sign = "Boson number per spin", "⟨n⟩/N"
    return Told(title, sign, units.get(spec.unit, ""), spec.claim)


def scale_title(question: MapSheet) -> str:
    """Return what stands at the colour scale."""
    words = told(question)
    if words.unit == "bits":
        return f"{words.symbol} (bits)"
    return with_unit(words.symbol, question.sheet) if words.unit else words.symbol


def quantity_choices() -> list[tuple[str, str]]:
    """Return value and label of every quantity that can be drawn."""
    plain = MapSheet.of({})
    found = []
    for name in SHOWN:
        words = told(plain, name)
        found.append((name, f"{words.title} {words.symbol}".strip()))
    return found


def place_words(question: MapSheet, name: str, value: float) -> str:
    """Return one quantity at one value in words: "λ = 0.75 ω"."""
    written = symbol(name, question.sheet.frame)
    unit = energy_unit(question.sheet) if written.frequency else ""
    return f"{written.plain} = {_number(value)}{' ' + unit if unit else ''}"


def _number(value: float) -> str:
    return number_text(float(f"{value:.6g}")).replace("-", "−")
