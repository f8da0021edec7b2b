"""Is it alive, and is it ready? Open to all: they say nothing but that."""

import logging
from typing import Any

from fastapi import APIRouter

from service.api.problems import RequestProblem
from service.api.schemas.administration import HealthOut
from service.ingest.commands import Probe
from service.web.parts import PartsOf, reading

logger = logging.getLogger(__name__)

router = APIRouter(tags=["health"])

NOT_READY: dict[int | str, dict[str, Any]] = {
    503: {
        "description": "Not ready",
        "content": {"application/problem+json": {"schema": {"$ref": "#/components/schemas/ProblemOut"}}},
    }
}


@router.get("/healthz", summary="Is the process alive?")
async def health() -> HealthOut:
    """Answers as long as the process can."""
    return HealthOut(status="alive")


@router.get("/readyz", summary="Can it take results?", responses=NOT_READY)
async def readiness(parts: PartsOf) -> HealthOut:
    """Checks that the database answers, has the schema this version knows, and takes writes where one failed before."""
    try:
        await reading(parts.check_ready)
        if parts.road.has_failed:
            await parts.road.submit(Probe())
    except Exception:
        logger.exception("not ready")
        detail = "The database does not answer or takes no writes, or its schema is another; see the log."
        raise RequestProblem("overloaded", detail, headers={"Retry-After": "5"}) from None
    return HealthOut(status="ready")
