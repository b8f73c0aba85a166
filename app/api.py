"""The JSON routes, and the factory that puts the application together."""

import asyncio
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from typing import Any

from fastapi import APIRouter, FastAPI, Request
from starlette.exceptions import HTTPException
from starlette.responses import Response, StreamingResponse

from app import (
    __version__,
    assets,
    cutoff_pages,
    exports,
    figure_cutoff,
    figure_map,
    identity,
    limits,
    links,
    map_pages,
    operating,
    pages,
    point_pages,
    streams,
)
from app.cutoff_sheets import CutoffSheet
from app.engine import Engine
from app.errors import ConflictError, JobFailedError, NotFoundError, SheetError, SoftmodeError, StoreError
from app.faults import on_error
from app.figures import picture
from app.jobs import Job
from app.map_sheets import MapSheet
from app.metrics import Metrics, Observed
from app.operations import FIRST, PARTIAL
from app.points import PointDesk
from app.questions import Question
from app.replies import accepted as _accepted
from app.replies import address_of, finished, table_reply
from app.replies import body_of as _body
from app.replies import client_of as _client
from app.replies import engine_of as _engine
from app.replies import json_reply as _json
from app.replies import pairs_of as _pairs
from app.replies import raise_if_over as _raise_if_over
from app.security import Guard
from app.settings import Settings
from app.sheets import Sheet
from app.short_links import StoredLinks

router = APIRouter()


def create_app(settings: Settings) -> FastAPI:
    """Return the application; raises StartError when the settings or the data directory are no good."""
    settings.check()
    engine = Engine(settings)

    @asynccontextmanager
    async def lifespan(_app: FastAPI) -> AsyncIterator[None]:
        await engine.start()
        yield
        await engine.close()

    app = FastAPI(
        title="Softmode",
        version=__version__,
        docs_url=None,
        redoc_url=None,
        openapi_url=None,
        lifespan=lifespan,
    )
    app.router.redirect_slashes = False
    app.state.engine = engine
    app.state.points = PointDesk(engine)
    app.state.settings = settings
    app.state.metrics = Metrics(engine)
    app.include_router(router)
    app.include_router(pages.router)
    app.include_router(point_pages.router)
    app.include_router(cutoff_pages.router)
    app.include_router(map_pages.router)
    app.include_router(operating.router)
    app.add_exception_handler(SoftmodeError, on_error)
    app.add_exception_handler(HTTPException, on_error)
    app.add_middleware(StoredLinks, engine=engine)
    app.add_middleware(Guard, settings=settings)
    app.add_middleware(Observed, metrics=app.state.metrics)
    pages.show_trouble(lambda: engine.store.trouble)
    return app


# -- sweeps -------------------------------------------------------------------------------------


@router.get("/api/sweep")
async def sweep_json(request: Request) -> Response:
    """Return the result of a sweep, or 202 and the job's address when it takes longer than `wait`."""
    result, job = await _sweep(request)
    if result is None:
        return _accepted(request, job)
    return Response(await asyncio.to_thread(exports.encode, result), media_type="application/json")


@router.get("/api/sweep.csv")
async def sweep_csv(request: Request) -> Response:
    """Return the result of a sweep as a table."""
    result, job = await _sweep(request)
    if result is None:
        return _accepted(request, job)
    return table_reply(await asyncio.to_thread(exports.csv_of, result), f"softmode-{job.id[:12]}.csv")


async def _sweep(request: Request) -> tuple[dict[str, Any] | None, Job]:
    """Return the result of the sweep that a query asks, None when it is not there in time, and its job."""
    pairs = _pairs(request)
    wait = links.take(pairs, "wait", links.WAIT)
    return await finished(request, links.from_pairs(pairs), wait)


@router.get("/api/sweep.py")
async def sweep_python(request: Request) -> Response:
    """Return a script that fetches the sweep, or computes it; nothing is computed for it here."""
    sheet = links.from_pairs(_pairs(request))
    base = f"{request.url.scheme}://{request.headers.get('host', '')}{request.app.state.settings.prefix}"
    return Response(exports.python_of(sheet, base), media_type="text/plain")


@router.post("/api/link")
async def link_of_form(request: Request) -> Response:
    """Return the canonical link for what was typed into a form; a long one is stored under a short name."""
    sheet = links.from_form(await _body(request))
    return _json(await address_of(request, sheet))


# -- jobs ---------------------------------------------------------------------------------------


@router.post("/api/jobs")
async def start_job(request: Request) -> Response:
    """Start the job of a sheet, or join it, and hand out a lease.

    The body is a sheet, `{"link": ...}`, or `{"form": ...}` with what was typed; the answer to a form
    brings the address of its sheet. A form may give up a lease on what was shown before, as
    `"instead": {"id": ..., "lease": ...}`: once the new job is held. With `first` the answer waits that
    many seconds for the first points and brings their picture.
    """
    pairs = _pairs(request)
    patience = links.take(pairs, "first", FIRST)
    body = await _body(request)
    engine = _engine(request)
    sheet = await _sheet_asked(request, body)
    job, lease = await engine.submit(sheet, _client(request))
    _leave_other(engine, body.get("instead") if "form" in body else None)
    if job.error is not None:
        raise job.error
    facts = job.snapshot(engine.pool.size)
    facts |= {"lease": lease, "lease_seconds": engine.settings.lease_seconds}
    if "form" in body:
        facts["address"] = await address_of(request, sheet)
    if patience:
        await job.wait_until(lambda one: one.done > 0 or not one.is_active, patience)
        facts |= job.snapshot(engine.pool.size)
        if job.done > 0 and job.error is None:
            facts["picture"] = await _picture(engine, job, sheet)
            return Response(
                await asyncio.to_thread(exports.encode, facts), 202, media_type="application/json"
            )
    return _json(facts, 200 if job.state == "done" else 202)


async def _sheet_asked(request: Request, body: dict[str, Any]) -> Question:
    """Return what a body asks for: as a link, as a form, or key by key."""
    if set(body) == {"link"}:
        if not isinstance(body["link"], str):
            raise SheetError("wrong-type", "'link' must be text", "link", body["link"], "a link")
        return links.parse_link(await _whole_link(request, body["link"]))
    if "form" in body and set(body) <= {"form", "instead"}:
        if not isinstance(body["form"], dict):
            raise SheetError("wrong-type", "'form' must be an object", "form", body["form"], "an object")
        return links.from_form(body["form"])
    return Sheet.model_validate(body)


def _leave_other(engine: Engine, held: Any) -> None:
    """Give up the lease that a form names; one that has lapsed, or names nothing, is given up already."""
    if not isinstance(held, dict):
        return
    job = engine.jobs.get(str(held.get("id")))
    if job is not None:
        engine.leave(job, str(held.get("lease")))


async def _whole_link(request: Request, link: str) -> str:
    """Return a link with the long query in the place of a short name."""
    address, mark, query = link.strip().partition("?")
    found = links.stored_name(query)
    if found is None:
        return link
    stored = await _engine(request).store.link(found[0])
    if stored is None:
        raise NotFoundError(
            "unknown-link", "this server has made no such short link", links.STORED_KEY, found[0]
        )
    return f"{address}{mark}{stored}"


@router.get("/api/jobs/{name}")
async def job_facts(request: Request, name: str) -> Response:
    """Return where a job stands."""
    engine = _engine(request)
    job = engine.job(name)
    job.renew_scripts(engine.lease_length)
    return _json(job.snapshot(engine.pool.size))


@router.post("/api/jobs/{name}/leases/{lease}")
async def renew_lease(request: Request, name: str, lease: str) -> Response:
    """Say that somebody still waits for this job."""
    engine = _engine(request)
    job = engine.job(name)
    engine.renew(job, lease)
    return _json(job.snapshot(engine.pool.size))


@router.delete("/api/jobs/{name}")
async def leave_job(request: Request, name: str) -> Response:
    """Give up a lease, or stop the job for everybody."""
    engine = _engine(request)
    job = engine.job(name)
    pairs = _pairs(request)
    if pairs == {"for": "everyone"}:
        engine.cancel(job)
    elif set(pairs) == {"lease"}:
        engine.leave(job, pairs["lease"])
    else:
        raise SheetError(
            "no-lease",
            "say which lease you give up, or stop the job for everyone",
            "lease",
            None,
            "lease=…, for=everyone",
        )
    return _json(job.snapshot(engine.pool.size))


@router.get("/api/jobs/{name}/events")
async def job_events(request: Request, name: str) -> Response:
    """Return the stream of a job's progress."""
    engine = _engine(request)
    answer = StreamingResponse(streams.events(engine.job(name), engine), media_type="text/event-stream")
    answer.headers["X-Accel-Buffering"] = "no"
    answer.headers["Cache-Control"] = "no-store"
    return answer


def _sheet_for(job: Job, pairs: dict[str, str]) -> Question:
    """Return the question of a query, which must be the job's; the job's own for an empty query."""
    if not pairs:
        return job.sheet
    sheet: Question
    if isinstance(job.sheet, MapSheet):
        sheet = links.map_from_pairs(pairs)
    elif isinstance(job.sheet, CutoffSheet):
        sheet = links.cutoff_from_pairs(pairs)
    else:
        sheet = links.from_pairs(pairs)
    if identity.sheet_id(sheet) != job.id:
        raise ConflictError(
            "another-question", "the link asks something else than this job computes", "id", job.id
        )
    return sheet


@router.get("/api/jobs/{name}/result")
async def job_result(request: Request, name: str) -> Response:
    """Return the result of a job, 202 while it runs; `partial=1` takes what there is."""
    pairs = _pairs(request)
    partial = links.take(pairs, "partial", PARTIAL) == "1"
    engine = _engine(request)
    job = engine.job(name)
    sheet = _sheet_for(job, pairs)
    job.renew_scripts(engine.lease_length)
    if job.error is not None or not (partial or job.is_active):
        _raise_if_over(job)
    if job.is_active and not (partial and job.plan is not None):
        return _accepted(request, job)
    result = await engine.result(job, sheet)
    return Response(await asyncio.to_thread(exports.encode, result), media_type="application/json")


@router.get("/api/jobs/{name}/picture")
async def job_picture(request: Request, name: str) -> Response:
    """Return the figure of a job as far as it is computed, shown as the query says."""
    engine = _engine(request)
    job = engine.job(name)
    sheet = _sheet_for(job, _pairs(request))
    if job.error is not None:
        raise job.error
    drawn = await _picture(engine, job, sheet)
    return Response(await asyncio.to_thread(exports.encode, drawn), media_type="application/json")


async def _picture(engine: Engine, job: Job, sheet: Question) -> dict[str, Any]:
    """Return the figure of what a job has computed so far."""
    revision = job.revision
    if isinstance(sheet, MapSheet):
        drawn = await engine.drawn(job, sheet, figure_map.picture)
        return {"revision": revision} | drawn
    result = await engine.result(job, sheet)
    if isinstance(sheet, CutoffSheet):
        drawn = await asyncio.to_thread(figure_cutoff.picture, sheet, result)
    else:
        drawn = await asyncio.to_thread(picture, sheet, result)
    return {"revision": revision, "complete": result["complete"]} | drawn


# -- the server ---------------------------------------------------------------------------------


@router.get("/api/limits")
async def server_limits(request: Request) -> Response:
    """Return what this server takes, and the grammar of links."""
    settings: Settings = request.app.state.settings
    data = await asyncio.to_thread(limits.describe, settings, _engine(request).calibrator.found)
    store = _engine(request).store
    try:
        data["store"] = await store.usage()
    except StoreError as error:
        data["store"] = {"budget": store.budget} | error.body()
    return _json(data)


@router.get("/health")
async def health(request: Request) -> Response:
    """Say that the server works, in which version, and what it has done."""
    engine = _engine(request)
    state = "restarting" if engine.restarting else "ok"
    trouble = engine.store.trouble
    kept = {"state": "ok" if trouble is None else "failing", "trouble": trouble}
    if engine.store.is_passing:
        kept["state"] = "passing"
    facts = {"status": state, "store": kept, "assets": assets.shelf().digest}
    return _json(facts | identity.versions() | {"counts": engine.facts()})


@router.get("/assets/{digest}/{name:path}")
async def static_file(request: Request, digest: str, name: str) -> Response:
    """Return a static file; its address changes with its content."""
    accepted = request.headers.get("accept-encoding", "")
    asset = await asyncio.to_thread(assets.load, digest, name, compress="gzip" in accepted)
    headers = {"Cache-Control": "public, max-age=31536000, immutable", "Vary": "Accept-Encoding"}
    if asset.compressed:
        headers["Content-Encoding"] = "gzip"
    return Response(asset.body, headers=headers, media_type=asset.media_type)


__all__ = ["JobFailedError", "create_app", "router"]
