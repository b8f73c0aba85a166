"""Links: the only place where an address is read or built.

A link is the sheet spelled as a query string: canonical order, defaults left out, shortest numbers that
read back the same. The same sheet gives the same link, byte for byte.
"""

import hashlib
import re
from collections.abc import Mapping
from typing import Any
from urllib.parse import quote, unquote_to_bytes, urlsplit

from app.errors import RequestError, SheetError
from app.keys import KEYS, MAP_KEYS, SWEPT, Key, nearest_name, number_text
from app.places import MEMBER, STATE, Place, place_of
from app.sheets import Sheet, critical_coupling

PAGE = "/sweep"
POINT_PAGE = "/point"
LONGEST_LINK = 1800
STORED_KEY = "stored"
STORED_NAME = re.compile(r"[0-9a-f]{32}")

# readable in an address bar, and safe there: the rest is percent-encoded
_SAFE = "-._~:,"


def split_query(query: str) -> dict[str, str]:
    """Return the keys and values of a query string, decoded; raise SheetError for malformed ones."""
    pairs: dict[str, str] = {}
    for piece in query.split("&"):
        if not piece:
            continue
        raw_name, mark, raw_value = piece.partition("=")
        name = _decoded(raw_name, "query")
        if not mark:
            raise SheetError(
                "no-value", f"'{name[:60]}' has no value: write {name[:60]}=value", name, None, "key=value"
            )
        value = _decoded(raw_value, name)
        if name in pairs:
            raise SheetError(
                "repeated-key", f"'{name[:60]}' is given twice; keep one", name, value, "given once"
            )
        pairs[name] = value
    return pairs


def parse(query: str) -> Sheet:
    """Return the sheet a query string asks for (without the question mark); raise SheetError."""
    return from_pairs(split_query(query))


def from_pairs(pairs: Mapping[str, str]) -> Sheet:
    """Return the sheet for decoded keys and values of a link; raise SheetError."""
    values: dict[str, Any] = {}
    for name, text in pairs.items():
        if name == "v":
            values[name] = int(text) if re.fullmatch(r"[0-9]{1,4}", text) else text
        elif name in KEYS:
            values[name] = KEYS[name].read(text)
        else:
            values[name] = text
    return Sheet.model_validate(values)


def parse_link(link: str) -> Sheet:
    """Return the sheet of a whole link, with or without host and path; raise SheetError."""
    text = link.strip().partition("#")[0]
    address, mark, query = text.partition("?")
    if not mark and "=" in address:
        address, query = "", address
    try:
        page = urlsplit(address).path.rpartition("/")[2]
    except ValueError:
        page = address
    if page not in {"", "sweep"}:
        raise SheetError("unknown-page", "this is not a link to a sweep", "link", link, "/sweep?…")
    if query.startswith(f"{STORED_KEY}="):
        raise SheetError(
            "stored-link",
            "this is a short link, known only to the server that made it: open it there and use the "
            "address in its JSON",
            "link",
            link,
            "the whole link",
        )
    return parse(query)


def query_of(sheet: Sheet) -> str:
    """Return the canonical query string of a sheet; empty when everything is at its default."""
    return "&".join(
        f"{name}={quote(KEYS[name].write(value), safe=_SAFE)}" for name, value in sheet.explicit().items()
    )


def link_of(sheet: Sheet) -> str:
    """Return the canonical link of a sheet, however long."""
    return whole(query_of(sheet))


def whole(query: str, page: str = PAGE) -> str:
    """Return the link for a query string."""
    return f"{page}?{query}" if query else page


def place_from_pairs(pairs: Mapping[str, str]) -> Place:
    """Return the point that decoded keys and values of a link name; raise SheetError."""
    rest = dict(pairs)
    options = {key.name: take(rest, key.name, key) for key in (MEMBER, STATE)}
    return place_of(from_pairs(rest), options)


def place_query(place: Place) -> str:
    """Return the canonical query string of a point: that of its sheet with `at`, then its own options."""
    options = place.options()
    own = [
        f"{key.name}={quote(key.write(options[key.name]), safe=_SAFE)}"
        for key in (MEMBER, STATE)
        if key.name in options
    ]
    return "&".join([query_of(place.sheet), *own])


def stored_query(query: str) -> str:
    """Return the query that stands for a longer one: the name of its content."""
    return f"{STORED_KEY}={hashlib.sha256(query.encode()).hexdigest()[:32]}"


def needs_storing(query: str) -> bool:
    """Say whether the link of this query is too long to be passed around."""
    return len(whole(query)) > LONGEST_LINK


def stored_name(query: str) -> tuple[str, str] | None:
    """Return the name of a stored link and the rest of the query, or None for an ordinary query."""
    pieces = query.split("&")
    names = [piece.removeprefix(f"{STORED_KEY}=") for piece in pieces if piece.startswith(f"{STORED_KEY}=")]
    if not names:
        return None
    if len(names) > 1 or not STORED_NAME.fullmatch(names[0]):
        raise SheetError(
            "bad-stored-link",
            "the name of a short link has 32 digits",
            STORED_KEY,
            names[0],
            "32 digits 0-9, a-f, given once",
        )
    return names[0], "&".join(piece for piece in pieces if not piece.startswith(f"{STORED_KEY}="))


def take(pairs: dict[str, str], name: str, key: Key) -> Any:
    """Remove an option that is not of the sheet, such as `wait`, and return its checked value."""
    return key.read(pairs.pop(name)) if name in pairs else key.default


WAIT = Key("wait", "real", 30.0, "seconds to wait for the result", low=0.0, high=300.0)
COUPLING_FORMS = ("lambda", "single", "critical")


def from_form(fields: Mapping[str, Any]) -> Sheet:
    """Return the sheet for what was typed into a form: texts, decimal point or comma, empty = default.

    `coupling_as` says how the coupling box is meant: "lambda", "single" (lambda / sqrt(N)) or "critical"
    (multiples of the critical value). Raises SheetError.
    """
    typed: dict[str, str] = {}
    for name, text in fields.items():
        if not isinstance(text, str):
            raise SheetError(
                "wrong-type", f"'{str(name)[:60]}' must be the text as typed", str(name), text, "text"
            )
        if text.strip() or (name in KEYS and KEYS[name].kind == "text" and text):
            typed[name] = text if name in KEYS and KEYS[name].kind == "text" else text.strip()
    form = typed.pop("coupling_as", "lambda")
    if form not in COUPLING_FORMS:
        raise SheetError(
            "unknown-choice",
            f"'coupling_as' cannot be '{form[:60]}'{nearest_name(form, COUPLING_FORMS)}",
            "coupling_as",
            form,
            ", ".join(COUPLING_FORMS),
        )
    plain = {name: _with_point(name, text) for name, text in typed.items()}
    if form == "lambda" or "coupling" not in plain:
        return from_pairs(plain)
    typed_coupling = KEYS["coupling"].read(plain.pop("coupling"))
    fixed = from_pairs({k: v for k, v in plain.items() if k in _FIXED})
    scale = float(fixed.spins) ** 0.5
    if form == "critical":
        scale = critical_coupling(fixed.mode, fixed.working_splitting, fixed.ratio)
    coupling = KEYS["coupling"].checked(typed_coupling * scale)
    return from_pairs(plain | {"coupling": number_text(coupling)})


_FIXED = ("spins", "mode", "splitting", "detuning", "ratio", "bias")


def _with_point(name: str, text: str) -> str:
    """Return a typed number with a decimal point in place of a decimal comma."""
    if name not in KEYS or KEYS[name].kind not in {"integer", "real"}:
        return text
    text = text.replace("\u2212", "-")
    if text.count(",") + text.count(".") > 1:
        raise KEYS[name].error(
            "ambiguous-number",
            f"'{name}' has several commas or points: use one decimal sign, no grouping",
            text,
        )
    return text.replace(",", ".")


def _decoded(raw: str, name: str) -> str:
    """Return a percent-decoded text; raise SheetError when it is not UTF-8."""
    try:
        return unquote_to_bytes(raw.replace("+", " ")).decode("utf-8")
    except (UnicodeDecodeError, UnicodeEncodeError):
        raise SheetError(
            "not-utf-8", f"'{name[:60]}' is not UTF-8 text", name, raw, "UTF-8, percent-encoded"
        ) from None


def check_length(query: str, most: int) -> None:
    """Raise RequestError when a query string is longer than the server reads."""
    if len(query) > most:
        raise RequestError(
            "address-too-long",
            f"the address has {len(query)} characters",
            "query",
            len(query),
            most,
            status=414,
        )


__all__ = [
    "LONGEST_LINK",
    "MAP_KEYS",
    "POINT_PAGE",
    "SWEPT",
    "WAIT",
    "check_length",
    "from_form",
    "from_pairs",
    "link_of",
    "needs_storing",
    "parse",
    "parse_link",
    "place_from_pairs",
    "place_query",
    "query_of",
    "split_query",
    "stored_name",
    "stored_query",
    "take",
    "whole",
]
