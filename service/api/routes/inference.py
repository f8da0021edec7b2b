"""Inference: what may be said once a test is decided."""

from typing import Annotated

from fastapi import APIRouter, Query, Request, Response
from pydantic import BaseModel, ConfigDict, Field

from service.api.access import requires
from service.api.bodies import StrictRoute
from service.api.conditional import etag
from service.api.description import answers_with
from service.api.schemas.inference import InferenceOut
from service.api.unchanged import unchanged_test
from service.domain.access import Role
from service.domain.errors import NotDecided
from service.domain.plan import Plan
from service.domain.sequential_test import SequentialTest
from service.web.asking import inference_for
from service.web.lookup import known_test
from service.web.parts import Parts, PartsOf, computing

router = APIRouter(prefix="/v1/tests/{key}", tags=["tests"], route_class=StrictRoute)

# Nearer to one the tails would be lost in rounding.
LARGEST_LEVEL = 0.999999


class InferenceQuery(BaseModel):
    """How sure to be."""

    model_config = ConfigDict(extra="forbid", allow_inf_nan=False)

    level: Annotated[float, Field(gt=0.0, le=LARGEST_LEVEL, description="Of the confidence interval.")] = 0.95


@router.get(
    "/inference",
    responses=answers_with("not-found", "not-decided", "computation-too-large"),
    response_model=InferenceOut,
    summary="What may be said after the decision",
    dependencies=[requires(Role.VIEWER)],
)
async def show_inference(
    key: str, request: Request, response: Response, parts: PartsOf, query: Annotated[InferenceQuery, Query()]
) -> InferenceOut | Response:
    """A p-value, an interval and estimates that allow for the stopping rule; before the decision, 409."""
    if (unchanged := await unchanged_test(parts, key, request)) is not None:
        return unchanged
    test, plan = await known_test(parts, key)
    if not test.state.is_decided:
        raise NotDecided(key)
    response.headers["ETag"] = etag(test.version)
    return await computing(parts, lambda: _inference(parts, test, plan, query.level))


def _inference(parts: Parts, test: SequentialTest, plan: Plan, level: float) -> InferenceOut:
    return InferenceOut.of(inference_for(parts.reader, test, plan, level), plan, test.state)
