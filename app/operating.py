"""Routes for those who run the server or write programs against it."""

from fastapi import APIRouter, Request
from starlette.responses import Response

from app.metrics import Metrics

router = APIRouter()


@router.get("/metrics")
async def metrics(request: Request) -> Response:
    """Return the numbers of the server as text for a monitoring system."""
    kept: Metrics = request.app.state.metrics
    body, kind = await kept.text(request.headers.get("accept", ""))
    return Response(body, headers={"Content-Type": kind, "Cache-Control": "no-store"})


__all__ = ["router"]
