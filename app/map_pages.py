"""The map: its page, its JSON, its table and arrays, and the ways from a cell."""

import asyncio
from collections.abc import Callable
from dataclasses import asdict, dataclass, replace
from typing import Any

from fastapi import APIRouter, Request
from starlette.responses import JSONResponse, RedirectResponse, Response

from app import exports, kinds, links, second_axis
from app.errors import SheetError, SoftmodeError
from app.face import Face, face_of, typed_texts
from app.jobs import Job
from app.keys import KEYS, Key
from app.map_sheets import MAP_OWN_KEYS, MapSheet, usual_points
from app.map_ways import column_of, place_in, row_of
from app.map_words import map_title, place_words, quantity_choices, shown_sheet
from app.pages import COUPLING_AS, Shell, choices_of, query_of, range_words, rendered, shell
from app.plan import axis_values
from app.replies import accepted, address_of, body_of, engine_of, finished, json_reply, pairs_of, table_reply
from app.symbols import interval_in_force

router = APIRouter()

ROW = Key("row", "integer", 0, "number of the row, from 0", low=0)
COLUMN = Key("column", "integer", 0, "number of the column, from 0", low=0)
# boxes that say their value even when it is the default
_ALWAYS = ("across", "every", "show", "scale")


@dataclass(frozen=True, kw_only=True)
class MapPage(Shell):
    """Everything the template `map.html` names.

    `face` is that of the sheet, its texts with those of the map's own boxes; `typed` what a malformed link
    had for each box, `sweep` the way back. A map has no family: `with_family` is for the shared form.
    """

    face: Face
    typed: dict[str, Any]
    choices: dict[str, list[tuple[str, str]]]
    ranges: dict[str, str]
    sweep: str
    with_family: bool


@router.get("/map")
async def map_page(request: Request) -> Response:
    """Show a map; opening the page computes nothing, its script asks for the picture."""
    query = query_of(request)
    try:
        question = links.map_from_pairs(links.split_query(query))
    except SoftmodeError as error:
        return rendered("map.html", _page(MapSheet.of({}), error, _typed(query)), error)
    return rendered("map.html", _page(question, None, {}), None)


@router.get("/sweep/map")
async def map_of_sweep(request: Request) -> Response:
    """Lead from a sweep to the map over a second quantity; nothing is computed for it."""
    question = MapSheet.of_sweep(links.from_pairs(pairs_of(request)))
    query = await engine_of(request).store.shortened(links.map_query(question))
    return RedirectResponse(f"..{links.whole(query, links.MAP_PAGE)}", 303)


@router.get("/api/map/face")
async def map_face(request: Request) -> Response:
    """Return the face of a map for the page's script."""
    pairs = pairs_of(request)
    coupling_as = links.take(pairs, "coupling_as", COUPLING_AS)
    question = links.map_from_pairs(pairs)
    return JSONResponse(asdict(face_with_map(question, coupling_as)) | {"sweep": _sweep(question)})


@router.post("/api/map/link")
async def link_of_map_form(request: Request) -> Response:
    """Return the canonical link for what was typed into the form of a map; a long one is stored."""
    return json_reply(await address_of(request, links.map_from_form(await body_of(request))))


@router.get("/api/map/cell")
async def map_cell(request: Request) -> Response:
    """Return the addresses of a cell's point, and of its row and column as sweeps; None for none."""
    pairs = pairs_of(request)
    row, column = (links.take(pairs, key.name, key) for key in (ROW, COLUMN))
    question = links.map_from_pairs(pairs)
    for key, number, count in ((ROW, row, question["rows"]), (COLUMN, column, question.sheet.points)):
        if number >= count:
            raise key.error("out-of-range", f"there is no {key.name} {number}", number, f"0 to {count - 1}")
    x, y = axis_values(question.sheet)[column], question.rows[row]
    shortened = engine_of(request).store.shortened

    async def address(query: Callable[[], str], page: str) -> str | None:
        try:
            return links.whole(await shortened(query()), page).lstrip("/")
        except SheetError:  # multiples of a critical coupling that is 0
            return None

    return json_reply(
        {
            "row": row,
            "column": column,
            "place": f"{place_words(question, question.sheet.along, x)}, "
            f"{place_words(question, question['across'], y)}",
            "point": await address(lambda: links.place_query(place_in(question, x, y)), links.POINT_PAGE),
            "row_sweep": await address(lambda: links.query_of(row_of(question, y, x)), links.PAGE),
            "column_sweep": await address(lambda: links.query_of(column_of(question, x, y)), links.PAGE),
        }
    )


@router.get("/api/map")
async def map_json(request: Request) -> Response:
    """Return the result of a map, or 202 when it takes longer than `wait`."""
    result, job = await _result(request)
    if result is None:
        return accepted(request, job)
    return Response(await asyncio.to_thread(exports.encode, result), media_type="application/json")


@router.get("/api/map.csv")
async def map_csv(request: Request) -> Response:
    """Return the cells of a map as a table."""
    result, job = await _result(request)
    if result is None:
        return accepted(request, job)
    return table_reply(await asyncio.to_thread(kinds.csv_of, result), f"softmode-map-{job.id[:12]}.csv")


@router.get("/api/map.npz")
async def map_npz(request: Request) -> Response:
    """Return a map as arrays of numpy."""
    result, job = await _result(request)
    if result is None:
        return accepted(request, job)
    answer = Response(await asyncio.to_thread(kinds.npz_of, result), media_type="application/octet-stream")
    answer.headers["Content-Disposition"] = f'attachment; filename="softmode-map-{job.id[:12]}.npz"'
    return answer


async def _result(request: Request) -> tuple[dict[str, Any] | None, Job]:
    """Return the result that a query asks, None when it is not there in time, and its job."""
    pairs = pairs_of(request)
    wait = links.take(pairs, "wait", links.WAIT)
    return await finished(request, links.map_from_pairs(pairs), wait)


def face_with_map(question: MapSheet, coupling_as: str = "lambda") -> Face:
    """Return the face of the sheet, both axes swept, with the query and texts of the whole map."""
    plain, swept = (face_of(sheet, coupling_as) for sheet in (question.sheet, shown_sheet(question)))
    query = links.map_query(question)
    explicit, data = question.explicit_own(), question.data()
    sheet_explicit = question.explicit_sheet()
    texts = {}
    for name, key in MAP_OWN_KEYS.items():
        value = data[name] if name in _ALWAYS else explicit.get(name)
        texts[name] = "" if value is None else key.write(value)
    texts["points"] = str(sheet_explicit["points"]) if "points" in sheet_explicit else ""
    low, high = second_axis.ends(question.sheet, question["across"])
    interval = interval_in_force(question["across"], question["low"], question["high"], question.sheet)
    return replace(
        plain,
        title=map_title(question),
        member=swept.member,
        hamiltonian=swept.hamiltonian,
        values=[*swept.values[:-1], interval],
        knobs=swept.knobs,
        query=query,
        link=links.whole(query, links.MAP_PAGE).lstrip("/"),
        texts=plain.texts | texts,
        placeholders=plain.placeholders
        | {
            "points": str(usual_points(question.sheet)),
            "low": f"{low:.4g}",
            "high": f"{high:.4g}",
            "rows": str(len(question.rows)),
            "title": map_title(MapSheet.of(data | {"title": ""})),
        },
    )


def _sweep(question: MapSheet) -> str:
    """Return the query of the sweep with the second quantity at its fixed value: the way back."""
    return links.query_of(question.sheet.changed(points=None, levels=None, at=None, zoom=None))


def _typed(query: str) -> dict[str, Any]:
    try:
        pairs = links.split_query(query)
    except SoftmodeError:
        return {}
    return typed_texts(pairs) | {name: text for name, text in pairs.items() if name in MAP_OWN_KEYS}


def _page(question: MapSheet, error: SoftmodeError | None, typed: dict[str, Any]) -> MapPage:
    shown = face_with_map(question)
    return MapPage(
        face=shown,
        typed=typed,
        choices=choices_of(question.sheet.frame) | _own_choices(),
        ranges={name: range_words(key) for name, key in (KEYS | MAP_OWN_KEYS).items()},
        sweep=links.whole(_sweep(question)).lstrip("/"),
        with_family=False,
        **shell(error, {"query": shown.query, "texts": shown.texts}),
    )


def _own_choices() -> dict[str, list[tuple[str, str]]]:
    return {
        "every": [("adaptive", "where the quantities bend"), ("all", "every one")],
        "show": quantity_choices(),
        "scale": [
            ("linear", "linear"),
            ("log", "logarithmic"),
            ("symmetric", "symmetric about zero"),
        ],
    }


__all__ = ["MapPage", "face_with_map", "router"]
