"""The picture of a map as plain figure data, and the numbers behind it."""

import itertools
import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from app import links
from app.figure_panels import Panel
from app.figure_point import DIVERGING
from app.figure_style import Stroke
from app.figures import stacked
from app.map_exports import is_complete, listed
from app.map_grid import Grid, critical_couplings
from app.map_plan import Row
from app.map_refine import Numbers
from app.map_sheets import MapSheet
from app.map_words import map_title, scale_title, told
from app.plan import Plan, axis_values
from app.symbols import energy_unit, symbol, with_unit

SHADES = 9
SEQUENTIAL = tuple((step / (SHADES - 1), f"shade-{step}") for step in range(SHADES))
HEIGHT = 520
CONTOUR = Stroke("ink", "dash", 1.3)
CRITICAL = Stroke("critical", "solid", 2.4)
FINE = 121
# dots along one side of the map: they are a texture, not data
MOST_DOTS = 32
MOST_TICKS = 7


def picture(
    question: MapSheet,
    made: Plan,
    rows: Sequence[Row | None],
    *,
    name: str,
    provenance: Mapping[str, Any],
) -> dict[str, Any]:
    """Return what the page draws and reads out: `figure`, `readout` and `title`.

    `readout` has the values and bounds of the quantity drawn, the cutoffs, and for each cell `state`:
    2 computed, 1 interpolated, 0 not settled yet.
    """
    grid = Grid(question, made, rows)
    values, bounds = grid.shown()
    words = told(question)
    return {
        "complete": is_complete(made, rows),
        "figure": figure(question, grid, values),
        "title": map_title(question),
        "readout": {
            "axis": _axis_of(question, question.sheet.along, axis_values(question.sheet)),
            "across": _axis_of(question, question["across"], question.rows),
            "shown": {
                "name": question["show"],
                "title": words.title,
                "symbol": words.symbol,
                "unit": words.unit,
                "claim": words.claim,
                "axis_title": scale_title(question),
            },
            "scale": question["scale"],
            "values": listed(values),
            "bounds": listed(bounds),
            "cutoffs": listed(grid.series("cutoff_needed"), whole=True),
            "state": (grid.settled.astype(int) + grid.computed.astype(int)).tolist(),
            "counts": {"cells": question.total, "computed": int(grid.computed.sum())},
            "notes": _notes(rows, question.sheet.points),
            "provenance": dict(provenance),
            "id": name,
            "link": links.map_link(question),
        },
    }


def _notes(rows: Sequence[Row | None], columns: int) -> dict[str, str]:
    """Return why values are missing, by row and column."""
    return {
        f"{point // columns},{point % columns}": row["answer"]["note"]
        for point, row in enumerate(rows)
        if row is not None and row["answer"]["note"]
    }


def _axis_of(question: MapSheet, name: str, values: Sequence[float]) -> dict[str, Any]:
    written = symbol(name, question.sheet.frame)
    return {
        "name": name,
        "symbol": written.plain,
        "unit": energy_unit(question.sheet) if written.frequency else "",
        "title": _title(question, name),
        "values": list(values),
    }


def _title(question: MapSheet, name: str) -> str:
    written = symbol(name, question.sheet.frame)
    shown = with_unit(written.figure, question.sheet) if written.frequency else written.figure
    return f"{written.words}  {shown}"


def figure(question: MapSheet, grid: Grid, values: Numbers) -> dict[str, Any]:
    """Return the map as plain data: shades, what is interpolated or still open, critical line, contours."""
    xs, ys = list(axis_values(question.sheet)), list(question.rows)
    panel = Panel("map", told(question).title, _title(question, question["across"]), HEIGHT)
    panel.limits = _limits(ys)
    scaled = _scaled(question, values)
    panel.traces.append(_heat(question, scaled, xs, ys))
    panel.traces += _marks(panel, grid, xs, ys)
    panel.traces += _critical(question, panel)
    panel.traces += _contours(question, panel, scaled, xs, ys)
    made = stacked(question.sheet, [panel], [], [])
    layout = made["layout"]
    layout["uirevision"] = None
    layout["xaxis"] |= {"range": list(_limits(xs)), "showgrid": False, "uirevision": None}
    layout["yaxis"] |= {"showgrid": False, "mirror": True, "uirevision": None}
    made["config"]["doubleClick"] = False
    return made


def _limits(values: Sequence[float]) -> tuple[float, float]:
    """Return the ends of an axis: half a cell beyond the outermost values."""
    return (
        values[0] - 0.5 * (values[1] - values[0]),
        values[-1] + 0.5 * (values[-1] - values[-2]),
    )


def _scaled(question: MapSheet, values: Numbers) -> Numbers:
    """Return the values as the colour scale takes them: decimal logarithms on a logarithmic one."""
    if question["scale"] != "log":
        return values
    return np.log10(np.where(values > 0.0, values, np.nan))


def shades_of(question: MapSheet, scaled: Numbers) -> tuple[float, float]:
    """Return the ends of the colour scale, in the numbers that it takes."""
    shades = question["shades"]
    if shades is not None:
        return (math.log10(shades[0]), math.log10(shades[1])) if question["scale"] == "log" else shades
    known = scaled[np.isfinite(scaled)]
    low, high = (float(known.min()), float(known.max())) if known.size else (0.0, 1.0)
    if question["scale"] == "symmetric":
        high = max(abs(low), abs(high))
        low = -high
    return (low, high) if low < high else (low - 0.5, high + 0.5)


def _heat(question: MapSheet, scaled: Numbers, xs: list[float], ys: list[float]) -> dict[str, Any]:
    low, high = shades_of(question, scaled)
    stops = DIVERGING if question["scale"] == "symmetric" else SEQUENTIAL
    bar: dict[str, Any] = {
        "thickness": 14,
        "outlinecolor": "token:rule",
        "outlinewidth": 1,
        "tickfont": {"size": "token:size-tick", "color": "token:ink"},
        "title": {
            "text": scale_title(question),
            "side": "right",
            "font": {"size": "token:size-axis", "color": "token:ink"},
        },
        "nticks": MOST_TICKS,
        "xpad": 8,
        "exponentformat": "power",
    }
    if question["scale"] == "log":
        bar |= _log_ticks(low, high)
    return {
        "type": "heatmap",
        "x": xs,
        "y": ys,
        "z": listed(scaled),
        "xaxis": "x",
        "yaxis": "y",
        "zmin": low,
        "zmax": high,
        "zauto": False,
        "hoverinfo": "skip",
        "name": question["show"],
        "colorscale": [[place, f"token:{token}"] for place, token in stops],
        "colorbar": bar,
    }


def _log_ticks(low: float, high: float) -> dict[str, Any]:
    """Return ticks at whole decades, or at 1, 2 and 5 where there are few of those."""
    first, last = math.floor(low), math.ceil(high)
    step = max(1, -(-(last - first) // MOST_TICKS))
    places = [
        (float(power), f"10<sup>{power}</sup>".replace("-", "−")) for power in range(first, last + 1, step)
    ]
    if last - first <= 3:
        places = [
            (power + math.log10(digit), f"{digit * 10.0**power:.6g}")
            for power, digit in itertools.product(range(first, last + 1), (1, 2, 5))
        ]
    inside = [(place, text) for place, text in places if low - 1e-9 <= place <= high + 1e-9]
    return {"tickvals": [place for place, _ in inside], "ticktext": [text for _, text in inside]}


def _marks(panel: Panel, grid: Grid, xs: list[float], ys: list[float]) -> list[dict[str, Any]]:
    """Return dots on interpolated cells, and a veil over those that are still open."""
    made: list[dict[str, Any]] = []
    opened = ~grid.settled
    if opened.any():
        veil = np.where(opened, 1.0, np.nan)
        made.append(
            {
                "type": "heatmap",
                "x": xs,
                "y": ys,
                "z": listed(veil),
                "xaxis": "x",
                "yaxis": "y",
                "zmin": 0.0,
                "zmax": 1.0,
                "showscale": False,
                "hoverinfo": "skip",
                "name": "not settled yet",
                "colorscale": [[0.0, "token:paper/0.5"], [1.0, "token:paper/0.5"]],
            }
        )
        panel.key.append(Stroke("uncoupled", "dot", 5.0).key("pale: not settled yet"))
    between = np.argwhere(grid.settled & ~grid.computed)
    if len(between):
        kept = [(row, column) for row, column in between if _dotted(row, ys) and _dotted(column, xs)]
        made.append(
            {
                "type": "scatter",
                "mode": "markers",
                "x": [xs[column] for _, column in kept],
                "y": [ys[row] for row, _ in kept],
                "xaxis": "x",
                "yaxis": "y",
                "marker": {
                    "size": 2.4,
                    "color": "token:paper/0.55",
                    "line": {"width": 0.6, "color": "token:ink/0.5"},
                },
                "hoverinfo": "skip",
                "name": "interpolated",
            }
        )
        panel.key.append(Stroke("ink", "dot", 2.0).key("interpolated"))
    return made


def _dotted(number: int, values: Sequence[float]) -> bool:
    """Say whether a row or column carries dots: half of them, fewer where there are many."""
    step = 2
    while len(values) > step * MOST_DOTS:
        step *= 2
    # blocks are halved: the middle of one is an odd multiple of half its side
    return number % step == step // 2


def _critical(question: MapSheet, panel: Panel) -> list[dict[str, Any]]:
    """Return the line on which the coupling is critical for N to infinity; there is none with a bias."""
    sheet = question.sheet
    xs, ys = (
        list(np.linspace(low, high, FINE))
        for low, high in ((sheet.start, sheet.stop), (question["low"], question["high"]))
    )
    coupling, critical = critical_couplings(question, xs, ys)
    if np.isnan(critical).any():
        return []
    # squares: the critical one is a straight line over either frequency
    over = coupling**2 - critical**2
    if "coupling-over-critical" in {sheet.along, question["across"]}:
        along_x, along_y = np.meshgrid(xs, ys)
        over = (along_x if sheet.along == "coupling-over-critical" else along_y) - 1.0
    if not over.min() < 0.0 < over.max():
        return []
    panel.key.append(CRITICAL.key(f"{symbol('critical', sheet.frame).figure}, N → ∞"))
    line = _line(xs, ys, over, 0.0, CRITICAL) | {"name": "critical"}
    return [line]


def _line(xs: list[float], ys: list[float], values: Numbers, level: float, stroke: Stroke) -> dict[str, Any]:
    return {
        "type": "contour",
        "x": xs,
        "y": ys,
        "z": listed(values),
        "xaxis": "x",
        "yaxis": "y",
        "showscale": False,
        "hoverinfo": "skip",
        "autocontour": False,
        "contours": {"coloring": "none", "start": level, "end": level, "size": 1},
        "line": {
            "color": f"token:{stroke.token}",
            "width": stroke.width,
            "dash": stroke.dash,
            "smoothing": 0,
        },
    }


def _contours(
    question: MapSheet, panel: Panel, scaled: Numbers, xs: list[float], ys: list[float]
) -> list[dict[str, Any]]:
    """Return the lines at chosen values."""
    made = []
    for level in question["contours"] or ():
        place = math.log10(level) if question["scale"] == "log" else level
        line = _line(xs, ys, scaled, place, CONTOUR) | {"name": f"contour {level:g}"}
        if question["scale"] != "log":
            line["contours"] |= {
                "showlabels": True,
                "labelfont": {"size": "token:size-key", "color": "token:ink"},
            }
        made.append(line)
    if made:
        levels = ", ".join(f"{level:g}".replace("-", "−") for level in question["contours"])
        panel.key.append(CONTOUR.key(f"contours {levels}"))
    return made
