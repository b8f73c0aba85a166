"""The question of the cutoff desk: a sheet, what the asker's own calculation must reach, and what it keeps.

A cutoff M keeps the number states n = 0..M of the undisplaced mode, and all of the spin.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Self

from app import second_axis
from app.errors import SheetError
from app.keys import KEYS, Key, canonical_json, nearest_name
from app.sheets import Sheet

QUANTITIES = ("energies", "gap", "boson_number", "order_parameter", "tail")
THERMAL_QUANTITIES = ("boson_number", "order_parameter", "tail")
DEFAULT_ROWS = 21

_ORDERED = (
    *second_axis.SECOND_AXIS_KEYS,
    Key("asked", "names", None, "quantities that your calculation must give", choices=QUANTITIES),
    Key("need-gap", "real", 1e-3, "error your gap may have, in units of mode", low=1e-9, high=0.9),
    Key("need-bosons", "real", 1e-2, "error your boson number may have, in quanta", low=1e-9, high=100.0),
    Key("need-order", "real", 1e-3, "error your order parameter may have", low=1e-9, high=0.9),
    Key("stated", "integer", None, "a cutoff you have: largest n kept", low=0, high=100_000),
    Key(
        "ensemble",
        "choice",
        "lowest",
        "state of the calculation: lowest levels, or thermal equilibrium of the collective spin or of "
        "distinguishable spins",
        choices=("lowest", "collective", "distinguishable"),
    ),
    Key("temperature", "real", None, "k_B T / hbar in the unit of the inputs", low=1e-6, high=1e6),
    Key("quanta", "real", None, "mean boson number of the bare mode, in place of a temperature", 1e-6, 1e4),
    Key(
        "start",
        "choice",
        "none",
        "state of the mode when the model is switched on",
        choices=("none", "thermal", "fock", "coherent"),
    ),
    Key("start-quanta", "real", 1.0, "mean boson number of that state", low=0.0, high=1e3),
    Key("start-periods", "real", 3.0, "mode periods that are followed", low=0.0, high=100.0),
)
CUTOFF_KEYS: dict[str, Key] = {key.name: key for key in _ORDERED}
# only with another key do these mean anything: leaving that one out, they are errors
_NEEDS = {
    "low": "across",
    "high": "across",
    "rows": "across",
    "start-quanta": "start",
    "start-periods": "start",
}


@dataclass(frozen=True)
class CutoffSheet:
    """A validated question of the cutoff desk; `own` holds CUTOFF_KEYS with their defaults filled in.

    Build one with `of`.
    """

    sheet: Sheet
    own: tuple[tuple[str, Any], ...]

    @classmethod
    def of(cls, given: Mapping[str, Any]) -> Self:
        """Return the question for keys of a sheet and of the desk; raise SheetError."""
        for name, value in given.items():
            if name != "v" and name not in KEYS and name not in CUTOFF_KEYS:
                known = nearest_name(name, [*KEYS, *CUTOFF_KEYS])
                raise SheetError(
                    "unknown-key",
                    f"'{name[:60]}' is not a key of a cutoff question{known}",
                    name,
                    value,
                    ", ".join([*KEYS, *CUTOFF_KEYS]),
                )
        sheet = Sheet.model_validate({k: v for k, v in given.items() if k not in CUTOFF_KEYS})
        own = {k: CUTOFF_KEYS[k].checked(v) for k, v in given.items() if k in CUTOFF_KEYS and v is not None}
        filled = {name: own.get(name, key.default) for name, key in CUTOFF_KEYS.items()}
        _check_company(own)
        _fill_asked(filled)
        _check_temperature(filled)
        _check_start(filled)
        second_axis.fill(filled, sheet, DEFAULT_ROWS)
        return cls(sheet, tuple((k, tuple(v) if isinstance(v, list) else v) for k, v in filled.items()))

    def __getitem__(self, name: str) -> Any:
        """Return the value of a key of the desk."""
        return dict(self.own)[name]

    @property
    def asked(self) -> tuple[str, ...]:
        """The quantities judged."""
        return tuple(self["asked"])

    @property
    def curves(self) -> tuple[float | None, ...]:
        """Values that tell the curves, or the rows of a map, apart; None alone for a single curve."""
        if self["across"] is not None:
            return across_values(self)
        return self.sheet.each.values if self.sheet.each else (None,)

    @property
    def second(self) -> str | None:
        """Name of the second quantity that varies: of a map, or of a family."""
        across: str | None = self["across"]
        return across or (self.sheet.each.name if self.sheet.each else None)

    @property
    def total(self) -> int:
        """Number of points of all curves or rows."""
        return int(self["rows"]) * self.sheet.points if self["across"] is not None else self.sheet.total

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

    def explicit_own(self) -> dict[str, Any]:
        """Return the desk's keys whose values differ from their defaults, in the order of the grammar."""
        data = self.data()
        defaults = {name: key.default for name, key in CUTOFF_KEYS.items()}
        defaults["asked"] = list(_judged(data["ensemble"]))
        if data["across"] is not None:
            defaults |= second_axis.explicit_defaults(self.sheet, data, DEFAULT_ROWS)
        return {k: data[k] for k in CUTOFF_KEYS if data[k] is not None and data[k] != defaults[k]}

    def computation_key(self) -> str:
        """Return canonical JSON of what the numbers depend on."""
        own = {
            name: value for name, value in self.data().items() if name in CUTOFF_KEYS and value is not None
        }
        needs = {
            "energies": "need",
            "gap": "need-gap",
            "boson_number": "need-bosons",
            "order_parameter": "need-order",
        }
        unused = {key for quantity, key in needs.items() if quantity not in self.asked}
        if self["start"] == "none":
            unused |= {"start-quanta", "start-periods"}
            if "tail" not in self.asked:
                unused.add("tail")
        if self["ensemble"] != "lowest":
            unused.add("levels")
        varied = self.sheet.swept | ({self["across"]} if self["across"] else set())
        # brackets of levels are not asked here
        numbers = {k: v for k, v in self.sheet.numbers(varied).items() if k != "tol"}
        return canonical_json(
            {k: v for k, v in ({"page": "cutoff"} | numbers | own).items() if k not in unused}
        )


def across_values(question: CutoffSheet) -> tuple[float, ...]:
    """Return the values of the second axis of a map, both ends exact, whole numbers for spins."""
    return second_axis.axis_values(*(question[name] for name in ("across", "low", "high", "rows")))


def _judged(ensemble: str) -> tuple[str, ...]:
    return QUANTITIES if ensemble == "lowest" else THERMAL_QUANTITIES


def _check_company(own: Mapping[str, Any]) -> None:
    """Refuse keys that mean nothing without another one."""
    for name, needed in _NEEDS.items():
        given = own.get(name, CUTOFF_KEYS[name].default) != CUTOFF_KEYS[name].default
        if given and own.get(needed) in {None, "none"}:
            raise SheetError(
                "needs-another",
                f"'{name}' means nothing without '{needed}'",
                name,
                own[name],
                f"left out, or together with '{needed}'",
            )


def _fill_asked(filled: dict[str, Any]) -> None:
    """Fill in what is judged; thermal equilibrium has no single levels to judge."""
    known = _judged(filled["ensemble"])
    if filled["asked"] is None:
        filled["asked"] = list(known)
    for name in filled["asked"]:
        if name not in known:
            raise SheetError(
                "not-judged",
                f"in thermal equilibrium '{name}' is not judged; leave it out of 'asked'",
                "asked",
                name,
                ", ".join(known),
            )


def _check_temperature(filled: Mapping[str, Any]) -> None:
    given = [name for name in ("temperature", "quanta") if filled[name] is not None]
    if filled["ensemble"] == "lowest" and given:
        raise SheetError(
            "no-ensemble",
            f"'{given[0]}' is for thermal equilibrium: say which with 'ensemble'",
            given[0],
            filled[given[0]],
            "left out, or with ensemble=collective or ensemble=distinguishable",
        )
    if filled["ensemble"] != "lowest" and len(given) != 1:
        raise SheetError(
            "both-given" if given else "no-temperature",
            "thermal equilibrium needs either 'temperature' or 'quanta' (mean boson number of the bare mode)"
            + (", not both" if given else ""),
            "quanta" if given else "temperature",
            filled["quanta"],
            "one of the two",
        )


def _check_start(filled: Mapping[str, Any]) -> None:
    quanta = filled["start-quanta"]
    if filled["start"] == "fock" and not float(quanta).is_integer():
        raise SheetError(
            "not-a-whole-number",
            "a number state has a whole number of quanta: change 'start-quanta'",
            "start-quanta",
            quanta,
            "whole number, 0 to 1000",
        )
