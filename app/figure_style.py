"""How curves look, as tokens: the stylesheet has the colours, and the page's script puts them in.

A colour is written "token:NAME" or, translucent, "token:NAME/0.2"; NAME is a custom property of the one
stylesheet. A font size is written "token:size-NAME".
"""

from dataclasses import dataclass
from typing import Any

# numbers stay where they are, unmeasured: looking for room takes a third of the time of a drawing
PLACED = {"ticklabeloverflow": "allow", "tickangle": 0}

# no buttons of Plotly's own: ours can be reached with the keyboard
QUIET = {
    "displayModeBar": False,
    "responsive": False,
    "doubleClick": "reset",
    "showTips": False,
    "scrollZoom": False,
}

MOST_MARKED = {"solid": 7, "dash": 4}

FAMILY_SYMBOLS = (
    "circle",
    "square",
    "diamond",
    "triangle-up",
    "triangle-down",
    "star",
    "triangle-left",
    "triangle-right",
)


@dataclass(frozen=True)
class Stroke:
    """The look of a curve: token of its colour, dash pattern and width in pixels; `symbol` marks a family."""

    token: str
    dash: str = "solid"
    width: float = 2.0
    symbol: str | None = None

    def line(self) -> dict[str, Any]:
        """Return the line of a trace."""
        # every point is drawn: merging nearly straight stretches shows as corners on a wall
        return {"color": f"token:{self.token}", "dash": self.dash, "width": self.width, "simplify": False}

    def key(self, label: str) -> dict[str, Any]:
        """Return one entry of a panel's key."""
        return {
            "label": label,
            "token": self.token,
            "dash": self.dash,
            "width": self.width,
            "symbol": self.symbol,
        }

    def dashed(self, dash: str) -> "Stroke":
        """Return the same look with another dash pattern."""
        return Stroke(self.token, dash, self.width, self.symbol)


EVEN = Stroke("even")
ODD = Stroke("odd", "dash")
NO_PARITY = Stroke("ink")
FIRST = Stroke("ink")
SECOND = Stroke("second", "dash")
LIMIT = Stroke("limit", "dot", 1.8)
UNCOUPLED = Stroke("uncoupled", "solid", 0.9)
EFFECTIVE = Stroke("effective", "dashdot", 1.4)
CRITICAL = Stroke("critical", "solid", 1.2)

PARITY_STROKES: dict[int, tuple[str, Stroke]] = {
    1: ("even", EVEN),
    -1: ("odd", ODD),
    0: ("no parity", NO_PARITY),
}


def family_stroke(number: int) -> Stroke:
    """Return the look of curve `number` (from 0) of a family."""
    place = number % len(FAMILY_SYMBOLS)
    return Stroke(f"family-{place + 1}", "solid", 2.0, FAMILY_SYMBOLS[place])


def curve(
    x: list[float | None], y: list[float | None], stroke: Stroke, axis: str, name: str
) -> dict[str, Any]:
    """Return a trace: one curve, or several joined with gaps (None), on a panel's axis.

    A family's curves carry a few markers each, so that colour is never alone.
    """
    trace: dict[str, Any] = {
        "type": "scatter",
        "mode": "lines",
        "x": x,
        "y": y,
        "xaxis": "x",
        "yaxis": axis,
        "line": stroke.line(),
        "name": name,
        "hoverinfo": "skip",
        "connectgaps": False,
    }
    if stroke.symbol is not None:
        trace["mode"] = "lines+markers"
        trace["marker"] = {
            "symbol": stroke.symbol,
            "size": 7,
            "maxdisplayed": MOST_MARKED.get(stroke.dash, 4),
            "color": f"token:{stroke.token}",
        }
    elif sum(value is not None for value in y) == 1:
        trace["mode"] = "lines+markers"
        trace["marker"] = {"size": 5, "color": f"token:{stroke.token}"}
    return trace


def band(
    x: list[float | None], y: list[float | None], stroke: Stroke, axis: str, name: str
) -> dict[str, Any]:
    """Return a trace that fills closed outlines (joined with None) with the curve's colour, translucent."""
    return {
        "type": "scatter",
        "mode": "lines",
        "x": x,
        "y": y,
        "xaxis": "x",
        "yaxis": axis,
        "line": {"width": 0},
        "fill": "toself",
        "fillcolor": f"token:{stroke.token}/0.22",
        "name": name,
        "hoverinfo": "skip",
    }


def marks(x: list[float], y: list[float], axis: str) -> dict[str, Any]:
    """Return rings around points that are not yet good to the tolerance."""
    return {
        "type": "scatter",
        "mode": "markers",
        "x": x,
        "y": y,
        "xaxis": "x",
        "yaxis": axis,
        "marker": {
            "symbol": "circle-open",
            "size": 10,
            "color": "token:warning",
            "line": {"width": 1.6, "color": "token:warning"},
        },
        "name": "not yet within tol",
        "hoverinfo": "skip",
    }


def vertical_axis(
    title: str, domain: tuple[float, float], *, revision: str, limits: tuple[float, float] | None = None
) -> dict[str, Any]:
    """Return a panel's vertical axis; without `limits` it fits the curves."""
    axis: dict[str, Any] = {
        "domain": list(domain),
        "anchor": "x",
        "title": {"text": title, "font": {"size": "token:size-axis", "color": "token:ink"}, "standoff": 8},
        "tickfont": {"size": "token:size-tick", "color": "token:ink"},
        "nticks": 6,
        "showgrid": True,
        "gridcolor": "token:hairline",
        "gridwidth": 1,
        "zeroline": False,
        "showline": True,
        "linecolor": "token:rule",
        "linewidth": 1,
        "ticks": "outside",
        "ticklen": 4,
        "tickcolor": "token:rule",
        "exponentformat": "power",
        "uirevision": revision,
        "fixedrange": False,
        **PLACED,
    }
    if limits is not None:
        axis["range"] = list(limits)
        axis["autorange"] = False
    return axis


def horizontal_axis(title: str, limits: tuple[float, float], anchor: str, *, revision: str) -> dict[str, Any]:
    """Return the axis that all panels share; it stands below the last one."""
    return {
        "domain": [0.0, 1.0],
        "anchor": anchor,
        "range": list(limits),
        "autorange": False,
        "title": {"text": title, "font": {"size": "token:size-axis", "color": "token:ink"}, "standoff": 10},
        "tickfont": {"size": "token:size-tick", "color": "token:ink"},
        "showgrid": True,
        "gridcolor": "token:hairline",
        "zeroline": False,
        "showline": True,
        "mirror": "all",
        "linecolor": "token:rule",
        "ticks": "outside",
        "ticklen": 5,
        "tickcolor": "token:rule",
        "exponentformat": "power",
        "uirevision": revision,
        **PLACED,
    }
