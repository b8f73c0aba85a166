"""The pictures of one point as plain figure data: numbers, phase-space maps, spin noise."""

import math
from collections.abc import Mapping, Sequence
from typing import Any

from app import figure_style as style
from app.sheets import Sheet

DIVERGING = ((0.0, "map-low"), (0.25, "map-below"), (0.5, "paper"), (0.75, "map-above"), (1.0, "map-high"))
SEQUENTIAL = ((0.0, "paper"), (0.5, "map-above"), (0.8, "map-high"), (1.0, "map-deep"))
HEIGHT = 430
BAR_HEIGHT = 300
MARGIN = {"l": 62, "r": 16, "t": 26, "b": 54}
FEWEST_BARS = 6
ELLIPSE_POINTS = 180


def point_figures(sheet: Sheet, result: Mapping[str, Any]) -> dict[str, dict[str, Any]]:
    """Return the figures `distribution`, `wigner`, `husimi` and `noise` of a point's result."""
    return {
        "distribution": distribution_figure(result),
        "wigner": wigner_figure(result["portrait"]["wigner"]),
        "husimi": husimi_figure(result["portrait"]["husimi"], sheet.frame),
        "noise": noise_figure(result["portrait"]["noise"], sheet.frame),
    }


def distribution_figure(result: Mapping[str, Any]) -> dict[str, Any]:
    """Return P(n) as bars, with the mean and the needed cutoff marked."""
    portrait = result["portrait"]
    weights = portrait["distribution"]
    needed = result["series"]["cutoff_needed"][0]
    last = max((n for n, weight in enumerate(weights) if weight > 1e-6), default=0)
    first = next((n for n, weight in enumerate(weights) if weight > 1e-7), 0)
    first = 0 if first < 0.5 * last else first
    last = max(last, FEWEST_BARS, needed if needed is not None else 0)
    inside = {"x": list(range(first, last + 1)), "y": (weights + [0.0] * (last + 1))[first : last + 1]}
    bars = {
        "type": "bar",
        **inside,
        "marker": {"color": "token:even", "line": {"width": 0}},
        "width": 0.8 if last - first < 120 else 1.0,
        "hovertemplate": "P(%{x}) = %{y:.4g}<extra></extra>",
    }
    marks = [_mark(portrait["mean"], "token:ink", "⟨n⟩", "dot", 1.02)]
    if needed is not None:
        marks.append(_mark(needed + 0.5, "token:critical", f"cutoff needed {needed}", "solid", 1.02))
    layout = _layout(BAR_HEIGHT)
    layout |= {
        "xaxis": _axis("n", [first - 0.7, last + 1.2]),
        "yaxis": _axis("P(n)", None) | {"rangemode": "tozero"},
        "shapes": [mark["shape"] for mark in marks],
        "annotations": [mark["label"] for mark in marks],
    }
    if needed is not None:
        # words stay inside the frame and apart from each other
        middle = 0.5 * (first + last)
        marks[1]["label"]["xanchor"] = "right" if needed > middle else "left"
        marks[0]["label"]["xanchor"] = "right" if portrait["mean"] < needed else "left"
    return _figure([bars], layout)


def _mark(x: float, colour: str, text: str, dash: str, y: float) -> dict[str, Any]:
    line = {"color": colour, "width": 1.5, "dash": dash}
    return {
        "shape": {
            "type": "line",
            "xref": "x",
            "yref": "paper",
            "x0": x,
            "x1": x,
            "y0": 0,
            "y1": 1,
            "line": line,
        },
        "label": {
            "x": x,
            "y": y,
            "xref": "x",
            "yref": "paper",
            "yanchor": "bottom",
            "text": text,
            "showarrow": False,
            "font": {"size": "token:size-key", "color": colour},
        },
    }


def wigner_figure(found: Mapping[str, Any]) -> dict[str, Any]:
    """Return the Wigner function as a map whose middle colour is zero."""
    largest = max(max(map(abs, row)) for row in found["values"])
    trace = _map(found["x"], found["p"], found["values"], DIVERGING)
    trace |= {
        "zmin": -largest,
        "zmax": largest,
        "hovertemplate": "x = %{x:.3g}, p = %{y:.3g}: W = %{z:.4g}<extra></extra>",
    }
    layout = _layout(HEIGHT)
    layout["xaxis"] = _axis("x = (a + a†)/2", _ends(found["x"]))
    layout["yaxis"] = _axis("p = (a − a†)/2i", _ends(found["p"]))
    if math.isclose(found["x"][-1] - found["x"][0], found["p"][-1] - found["p"][0]):
        layout["yaxis"] |= {"scaleanchor": "x", "constrain": "domain"}
        layout["xaxis"] |= {"constrain": "domain"}
    return _figure([trace], layout)


def husimi_figure(found: Mapping[str, Any], frame: str) -> dict[str, Any]:
    """Return the Husimi function of the spin over phi and cos(theta): equal areas of the sphere are equal."""
    polar, zero = ("z", "x") if frame == "cavity" else ("Sx", "−Sz")
    rows = found["cos_theta"]
    half = 0.5 * (rows[1] - rows[0])
    # from -pi/2 on, so that both directions along x lie inside; the first column comes again as the last
    start = len(found["phi"]) // 4
    phi = [angle / math.pi for angle in found["phi"]]
    angles = [*phi[start:], *(angle + 2.0 for angle in phi[: start + 1])]
    turned = [[*row[start:], *row[: start + 1]] for row in found["values"]]
    trace = _map(angles, rows, turned, SEQUENTIAL)
    trace |= {
        "zmin": 0.0,
        "zmax": max(max(row) for row in found["values"]),
        "hovertemplate": "φ = %{x:.3g}π, cos θ = %{y:.4g}: Q = %{z:.4g}<extra></extra>",
    }
    layout = _layout(HEIGHT)
    layout["xaxis"] = _axis(f"φ/π, from {zero}", [-0.5, 1.5]) | {"tickvals": [-0.5, 0, 0.5, 1, 1.5]}
    layout["yaxis"] = _axis(f"cos θ, from {polar}", [rows[0] - half, rows[-1] + half])
    return _figure([trace], layout)


def noise_figure(found: Mapping[str, float], frame: str) -> dict[str, Any]:
    """Return the noise of the spin orthogonal to its mean, beside the circle of a coherent spin state."""
    angles = [2.0 * math.pi * step / ELLIPSE_POINTS for step in range(ELLIPSE_POINTS + 1)]
    wide, high = found["in_plane"], found["along_y"]
    across = "Jy" if frame == "cavity" else "Sy"
    traces = []
    for name, stroke, a, b in (
        ("coherent spin state", style.SECOND, 1.0, 1.0),
        ("this state", style.FIRST, wide, high),
    ):
        x, y = [a * math.cos(angle) for angle in angles], [b * math.sin(angle) for angle in angles]
        traces.append(
            {
                "type": "scatter",
                "mode": "lines",
                "x": x,
                "y": y,
                "line": stroke.line(),
                "hovertemplate": f"{name}: semi-axes {a:.4g} and {b:.4g}<extra></extra>",
            }
        )
    traces[1] |= {"fill": "toself", "fillcolor": "token:even/0.12"}
    reach = 1.12 * max(1.0, wide, high)
    layout = _layout(HEIGHT)
    layout["xaxis"] = _axis("in the plane of the mean spin, units of √N/2", [-reach, reach])
    layout["yaxis"] = _axis(f"along {across}, units of √N/2", [-reach, reach])
    layout["yaxis"] |= {"scaleanchor": "x", "constrain": "domain"}
    layout["xaxis"] |= {"constrain": "domain"}
    return _figure(traces, layout)


def _map(
    x: Sequence[float], y: Sequence[float], z: list[list[float]], scale: Sequence[tuple[float, str]]
) -> dict[str, Any]:
    return {
        "type": "heatmap",
        "x": list(x),
        "y": list(y),
        "z": z,
        "zsmooth": "fast",
        "colorscale": [[place, f"token:{token}"] for place, token in scale],
        "colorbar": {
            "thickness": 12,
            "outlinewidth": 0,
            "tickfont": {"size": "token:size-key", "color": "token:ink"},
            "nticks": 5,
            "xpad": 6,
        },
    }


def _ends(values: Sequence[float]) -> list[float]:
    return [values[0], values[-1]]


def _axis(title: str, limits: list[float] | None) -> dict[str, Any]:
    axis = style.horizontal_axis(title, (0.0, 1.0), "y", revision=title)
    for name in ("anchor", "domain", "range", "autorange"):
        del axis[name]
    axis |= {"showgrid": False, "mirror": True, "fixedrange": True}
    if limits is not None:
        axis |= {"range": limits, "autorange": False}
    return axis


def _layout(height: int) -> dict[str, Any]:
    return style.still_layout(height, MARGIN)


def _figure(data: list[dict[str, Any]], layout: dict[str, Any]) -> dict[str, Any]:
    return {"data": data, "layout": layout, "config": dict(style.QUIET)}
