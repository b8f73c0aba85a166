"""Links: the only place where an address is read or built.

A link is the sheet spelled as a query string: canonical order, defaults left out, shortest numbers that
read back the same. The same sheet gives the same link, byte for byte.
"""

import hashlib
import re
from collections.abc import Mapping
from typing import Any
from urllib.parse import quote, unquote_to_bytes, urlsplit

from app.cutoff_sheets import CUTOFF_KEYS, CutoffSheet
from app.errors import RequestError, SheetError
from app.keys import KEYS, MAP_KEYS, SWEPT, Key, nearest_name, number_text
from app.map_sheets import MAP_OWN_KEYS, MapSheet
from app.places import MEMBER, STATE, Place, place_of
from app.questions import Question
from app.sheets import Sheet, critical_coupling

PAGE = "/sweep"
POINT_PAGE = "/point"
CUTOFF_PAGE = "/cutoff"
MAP_PAGE = "/map"
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
    return Sheet.model_validate(_read(pairs, KEYS))


def cutoff_from_pairs(pairs: Mapping[str, str]) -> CutoffSheet:
    """Return the question of the cutoff desk for decoded keys and values of a link; raise SheetError."""
    return CutoffSheet.of(_read(pairs, KEYS | CUTOFF_KEYS))


def map_from_pairs(pairs: Mapping[str, str]) -> MapSheet:
    """Return the map for decoded keys and values of a link; raise SheetError."""
    return MapSheet.of(_read(pairs, KEYS | MAP_OWN_KEYS))


def _read(pairs: Mapping[str, str], known: Mapping[str, Key]) -> dict[str, Any]:
    """Return the values of known keys; unknown ones keep their text, for the error that names them."""
    values: dict[str, Any] = {}
    for name, text in pairs.items():
        if name == "v":
            values[name] = int(text) if re.fullmatch(r"[0-9]{1,4}", text) else text
        else:
            values[name] = known[name].read(text) if name in known else text
    return values


def parse_link(link: str) -> Question:
    """Return what a whole link asks, with or without host; raise SheetError."""
    text = link.strip().partition("#")[0]
    address, mark, query = text.partition("?")
    if not mark and "=" in address:
        address, query = "", address
    try:
        page = urlsplit(address).path.rpartition("/")[2]
    except ValueError:
        page = address
    if page not in {"", "sweep", "cutoff", "map"}:
        raise SheetError(
            "unknown-page",
            "this is not a link to a sweep, a map or a cutoff question",
            "link",
            link,
            "/sweep?…, /map?…, /cutoff?…",
        )
    if query.startswith(f"{STORED_KEY}="):
        raise SheetError(
            "stored-link",
            "this is a short link, known only to the server that made it: open it there and use the "
            "address in its JSON",
            "link",
            link,
            "the whole link",
        )
    if page == "map":
        return map_from_pairs(split_query(query))
    return cutoff_from_pairs(split_query(query)) if page == "cutoff" else parse(query)


def query_of(sheet: Sheet) -> str:
    """Return the canonical query string of a sheet; empty when everything is at its default."""
    return _written(sheet.explicit(), KEYS)


def cutoff_query(question: CutoffSheet) -> str:
    """Return the canonical query string of a cutoff question: that of its sheet, then the desk's own keys."""
    parts = (query_of(question.sheet), _written(question.explicit_own(), CUTOFF_KEYS))
    return "&".join(part for part in parts if part)


def map_query(question: MapSheet) -> str:
    """Return the canonical query string of a map: that of its sheet, then its own keys."""
    parts = (
        _written(question.explicit_sheet(), KEYS),
        _written(question.explicit_own(), MAP_OWN_KEYS),
    )
    return "&".join(part for part in parts if part)


def _written(values: Mapping[str, Any], known: Mapping[str, Key]) -> str:
    return "&".join(f"{name}={quote(known[name].write(value), safe=_SAFE)}" for name, value in values.items())


def addressed(question: Question) -> tuple[str, str]:
    """Return the page of a question and its canonical query."""
    if isinstance(question, CutoffSheet):
        return CUTOFF_PAGE, cutoff_query(question)
    if isinstance(question, MapSheet):
        return MAP_PAGE, map_query(question)
    return PAGE, query_of(question)


def link_of(sheet: Sheet) -> str:
    """Return the canonical link of a sheet, however long."""
    return whole(query_of(sheet))


def cutoff_link(question: CutoffSheet) -> str:
    """Return the canonical link of a cutoff question, however long."""
    return whole(cutoff_query(question), CUTOFF_PAGE)


def map_link(question: MapSheet) -> str:
    """Return the canonical link of a map, however long."""
    return whole(map_query(question), MAP_PAGE)


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
    own = _written(place.options(), {key.name: key for key in (MEMBER, STATE)})
    return "&".join(part for part in (query_of(place.sheet), own) if part)


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
    return from_pairs(_typed(fields, KEYS))


def cutoff_from_form(fields: Mapping[str, Any]) -> CutoffSheet:
    """Return the cutoff question for what was typed into its form, as `from_form` does; raise SheetError."""
    return cutoff_from_pairs(_typed(fields, KEYS | CUTOFF_KEYS))


def map_from_form(fields: Mapping[str, Any]) -> MapSheet:
    """Return the map for what was typed into its form, as `from_form` does; raise SheetError."""
    return map_from_pairs(_typed(fields, KEYS | MAP_OWN_KEYS))


def _typed(fields: Mapping[str, Any], known: Mapping[str, Key]) -> dict[str, str]:
    """Return the keys and values of a link for the texts of a form; raise SheetError."""
    typed: dict[str, str] = {}
    for name, text in fields.items():
        if not isinstance(text, str):
            raise SheetError(
                "wrong-type", f"'{str(name)[:60]}' must be the text as typed", str(name), text, "text"
            )
        if text.strip() or (name in known and known[name].kind == "text" and text):
            typed[name] = text if name in known and known[name].kind == "text" else text.strip()
    form = typed.pop("coupling_as", "lambda")
    if form not in COUPLING_FORMS:
        raise SheetError(
            "unknown-choice",
            f"'coupling_as' cannot be '{form[:60]}'{nearest_name(form, COUPLING_FORMS)}",
            "coupling_as",
            form,
            ", ".join(COUPLING_FORMS),
        )
    plain = {name: _with_point(known[name], text) if name in known else text for name, text in typed.items()}
    if form == "lambda" or "coupling" not in plain:
        return plain
    typed_coupling = KEYS["coupling"].read(plain.pop("coupling"))
    fixed = from_pairs({k: v for k, v in plain.items() if k in _FIXED})
    scale = float(fixed.spins) ** 0.5
    if form == "critical":
        scale = critical_coupling(fixed.mode, fixed.working_splitting, fixed.ratio)
    return plain | {"coupling": number_text(KEYS["coupling"].checked(typed_coupling * scale))}


_FIXED = ("spins", "mode", "splitting", "detuning", "ratio", "bias")


def _with_point(key: Key, text: str) -> str:
    """Return a typed number with a decimal point in place of a decimal comma."""
    if key.kind not in {"integer", "real"}:
        return text
    text = text.replace("\u2212", "-")
    if text.count(",") + text.count(".") > 1:
        raise key.error(
            "ambiguous-number",
            f"'{key.name}' has several commas or points: use one decimal sign, no grouping",
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
    "CUTOFF_PAGE",
    "LONGEST_LINK",
    "MAP_KEYS",
    "MAP_PAGE",
    "POINT_PAGE",
    "SWEPT",
    "WAIT",
    "addressed",
    "check_length",
    "cutoff_from_form",
    "cutoff_from_pairs",
    "cutoff_link",
    "cutoff_query",
    "from_form",
    "from_pairs",
    "link_of",
    "map_from_form",
    "map_from_pairs",
    "map_link",
    "map_query",
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
