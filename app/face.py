"""The face of a sheet: everything a page writes around the picture, as plain data.

The page's template and `/api/face` show the same face, so that a change of a knob and a fresh load of the
new address end on the same page.
"""

import math
from dataclasses import dataclass
from typing import Any

from app import links
from app.keys import KEYS, SWEPT, number_text
from app.sheets import Sheet, default_points, default_range
from app.symbols import Symbol, energy_unit, hamiltonian, member_name, sheet_title, symbol, values_in_force

KNOBS = ("spins", "mode", "splitting", "coupling", "ratio", "bias")
STEPS = 200


@dataclass(frozen=True)
class Knob:
    """One fixed quantity: what its label says, the text in its box, and the reach of its slider.

    `scale` is "linear" or "logarithmic" (the slider then holds the decimal logarithm). `fixed` is False
    while the quantity is swept or varied by a family.
    """

    name: str
    words: str
    symbol: str
    unit: str
    text: str
    scale: str
    low: float
    high: float
    step: float
    place: float
    fixed: bool


@dataclass(frozen=True)
class Face:
    """What a page shows of a sheet beside the picture; see the template for the place of each."""

    title: str
    member: str
    note: str
    hamiltonian: str
    values: list[str]
    query: str
    link: str
    knobs: list[Knob]
    texts: dict[str, str]
    placeholders: dict[str, str]
    axis_unit: str
    splitting_as: str
    swept_names: list[list[str]]


def face_of(sheet: Sheet, coupling_as: str = "lambda") -> Face:
    """Return the face of a sheet; `coupling_as` says what its coupling box means, as in `links.from_form`."""
    query = links.query_of(sheet)
    swept = symbol(sheet.along, sheet.frame)
    return Face(
        title=sheet_title(sheet),
        member=member_name(sheet),
        note=sheet.note,
        hamiltonian=hamiltonian(sheet),
        values=values_in_force(sheet),
        query=query,
        link=links.whole(query).lstrip("/"),
        knobs=[_knob(name, sheet, coupling_as) for name in KNOBS],
        texts=_texts(sheet),
        placeholders=_placeholders(sheet),
        axis_unit=_shown_unit(swept, sheet),
        splitting_as="splitting" if sheet.detuning is None else "detuning",
        swept_names=[
            [name, f"{symbol(name, sheet.frame).words} {symbol(name, sheet.frame).plain}"] for name in SWEPT
        ],
    )


def _shown_unit(written: Symbol, sheet: Sheet) -> str:
    return energy_unit(sheet) if written.frequency else ""


# -- knobs -----------------------------------------------------------------------------------------


def coupling_scale(sheet: Sheet, coupling_as: str) -> float:
    """Return by how much the number in the coupling box is multiplied to give lambda."""
    if coupling_as == "single":
        return math.sqrt(sheet.spins)
    return sheet.critical_coupling if coupling_as == "critical" else 1.0


def _knob(name: str, sheet: Sheet, coupling_as: str) -> Knob:
    shown, value = name, _fixed_value(name, sheet)
    if name == "splitting" and sheet.detuning is not None:
        shown, value = "detuning", sheet.detuning
    written = symbol(shown, sheet.frame)
    unit = _shown_unit(written, sheet)
    words, sign = written.words, written.plain
    if name == "coupling" and coupling_as != "lambda":
        scale = coupling_scale(sheet, coupling_as)
        value = float(f"{value / scale:.12g}") if scale > 0.0 else value
        if coupling_as == "critical":
            over = symbol("coupling-over-critical", sheet.frame)
            words, sign, unit = over.words, over.plain, ""
        else:
            words, sign = "single-spin coupling", f"g = {sign}/√N" if sheet.frame == "cavity" else f"{sign}√N"
    scale_name, low, high = _reach(shown, value, sheet, coupling_as)
    step = 0.005 if scale_name == "logarithmic" else _round_step((high - low) / STEPS)
    same = {"splitting": {"splitting", "detuning"}, "coupling": {"coupling", "coupling-over-critical"}}
    return Knob(
        name=name,
        words=words,
        symbol=sign,
        unit=unit,
        text=number_text(value),
        scale=scale_name,
        low=low,
        high=high,
        step=step,
        place=math.log10(max(value, 1e-300)) if scale_name == "logarithmic" else value,
        fixed=not same.get(name, {name}) & sheet.swept,
    )


def _fixed_value(name: str, sheet: Sheet) -> float:
    return sheet.working_splitting if name == "splitting" else getattr(sheet, name)


def _reach(name: str, value: float, sheet: Sheet, coupling_as: str) -> tuple[str, float, float]:
    """Return the scale of a slider and its ends; they always include the value."""
    if name == "spins":
        return "logarithmic", 0.0, math.log10(KEYS["spins"].high)
    if name == "mode":
        decade = math.floor(math.log10(value))
        return "logarithmic", decade - 1.0, decade + 1.0
    natural = {
        "splitting": 2.0 * sheet.mode,
        "detuning": sheet.mode,
        "coupling": 2.0 * (sheet.critical_coupling or sheet.mode) / _positive_scale(sheet, coupling_as),
        "ratio": 1.0,
        "bias": sheet.mode,
    }[name]
    high = _round_up(max(natural, abs(value)))
    return "linear", (-high if name == "detuning" or value < 0.0 else 0.0), high


def _positive_scale(sheet: Sheet, coupling_as: str) -> float:
    return coupling_scale(sheet, coupling_as) or 1.0


def _round_up(value: float) -> float:
    """Return the next of 1, 1.5, 2, 3, 4, 5, 6, 8, 10 times a power of ten."""
    power = 10.0 ** math.floor(math.log10(value))
    for factor in (1.0, 1.5, 2.0, 3.0, 4.0, 5.0, 6.0, 8.0):
        if value <= factor * power * (1.0 + 1e-9):
            return factor * power
    return 10.0 * power


def _round_step(value: float) -> float:
    power = 10.0 ** math.floor(math.log10(value))
    return next((f * power for f in (1.0, 2.0, 5.0) if value <= f * power * (1.0 + 1e-9)), 10.0 * power)


# -- the rest of the form --------------------------------------------------------------------------


def _texts(sheet: Sheet) -> dict[str, str]:
    """Return the texts of the other boxes; axis boxes are empty while they are at their default."""
    explicit = sheet.explicit()
    texts = {name: KEYS[name].write(explicit[name]) if name in explicit else "" for name in _AXIS}
    texts |= {name: KEYS[name].write(getattr(sheet, name)) for name in _ALWAYS}
    texts["each_name"] = sheet.each.name if sheet.each else ""
    texts["each_values"] = " ".join(number_text(value) for value in sheet.each.values) if sheet.each else ""
    texts["at"] = "" if sheet.at is None else number_text(sheet.at)
    texts["zoom"] = "" if sheet.zoom is None else KEYS["zoom"].write(sheet.zoom)
    texts["splitting"] = number_text(sheet.working_splitting)
    texts["detuning"] = number_text(float(f"{sheet.working_splitting - sheet.mode:.12g}"))
    return texts


_AXIS = ("from", "to", "points")
_ALWAYS = (
    "along",
    "levels",
    "tol",
    "need",
    "tail",
    "unit",
    "frame",
    "energies",
    "bosons",
    "overlay",
    "title",
    "note",
)


def _placeholders(sheet: Sheet) -> dict[str, str]:
    """Return the defaults that stand for empty boxes of the axis."""
    low, high = default_range(sheet.data())
    return {
        "from": f"{low:.4g}",
        "to": f"{high:.4g}",
        "points": str(default_points(sheet.along, sheet.start, sheet.stop)),
        "title": sheet_title(sheet.changed(title=None)),
    }


def typed_texts(pairs: dict[str, str]) -> dict[str, Any]:
    """Return what a malformed link had typed, for the boxes: nothing is lost, nothing is corrected."""
    texts: dict[str, Any] = {name: text for name, text in pairs.items() if name in KEYS}
    name, colon, values = texts.pop("each", "").partition(":")
    if name or colon:
        texts |= {"each_name": name, "each_values": values.replace(",", " ")}
    return texts
