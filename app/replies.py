"""What the JSON routes share: who asks, what a body holds, waiting for a job, forms of an answer."""

import json
from typing import Any

from fastapi import Request
from starlette.responses import JSONResponse, Response

from app import exports, identity, links
from app.cutoff_sheets import CutoffSheet
from app.engine import Engine
from app.errors import BusyError, ConflictError, RequestError, SheetError
from app.jobs import Job
from app.map_sheets import MapSheet
from app.questions import Question


def engine_of(request: Request) -> Engine:
    """Return the engine of the server."""
    engine: Engine = request.app.state.engine
    return engine


def client_of(request: Request) -> str:
    """Return who asks, for fairness."""
    return request.client.host if request.client else ""


def pairs_of(request: Request) -> dict[str, str]:
    """Return the keys and values of the query; raise SheetError."""
    return links.split_query(request.scope["query_string"].decode("latin-1"))


async def body_of(request: Request) -> dict[str, Any]:
    """Return the JSON object in a request's body; raise RequestError or SheetError."""
    kind = request.headers.get("content-type", "").partition(";")[0].strip().lower()
    if kind != "application/json":
        raise RequestError(
            "not-json",
            "send the body as application/json",
            "Content-Type",
            kind,
            "application/json",
            status=415,
        )
    raw = await request.body()

    def once(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
        data = dict(pairs)
        if len(data) != len(pairs):
            names = [name for name, _ in pairs]
            name = next(one for one in names if names.count(one) > 1)
            raise SheetError(
                "repeated-key", f"'{name[:60]}' is given twice; keep one", name, None, "given once"
            )
        return data

    def constant(name: str) -> None:
        raise SheetError(
            "not-finite", f"{name} is not a number that can be used", "body", name, "finite numbers"
        )

    try:
        data = json.loads(raw, object_pairs_hook=once, parse_constant=constant)
    except (ValueError, RecursionError) as error:
        raise RequestError(
            "bad-json", f"the body is not JSON: {error}", "body", None, "a JSON object"
        ) from None
    if not isinstance(data, dict):
        raise RequestError(
            "bad-json", "the body must be a JSON object", "body", data, "a JSON object", status=422
        )
    return data


def json_reply(data: Any, status: int = 200) -> Response:
    """Return data as JSON."""
    return Response(exports.encode(data), status, media_type="application/json")


def raise_if_over(job: Job) -> None:
    """Raise the error of a job that ended without a result."""
    if job.error is not None:
        raise job.error
    if job.state == "cancelled":
        raise ConflictError(
            "cancelled", "the job was stopped; ask for the sheet again to go on", "id", job.id, None
        )
    if job.state == "restarting":
        raise BusyError("restarting", "the server is restarting; ask again in a moment", retry_after=3)


async def finished(request: Request, question: Question, wait: float) -> tuple[dict[str, Any] | None, Job]:
    """Return the result of a question, None in its place when `wait` seconds are not enough, and its job."""
    engine = engine_of(request)
    job, _ = await engine.submit(question, client_of(request), by_polling=True, extra_seconds=wait)
    await job.wait_until(lambda one: not one.is_active, wait)
    if job.is_active:
        job.renew_scripts(engine.lease_length)
        return None, job
    raise_if_over(job)
    return await engine.result(job, question), job


def accepted(request: Request, job: Job) -> Response:
    """Say that a job is under way, and where to ask for it."""
    facts = job.snapshot(engine_of(request).pool.size)
    answer = JSONResponse({"job": f"api/jobs/{job.id}"} | facts, 202)
    answer.headers["Retry-After"] = "1"
    return answer


def table_reply(text: str, name: str) -> Response:
    """Return a table as a file with a name."""
    answer = Response(text, media_type="text/csv")
    answer.headers["Content-Disposition"] = f'attachment; filename="{name}"'
    return answer


async def address_of(request: Request, question: Question) -> dict[str, Any]:
    """Return how a question is addressed: its link and query, short where need be, and its name."""
    if isinstance(question, MapSheet):
        page, whole = links.MAP_PAGE, links.map_query(question)
    elif isinstance(question, CutoffSheet):
        page, whole = links.CUTOFF_PAGE, links.cutoff_query(question)
    else:
        page, whole = links.PAGE, links.query_of(question)
    query = await engine_of(request).store.shortened(whole)
    return {
        "link": links.whole(query, page),
        "query": query,
        "sheet": question.data(),
        "id": identity.sheet_id(question),
    }
