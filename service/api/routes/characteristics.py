"""What plans really promise: exact risks and sample numbers, stored plans or not."""

from collections.abc import Mapping
from typing import Annotated, Any, cast

from fastapi import APIRouter, Query, Request
from pydantic import BaseModel, ConfigDict, Field

from service.api.access import requires
from service.api.bodies import StrictRequest, StrictRoute
from service.api.description import answers_with
from service.api.lookup import known_plan
from service.api.parts import Parts, PartsOf, computing
from service.api.routes.observations import PathQuery
from service.api.schemas.characteristics import CandidateOut, CharacteristicsForm, CharacteristicsOut, ComparisonOut
from service.api.schemas.observations import ObservationsForm, RehearsalForm, RehearsalOut
from service.domain.access import Role
from service.domain.characteristics import common_grid, promise_of
from service.domain.checking import checked_candidates, checked_content
from service.domain.designing import suggested_truncation
from service.domain.errors import Fault, InvalidQuestion, located
from service.domain.observing import observe
from service.domain.procedure import Procedure, procedure_of, procedure_of_document
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
    promise = await computing(parts, lambda: promise_of(plan.document, query.at))
    return CharacteristicsOut.of(promise, plan.document)


@router.post(
    "/characteristics",
    responses=answers_with("computation-too-large", "invalid-question", "invalid-plan", has_body=True),
    summary="Exact risks and sample numbers of plans in the body",
    dependencies=[requires(Role.VIEWER)],
)
async def design(form: CharacteristicsForm, parts: PartsOf) -> CharacteristicsOut | ComparisonOut:
    """For designing: nothing is stored. Candidates are answered side by side, at the same true parameters."""
    return await computing(parts, lambda: _comparison(form) if form.candidates else _design(form))


def _design(form: CharacteristicsForm) -> CharacteristicsOut:
    content, question = form.content(), form.suggest_truncation
    document = checked_content(content)
    suggestion = None if question is None else suggested_truncation(content, question.inflation)
    return CharacteristicsOut.of(promise_of(document, form.at), document, suggestion)


def _comparison(form: CharacteristicsForm) -> ComparisonOut:
    beside = form.model_fields_set - {"candidates", "at"}
    if beside:
        faults = [Fault(f"/{field}", "may not stand beside candidates") for field in sorted(beside)]
        raise InvalidQuestion("Candidates carry their own plans.", faults)
    candidates = form.candidates or []
    documents = checked_candidates([candidate.content() for candidate in candidates])
    at = form.at or common_grid(documents)
    return ComparisonOut(
        candidates=[
            CandidateOut(name=candidate.name, **dict(CharacteristicsOut.of(promise_of(document, at), document)))
            for candidate, document in zip(candidates, documents, strict=True)
        ]
    )


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
    submission = cast("StrictRequest", request).document
    return await computing(parts, lambda: _rehearsed(parts, procedure_of(plan), submission, query.points))


@router.post(
    "/rehearsal",
    responses=answers_with(
        "invalid-plan", "computation-too-large", "invalid-observations", "unit-repeated", has_body=True
    ),
    summary="Run historical observations through a plan in the body",
    dependencies=[requires(Role.VIEWER)],
)
async def rehearse_inline(
    form: RehearsalForm, request: Request, parts: PartsOf, query: Annotated[PathQuery, Query()]
) -> RehearsalOut:
    """As with a stored plan; nothing is stored."""
    submission = cast("StrictRequest", request).document["submission"]

    def run() -> RehearsalOut:
        with located("/plan"):
            procedure = procedure_of_document(checked_content(form.plan.content()))
        with located("/submission"):
            return _rehearsed(parts, procedure, submission, query.points)

    return await computing(parts, run)


def _rehearsed(parts: Parts, procedure: Procedure, submission: Mapping[str, Any], points: int) -> RehearsalOut:
    state = observe(procedure, State(), submission, parts.clock())
    new_units(submission, first_sequence=1, find_known=lambda _: {})
    return RehearsalOut.of(procedure, state, submission, points)
