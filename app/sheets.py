"""The sheet: one validated question, the same whether it came by link, form, body or command line."""

import sys
from collections.abc import Mapping
from typing import Any, Self

from pydantic import BaseModel, ConfigDict, Field, model_validator

from app.errors import SheetError
from app.keys import GRAMMAR_VERSION, KEYS, MAP_KEYS, SWEPT, canonical_json, nearest_name
from solver import CollectiveModel

# quantities that say the same thing in two ways: no two of one group can vary in the same sheet
SAME_QUANTITY = (frozenset({"splitting", "detuning"}), frozenset({"coupling", "coupling-over-critical"}))


class Family(BaseModel):
    """A family of curves: the quantity that tells them apart, and its values."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    name: str
    values: tuple[float, ...]


class Sheet(BaseModel):
    """A validated question: a model, what is swept, what is asked, and how it is shown.

    Frequencies share one unit; `tol` and `need` are in units of `mode`, `tail` is a weight. Exactly one
    of `splitting` and `detuning` is set. `start` and `stop` are the link's `from` and `to`. Building one
    raises SheetError for anything that is not allowed.
    """

    model_config = ConfigDict(frozen=True, extra="forbid", populate_by_name=True)

    spins: int
    mode: float
    splitting: float | None
    detuning: float | None
    coupling: float
    ratio: float
    bias: float
    along: str
    start: float = Field(alias="from")
    stop: float = Field(alias="to")
    points: int
    each: Family | None
    levels: int
    tol: float
    need: float
    tail: float
    unit: str
    frame: str
    title: str
    note: str
    energies: str
    bosons: str
    overlay: str
    at: float | None
    zoom: tuple[float, float] | None

    @model_validator(mode="before")
    @classmethod
    def _complete(cls, data: Any) -> dict[str, Any]:
        """Check every given key, then fill in the others."""
        if not isinstance(data, Mapping):
            raise SheetError(
                "wrong-type", "a sheet is an object of keys and values", "sheet", data, "an object"
            )
        given = dict(data)
        _check_names(given)
        given.pop("v", None)
        checked = {name: KEYS[name].checked(value) for name, value in given.items() if value is not None}
        return _filled(checked)

    @property
    def working_splitting(self) -> float:
        """Spin frequency at the fixed values: `splitting`, or `mode` plus `detuning`."""
        return self.mode + self.detuning if self.detuning is not None else self.splitting or 0.0

    @property
    def critical_coupling(self) -> float:
        """Critical coupling at the fixed values."""
        return critical_coupling(self.mode, self.working_splitting, self.ratio)

    @property
    def swept(self) -> frozenset[str]:
        """Names of the quantities that vary: `along`, and the name of `each`."""
        return frozenset({self.along} | ({self.each.name} if self.each else set()))

    @property
    def total(self) -> int:
        """Number of points of all curves."""
        return self.points * (len(self.each.values) if self.each else 1)

    def data(self) -> dict[str, Any]:
        """Return all keys in the order of the grammar, defaults filled, as JSON-able data."""
        dumped = self.model_dump(mode="json", by_alias=True)
        for name in ("from", "to"):
            dumped[name] = int(dumped[name]) if self.along == "spins" else dumped[name]
        if self.each and self.each.name == "spins":
            dumped["each"]["values"] = [int(value) for value in self.each.values]
        return {name: dumped[name] for name in KEYS}

    def explicit(self) -> dict[str, Any]:
        """Return only the keys whose values differ from their defaults, in the order of the grammar."""
        data = self.data()
        defaults = {name: key.default for name, key in KEYS.items()}
        defaults["from"], defaults["to"] = default_range(data)
        defaults["points"] = default_points(self.along, self.start, self.stop)
        return {k: v for k, v in data.items() if v is not None and v != defaults[k]}

    def changed(self, **keys: Any) -> Self:
        """Return a new sheet with some keys changed (None: back to the default); "from" is `start` here.

        Defaults that depend on other keys, such as the range of the axis, follow.
        """
        names = {"start": "from", "stop": "to"}
        kept = self.explicit() | {names.get(name, name): value for name, value in keys.items()}
        return self.__class__.model_validate(kept)

    def computation_key(self) -> str:
        """Return canonical JSON of what the numbers depend on."""
        return canonical_json(self.numbers(self.swept))

    def numbers(self, varied: frozenset[str]) -> dict[str, Any]:
        """Return the keys that numbers depend on while `varied` vary: no view keys, no overridden values."""
        hidden = set(varied)
        for group in SAME_QUANTITY:
            hidden |= group if group & varied else set()
        return {
            k: v for k, v in self.data().items() if v is not None and not KEYS[k].view and k not in hidden
        }


def critical_coupling(mode: float, splitting: float, ratio: float) -> float:
    """Return the critical coupling, in the unit of `mode`, for any strength of the coupling itself."""
    return CollectiveModel(
        spins=1, mode=mode, splitting=splitting, rotating=1.0, counter=ratio
    ).critical_coupling


def default_range(given: Mapping[str, Any]) -> tuple[float, float]:
    """Return the range that the axis gets when a sheet leaves it out; fixed values must be filled in."""
    mode, along = given["mode"], given["along"]
    splitting = mode + given["detuning"] if given["detuning"] is not None else given["splitting"]
    if along == "coupling":
        ends = (0.0, 1.5 * (critical_coupling(mode, splitting, given["ratio"]) or mode))
    elif along == "spins":
        return 1, max(2, given["spins"])
    else:
        ends = {
            "detuning": (-mode, mode),
            "splitting": (0.0, 2.0 * mode),
            "mode": (0.5 * mode, 1.5 * mode),
            "ratio": (0.0, 1.0),
            "bias": (0.0, mode),
            "coupling-over-critical": (0.0, 1.5),
        }[along]
    key = SWEPT[along]
    return max(key.low, ends[0]), min(key.high, ends[1])


def _check_names(given: Mapping[Any, Any]) -> None:
    """Refuse keys that are not of this grammar."""
    for name in given:
        if name in MAP_KEYS:
            raise SheetError(
                "one-axis-only",
                f"a sweep has one axis: leave out '{name}', or draw a family of curves with 'each'",
                name,
                given[name],
                "left out",
            )
        if name != "v" and name not in KEYS:
            raise SheetError(
                "unknown-key",
                f"'{str(name)[:60]}' is not a key of a sweep{nearest_name(str(name), KEYS)}",
                str(name),
                given[name],
                ", ".join(KEYS),
            )
    version = given.get("v", GRAMMAR_VERSION)
    if version != GRAMMAR_VERSION or isinstance(version, bool):
        raise SheetError(
            "unknown-version",
            "this server reads version 1 of the link grammar",
            "v",
            version,
            str(GRAMMAR_VERSION),
        )


def _filled(given: dict[str, Any]) -> dict[str, Any]:
    """Return all keys: those given, and the defaults of the others; raise SheetError where they clash."""
    if "splitting" in given and "detuning" in given:
        raise SheetError(
            "both-given",
            "give either 'splitting' or 'detuning' (splitting minus mode), not both",
            "detuning",
            given["detuning"],
            "left out when 'splitting' is given",
        )
    filled = {name: given.get(name, key.default) for name, key in KEYS.items()}
    if filled["detuning"] is not None:
        filled["splitting"] = None
    _check_family(filled)
    _check_critical(filled)
    _fill_axis(filled, given)
    return filled


def _check_critical(filled: Mapping[str, Any]) -> None:
    """Refuse multiples of a critical coupling that is zero everywhere."""
    family = filled["each"] or {"name": "", "values": []}
    names = {filled["along"], family["name"]}
    if "coupling-over-critical" not in names or filled["along"] in {"splitting", "detuning", "mode"}:
        return
    if family["name"] in {"splitting", "detuning", "mode"}:
        bases = [{**filled, family["name"]: value} for value in family["values"]]
        if family["name"] == "splitting":
            bases = [{**base, "detuning": None} for base in bases]
    else:
        bases = [dict(filled)]
    for base in bases:
        splitting = base["splitting"] if base["detuning"] is None else base["mode"] + base["detuning"]
        if splitting == 0.0:
            raise SheetError(
                "no-critical-coupling",
                "the critical coupling is 0 where the spin frequency is 0: sweep 'coupling' instead, "
                "or choose another splitting",
                "along" if filled["along"] == "coupling-over-critical" else "each",
                "coupling-over-critical",
                "a splitting other than 0",
            )


def _check_family(filled: Mapping[str, Any]) -> None:
    """Refuse a family of curves that varies the same quantity as the axis."""
    if filled["each"] is None:
        return
    name, along = filled["each"]["name"], filled["along"]
    if name == along or any({name, along} <= group for group in SAME_QUANTITY):
        raise SheetError(
            "same-quantity",
            f"'each' varies '{name}', which the axis '{along}' sets already; choose another quantity",
            "each",
            name,
            ", ".join(other for other in SWEPT if other != along),
        )


def _fill_axis(filled: dict[str, Any], given: Mapping[str, Any]) -> None:
    """Fill in and check the range and the number of points of the axis."""
    along = filled["along"]
    low, high = default_range(filled)
    key = SWEPT[along]
    for name, default in (("from", low), ("to", high)):
        value = given.get(name, default)
        try:
            filled[name] = key.checked(value)
        except SheetError as error:
            raise SheetError(
                error.code,
                f"'{name}' is not a value that '{along}' can take: {error.message}",
                name,
                value,
                error.allowed,
            ) from None
    start, stop = filled["from"], filled["to"]
    if not start < stop:
        raise SheetError(
            "empty-range",
            f"the axis is empty: 'to' ({stop:g}) must be above 'from' ({start:g})",
            "to" if "to" in given or "from" not in given else "from",
            stop if "to" in given else start,
            f"'from' below 'to', both {key.allowed}",
        )
    most = most_points(along, start, stop)
    filled["points"] = given.get("points", default_points(along, start, stop))
    if filled["points"] > most:
        raise SheetError(
            "too-many-points",
            f"there are only {most} different values between 'from' and 'to'",
            "points",
            filled["points"],
            f"2 to {max(most, 2)}",
        )


def most_points(along: str, start: float, stop: float) -> int:
    """Return how many different values an axis has room for, at most as many as a sheet may ask."""
    if along == "spins":
        room = stop - start + 1
    else:
        # below the smallest normal number there is no room
        room = (stop - start) / max(2.0**-49 * max(abs(start), abs(stop)), sys.float_info.min)
    return int(min(room, KEYS["points"].high))


def default_points(along: str, start: float, stop: float) -> int:
    """Return the number of points that an axis gets when a sheet leaves it out."""
    default = int(KEYS["points"].default)
    return min(default, most_points(along, start, stop)) if along == "spins" else default
