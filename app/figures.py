"""The picture of a sweep: stacked plots over one axis as plain figure data, and the numbers behind them.

Pure functions of a sheet and its result. Page, exports and print draw from the same figure; colours and
font sizes are tokens (see `figure_style`) that the page replaces from its stylesheet.
"""

from collections.abc import Mapping, Sequence
from typing import Any

from app import figure_style as style
from app.exports import curves_of
from app.figure_joins import crossings
from app.figure_panels import BUILDERS, Curve, Panel, computed_curves
from app.figure_readout import readout
from app.sheets import Sheet
from app.symbols import axis_title, sheet_title, symbol

HEAD = 46  # above each panel: its title and key
FOOT = 58  # below the last one: ticks and title of the axis
SIDE = 80
RIGHT = 20


def picture(sheet: Sheet, result: Mapping[str, Any]) -> dict[str, Any]:
    """Return what a page draws: `figure` (data, layout, config), `readout` and `title`.

    `result` may be unfinished: missing points are left out and the curves run through those that are
    there.
    """
    return {
        "figure": sweep_figure(sheet, result),
        "readout": readout(sheet, result),
        "title": sheet_title(sheet),
    }


def sweep_figure(sheet: Sheet, result: Mapping[str, Any]) -> dict[str, Any]:
    """Return the stacked figure of a sweep as plain data.

    `layout.meta` has what the script draws on top: per panel its title, place and key, the key of the
    family, and the critical places.
    """
    curves = computed_curves(sheet, curves_of(result), complete=result["complete"])
    panels = [
        build(sheet, curves, "y" if number == 0 else f"y{number + 1}")
        for number, build in enumerate(BUILDERS)
    ]
    family = [curve.stroke.key(curve.label) for curve in curves if curve.stroke is not None]
    return stacked(sheet, panels, family, _critical(sheet, curves))


def stacked(
    sheet: Sheet,
    panels: Sequence[Panel],
    family: list[dict[str, Any]],
    critical: list[dict[str, Any]],
) -> dict[str, Any]:
    """Return panels over the axis of a sheet as one figure, with the key of a family and critical places."""
    return {
        "data": [trace for panel in panels for trace in panel.traces],
        "layout": _layout(sheet, panels, family, critical),
        "config": dict(style.QUIET),
    }


def _layout(
    sheet: Sheet,
    panels: Sequence[Panel],
    family: list[dict[str, Any]],
    critical: list[dict[str, Any]],
) -> dict[str, Any]:
    height = sum(panel.height for panel in panels) + HEAD * (len(panels) - 1)
    domains = _domains(panels, height)
    limits = sheet.zoom if sheet.zoom is not None else (sheet.start, sheet.stop)
    question = f"{sheet.along}:{sheet.start!r}:{sheet.stop!r}:{sheet.zoom!r}"
    layout: dict[str, Any] = {
        "height": height + HEAD + FOOT,
        "margin": {"l": SIDE, "r": RIGHT, "t": HEAD, "b": FOOT, "pad": 0},
        "paper_bgcolor": "token:paper",
        "plot_bgcolor": "token:paper",
        "font": {"family": "token:font-figure", "size": "token:size-tick", "color": "token:ink"},
        "showlegend": False,
        "hovermode": False,
        "dragmode": "zoom",
        "uirevision": question,
        "xaxis": style.horizontal_axis(axis_title(sheet), limits, _axis_id(len(panels)), revision=question),
        "meta": {
            "panels": [
                {"name": panel.name, "title": panel.title, "domain": domain, "key": panel.key}
                for panel, domain in zip(panels, domains, strict=True)
            ],
            "family": family,
            "critical": critical,
        },
    }
    shown = (sheet.energies, sheet.bosons, sheet.along, sheet.each.name if sheet.each else "")
    for number, (panel, domain) in enumerate(zip(panels, domains, strict=True)):
        revision = f"{panel.name}:{':'.join(shown)}"
        name = "yaxis" if number == 0 else f"yaxis{number + 1}"
        axis = style.vertical_axis(panel.axis_title, domain, revision=revision, limits=panel.limits)
        if panel.from_zero:
            axis["rangemode"] = "tozero"
        layout[name] = axis
    return layout


def _axis_id(number: int) -> str:
    return "y" if number == 1 else f"y{number}"


def _domains(panels: Sequence[Panel], height: int) -> list[tuple[float, float]]:
    """Return the share of the height that each panel takes, from the top down."""
    domains = []
    top = float(height)
    for panel in panels:
        domains.append((max(0.0, (top - panel.height) / height), top / height))
        top -= panel.height + HEAD
    return domains


def _critical(sheet: Sheet, curves: Sequence[Curve]) -> list[dict[str, Any]]:
    """Return the places on the axis at which the coupling is critical: there is no such place with a bias."""
    if "bias" in sheet.swept or sheet.bias != 0.0:
        return []
    label = symbol("critical", sheet.frame).figure
    found: dict[float, dict[str, Any]] = {}
    for curve in curves:
        if sheet.along == "coupling-over-critical":
            places = [1.0] if sheet.start <= 1.0 <= sheet.stop else []
        else:
            differences = [
                None if critical is None else coupling - critical
                for coupling, critical in zip(
                    _couplings(sheet, curve), curve.limit["critical_coupling"], strict=True
                )
            ]
            places = crossings(curve.x, differences)
        for place in places:
            token = "critical" if curve.stroke is None else curve.stroke.token
            known = found.setdefault(round(place, 9), {"x": place, "label": label, "token": token})
            if known["token"] != token:
                found[round(place, 9)] = known | {"token": "critical"}
    return list(found.values())


def _couplings(sheet: Sheet, curve: Curve) -> list[float]:
    """Return the coupling at each point of a curve."""
    if sheet.along == "coupling":
        return curve.x
    if sheet.each is not None and sheet.each.name in {"coupling", "coupling-over-critical"}:
        factor = sheet.each.values[_number(curve)]
        if sheet.each.name == "coupling":
            return [factor] * len(curve.x)
        return [factor * (critical or 0.0) for critical in curve.limit["critical_coupling"]]
    return [sheet.coupling] * len(curve.x)


def _number(curve: Curve) -> int:
    return int(curve.stroke.token.rpartition("-")[2]) - 1 if curve.stroke is not None else 0


__all__ = ["picture", "readout", "sweep_figure"]
