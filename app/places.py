"""A place: one point of a sweep, looked at closely.

It keeps the whole sheet, so that the way back and the neighbours are known, and pins `at`.
"""

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any, Self

from app.errors import SheetError
from app.keys import SWEPT, Key
from app.plan import axis_values
from app.sheets import Sheet
from solver import STATE_NAMES, StateName

MEMBER = Key("member", "real", None, "value of 'each' at this point; the first one when left out")
STATE = Key(
    "state",
    "choice",
    "ground",
    "ground state, or a symmetry-broken state of its doublet",
    choices=STATE_NAMES,
)


@dataclass(frozen=True)
class Place:
    """One point of a sheet: the value `at` of its axis, of its family, and the state that is drawn."""

    sheet: Sheet
    at: float
    member: float | None
    state: StateName

    @property
    def neighbours(self) -> tuple[float | None, float | None]:
        """The points of the sweep just below and just above, None at its ends."""
        axis = axis_values(self.sheet)
        below = max((x for x in axis if x < self.at), default=None)
        above = min((x for x in axis if x > self.at), default=None)
        return below, above

    @property
    def number(self) -> int | None:
        """Number of the point on its curve, None when it lies between the points of the sweep."""
        axis = axis_values(self.sheet)
        return axis.index(self.at) if self.at in axis else None

    @property
    def curve(self) -> int:
        """Number of its curve in the family."""
        return 0 if self.sheet.each is None else self.sheet.each.values.index(self.member or 0.0)

    def values(self) -> dict[str, float]:
        """Return the values of what the sweep varies."""
        found = {self.sheet.along: self.at}
        if self.sheet.each is not None and self.member is not None:
            found[self.sheet.each.name] = self.member
        return found

    def moved(self, at: float) -> Self:
        """Return another point of the same curve."""
        return replace(self, sheet=self.sheet.changed(at=at), at=at)

    def other(self, **parts: Any) -> Self:
        """Return the same point for another `member` or `state`."""
        return replace(self, **parts)

    def options(self) -> dict[str, Any]:
        """Return the keys that a sweep does not have and that are not at their default."""
        options: dict[str, Any] = {}
        if self.sheet.each is not None and self.member != self.sheet.each.values[0]:
            options[MEMBER.name] = self.member
        if self.state != STATE.default:
            options[STATE.name] = self.state
        return options


def place_of(sheet: Sheet, options: Mapping[str, Any]) -> Place:
    """Return the place that a sheet and its options name; raise SheetError."""
    key = SWEPT[sheet.along]
    if sheet.at is None:
        raise SheetError(
            "no-place",
            f"say at which value of '{sheet.along}' the point lies: at=value",
            "at",
            None,
            key.allowed,
        )
    try:
        at = key.checked(sheet.at)
    except SheetError as error:
        raise SheetError(
            error.code,
            f"'at' is not a value that '{sheet.along}' can take: {error.message}",
            "at",
            sheet.at,
            error.allowed,
        ) from None
    return Place(
        sheet, at, _member(sheet, options.get(MEMBER.name)), options.get(STATE.name) or STATE.default
    )


def _member(sheet: Sheet, member: float | None) -> float | None:
    if sheet.each is None:
        if member is not None:
            raise SheetError(
                "no-family", "'member' needs a family of curves: 'each'", MEMBER.name, member, "left out"
            )
        return None
    if member is not None and member not in sheet.each.values:
        raise SheetError(
            "not-a-member",
            "'member' is not one of the values of 'each'",
            MEMBER.name,
            member,
            ", ".join(str(value) for value in sheet.each.values),
        )
    return sheet.each.values[0] if member is None else member
