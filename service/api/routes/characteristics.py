"""What plans really promise: exact risks and sample numbers, stored plans or not."""

from collections.abc import Mapping
from typing import Annotated, Any, cast

from fastapi import APIRouter, Query, Request
from fastapi.responses import JSONResponse, Response
from pydantic import BaseModel, ConfigDict, Field

from service.api.access import requires
from service.api.bodies import StrictRequest, StrictRoute
from service.api.description import answers_with
from service.api.routes.observations import PathQuery
from service.api.schemas.characteristics import CandidateOut, CharacteristicsForm, CharacteristicsOut, ComparisonOut
from service.api.schemas.observations import ObservationsForm, RehearsalForm, RehearsalOut
from service.api.schemas.simulations import SimulationOut
from service.domain.access import Role
from service.domain.characteristics import common_grid, promise_of
from service.domain.checking import checked_candidates, checked_content
from service.domain.designing import suggested_truncation
from service.domain.errors import Fault, InvalidQuestion, located
from service.domain.observing import observe
from service.domain.procedure import Procedure, procedure_of, procedure_of_document
from service.domain.simulating import Question, question_of
from service.domain.state import State
from service.domain.units import new_units
from service.web.lookup import known_plan
from service.web.parts import Parts, PartsOf, computing

router = APIRouter(prefix="/v1", tags=["characteristics"], route_class=StrictRoute)


SIMULATING: dict[int | str, dict[str, Any]] = {
    202: {"model": SimulationOut, "description": "The simulation is not done yet; `Location` shows its progress."}
}


class CharacteristicsQuery(BaseModel):
    """The true parameters to ask about."""

    model_config = ConfigDict(extra="forbid", allow_inf_nan=False)

    at: Annotated[list[float], Field(max_length=500, description="True parameters; a grid without any.")] = []
    seed: int | None = Field(None, description="Of an invariant plan: the seed of the simulation, 1 when left out.")


@router.get(
    "/plans/{name}/characteristics",
    responses={**answers_with("not-found", "computation-too-large", "invalid-question"), **SIMULATING},
    response_model=CharacteristicsOut,
    summary="Risks and sample numbers of a stored plan",
    dependencies=[requires(Role.VIEWER)],
)
async def show_characteristics(
    name: str, parts: PartsOf, query: Annotated[CharacteristicsQuery, Query()]
) -> CharacteristicsOut | Response:
    """
    At these parameters, or on a grid fit for plotting: exact, or simulated for an invariant plan.

    A simulation that is not done yet answers 202 with its address; this question asked again answers 200 when it is.
    """
    plan = await known_plan(parts, name)
    if _is_simulated(plan.document, query.seed):
        return _simulated(parts, question_of(plan.document, query.at, query.seed))
    promise = await computing(parts, lambda: promise_of(plan.document, query.at))
    return CharacteristicsOut.of(promise, plan.document)


@router.post(
    "/characteristics",
    responses={
        **answers_with("computation-too-large", "invalid-question", "invalid-plan", has_body=True),
        **SIMULATING,
    },
    response_model=CharacteristicsOut | ComparisonOut,
    summary="Risks and sample numbers of plans in the body",
    dependencies=[requires(Role.VIEWER)],
)
async def design(form: CharacteristicsForm, parts: PartsOf) -> CharacteristicsOut | ComparisonOut | Response:
    """
    For designing: nothing is stored. Candidates are answered side by side, at the same true parameters.

    An invariant plan is answered as when it is stored: with 202 and an address while its simulation runs.
    """
    found = await computing(parts, lambda: _comparison(form) if form.candidates else _design(form))
    return _simulated(parts, found) if isinstance(found, Question) else found


def _is_simulated(document: str, seed: int | None) -> bool:
    """Whether a plan's figures are; a seed means nothing to others."""
    if procedure_of_document(document).family.is_invariant:
        return True
    if seed is not None:
        fault = Fault("/seed", "means nothing for exact figures")
        raise InvalidQuestion("The figures of this plan are exact.", [fault])
    return False


def _simulated(parts: Parts, question: Question) -> CharacteristicsOut | Response:
    simulation = parts.simulations.asked(question)
    if simulation.promise is not None:
        return CharacteristicsOut.of(simulation.promise, question.document)
    if simulation.problem is not None:
        raise simulation.problem
    headers = {"Location": f"/v1/simulations/{simulation.id}", "Retry-After": "1"}
    return JSONResponse(SimulationOut.of(simulation).model_dump(mode="json"), 202, headers)


def _design(form: CharacteristicsForm) -> CharacteristicsOut | Question:
    content, question = form.content(), form.suggest_truncation
    if question is not None and content.get("statistic") == "invariant":
        suggested_truncation(content, question.inflation)
    document = checked_content(content)
    if _is_simulated(document, form.seed):
        return question_of(document, form.at, form.seed)
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
