"""The second swept quantity of a map: its keys, its range and its values."""

from collections.abc import Mapping
from typing import Any

from app.errors import SheetError
from app.keys import SWEPT, Key, number_text
from app.sheets import SAME_QUANTITY, Sheet, default_range, most_points

MOST_POINTS = 40_000

SECOND_AXIS_KEYS = (
    Key("across", "choice", None, "second swept quantity: a map", choices=tuple(SWEPT)),
    Key("low", "real", None, "first value of the second swept quantity"),
    Key("high", "real", None, "last value of the second swept quantity"),
    Key("rows", "integer", None, "number of values of the second swept quantity", low=2, high=2001),
)


def axis_values(name: str, low: float, high: float, count: int) -> tuple[float, ...]:
    """Return the values of the second axis, both ends exact, whole numbers for spins."""
    last = count - 1
    if name == "spins":
        return tuple((int(low) * (last - i) + int(high) * i + last // 2) // last for i in range(count))
    return (low, *((low * (last - i) + high * i) / last for i in range(1, last)), high)


def default_rows(across: str, low: float, high: float, usual: int) -> int:
    """Return the number of values that the second axis gets when it is left out, `usual` where they fit."""
    return min(usual, most_points(across, low, high)) if across == "spins" else usual


def ends(sheet: Sheet, across: str) -> tuple[float, float]:
    """Return the range that the second axis gets when it is left out."""
    return default_range(sheet.data() | {"along": across})


def fill(filled: dict[str, Any], sheet: Sheet, usual_rows: int) -> None:
    """Fill in and check the second axis of a map; raise SheetError. Without `across` nothing is done."""
    across = filled["across"]
    if across is None:
        return
    if sheet.each is not None:
        raise SheetError(
            "map-or-family",
            "a map has no family of curves: leave out 'each' or 'across'",
            "each",
            sheet.each.name,
            "left out",
        )
    if across == sheet.along or any({across, sheet.along} <= group for group in SAME_QUANTITY):
        raise SheetError(
            "same-quantity",
            f"'across' varies '{across}', which the axis '{sheet.along}' sets already; choose another",
            "across",
            across,
            ", ".join(other for other in SWEPT if other != sheet.along),
        )
    if across == "coupling-over-critical" and sheet.along not in {"splitting", "detuning", "mode"}:
        # the same check that a swept multiple gets
        sheet.changed(along=across, start=None, stop=None, points=None, zoom=None, at=None)
    for name, default in zip(("low", "high"), ends(sheet, across), strict=True):
        value = default if filled[name] is None else filled[name]
        try:
            filled[name] = SWEPT[across].checked(value)
        except SheetError as error:
            raise SheetError(
                error.code,
                f"'{name}' is not a value that '{across}' can take: {error.message}",
                name,
                value,
                error.allowed,
            ) from None
    _check_rows(filled, sheet, usual_rows)


def _check_rows(filled: dict[str, Any], sheet: Sheet, usual_rows: int) -> None:
    across, low, high = filled["across"], filled["low"], filled["high"]
    if not low < high:
        raise SheetError(
            "empty-range",
            f"the second axis is empty: 'high' ({high:g}) must be above 'low' ({low:g})",
            "high",
            high,
            f"above {number_text(low)}",
        )
    if filled["rows"] is None:
        filled["rows"] = default_rows(across, low, high, usual_rows)
    most = min(most_points(across, low, high), MOST_POINTS // sheet.points)
    if filled["rows"] > most:
        raise SheetError(
            "too-many-points",
            f"{filled['rows']} rows of {sheet.points} points are too many: a map has at most {MOST_POINTS} "
            "points, and each value of the second axis once",
            "rows",
            filled["rows"],
            f"2 to {most}",
        )


def explicit_defaults(sheet: Sheet, values: Mapping[str, Any], usual_rows: int) -> dict[str, Any]:
    """Return the defaults of `low`, `high` and `rows` of a second axis that is there."""
    low, high = ends(sheet, values["across"])
    rows = default_rows(values["across"], values["low"], values["high"], usual_rows)
    return {"low": low, "high": high, "rows": rows}
