"""The pictures of a cutoff question: needed cutoffs along the axis, or the map of the covering one."""

import math
from collections.abc import Mapping, Sequence
from typing import Any

from app import figure_style as style
from app import links
from app.cutoff_plan import model_at
from app.cutoff_sheets import CutoffSheet
from app.cutoff_summary import quantities_of
from app.cutoff_words import NAMES, allowed_of, answer_words, place_words, question_title, size_words
from app.figure_joins import Numbers, crossings
from app.figure_panels import Panel
from app.figure_point import SEQUENTIAL
from app.figure_style import Stroke
from app.figures import stacked
from app.places import MEMBER, place_of
from app.plan import axis_values
from app.symbols import curve_label, energy_unit, symbol, with_unit

STATED = Stroke("critical", "dash", 1.8)
COVERING = Stroke("ink", "solid", 1.2)
STATUS_DASH = {"proven": "solid", "checked": "dash"}
MAP_HEIGHT = 420
LEAST_SHARE = -5.0
MOST_ROWS_TOLD = 24


def picture(question: CutoffSheet, result: Mapping[str, Any]) -> dict[str, Any]:
    """Return what the page draws and says: `figure`, `title`, `words`, `sizes` and `readout`.

    `readout` has the result with the names, units and allowed errors of its quantities; of a map only its
    summary.
    """
    kept = {key: result[key] for key in ("id", "link", "complete", "provenance", "axis", "summary")}
    if question["across"] is None:
        told = (
            "second",
            "x",
            "needed",
            "status",
            "error",
            "covering",
            "deciding",
            "stated",
            "values",
            "notes",
        )
        kept |= {key: result[key] for key in told}
    else:
        kept["rows"] = _rows_of_map(question, result)
    swept = symbol(question.sheet.along, question.sheet.frame)
    return {
        "figure": figure(question, result),
        "title": question_title(question),
        "words": answer_words(question, result),
        "sizes": [size_words(size) for size in result["summary"]["sizes"]],
        "readout": kept
        | {
            "symbol": swept.plain,
            "unit": energy_unit(question.sheet) if swept.frequency else "",
            "quantities": [
                {"key": key, "name": NAMES[key], "allowed": allowed_of(question)[key]}
                for key in quantities_of(question)
            ],
            "curves": [
                "" if value is None or question.second is None else _label(question, value, plain=True)
                for value in question.curves
            ],
            "ensemble": question["ensemble"],
            "deciding_point": _deciding_link(question, result),
        },
    }


def _deciding_link(question: CutoffSheet, result: Mapping[str, Any]) -> str | None:
    """Return the address of the page of the deciding point; a map's points have no such page."""
    deciding = result["summary"]["deciding"]
    if deciding is None or question["across"] is not None:
        return None
    place = place_of(question.sheet.changed(at=deciding["x"]), {MEMBER.name: deciding["second"]})
    return links.whole(links.place_query(place), links.POINT_PAGE).lstrip("/")


def _rows_of_map(question: CutoffSheet, result: Mapping[str, Any]) -> list[dict[str, Any]]:
    """Return for rows of a map, thinned to MOST_ROWS_TOLD, the largest cutoff needed and where."""
    length, rows = question.sheet.points, list(question.curves)
    step = -(-len(rows) // MOST_ROWS_TOLD)
    told = []
    for row in [*range(0, len(rows) - 1, step), len(rows) - 1]:
        part = result["covering"][row * length : (row + 1) * length]
        known = [(value, -column) for column, value in enumerate(part) if value is not None]
        if known:
            value, negative = max(known)
            x, second = result["axis"]["values"][-negative], rows[row]
            told.append({"place": place_words(question, x, second), "cutoff": value})
    return told


def figure(question: CutoffSheet, result: Mapping[str, Any]) -> dict[str, Any]:
    """Return the stacked figure of a cutoff question as plain data."""
    if question["across"] is not None:
        panels = [_map_panel(question, result)]
    else:
        panels = [_needed_panel(question, result)]
        if question["stated"] is not None:
            panels.append(_error_panel(question, result))
    made = stacked(question.sheet, panels, [], _critical(question) if question["across"] is None else [])
    if question["across"] is not None:
        written = symbol(question["across"], question.sheet.frame)
        text = with_unit(written.figure, question.sheet) if written.frequency else written.figure
        made["layout"]["yaxis"] |= {"title": made["layout"]["yaxis"]["title"] | {"text": text}}
        made["layout"]["yaxis"]["showgrid"] = False
        made["layout"]["xaxis"]["showgrid"] = False
        made["layout"]["hovermode"] = "closest"
    elif question["stated"] is not None:
        made["layout"]["yaxis2"]["type"] = "log"
    return made


def _label(question: CutoffSheet, value: float, *, plain: bool = False) -> str:
    name = question.second or ""
    label = curve_label(name, value, question.sheet.frame)
    written = symbol(name, question.sheet.frame)
    return label.replace(written.figure, written.plain) if plain else label


def _lines(question: CutoffSheet) -> list[tuple[str, str, Stroke, range]]:
    """Return quantity (or "covering"), label, look and points of each line that is drawn."""
    length = question.sheet.points
    if question.second is None:
        return [
            (quantity, NAMES[quantity], style.family_stroke(number + 1), range(length))
            for number, quantity in enumerate(quantities_of(question))
        ]
    return [
        (
            "covering",
            _label(question, value),
            style.family_stroke(number),
            range(number * length, (number + 1) * length),
        )
        for number, value in enumerate(question.curves)
        if value is not None
    ]


def _needed_panel(question: CutoffSheet, result: Mapping[str, Any]) -> Panel:
    title = "Largest n needed"
    panel = Panel("needed", title, "n", 330, from_zero=True)
    xs = result["x"]
    claims: set[str] = set()
    if question["stated"] is not None:
        _shade(panel, question, result)
    for quantity, label, stroke, points in _lines(question):
        if quantity == "covering":
            needed, status = _of_curve(result, points)
            panel.key.append(stroke.key(label))
        else:
            needed, status = result["needed"][quantity], result["status"][quantity]
        for claim, dash in STATUS_DASH.items():
            drawn = stroke.dashed(dash)
            x, y = _where_claimed(xs, needed, status, claim)
            if x:
                panel.traces.append(style.curve(x, y, drawn, "y", f"{label}, {claim}"))
                if quantity != "covering":
                    panel.key.append(drawn.key(f"{label}, {claim}"))
                claims.add(claim)
    if question.second is not None:
        panel.key += [
            COVERING.dashed(dash).key(claim) for claim, dash in STATUS_DASH.items() if claim in claims
        ]
    return panel


def _of_curve(result: Mapping[str, Any], points: range) -> tuple[list[int | None], list[str | None]]:
    """Return the covering cutoff of one curve's points, None elsewhere, and what is claimed of it."""
    needed: list[int | None] = [None] * len(result["x"])
    status: list[str | None] = [None] * len(result["x"])
    for point in points:
        needed[point] = result["covering"][point]
        if result["deciding"][point] is not None:
            status[point] = result["status"][result["deciding"][point]][point]
    return needed, status


def _where_claimed(
    xs: Sequence[float], needed: Sequence[int | None], status: Sequence[str | None], claim: str
) -> tuple[list[float | None], list[float | None]]:
    """Return a curve through the computed points that carry a claim, broken where others lie between."""
    x: list[float | None] = []
    y: list[float | None] = []
    broken = False
    for place, value, told in zip(xs, needed, status, strict=True):
        if value is None:
            continue
        if told != claim:
            broken = True
            continue
        if broken and x:
            x.append(None)
            y.append(None)
        broken = False
        x.append(place)
        y.append(float(value))
    return x, y


def _shade(panel: Panel, question: CutoffSheet, result: Mapping[str, Any]) -> None:
    """Draw the stated cutoff, and fill what lies between it and what is needed."""
    sheet, stated = question.sheet, float(question["stated"])
    panel.key.append(STATED.key(f"stated, n = {question['stated']}"))
    length = sheet.points
    outline_x: list[float | None] = []
    outline_y: list[float | None] = []
    for row in range(len(question.curves)):
        run: list[tuple[float, float]] = []
        for point in [*range(row * length, (row + 1) * length), None]:
            needed = None if point is None else result["covering"][point]
            if point is not None and needed is not None and needed > stated:
                run.append((result["x"][point], float(needed)))
            elif run and (point is None or needed is not None):
                outline_x += [run[0][0], *(x for x, _ in run), run[-1][0], run[0][0], None]
                outline_y += [stated, *(y for _, y in run), stated, stated, None]
                run = []
    if outline_x:
        panel.traces.append(style.band(outline_x, outline_y, Stroke("warning"), "y", "not enough"))
        panel.key.append(Stroke("warning", "solid", 6.0).key("not enough"))
    panel.traces.append(style.curve([sheet.start, sheet.stop], [stated, stated], STATED, "y", "stated"))


def _error_panel(question: CutoffSheet, result: Mapping[str, Any]) -> Panel:
    """Draw the error at the stated cutoff in units of what is allowed."""
    panel = Panel(
        "stated",
        f"Error at n = 0..{question['stated']} over allowed error",
        "error / allowed",
        230,
    )
    allowed, errors = allowed_of(question), result["stated"]["error"]
    xs = result["x"]
    largest = 10.0
    x: Numbers
    y: Numbers
    for quantity, label, stroke, points in _lines(question):
        asked = quantities_of(question) if quantity == "covering" else (quantity,)
        x, y = [], []
        for point in points:
            shares = [errors[one][point] / allowed[one] for one in asked if errors[one][point]]
            if shares:
                x.append(xs[point])
                y.append(max(shares))
                largest = max(largest, *shares)
        if x:
            panel.traces.append(style.curve(x, y, stroke, "y2", label))
    ends: Numbers = [question.sheet.start, question.sheet.stop]
    panel.traces.append(style.curve(ends, [1.0, 1.0], STATED, "y2", "allowed"))
    panel.key.append(STATED.key("allowed"))
    # what is far below the allowed error needs no room; both ends are decimal logarithms
    panel.limits = (LEAST_SHARE, math.log10(largest) + 0.5)
    return panel


def _map_panel(question: CutoffSheet, result: Mapping[str, Any]) -> Panel:
    """Draw the covering cutoff over both axes, and the border of the stated one."""
    panel = Panel("needed", "Largest n needed", "", MAP_HEIGHT)
    length = question.sheet.points
    rows = list(question.curves)
    values = result["covering"]
    grid = [values[row * length : (row + 1) * length] for row in range(len(rows))]
    across = symbol(question["across"], question.sheet.frame)
    along = symbol(question.sheet.along, question.sheet.frame)
    axis = list(result["axis"]["values"])
    panel.traces.append(
        {
            "type": "heatmap",
            "x": axis,
            "y": rows,
            "z": grid,
            "xaxis": "x",
            "yaxis": "y",
            "hoverongaps": False,
            "colorscale": [[place, f"token:{token}"] for place, token in SEQUENTIAL],
            "colorbar": {
                "thickness": 12,
                "outlinewidth": 0,
                "tickfont": {"size": "token:size-key", "color": "token:ink"},
            },
            "hovertemplate": f"{along.plain} = %{{x:.6g}}, {across.plain} = %{{y:.6g}}: "
            "largest n needed %{z}<extra></extra>",
        }
    )
    stated = question["stated"]
    if stated is not None and any(value is not None for value in values):
        panel.traces.append(
            {
                "type": "contour",
                "x": axis,
                "y": rows,
                "z": grid,
                "xaxis": "x",
                "yaxis": "y",
                "showscale": False,
                "hoverinfo": "skip",
                "contours": {"coloring": "none", "start": stated + 0.5, "end": stated + 0.5, "size": 1},
                "line": {"color": "token:critical", "width": 2.2, "smoothing": 0},
            }
        )
        panel.key.append(Stroke("critical", "solid", 2.2).key(f"border of the stated cutoff n = {stated}"))
    panel.limits = (float(rows[0] or 0.0), float(rows[-1] or 0.0))
    return panel


def _critical(question: CutoffSheet) -> list[dict[str, Any]]:
    """Return the places on the axis at which the coupling is critical: there is no such place with a bias."""
    sheet = question.sheet
    if sheet.bias != 0.0 or "bias" in sheet.swept:
        return []
    label = symbol("critical", sheet.frame).figure
    if sheet.along == "coupling-over-critical":
        inside = sheet.start <= 1.0 <= sheet.stop
        return [{"x": 1.0, "label": label, "token": "critical"}] if inside else []
    found = {}
    axis = list(axis_values(sheet))
    for value in question.curves:
        models = [model_at(question, x, value) for x in axis]
        apart: list[float | None] = [model.rotating - model.critical_coupling for model in models]
        for place in crossings(axis, apart):
            found[round(place, 9)] = {"x": place, "label": label, "token": "critical"}
    return list(found.values())
