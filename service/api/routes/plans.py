"""Plans: create, list, show."""

from typing import Annotated, cast

from fastapi import APIRouter, Query, Request, Response
from pydantic import BaseModel, ConfigDict

from service.api.access import requires
from service.api.bodies import StrictRoute
from service.api.conditional import etag, not_modified
from service.api.description import answers_with
from service.api.paging import Cursor, Limit, encoded, link_next, text_after
from service.api.schemas.plans import PlanForm, PlanOut, PlansOut, StandardOut, StandardsOut
from service.domain.access import AccessKey, Role
from service.domain.checking import attained_by, checked_content
from service.domain.standards import catalogue
from service.ingest.commands import CreatePlan, StoredPlan
from service.web.lookup import known_plan
from service.web.parts import PartsOf, computing, reading
from service.web.requests import request_id_of

router = APIRouter(prefix="/v1/plans", tags=["plans"], route_class=StrictRoute)
standards_router = APIRouter(prefix="/v1/standard-plans", tags=["plans"], route_class=StrictRoute)


class PlansQuery(BaseModel):
    """The parameters of the list."""

    model_config = ConfigDict(extra="forbid")

    limit: Limit = 100
    cursor: Cursor = None


@router.post(
    "",
    status_code=201,
    responses={
        **answers_with("invalid-plan", "computation-too-large", "plan-differs", has_body=True),
        200: {"description": "The plan exists already with this content", "model": PlanOut},
    },
    summary="Create a plan",
)
async def create_plan(
    form: PlanForm,
    request: Request,
    response: Response,
    parts: PartsOf,
    key: Annotated[AccessKey, requires(Role.ENGINEER)],
) -> PlanOut:
    """The same name with the same content answers 200 with the stored plan; with other content, 409."""
    document = await computing(parts, lambda: checked_content(form.content()))
    outcome = cast(
        "StoredPlan", await parts.road.submit(CreatePlan(form.name, document, key.name, request_id_of(request)))
    )
    response.status_code = 201 if outcome.is_new else 200
    response.headers["Location"] = f"/v1/plans/{outcome.plan.name}"
    response.headers["ETag"] = etag(outcome.plan.fingerprint)
    return PlanOut.of(outcome.plan)


@router.get("", responses=answers_with(), summary="List plans by name", dependencies=[requires(Role.VIEWER)])
async def list_plans(
    request: Request, response: Response, parts: PartsOf, query: Annotated[PlansQuery, Query()]
) -> PlansOut:
    """A page of plans."""
    after = text_after(query.cursor)
    plans = await reading(lambda: parts.reader.plans(after, query.limit + 1))
    page = plans[: query.limit]
    next_cursor = encoded(page[-1].name) if len(plans) > len(page) else None
    link_next(request, response, next_cursor)
    return PlansOut(items=[PlanOut.of(plan) for plan in page], next_cursor=next_cursor)


@router.get(
    "/{name}",
    responses=answers_with("not-found"),
    response_model=PlanOut,
    summary="Show a plan",
    dependencies=[requires(Role.VIEWER)],
)
async def show_plan(name: str, request: Request, response: Response, parts: PartsOf) -> PlanOut | Response:
    """A stored plan with its thresholds and lines."""
    plan = await known_plan(parts, name)
    tag = etag(plan.fingerprint)
    if (unchanged := not_modified(request, tag)) is not None:
        return unchanged
    response.headers["ETag"] = tag
    return PlanOut.of(plan)


@standards_router.get(
    "", responses=answers_with(), summary="List the standard plans", dependencies=[requires(Role.VIEWER)]
)
async def list_standards(parts: PartsOf) -> StandardsOut:
    """Public-domain plans, ready to use, with their sources and the risks that they really attain."""
    attained = await computing(parts, lambda: [(standard, attained_by(standard)) for standard in catalogue()])
    return StandardsOut(items=[StandardOut.of(standard, risks) for standard, risks in attained])
