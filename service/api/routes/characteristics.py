"""What plans really promise: exact risks and sample numbers, stored plans or not."""

from typing import Annotated, cast

from fastapi import APIRouter, Query, Request
from pydantic import BaseModel, ConfigDict, Field

from service.api.access import requires
from service.api.bodies import StrictRequest, StrictRoute
from service.api.description import answers_with
from service.api.lookup import known_plan
from service.api.parts import PartsOf, computing
from service.api.routes.observations import PathQuery
from service.api.schemas.characteristics import CharacteristicsForm, CharacteristicsOut
from service.api.schemas.observations import ObservationsForm, RehearsalOut
from service.domain.access import Role
from service.domain.characteristics import promise_of
from service.domain.observing import observe
from service.domain.procedure import checked_content, procedure_of
from service.domain.state import State
from service.domain.units import new_units

router = APIRouter(prefix="/v1", tags=["characteristics"], route_class=StrictRoute)


class CharacteristicsQuery(BaseModel):
    """The true parameters to ask about."""

    model_config = ConfigDict(extra="forbid", allow_inf_nan=False)

    at: Annotated[list[float], Field(max_length=500, description="True parameters; a grid without any.")] = []


@router.get(
    "/plans/{name}/characteristics",
    responses=answers_with("not-found", "computation-too-large", "invalid-question"),
    summary="Exact risks and sample numbers of a stored plan",
    dependencies=[requires(Role.VIEWER)],
)
async def show_characteristics(
    name: str, parts: PartsOf, query: Annotated[CharacteristicsQuery, Query()]
) -> CharacteristicsOut:
    """At these parameters, or on a grid fit for plotting."""
    plan = await known_plan(parts, name)
    return CharacteristicsOut.of(await computing(parts, lambda: promise_of(plan.document, query.at)))


@router.post(
    "/characteristics",
    responses=answers_with("computation-too-large", "invalid-question", "invalid-plan", has_body=True),
    summary="Exact risks and sample numbers of a plan in the body",
    dependencies=[requires(Role.VIEWER)],
)
async def design(form: CharacteristicsForm, parts: PartsOf) -> CharacteristicsOut:
    """For designing: nothing is stored."""
    document = checked_content(form.content())
    return CharacteristicsOut.of(await computing(parts, lambda: promise_of(document, form.at)))


@router.post(
    "/plans/{name}/rehearsal",
    responses=answers_with("not-found", "invalid-observations", "unit-repeated", has_body=True),
    summary="Run historical observations through a stored plan",
    dependencies=[requires(Role.VIEWER)],
)
async def rehearse(
    name: str,
    form: ObservationsForm,  # noqa: ARG001 - what is rehearsed is the body as received; this checked its form
    request: Request,
    parts: PartsOf,
    query: Annotated[PathQuery, Query()],
) -> RehearsalOut:
    """What the plan would have answered, and the path to it; nothing is stored."""
    plan = await known_plan(parts, name)
    document = cast("StrictRequest", request).document

    def run() -> RehearsalOut:
        procedure = procedure_of(plan)
        state = observe(procedure, State(), document, parts.clock())
        new_units(document, first_sequence=1, find_known=lambda _: {})
        return RehearsalOut.of(procedure, state, document, query.points)

    return await computing(parts, run)
