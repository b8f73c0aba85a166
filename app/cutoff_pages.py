"""The cutoff desk: its page, its JSON, its tables, and the margins at one point."""

import asyncio
from collections.abc import Mapping
from dataclasses import asdict, dataclass, replace
from typing import Any

from fastapi import APIRouter, Request
from starlette.responses import JSONResponse, Response

from app import cutoff_exports, exports, links, scenario
from app.cutoff_plan import CUTOFF, POINT, margins_at, place_of
from app.cutoff_sheets import CUTOFF_KEYS, QUANTITIES, CutoffSheet, across_values
from app.cutoff_summary import quantities_of
from app.cutoff_words import NAMES, allowed_of, place_words, question_title, shown_sheet
from app.errors import SheetError, SoftmodeError
from app.face import Face, face_of, typed_texts
from app.jobs import Job
from app.keys import KEYS
from app.pages import COUPLING_AS, Shell, choices_of, query_of, range_words, rendered, shell
from app.points import PointDesk, check_margins_price
from app.replies import (
    accepted,
    address_of,
    body_of,
    client_of,
    engine_of,
    finished,
    json_reply,
    pairs_of,
    table_reply,
)
from app.sheets import default_range
from app.symbols import interval_in_force

router = APIRouter()

# boxes that say their value even when it is the default
_ALWAYS = ("need-gap", "need-bosons", "need-order", "ensemble", "start", "start-quanta", "start-periods")
MARGINS_WORK = "margins"


@dataclass(frozen=True, kw_only=True)
class CutoffPage(Shell):
    """Everything the template `cutoff.html` names.

    `face` is that of the sheet, its texts with those of the desk's own boxes; `typed` what a malformed link
    had for each box, `sweep` the way back.
    """

    face: Face
    invented: str
    typed: dict[str, Any]
    choices: dict[str, list[tuple[str, str]]]
    ranges: dict[str, str]
    quantities: list[tuple[str, str]]
    judged: list[str]
    sweep: str


@router.get("/cutoff")
async def cutoff(request: Request) -> Response:
    """Show the cutoff desk; opening the page computes nothing, its script asks for the answer."""
    query = query_of(request)
    try:
        question = links.cutoff_from_pairs(links.split_query(query))
    except SoftmodeError as error:
        return rendered("cutoff.html", _page(links.cutoff_from_pairs({}), error, _typed(query), ""), error)
    return rendered("cutoff.html", _page(question, None, {}, "" if query else scenario.MARK), None)


@router.get("/api/cutoff/face")
async def cutoff_face(request: Request) -> Response:
    """Return the face of a cutoff question for the page's script."""
    pairs = pairs_of(request)
    coupling_as = links.take(pairs, "coupling_as", COUPLING_AS)
    question = links.cutoff_from_pairs(pairs)
    return JSONResponse(
        asdict(face_with_desk(question, coupling_as))
        | {"judged": list(question.asked), "sweep": links.query_of(question.sheet)}
    )


@router.post("/api/cutoff/link")
async def link_of_cutoff_form(request: Request) -> Response:
    """Return the canonical link for what was typed into the form of the desk; a long one is stored."""
    question = links.cutoff_from_form(await body_of(request))
    return json_reply(await address_of(request, question))


@router.get("/api/cutoff")
async def cutoff_json(request: Request) -> Response:
    """Return the result of a cutoff question, or 202 when it takes longer than `wait`."""
    result, job = await _result(request)
    if result is None:
        return accepted(request, job)
    return Response(await asyncio.to_thread(exports.encode, result), media_type="application/json")


@router.get("/api/cutoff.csv")
async def cutoff_csv(request: Request) -> Response:
    """Return the points of a cutoff question as a table."""
    result, job = await _result(request)
    if result is None:
        return accepted(request, job)
    return table_reply(
        await asyncio.to_thread(cutoff_exports.csv_of, result), f"softmode-cutoffs-{job.id[:12]}.csv"
    )


@router.get("/api/cutoff/sizes.csv")
async def cutoff_sizes(request: Request) -> Response:
    """Return the sizes of the calculation at the covering and at the stated cutoff as a table."""
    result, job = await _result(request)
    if result is None:
        return accepted(request, job)
    return table_reply(cutoff_exports.sizes_csv_of(result), f"softmode-sizes-{job.id[:12]}.csv")


@router.get("/api/cutoff/margins")
async def cutoff_margins(request: Request) -> Response:
    """Return the errors at some cutoffs from `cutoff` on at one point, and the false plateaus there."""
    pairs = pairs_of(request)
    wait = links.take(pairs, "wait", links.WAIT)
    point = links.take(pairs, POINT.name, POINT)
    cutoff = links.take(pairs, CUTOFF.name, CUTOFF)
    question = links.cutoff_from_pairs(pairs)
    if cutoff is None:
        raise SheetError(
            "no-cutoff", "say around which cutoff: cutoff=number", "cutoff", None, CUTOFF.allowed
        )
    model, asked = await asyncio.to_thread(margins_at, question, point, cutoff)
    settings = engine_of(request).settings
    await asyncio.to_thread(check_margins_price, model, asked, settings)
    desk: PointDesk = request.app.state.points
    found = await desk.compute(((asked,), MARGINS_WORK, "ground"), model.spins, client_of(request), wait)
    if found is None:
        return JSONResponse({"state": "running"}, 202, headers={"Retry-After": "1"})
    outcome, provenance = found
    return json_reply(_margins(question, point, cutoff, outcome.rows[0]) | {"provenance": provenance})


def _margins(question: CutoffSheet, point: int, cutoff: int, row: Mapping[str, Any]) -> dict[str, Any]:
    x, second = place_of(question, point)
    judged = quantities_of(question)
    allowed = allowed_of(question)
    return {
        "link": links.cutoff_link(question),
        "point": point,
        "x": x,
        "second": second,
        "place": place_words(question, x, second),
        "cutoff": cutoff,
        "cutoffs": row["cutoffs"],
        "error": {name: row["error"][name] for name in judged if name in row["error"]},
        "allowed": {name: allowed[name] for name in judged},
        "names": {name: NAMES[name].capitalize() for name in judged},
        "plateaus": row["plateaus"],
    }


async def _result(request: Request) -> tuple[dict[str, Any] | None, Job]:
    """Return the result that a query asks, None when it is not there in time, and its job."""
    pairs = pairs_of(request)
    wait = links.take(pairs, "wait", links.WAIT)
    return await finished(request, links.cutoff_from_pairs(pairs), wait)


def face_with_desk(question: CutoffSheet, coupling_as: str = "lambda") -> Face:
    """Return the face of the sheet, with the query, the texts and the placeholders of the whole question."""
    plain = _face_of_axes(question, coupling_as)
    query = links.cutoff_query(question)
    explicit, data = question.explicit_own(), question.data()
    texts = {}
    for name, key in CUTOFF_KEYS.items():
        value = data[name] if name in _ALWAYS else explicit.get(name)
        texts[name] = "" if value is None else key.write(value)
    return replace(
        plain,
        query=query,
        link=links.whole(query, links.CUTOFF_PAGE).lstrip("/"),
        texts=plain.texts | texts,
        placeholders=plain.placeholders | _placeholders(question),
    )


def _face_of_axes(question: CutoffSheet, coupling_as: str) -> Face:
    """Return the face of the sheet; both axes of a map count as swept."""
    plain = face_of(question.sheet, coupling_as)
    if question["across"] is None:
        return plain
    swept = face_of(shown_sheet(question), coupling_as)
    range_shown = interval_in_force(question["across"], question["low"], question["high"], question.sheet)
    return replace(
        plain,
        title=question_title(question),
        member=swept.member,
        hamiltonian=swept.hamiltonian,
        values=[*swept.values[:-1], range_shown],
        knobs=swept.knobs,
    )


def _placeholders(question: CutoffSheet) -> dict[str, str]:
    """Return the defaults that stand for empty boxes of the second axis."""
    across = question["across"]
    if across is None:
        return {"low": "", "high": "", "rows": ""}
    low, high = default_range(question.sheet.data() | {"along": across})
    return {"low": f"{low:.4g}", "high": f"{high:.4g}", "rows": str(len(across_values(question)))}


def _typed(query: str) -> dict[str, Any]:
    try:
        pairs = links.split_query(query)
    except SoftmodeError:
        return {}
    return typed_texts(pairs) | {name: text for name, text in pairs.items() if name in CUTOFF_KEYS}


def _page(
    question: CutoffSheet, error: SoftmodeError | None, typed: dict[str, Any], invented: str
) -> CutoffPage:
    shown = face_with_desk(question)
    return CutoffPage(
        face=shown,
        invented=invented,
        typed=typed,
        choices=choices_of(question.sheet.frame) | _own_choices(),
        ranges={name: range_words(key) for name, key in (KEYS | CUTOFF_KEYS).items()},
        quantities=[(name, NAMES[name]) for name in QUANTITIES],
        judged=list(question.asked),
        sweep=links.whole(links.query_of(question.sheet)).lstrip("/"),
        **shell(error, {"query": shown.query, "texts": shown.texts}),
    )


def _own_choices() -> dict[str, list[tuple[str, str]]]:
    return {
        "ensemble": [
            ("lowest", "lowest levels"),
            ("collective", "thermal, collective spin"),
            ("distinguishable", "thermal, distinguishable spins"),
        ],
        "start": [
            ("none", "not asked"),
            ("thermal", "thermal state of the mode"),
            ("fock", "number state"),
            ("coherent", "coherent state"),
        ],
        "heat": [("quanta", "mean quanta of the bare mode"), ("temperature", "k_B T/ħ")],
    }


__all__ = ["CutoffPage", "face_with_desk", "router"]
