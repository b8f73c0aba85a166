"""What a truncated calculation of one point gets wrong, cutoff by cutoff: plain figure data."""

from collections.abc import Mapping, Sequence
from typing import Any

from app import figure_style as style
from app.figure_style import Stroke

HEIGHT = 190
HEAD = 34
FOOT = 54
# errors below this are rounding
SMALLEST = 1e-15
BOUND = Stroke("limit", "dot", 1.8)
BASES = (("fock", Stroke("ink"), "number states"), ("shifted", Stroke("second", "dash"), "displaced ladders"))
PANELS = (
    ("energies", "Levels: largest error", "|error|/{mode}"),
    ("gap", "Gap: error", "|error|/{mode}"),
    ("boson_number", "Boson number: error", "|error|"),
    ("order_parameter", "Order parameter: error", "|error|"),
)


def convergence_figure(
    rows: Mapping[str, Mapping[str, Any]], wanted: Mapping[str, float | None], frame: str
) -> dict[str, Any]:
    """Return true errors against cutoff in both bases, with what one solve tells and the errors wanted.

    `rows` has a row of the solver for each basis that answered; quantities without numbers are left out.
    """
    panels = [panel for panel in PANELS if any(_known(row["error"][panel[0]]) for row in rows.values())]
    height = len(panels) * HEIGHT + (len(panels) - 1) * HEAD
    layout = _layout(height + HEAD + FOOT, max((row["cutoffs"][-1] for row in rows.values()), default=1))
    traces: list[dict[str, Any]] = []
    top = float(height)
    mode = "ω" if frame == "cavity" else "|δ|"
    for number, (key, title, words) in enumerate(panels):
        axis = "y" if number == 0 else f"y{number + 1}"
        domain = (max(0.0, (top - HEIGHT) / height), top / height)
        top -= HEIGHT + HEAD
        found = _traces(rows, key, axis)
        traces += found
        upright = style.vertical_axis(words.format(mode=mode), domain, revision=key)
        upright |= {"type": "log", "exponentformat": "power", "nticks": 5, "fixedrange": True}
        layout[f"yaxis{axis[1:]}"] = upright
        layout["annotations"].append(_head(title, domain[1]))
        if wanted.get(key) is not None:
            layout["shapes"].append(_line(axis, wanted[key]))
    layout["xaxis"]["anchor"] = "y" if len(panels) < 2 else f"y{len(panels)}"
    return {"data": traces, "layout": layout, "config": dict(style.QUIET)}


def convergence_key() -> list[dict[str, Any]]:
    """Return the key of the figure."""
    wanted = Stroke("critical", "solid", 1.2)
    entries = [stroke.key(label) for _, stroke, label in BASES]
    return [*entries, BOUND.key("told from one solve"), wanted.key("error wanted")]


def _known(values: Sequence[float | None]) -> bool:
    return any(value is not None for value in values)


def _traces(rows: Mapping[str, Mapping[str, Any]], key: str, axis: str) -> list[dict[str, Any]]:
    found = []
    for basis, stroke, label in BASES:
        if basis not in rows:
            continue
        row = rows[basis]
        bound = row["bound"][key]
        if bound is not None:
            found.append(_trace(row["cutoffs"], bound, BOUND, axis, "told from one solve"))
        found.append(_trace(row["cutoffs"], row["error"][key], stroke, axis, label))
    return found


def _trace(
    cutoffs: Sequence[int], values: Sequence[float | None], stroke: Stroke, axis: str, name: str
) -> dict[str, Any]:
    shown = [None if value is None or value < SMALLEST else value for value in values]
    trace = style.curve(list(map(float, cutoffs)), shown, stroke, axis, name)
    trace |= {"mode": "lines+markers", "marker": {"size": 3.5, "color": f"token:{stroke.token}"}}
    del trace["hoverinfo"]
    return trace | {"hovertemplate": f"{name}, cutoff %{{x}}: %{{y:.2e}}<extra></extra>"}


def _layout(height: int, last: int) -> dict[str, Any]:
    across = style.horizontal_axis("cutoff", (-0.5, last + 0.5), "y", revision="cutoff")
    layout = style.still_layout(height, {"l": 80, "r": 16, "t": HEAD, "b": FOOT})
    return layout | {"xaxis": across | {"fixedrange": True}, "shapes": [], "annotations": []}


def _head(text: str, top: float) -> dict[str, Any]:
    return {
        "text": text,
        "showarrow": False,
        "xref": "paper",
        "yref": "paper",
        "x": 0,
        "y": top,
        "xanchor": "left",
        "yanchor": "bottom",
        "yshift": 3,
        "font": {"size": "token:size-key", "color": "token:ink"},
    }


def _line(axis: str, value: float | None) -> dict[str, Any]:
    return {
        "type": "line",
        "xref": "paper",
        "x0": 0,
        "x1": 1,
        "yref": axis,
        "y0": value,
        "y1": value,
        "line": {"color": "token:critical", "width": 1.2},
    }
