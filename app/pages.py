"""The pages: HTML for people, and the face of a sheet as JSON for the page's own script."""

import dataclasses
import functools
import re
from collections.abc import Callable, Mapping
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

from fastapi import APIRouter, Request
from jinja2 import Environment, FileSystemLoader, StrictUndefined
from markupsafe import Markup
from starlette.responses import HTMLResponse, JSONResponse, Response

from app import links, scenario
from app.assets import PLOTLY, asset_url, shelf
from app.errors import SoftmodeError
from app.face import Face, face_of, typed_texts
from app.identity import versions
from app.keys import KEYS, SWEPT, Key, number_text
from app.settings import templates_dir
from app.sheets import Sheet

router = APIRouter()

FILES = ("softmode.css", "theme.js", "main.js", "point.js", "cutoff.js", "map.js", "icon.svg", PLOTLY)
COUPLING_AS = Key("coupling_as", "choice", "lambda", "meaning of the box", choices=links.COUPLING_FORMS)


@dataclass(frozen=True, kw_only=True)
class Shell:
    """What every page carries beside its content; `boot` is for its script."""

    error: dict[str, Any] | None
    assets: str
    scripts: dict[str, str]
    plotly_mark: str
    versions: dict[str, str]
    boot: dict[str, Any]


@dataclass(frozen=True, kw_only=True)
class SweepPage(Shell):
    """Everything the template `sweep.html` names.

    `face` is what the page shows of its sheet; after an error it is that of the default sheet, `typed`
    what the link had for each box, and `error` what is wrong with it.
    """

    face: Face
    invented: str
    typed: dict[str, Any]
    choices: dict[str, list[tuple[str, str]]]
    ranges: dict[str, str]


@router.get("/")
async def front(request: Request) -> Response:
    """Show the sweep of an invented laboratory; a query is that of `/sweep`."""
    query = query_of(request)
    if query:
        return await sweep(request)
    return _sweep_page(scenario.example(), None, {}, scenario.MARK)


@router.get("/sweep")
async def sweep(request: Request) -> Response:
    """Show a sweep; opening the page computes nothing, its script asks for the picture."""
    query = query_of(request)
    try:
        sheet = links.parse(query)
    except SoftmodeError as error:
        return _sweep_page(links.parse(""), error, _typed(query), "")
    return _sweep_page(sheet, None, {}, "")


@router.get("/api/face")
async def face(request: Request) -> Response:
    """Return the face of a sheet for the page's script."""
    pairs = links.split_query(query_of(request))
    coupling_as = links.take(pairs, "coupling_as", COUPLING_AS)
    return JSONResponse(asdict(face_of(links.from_pairs(pairs), coupling_as)))


def query_of(request: Request) -> str:
    """Return the query string as it came."""
    return str(request.scope["query_string"].decode("latin-1"))


def _typed(query: str) -> dict[str, Any]:
    try:
        return typed_texts(links.split_query(query))
    except SoftmodeError:
        return {}


def _sweep_page(
    sheet: Sheet, error: SoftmodeError | None, typed: dict[str, Any], invented: str
) -> HTMLResponse:
    shown = face_of(sheet)
    page = SweepPage(
        face=shown,
        invented=invented,
        typed=typed,
        choices=choices_of(sheet.frame),
        ranges={name: range_words(key) for name, key in KEYS.items()},
        **shell(error, {"query": shown.query, "texts": shown.texts}),
    )
    return rendered("sweep.html", page, error)


def shell(error: SoftmodeError | None, boot: Mapping[str, Any]) -> dict[str, Any]:
    """Return the fields of a Shell; `boot` is what the page's own script needs."""
    problem = error.body()["error"] if error is not None else None
    named = versions()
    return {
        "error": problem,
        "assets": shelf().digest,
        "scripts": {name: asset_url(name) for name in FILES},
        "plotly_mark": plotly_mark(),
        "versions": named,
        "boot": {**boot, "error": problem, "assets": shelf().digest, "solver": named["solver"]},
    }


def rendered(template: str, page: Shell, error: SoftmodeError | None) -> HTMLResponse:
    """Return a page as HTML, with the status of its error."""
    fields = {field.name: getattr(page, field.name) for field in dataclasses.fields(page)}
    html = environment().get_template(template).render(fields)
    return HTMLResponse(html, error.status if error is not None else 200)


def choices_of(frame: str) -> dict[str, list[tuple[str, str]]]:
    """Return value and label of every choice on the page."""
    coupling = {
        "cavity": ("λ, collective", "g = λ/√N, single spin", "λ/λc, over critical"),
        "trap": ("g₀/2, collective", "g₀/2√N, single spin", "g₀/gc, over critical"),
    }[frame]
    return {
        "coupling_as": list(zip(links.COUPLING_FORMS, coupling, strict=True)),
        "unit": [
            ("none", "none"),
            ("Hz", "Hz (times 2π)"),
            ("kHz", "kHz (times 2π)"),
            ("MHz", "MHz (times 2π)"),
        ],
        "frame": [("cavity", "cavity: ω, ω₀, λ"), ("trap", "trap: δ, B, g₀")],
        "energies": [
            ("absolute", "absolute"),
            ("ground", "above the ground level"),
            ("uncoupled", "minus the uncoupled energy"),
        ],
        "bosons": [("total", "total"), ("per-spin", "per spin")],
        "overlay": [("none", "none"), ("effective", "boson eliminated")],
    }


def range_words(key: Key) -> str:
    """Return the range of a key as the hint beside its box."""
    if key.kind in {"integer", "real"}:
        return f"{number_text(key.low)} to {number_text(key.high)}"
    return key.allowed


def show_trouble(trouble: Callable[[], str | None]) -> None:
    """Have every page say what `trouble` returns, as long as it returns something."""
    environment().globals["trouble"] = trouble


def _no_trouble() -> None:
    return None


@functools.cache
def environment() -> Environment:
    """Return the template environment: everything is escaped, an unknown name is an error."""
    made = Environment(
        loader=FileSystemLoader(str(templates_dir())),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    made.globals["swept"] = tuple(SWEPT)
    made.globals["trouble"] = _no_trouble
    made.filters["mathml"] = Markup  # built by `symbols` alone, from fixed pieces and escaped text
    return made


@functools.cache
def plotly_mark() -> str:
    """Return the id of an element whose presence keeps Plotly from adding a style element of its own.

    Its map support does so on loading, which the content security policy forbids; no map is drawn here.
    """
    script = Path(shelf().files[PLOTLY]).read_text(encoding="utf-8")
    found = re.search(r'getElementById\("([0-9a-f]{64})"\)', script)
    return found.group(1) if found else "no-map-styles"
