"""From a cell of a map to its row or column as a sweep, and to the page of its point."""

from app.map_sheets import MapSheet
from app.places import Place, place_of
from app.sheets import SAME_QUANTITY, Sheet


def row_of(question: MapSheet, y: float, at: float | None = None) -> Sheet:
    """Return the sweep along one row of a map."""
    return _held(question.sheet, question["across"], y).changed(at=at, zoom=None)


def column_of(question: MapSheet, x: float, at: float | None = None) -> Sheet:
    """Return the sweep along one column of a map: the second quantity varies, the first one is held."""
    turned = question.sheet.explicit() | {
        "along": question["across"],
        "from": question["low"],
        "to": question["high"],
        "points": question["rows"],
    }
    # the first quantity is held at a value of its own, below
    for name in ("at", "zoom", *_same(question.sheet.along), *_same(question["across"])):
        turned.pop(name, None)
    return _held(Sheet.model_validate(turned), question.sheet.along, x).changed(at=at)


def place_in(question: MapSheet, x: float, y: float) -> Place:
    """Return the point of a cell, as one of its row."""
    return place_of(row_of(question, y, at=x), {})


def _held(sheet: Sheet, name: str, value: float) -> Sheet:
    """Return a sheet with a swept quantity held at a value."""
    kept = sheet.explicit() | {"from": sheet.start, "to": sheet.stop, "points": sheet.points}
    if name == "coupling-over-critical":
        # a multiple of what may vary along the axis: one curve of a family
        return Sheet.model_validate(kept | {"each": {"name": name, "values": [value]}})
    # the ends stay where they are, even if they are those that the held value would not lead to
    return Sheet.model_validate({k: v for k, v in kept.items() if k not in _same(name)} | {name: value})


def _same(name: str) -> frozenset[str]:
    """Return the fixed quantities that say the same as one that is swept."""
    group = next((group for group in SAME_QUANTITY if name in group), frozenset({name}))
    return group - {"coupling-over-critical"}
