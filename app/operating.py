"""Routes for those who run the server or write programs against it."""

from fastapi import APIRouter, Request
from starlette.responses import Response

from app import openapi
from app.metrics import Metrics
from app.replies import json_reply
from app.settings import Settings

router = APIRouter()


@router.get("/metrics")
async def metrics(request: Request) -> Response:
    """Return the numbers of the server as text for a monitoring system."""
    kept: Metrics = request.app.state.metrics
    body, kind = await kept.text(request.headers.get("accept", ""))
    return Response(body, headers={"Content-Type": kind, "Cache-Control": "no-store"})


@router.get("/api/openapi.json")
async def description(request: Request) -> Response:
    """Return the JSON routes in the OpenAPI form."""
    settings: Settings = request.app.state.settings
    made = openapi.document(settings.prefix, with_key=settings.key is not None)
    return json_reply(made)


__all__ = ["router"]
