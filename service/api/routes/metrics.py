"""Figures for monitoring."""

from typing import Any

from fastapi import APIRouter, Response

from service.api.access import requires_metrics
from service.api.description import answers_with
from service.domain.errors import DatabaseAway
from service.web.metrics import MEDIA_TYPE, outbox_text
from service.web.parts import Parts, PartsOf, reading

router = APIRouter(tags=["health"])

FIGURES: dict[int | str, dict[str, Any]] = {
    200: {
        "description": "The text format of Prometheus",
        "content": {"text/plain": {"schema": {"type": "string"}, "example": "sprt_event_streams 2.0\n"}},
    }
}


@router.get(
    "/metrics",
    responses={**answers_with("key-limited"), **FIGURES},
    response_class=Response,
    summary="Figures for monitoring",
    dependencies=[requires_metrics()],
)
async def show_metrics(parts: PartsOf) -> Response:
    """Requests, latencies, what waits, groups, commits, decisions, notices and streams, added up over all processes."""
    return Response(await reading(lambda: _figures(parts)), media_type=MEDIA_TYPE)


def _figures(parts: Parts) -> bytes:
    """All figures; those of the outbox are left out while the database is away, which the others show."""
    own = parts.metrics.text()
    try:
        return own + outbox_text(parts.reader.notices.figures(), parts.clock())
    except DatabaseAway:
        return own
