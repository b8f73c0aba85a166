"""The keys of a sheet: their ranges, defaults and meaning, and how one value is read and written.

One table serves the link grammar, the JSON bodies, the form of the page and `/api/limits`.
"""

import difflib
import json
import math
import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

from app.errors import SheetError

LARGEST = 1e6
SMALLEST_MODE = 1e-6
MOST_CURVES = 8
MOST_NUMBERS = 8

_NUMBER = re.compile(r"[+-]?([0-9]+(\.[0-9]*)?|\.[0-9]+)([eE][+-]?[0-9]{1,4})?")
_WHOLE = re.compile(r"[+-]?[0-9]{1,12}")
_CONTROL = re.compile(r"[\x00-\x08\x0b-\x1f\x7f\ud800-\udfff]")


@dataclass(frozen=True)
class Key:
    """One key of the grammar.

    `kind` is "integer", "real", "choice", "names" (one or more of the choices), "numbers" (a few different
    ones), "text", "family" or "interval"; `low` and `high` bound numbers (inclusive) and, as `high`, the
    number of characters of a text. View keys change what is shown, never what is computed.
    """

    name: str
    kind: str
    default: Any
    meaning: str
    low: float = -LARGEST
    high: float = LARGEST
    choices: tuple[str, ...] = ()
    view: bool = False

    @property
    def allowed(self) -> str:
        """Say in words which values are allowed."""
        fixed = {
            "choice": ", ".join(self.choices),
            "names": f"one or more of {', '.join(self.choices)}, with commas between",
            "numbers": f"1 to {MOST_NUMBERS} different numbers, with commas between",
            "text": f"at most {int(self.high)} characters",
            "family": f"name:value,value,… with 1 to {MOST_CURVES} different values; names: "
            + ", ".join(SWEPT),
            "interval": "low:high, two numbers, low below high",
        }
        if self.kind in fixed:
            return fixed[self.kind]
        noun = "whole number" if self.kind == "integer" else "number"
        return f"{noun}, {number_text(self.low)} to {number_text(self.high)}"

    def error(self, code: str, message: str, value: Any, allowed: str | None = None) -> SheetError:
        """Return the error that says what is wrong with `value` of this key."""
        return SheetError(code, message, self.name, value, allowed or self.allowed)

    def read(self, text: str) -> Any:
        """Return the checked value that `text` of a link stands for, or raise SheetError."""
        if self.kind == "integer":
            if not _WHOLE.fullmatch(text):
                raise self.error("not-a-whole-number", f"'{self.name}' must be a whole number", text)
            return self.checked(int(text))
        if self.kind == "real":
            return self.checked(self._number(text))
        if self.kind in {"interval", "numbers"}:
            mark = ":" if self.kind == "interval" else ","
            return self.checked([self._number(part) for part in text.split(mark)])
        if self.kind == "names":
            return self.checked(text.split(","))
        if self.kind == "family":
            name, colon, rest = text.partition(":")
            if not colon:
                raise self.error("bad-family", "'each' is a name, a colon and values with commas", text)
            return self.checked({"name": name, "values": [self._number(part) for part in rest.split(",")]})
        return self.checked(text)

    def _number(self, text: str) -> float:
        if not _NUMBER.fullmatch(text):
            hint = "; in a link the decimal sign is a point" if "," in text else ""
            raise self.error("not-a-number", f"'{self.name}' must be a number in plain digits{hint}", text)
        return float(text)

    def write(self, value: Any) -> str:
        """Return the canonical text of a checked value."""
        if self.kind == "family":
            return f"{value['name']}:{','.join(number_text(item) for item in value['values'])}"
        if self.kind == "interval":
            return ":".join(number_text(item) for item in value)
        if self.kind == "numbers":
            return ",".join(number_text(item) for item in value)
        if self.kind in {"integer", "real"}:
            return number_text(value)
        if self.kind == "names":
            return ",".join(value)
        return str(value)

    def checked(self, value: Any) -> Any:
        """Return `value` in its normal form when it is of this key's kind and range, or raise SheetError."""
        if self.kind in {"integer", "real"}:
            return self._checked_number(value)
        if self.kind == "family":
            return self._checked_family(value)
        if self.kind == "interval":
            return self._checked_interval(value)
        if self.kind == "numbers":
            return self._checked_numbers(value)
        if self.kind == "names":
            return self._checked_names(value)
        if not isinstance(value, str):
            raise self.error("wrong-type", f"'{self.name}' must be text", value)
        if self.kind == "choice" and value not in self.choices:
            nearest = nearest_name(value, self.choices)
            raise self.error("unknown-choice", f"'{self.name}' cannot be '{value[:60]}'{nearest}", value)
        if self.kind == "text":
            self._check_text(value)
        return value

    def _checked_numbers(self, value: Any) -> list[float]:
        """Return the numbers from below: the same set is always written the same way."""
        if not isinstance(value, list | tuple) or not 1 <= len(value) <= MOST_NUMBERS:
            raise self.error("wrong-type", f"'{self.name}' is a list of 1 to {MOST_NUMBERS} numbers", value)
        kept = sorted(Key(self.name, "real", None, "").checked(item) for item in value)
        if len(set(kept)) != len(kept):
            raise self.error("repeated-value", f"'{self.name}' names the same number twice", value)
        return kept

    def _checked_names(self, value: Any) -> list[str]:
        """Return the names in the order of the choices: the same set is always written the same way."""
        if not isinstance(value, list | tuple) or not all(isinstance(name, str) for name in value):
            raise self.error("wrong-type", f"'{self.name}' is a list of names", value)
        if not any(value):
            raise self.error("nothing-named", f"'{self.name}' must name at least one of its choices", value)
        for name in value:
            if name not in self.choices:
                nearest = nearest_name(name, self.choices)
                raise self.error("unknown-choice", f"'{self.name}' cannot name '{name[:60]}'{nearest}", name)
        if len(set(value)) != len(value):
            raise self.error("repeated-value", f"'{self.name}' names the same thing twice", value)
        return [name for name in self.choices if name in value]

    def _check_text(self, value: str) -> None:
        if len(value) > self.high:
            raise self.error(
                "too-long",
                f"'{self.name}' has {len(value)} characters; shorten it to {int(self.high)}",
                value,
            )
        if _CONTROL.search(value) or (self.name == "title" and "\n" in value):
            raise self.error("control-characters", f"'{self.name}' contains control characters", value)

    def _checked_number(self, value: Any) -> float | int:
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise self.error("wrong-type", f"'{self.name}' must be a number", value)
        if isinstance(value, float) and not math.isfinite(value):
            raise self.error("not-finite", f"'{self.name}' must be finite", value)
        if self.kind == "integer" and isinstance(value, float):
            if not value.is_integer():
                raise self.error("not-a-whole-number", f"'{self.name}' must be a whole number", value)
            value = int(value)
        if not self.low <= value <= self.high:
            raise self.error("out-of-range", f"'{self.name}' is out of range: {_shown(value)}", value)
        return value if self.kind == "integer" else float(value) + 0.0

    def _checked_family(self, value: Any) -> dict[str, Any]:
        if isinstance(value, str):
            checked: dict[str, Any] = self.read(value)
            return checked
        if not isinstance(value, Mapping) or set(value) != {"name", "values"}:
            raise self.error("bad-family", "'each' needs a name and values", value)
        name, values = value["name"], value["values"]
        if not isinstance(name, str) or name not in SWEPT:
            known = nearest_name(str(name), SWEPT)
            raise self.error("unknown-choice", f"'each' cannot vary '{str(name)[:60]}'{known}", name)
        if not isinstance(values, list | tuple) or not 1 <= len(values) <= MOST_CURVES:
            raise self.error("bad-family", f"'each' takes 1 to {MOST_CURVES} values", values)
        kept = []
        for item in values:
            try:
                kept.append(SWEPT[name].checked(item))
            except SheetError as error:
                raise self.error(error.code, f"in 'each': {error.message}", item, error.allowed) from None
        if len(set(kept)) != len(kept):
            raise self.error("repeated-value", "'each' names the same value twice", values)
        return {"name": name, "values": kept}

    def _checked_interval(self, value: Any) -> list[float]:
        if isinstance(value, str):
            interval: list[float] = self.read(value)
            return interval
        if not isinstance(value, list | tuple) or len(value) != 2:
            raise self.error("bad-interval", f"'{self.name}' is two numbers", value)
        low, high = (Key(self.name, "real", None, "").checked(item) for item in value)
        if not low < high:
            raise self.error(
                "bad-interval", f"'{self.name}' is empty: its low end must be below its high end", value
            )
        return [low, high]


def number_text(value: float) -> str:
    """Return the shortest text that reads back as `value`, whole numbers without a decimal point."""
    if isinstance(value, int):
        return str(value)
    text = repr(value + 0.0).removesuffix(".0")
    mantissa, mark, exponent = text.partition("e")
    return f"{mantissa}e{int(exponent)}" if mark else text


def nearest_name(word: str, names: Iterable[str]) -> str:
    """Return "; did you mean '...'?" for the known name nearest to `word`, or an empty text."""
    close = difflib.get_close_matches(word.lower()[:60], list(names), n=1, cutoff=0.4)
    return f"; did you mean '{close[0]}'?" if close else ""


def canonical_json(data: Any) -> str:
    """Return JSON text that is the same for the same data, byte for byte."""
    return json.dumps(data, sort_keys=True, separators=(",", ":"), ensure_ascii=True, allow_nan=False)


def _shown(value: float) -> str:
    return number_text(value) if isinstance(value, float) else str(value)[:40]


SWEPT: dict[str, Key] = {
    key.name: key
    for key in (
        Key("coupling", "real", 0.5, "coupling of the rotating part, lambda", low=0.0),
        Key("detuning", "real", None, "splitting minus mode frequency; in place of splitting"),
        Key("splitting", "real", 1.0, "spin frequency"),
        Key("mode", "real", 1.0, "boson frequency", low=SMALLEST_MODE),
        Key("ratio", "real", 1.0, "counter-rotating over rotating coupling", low=0.0),
        Key("bias", "real", 0.0, "bias along x; breaks parity"),
        Key("spins", "integer", 20, "number of spins, N", low=1, high=5000),
        Key("coupling-over-critical", "real", None, "coupling in units of its critical value", low=0.0),
    )
}

_ORDERED = (
    SWEPT["spins"],
    SWEPT["mode"],
    SWEPT["splitting"],
    SWEPT["detuning"],
    SWEPT["coupling"],
    SWEPT["ratio"],
    SWEPT["bias"],
    Key("along", "choice", "coupling", "swept quantity", choices=tuple(SWEPT)),
    Key("from", "real", None, "first value of the swept quantity"),
    Key("to", "real", None, "last value of the swept quantity"),
    Key("points", "integer", 101, "number of points of the sweep", low=2, high=2001),
    Key("each", "family", None, "one curve for each value of a second quantity"),
    Key("levels", "integer", 6, "number of lowest levels over both parities", low=1, high=40),
    Key("tol", "real", 1e-9, "wanted bound on every level, in units of mode", low=1e-12, high=1e-2),
    Key(
        "need",
        "real",
        1e-3,
        "level error your own calculation may have, in units of mode",
        low=1e-12,
        high=1.0,
    ),
    Key("tail", "real", 1e-4, "weight your own calculation may leave above its cutoff", low=1e-12, high=0.5),
    Key("unit", "choice", "none", "unit shown", choices=("none", "Hz", "kHz", "MHz"), view=True),
    Key("frame", "choice", "cavity", "symbols shown", choices=("cavity", "trap"), view=True),
    Key("title", "text", "", "shown with the plot", high=120, view=True),
    Key("note", "text", "", "shown with the plot", high=2000, view=True),
    Key(
        "energies",
        "choice",
        "absolute",
        "zero of the energies",
        choices=("absolute", "ground", "uncoupled"),
        view=True,
    ),
    Key("bosons", "choice", "total", "boson number shown", choices=("total", "per-spin"), view=True),
    Key("overlay", "choice", "none", "second model shown", choices=("none", "effective"), view=True),
    Key("at", "real", None, "place of the pinned cursor", view=True),
    Key("zoom", "interval", None, "part of the axis shown", view=True),
)

KEYS: dict[str, Key] = {key.name: key for key in _ORDERED}
MAP_KEYS = ("across", "low", "high", "rows")
GRAMMAR_VERSION = 1
