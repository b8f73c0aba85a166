"""The stacked panels of a sweep: each builder turns curves of a result into traces and a key."""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from app import figure_style as style
from app.figure_joins import THINNEST_BAND, THINNEST_BAND_YET, Numbers, joined, outlines
from app.figure_style import Stroke
from app.sheets import Sheet
from app.symbols import curve_label, with_unit


@dataclass(frozen=True)
class Curve:
    """One curve of a result, reduced to the points that are computed.

    `series`, `limit`, `uncoupled` and `effective` hold one entry per entry of `x`; `spins` is the number of
    spins at each point; `thinnest` is the share of a panel below which a band is left out.
    """

    label: str
    stroke: Stroke | None
    x: list[float]
    spins: list[int]
    series: dict[str, list[Any]]
    limit: dict[str, Numbers]
    uncoupled: list[list[float]]
    effective: list[list[float | None] | None] | None
    thinnest: float = THINNEST_BAND


@dataclass
class Panel:
    """One panel: its place in the stack, what is written on it, and what is drawn in it."""

    name: str
    title: str
    axis_title: str
    height: int
    traces: list[dict[str, Any]] = field(default_factory=list)
    key: list[dict[str, Any]] = field(default_factory=list)
    limits: tuple[float, float] | None = None
    from_zero: bool = False


def computed_curves(
    sheet: Sheet, curves: Sequence[Mapping[str, Any]], *, complete: bool = True
) -> list[Curve]:
    """Return the curves of a result without the points that are still missing."""
    thinnest = THINNEST_BAND if complete or sheet.zoom is not None else THINNEST_BAND_YET
    found = []
    for number, curve in enumerate(curves):
        kept = [point for point, energy in enumerate(curve["series"]["energy"]) if energy is not None]
        axis = curve["axis"]["values"]

        def pick(values: Sequence[Any], kept: list[int] = kept) -> list[Any]:
            return [values[point] for point in kept]

        in_family = curve["name"] is not None
        found.append(
            Curve(
                curve_label(curve["name"], curve["value"], sheet.frame) if in_family else "",
                style.family_stroke(number) if in_family else None,
                pick(axis),
                [_spins(sheet, curve, axis[point]) for point in kept],
                {key: pick(values) for key, values in curve["series"].items()},
                {key: pick(values) for key, values in curve["limit"].items()},
                pick(curve["uncoupled"]["levels"]),
                pick(curve["effective"]["energy"]) if "effective" in curve else None,
                thinnest,
            )
        )
    return found


def _spins(sheet: Sheet, curve: Mapping[str, Any], x: float) -> int:
    if sheet.along == "spins":
        return int(x)
    return int(curve["value"]) if curve["name"] == "spins" else sheet.spins


# -- levels ----------------------------------------------------------------------------------------

_LEVEL_TITLES = {
    "absolute": "Energy levels",
    "ground": "Levels above the ground level",
    "uncoupled": "Levels minus the uncoupled ground energy",
}
_LEVEL_SYMBOLS = {"absolute": "E", "ground": "E − E<sub>0</sub>", "uncoupled": "E − E<sub>unc</sub>"}


def levels_panel(sheet: Sheet, curves: Sequence[Curve], axis: str) -> Panel:
    """Draw the lowest levels by parity with their bounds, uncoupled levels, large-N ground energy."""
    title = _LEVEL_TITLES[sheet.energies]
    if sheet.each is not None:
        title = f"{title}: the lowest of each parity"
    panel = Panel("levels", title, with_unit(_LEVEL_SYMBOLS[sheet.energies], sheet), 250)
    family = sheet.each is not None
    for curve in curves:
        zero = _zeros(sheet, curve)
        if not family:
            _add_uncoupled(panel, curve, zero, axis, sheet)
        if curve.effective is not None:
            _add_effective(panel, curve, axis, sheet, family=family)
        _add_levels(panel, curve, zero, axis, family=family)
        if sheet.energies != "ground":
            _add_limit_energy(panel, curve, zero, axis)
        _add_marks(panel, curve, [energy[0] for energy in curve.series["energy"]], axis, zero)
    panel.key = _unique(panel.key)
    return panel


def _zeros(sheet: Sheet, curve: Curve) -> list[float]:
    """Return the energy that is subtracted at each point."""
    if sheet.energies == "ground":
        return [energy[0] for energy in curve.series["energy"]]
    if sheet.energies == "uncoupled":
        return [levels[0] for levels in curve.uncoupled]
    return [0.0] * len(curve.x)


def _add_uncoupled(panel: Panel, curve: Curve, zero: list[float], axis: str, sheet: Sheet) -> None:
    shown = [
        [level - (levels[0] if sheet.energies == "ground" else base) for level in levels]
        for levels, base in zip(curve.uncoupled, zero, strict=True)
    ]
    x, y = joined(curve.x, shown)
    panel.traces.append(style.curve(x, y, style.UNCOUPLED, axis, "uncoupled"))
    panel.key.append(style.UNCOUPLED.key("uncoupled"))


def _add_effective(panel: Panel, curve: Curve, axis: str, sheet: Sheet, *, family: bool) -> None:
    """Draw the levels of the boson-eliminated model: of a family only the ground level, for legibility."""
    shown: list[list[float | None]] = []
    for levels, own, uncoupled in zip(
        curve.effective or [], curve.series["energy"], curve.uncoupled, strict=True
    ):
        if not levels or levels[0] is None:
            shown.append([])
            continue
        base = {"absolute": 0.0, "ground": levels[0], "uncoupled": uncoupled[0]}[sheet.energies]
        # the boson-eliminated model has no boson ladder: as many levels as the panel shows, no more
        kept = levels[: 1 if family else len(own)]
        shown.append([None if level is None else level - base for level in kept])
    x, y = joined(curve.x, shown)
    panel.traces.append(style.curve(x, y, style.EFFECTIVE, axis, "effective spin model"))
    panel.key.append(style.EFFECTIVE.key("effective spin model"))


def _add_levels(panel: Panel, curve: Curve, zero: list[float], axis: str, *, family: bool) -> None:
    parities = sorted({parity for row in curve.series["parity"] for parity in row}, reverse=True)
    for parity in parities:
        name, own = style.PARITY_STROKES[parity]
        stroke = own if curve.stroke is None else curve.stroke.dashed(own.dash)
        # without parity the lowest two levels of a family's curve; with it the lowest of each block
        most = (2 if parity == 0 else 1) if family else None
        upper = _by_parity(curve, "energy", parity, zero, most)
        lower = _by_parity(curve, "energy_lower", parity, zero, most)
        label = name if curve.stroke is None else f"{curve.label}, {name}"
        outline = outlines(curve.x, lower, upper, curve.thinnest)
        if outline is not None:
            panel.traces.append(style.band(*outline, stroke, axis, f"{label}: bounds"))
        panel.traces.append(style.curve(*joined(curve.x, upper), stroke, axis, label))
        panel.key.append((style.Stroke("ink", own.dash) if family else own).key(name))


def _by_parity(curve: Curve, key: str, parity: int, zero: list[float], most: int | None) -> list[Numbers]:
    """Return per point the levels of one parity from below, measured from `zero`."""
    rows = []
    for values, parities, base in zip(curve.series[key], curve.series["parity"], zero, strict=True):
        row: Numbers = [
            None if value is None else value - base
            for value, own in zip(values, parities, strict=True)
            if own == parity
        ]
        rows.append(row[:most])
    return rows


def _add_limit_energy(panel: Panel, curve: Curve, zero: list[float], axis: str) -> None:
    y: Numbers = [
        None if energy is None else spins * energy - base
        for energy, spins, base in zip(curve.limit["energy_per_spin"], curve.spins, zero, strict=True)
    ]
    _add_limit(panel, curve, y, axis)


def _add_limit(panel: Panel, curve: Curve, y: Numbers, axis: str) -> None:
    """Draw a large-N curve, unless this model has none."""
    if all(value is None for value in y):
        return
    # one dotted slate curve each; a family that shares it draws it on top of itself
    if any(trace["name"] == "N → ∞" and trace["y"] == y for trace in panel.traces):
        return
    panel.traces.append(style.curve(list(curve.x), y, style.LIMIT, axis, "N → ∞"))
    panel.key.append(style.LIMIT.key("N → ∞"))


def _add_marks(
    panel: Panel, curve: Curve, values: Numbers, axis: str, zero: Sequence[float] | None = None
) -> None:
    bases = zero if zero is not None else [0.0] * len(curve.x)
    places = [
        (x, value - base)
        for x, value, base, good in zip(curve.x, values, bases, curve.series["meets_tolerance"], strict=True)
        if not good and value is not None
    ]
    if places:
        panel.traces.append(style.marks([x for x, _ in places], [y for _, y in places], axis))
        panel.key.append(
            style.Stroke("warning", "solid", 1.6, "circle-open").key("not yet within tol")
            | {"marker_only": True}
        )


# -- one number per point --------------------------------------------------------------------------


def gap_panel(sheet: Sheet, curves: Sequence[Curve], axis: str) -> Panel:
    """Draw the gap to the next level of the same and of any parity, and the large-N lower branch."""
    panel = Panel("gap", "Gap above the ground level", with_unit("gap", sheet), 125, from_zero=True)
    for curve in curves:
        parity = any(value != 0 for row in curve.series["parity"] for value in row)
        if parity:
            _add_number(panel, curve, "gap", axis, stroke=style.FIRST, label="same parity")
        _add_number(
            panel,
            curve,
            "gap_any",
            axis,
            stroke=style.SECOND if parity else style.FIRST,
            label="any parity" if parity else "next level",
        )
        _add_limit(panel, curve, curve.limit["lower_branch"], axis)
    panel.key = _unique(panel.key)
    return panel


def boson_panel(sheet: Sheet, curves: Sequence[Curve], axis: str) -> Panel:
    """Draw the boson number of the ground level, total or per spin, and its large-N value."""
    per_spin = sheet.bosons == "per-spin"
    symbol = "⟨a<sup>†</sup>a⟩"
    panel = Panel(
        "bosons",
        "Boson number per spin, ground level" if per_spin else "Boson number, ground level",
        f"{symbol}/N" if per_spin else symbol,
        125,
        from_zero=True,
    )
    for curve in curves:
        scale = [1.0 / spins if per_spin else 1.0 for spins in curve.spins]
        _add_number(panel, curve, "boson_number", axis, stroke=style.FIRST, label="ground level", scale=scale)
        limit: Numbers = [
            None if value is None else value * factor
            for value, factor in zip(curve.limit["boson_number"], scale, strict=True)
        ]
        _add_limit(panel, curve, limit, axis)
    panel.key = [entry for entry in _unique(panel.key) if entry["label"] != "ground level"]
    return panel


def spin_panel(_sheet: Sheet, curves: Sequence[Curve], axis: str) -> Panel:
    """Draw the order parameter and the inversion of the ground level with their large-N values."""
    panel = Panel("spins", "Spins, ground level", "per N/2", 135, limits=(-1.08, 1.08))
    for curve in curves:
        _add_number(panel, curve, "order_parameter", axis, stroke=style.FIRST, label="order parameter")
        _add_number(panel, curve, "inversion", axis, stroke=style.SECOND, label="inversion")
        _add_limit(panel, curve, curve.limit["order_parameter"], axis)
        _add_limit(panel, curve, curve.limit["inversion"], axis)
    panel.key = _unique(panel.key)
    return panel


def cutoff_panel(_sheet: Sheet, curves: Sequence[Curve], axis: str) -> Panel:
    """Draw the boson cutoff that the reader's own calculation needs beside the one used here."""
    panel = Panel("cutoff", "Boson cutoff", "highest level", 115, from_zero=True)
    for curve in curves:
        _add_number(panel, curve, "cutoff_needed", axis, stroke=style.FIRST, label="needed")
        _add_number(panel, curve, "cutoff_used", axis, stroke=style.SECOND, label="used here")
    panel.key = _unique(panel.key)
    return panel


def _add_number(
    panel: Panel,
    curve: Curve,
    key: str,
    axis: str,
    *,
    stroke: Stroke,
    label: str,
    scale: Sequence[float] | None = None,
) -> None:
    """Draw one number per point with its bound, if it has one, as a band."""
    factors = scale if scale is not None else [1.0] * len(curve.x)
    y: Numbers = [
        None if value is None else value * factor
        for value, factor in zip(curve.series[key], factors, strict=True)
    ]
    errors = curve.series.get(f"{key}_error", [None] * len(curve.x))
    look = stroke if curve.stroke is None else curve.stroke.dashed(stroke.dash)
    low: list[Numbers] = []
    high: list[Numbers] = []
    for value, error, factor in zip(y, errors, factors, strict=True):
        known = value is not None and error is not None
        low.append([value - error * factor if known else None])
        high.append([value + error * factor if known else None])
    outline = outlines(curve.x, low, high, curve.thinnest)
    if outline is not None:
        panel.traces.append(style.band(*outline, look, axis, f"{label}: bounds"))
    name = label if curve.stroke is None else f"{curve.label}, {label}"
    panel.traces.append(style.curve(list(curve.x), y, look, axis, name))
    panel.key.append((stroke if curve.stroke is None else Stroke("ink", stroke.dash)).key(label))
    _add_marks(panel, curve, y, axis)


def _unique(key: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """Return the entries of a key, each once."""
    seen: dict[str, dict[str, Any]] = {}
    for entry in key:
        seen.setdefault(entry["label"], entry)
    return list(seen.values())


BUILDERS: tuple[Callable[[Sheet, Sequence[Curve], str], Panel], ...] = (
    levels_panel,
    gap_panel,
    boson_panel,
    spin_panel,
    cutoff_panel,
)
