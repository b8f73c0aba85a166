"""The page of one point, its JSON, and its pictures."""

import asyncio
from dataclasses import asdict, dataclass, replace
from typing import Any

from fastapi import APIRouter, Request
from starlette.responses import JSONResponse, Response

from app import exports, links
from app.errors import SoftmodeError
from app.face import Face, face_of
from app.figure_convergence import convergence_figure, convergence_key
from app.figure_point import point_figures
from app.figure_readout import readout
from app.keys import number_text
from app.pages import Shell, query_of, rendered, shell
from app.places import STATE, Place
from app.point_work import WORK as CONVERGENCE
from app.point_work import convergence_at
from app.points import PointDesk, check_ceilings
from app.store import Store
from app.symbols import place_title, symbol, values_in_force

router = APIRouter()

STATE_WORDS = {
    "ground": "ground state",
    "plus": "broken symmetry, ⟨a⟩ > 0",
    "minus": "broken symmetry, ⟨a⟩ < 0",
}


@dataclass(frozen=True)
class Way:
    """A link to another page: what it says, where it leads (nothing at an end), whether it is this page."""

    words: str
    address: str | None
    here: bool = False


@dataclass(frozen=True, kw_only=True)
class PointPage(Shell):
    """Everything the template `point.html` names.

    `face` is that of the sheet, with title, values and query of the point; after an error, of the default
    sheet. `sweep` leads back, `cutoff` to the cutoff desk, `below` and `above` to the neighbours.
    """

    face: Face
    sweep: str
    cutoff: str
    below: Way
    above: Way
    members: list[Way]
    states: list[Way]


@router.get("/point")
async def point(request: Request) -> Response:
    """Show a point; opening the page computes nothing, its script asks for the numbers."""
    try:
        place = links.place_from_pairs(links.split_query(query_of(request)))
    except SoftmodeError as error:
        return rendered("point.html", _broken_page(error), error)
    return rendered("point.html", await _page(place, request.app.state.engine.store), None)


@router.get("/api/point")
async def point_json(request: Request) -> Response:
    """Return the result of a point, or 202 when it takes longer than `wait`: then ask again."""
    _, result = await _result(request)
    return _accepted() if result is None else await _json(result)


@router.get("/api/point/picture")
async def point_picture(request: Request) -> Response:
    """Return the figures of a point and the numbers behind them."""
    place, result = await _result(request)
    if result is None:
        return _accepted()
    portrait = result["portrait"]
    told = ("state", "doublet_closed", "mean", "above_needed", "parity_of_n")
    return await _json(
        {
            "figures": await asyncio.to_thread(point_figures, place.sheet, result),
            "readout": readout(place.sheet, result),
            "portrait": {key: portrait[key] for key in told}
            | {"resolved": portrait["wigner"]["resolved"], "noise": portrait["noise"]},
        }
    )


@router.get("/api/point/convergence")
async def point_convergence(request: Request) -> Response:
    """Return what truncated calculations of a point get wrong, cutoff by cutoff, with a figure of it.

    202 when it takes longer than `wait`: then ask again.
    """
    pairs = links.split_query(query_of(request))
    wait = links.take(pairs, "wait", links.WAIT)
    place = links.place_from_pairs(pairs)
    asked = await asyncio.to_thread(convergence_at, place)
    desk: PointDesk = request.app.state.points
    engine = desk.engine
    seconds = engine.calibrator.found.factor(CONVERGENCE) * asked.seconds
    check_ceilings(asked.model, seconds, asked.most_bytes, engine.settings)
    client = request.client.host if request.client else ""
    found = await desk.compute(((asked,), CONVERGENCE, "ground"), asked.model.spins, client, wait)
    if found is None:
        return _accepted()
    outcome, provenance = found
    row = outcome.rows[0]
    bases: dict[str, Any] = {name: row[name] for name in ("fock", "shifted") if name in row}
    wanted = asdict(asked.fock.wanted)
    return await _json(
        {
            "link": links.whole(links.place_query(place), links.POINT_PAGE),
            "provenance": provenance,
            "wanted": wanted,
            "bases": bases,
            "notes": row["notes"] + [one["note"] for one in bases.values() if one["note"]],
            "figure": convergence_figure(bases, wanted, place.sheet.frame),
            "key": convergence_key(),
        }
    )


async def _result(request: Request) -> tuple[Place, dict[str, Any] | None]:
    """Return the point that a query names and its result, None in its place when `wait` is not enough."""
    pairs = links.split_query(query_of(request))
    wait = links.take(pairs, "wait", links.WAIT)
    place = links.place_from_pairs(pairs)
    desk: PointDesk = request.app.state.points
    client = request.client.host if request.client else ""
    return place, await desk.ask(place, client, wait)


def _accepted() -> Response:
    return JSONResponse({"state": "running"}, 202, headers={"Retry-After": "1"})


async def _json(data: Any) -> Response:
    return Response(await asyncio.to_thread(exports.encode, data), media_type="application/json")


async def _page(place: Place, store: Store) -> PointPage:
    sheet = place.sheet
    query = await store.shortened(links.place_query(place))
    sweep = await store.shortened(links.query_of(sheet))

    async def to(other: Place) -> str:
        return links.whole(await store.shortened(links.place_query(other)), links.POINT_PAGE).lstrip("/")

    below, above = place.neighbours
    along = symbol(sheet.along, sheet.frame).plain
    members = []
    if sheet.each is not None:
        name = symbol(sheet.each.name, sheet.frame).plain
        for value in sheet.each.values:
            other = await to(place.other(member=value))
            members.append(Way(f"{name} = {_shown(value)}", other, value == place.member))
    return PointPage(
        face=replace(
            face_of(sheet),
            title=place_title(sheet, place.values()),
            values=values_in_force(sheet, place.values()),
            query=query,
        ),
        sweep=links.whole(sweep).lstrip("/"),
        cutoff=links.whole(sweep, links.CUTOFF_PAGE).lstrip("/"),
        below=Way(f"{along} = {_shown(below)}", None if below is None else await to(place.moved(below))),
        above=Way(f"{along} = {_shown(above)}", None if above is None else await to(place.moved(above))),
        members=members,
        states=[
            Way(STATE_WORDS[name], await to(place.other(state=name)), name == place.state)
            for name in STATE.choices
        ],
        **shell(None, {"query": query}),
    )


def _broken_page(error: SoftmodeError) -> PointPage:
    nowhere = Way("", None)
    return PointPage(
        face=replace(face_of(links.parse("")), title="This point cannot be shown"),
        sweep=links.whole("").lstrip("/"),
        cutoff=links.whole("", links.CUTOFF_PAGE).lstrip("/"),
        below=nowhere,
        above=nowhere,
        members=[],
        states=[],
        **shell(error, {"query": ""}),
    )


def _shown(value: float | None) -> str:
    """Return a value for the words of a way; short, the link itself is exact."""
    if value is None:
        return ""
    return number_text(float(f"{value:.6g}")).replace("-", "−")
