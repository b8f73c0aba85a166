"""The question of a map: a sheet, a second swept quantity, and what is drawn of it."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Self

from app import second_axis
from app.errors import SheetError
from app.keys import KEYS, Key, canonical_json, nearest_name
from app.sheets import Sheet, most_points
from solver import SERIES

DEFAULT_POINTS = 61
DEFAULT_ROWS = 61
DEFAULT_LEVELS = 2

_BOUNDS = {spec.error_key for spec in SERIES}
# what has one number at each point; the ground level stands for the energies, "error" for their brackets
SHOWN: dict[str, str] = {
    "gap": "gap",
    "gap-any": "gap_any",
    "energy": "energy",
    **{
        spec.key.replace("_", "-"): spec.key
        for spec in SERIES
        if spec.kind in {"number", "integer"} and spec.key not in _BOUNDS | {"gap", "gap_any"}
    },
    "error": "error",
}

_ORDERED = (
    *second_axis.SECOND_AXIS_KEYS,
    Key(
        "every",
        "choice",
        "adaptive",
        "cells computed: those where the quantities bend, or all",
        choices=("adaptive", "all"),
    ),
    Key("show", "choice", "gap", "quantity drawn", choices=tuple(SHOWN), view=True),
    Key(
        "scale",
        "choice",
        "linear",
        "steps of the colour scale; symmetric has zero in its middle",
        choices=("linear", "log", "symmetric"),
        view=True,
    ),
    Key("shades", "interval", None, "values at the ends of the colour scale", view=True),
    Key("contours", "numbers", None, "values at which lines are drawn", view=True),
)
MAP_OWN_KEYS: dict[str, Key] = {key.name: key for key in _ORDERED}


@dataclass(frozen=True)
class MapSheet:
    """A validated map; `own` holds MAP_OWN_KEYS with their defaults filled in.

    A map has fewer points and levels than a sweep when it does not say how many. Build one with `of`.
    """

    sheet: Sheet
    own: tuple[tuple[str, Any], ...]

    @classmethod
    def of(cls, given: Mapping[str, Any]) -> Self:
        """Return the map for keys of a sheet and its own; raise SheetError."""
        for name, value in given.items():
            if name != "v" and name not in KEYS and name not in MAP_OWN_KEYS:
                raise SheetError(
                    "unknown-key",
                    f"'{name[:60]}' is not a key of a map{nearest_name(name, [*KEYS, *MAP_OWN_KEYS])}",
                    name,
                    value,
                    ", ".join([*KEYS, *MAP_OWN_KEYS]),
                )
        sheet = _sheet({k: v for k, v in given.items() if k not in MAP_OWN_KEYS})
        own = {k: MAP_OWN_KEYS[k].checked(v) for k, v in given.items() if k in MAP_OWN_KEYS and v is not None}
        filled = {name: own.get(name, key.default) for name, key in MAP_OWN_KEYS.items()}
        filled["across"] = filled["across"] or default_across(sheet.along)
        second_axis.fill(filled, sheet, DEFAULT_ROWS)
        _check_scale(filled)
        return cls(sheet, tuple((k, tuple(v) if isinstance(v, list) else v) for k, v in filled.items()))

    @classmethod
    def of_sweep(cls, sheet: Sheet) -> Self:
        """Return the map that a sweep leads to: its model and axis, over a second quantity."""
        dropped = {"each", "points", "levels", "at", "zoom"}
        return cls.of({name: value for name, value in sheet.explicit().items() if name not in dropped})

    def __getitem__(self, name: str) -> Any:
        """Return the value of a key of the map itself."""
        return dict(self.own)[name]

    @property
    def rows(self) -> tuple[float, ...]:
        """Values of the second quantity."""
        return second_axis.axis_values(*(self[name] for name in ("across", "low", "high", "rows")))

    @property
    def total(self) -> int:
        """Number of cells."""
        return int(self["rows"]) * self.sheet.points

    @property
    def spins(self) -> int:
        """Number of spins where it is fixed."""
        return self.sheet.spins

    def data(self) -> dict[str, Any]:
        """Return all keys, those of the sheet first, defaults filled, as JSON-able data."""
        own: dict[str, Any] = {k: list(v) if isinstance(v, tuple) else v for k, v in self.own}
        if own["across"] == "spins":
            own |= {name: int(own[name]) for name in ("low", "high")}
        return self.sheet.data() | own

    def explicit_sheet(self) -> dict[str, Any]:
        """Return the keys of the sheet whose values differ from their defaults in a map, in order."""
        data = self.sheet.data()
        usual = {"levels": DEFAULT_LEVELS, "points": usual_points(self.sheet)}
        kept = self.sheet.explicit() | {name: data[name] for name in usual}
        return {k: kept[k] for k in KEYS if k in kept and kept[k] != usual.get(k)}

    def explicit_own(self) -> dict[str, Any]:
        """Return the map's own keys whose values differ from their defaults, in the order of the grammar."""
        data = self.data()
        defaults = {name: key.default for name, key in MAP_OWN_KEYS.items()}
        defaults["across"] = default_across(self.sheet.along)
        defaults |= second_axis.explicit_defaults(self.sheet, data, DEFAULT_ROWS)
        return {k: data[k] for k in MAP_OWN_KEYS if data[k] is not None and data[k] != defaults[k]}

    def computation_key(self) -> str:
        """Return canonical JSON of what the numbers depend on."""
        own = {name: value for name, value in self.data().items() if name in MAP_OWN_KEYS}
        numbers = self.sheet.numbers(frozenset({self.sheet.along, self["across"]}))
        return canonical_json(
            {"page": "map"} | numbers | {k: v for k, v in own.items() if not MAP_OWN_KEYS[k].view}
        )


def default_across(along: str) -> str:
    """Return the second quantity of a map that does not name one."""
    return "detuning" if along in {"coupling", "coupling-over-critical"} else "coupling"


def usual_points(sheet: Sheet) -> int:
    """Return the number of points along the axis of a map that does not say how many."""
    if sheet.along != "spins":
        return DEFAULT_POINTS
    return min(DEFAULT_POINTS, most_points(sheet.along, sheet.start, sheet.stop))


def _sheet(given: Mapping[str, Any]) -> Sheet:
    """Return the sheet of a map, with the number of levels and points that are usual for maps."""
    if given.get("each") is not None:
        raise SheetError(
            "map-or-family",
            "a map has no family of curves: leave out 'each'",
            "each",
            given["each"],
            "left out",
        )
    with_levels = {"levels": DEFAULT_LEVELS} | {k: v for k, v in given.items() if v is not None}
    sheet = Sheet.model_validate(with_levels)
    if "points" in with_levels:
        return sheet
    return Sheet.model_validate(with_levels | {"points": usual_points(sheet)})


def _check_scale(filled: Mapping[str, Any]) -> None:
    """Refuse ends and lines that a colour scale cannot have."""
    shades, contours = filled["shades"], filled["contours"]
    if filled["scale"] == "log":
        for name, values in (("shades", shades), ("contours", contours)):
            if values is not None and min(values) <= 0.0:
                raise SheetError(
                    "not-positive",
                    f"a logarithmic scale has no place for values of '{name}' that are not positive",
                    name,
                    list(values),
                    "numbers above 0, or scale=linear",
                )
    if filled["scale"] == "symmetric" and shades is not None and shades[0] != -shades[1]:
        raise SheetError(
            "not-symmetric",
            "a symmetric scale ends at -x and x: give 'shades' so, or leave them out",
            "shades",
            list(shades),
            "-x:x",
        )
