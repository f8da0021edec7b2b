"""Designing a plan: its figures change as one types; what satisfies is saved."""

from dataclasses import dataclass, replace
from typing import cast

from fastapi import Request, Response
from fastapi.responses import RedirectResponse

from service.domain.access import Role
from service.domain.checking import attained_by, checked_content
from service.domain.errors import Fault, Invalid, InvalidPlan, PlanDiffers, TooManyQuestions, UnknownPlan
from service.domain.names import NAME_RULE, is_name
from service.domain.plan import Plan
from service.domain.standards import catalogue
from service.ingest.commands import CreatePlan, StoredPlan
from service.pages.failing import status_of
from service.pages.forms import Typed, typed
from service.pages.rendering import page
from service.pages.routes.plans import csv_answer
from service.pages.routing import page_router
from service.pages.session import Session, SignedIn, check_role
from service.pages.simulating import with_simulation
from service.pages.views.candidates import LETTERS, Candidate
from service.pages.views.designing import (
    ADD,
    DESIGN,
    REMOVE,
    SAVE,
    SIMULATE,
    TRUNCATE,
    Design,
    design_in,
    suggestion_for,
)
from service.pages.views.judging import Judged, judged_candidates
from service.pages.views.showing import Shown, shown_of
from service.web.lookup import known_plan
from service.web.parts import Parts, PartsOf, computing
from service.web.requests import request_id_of

router = page_router()

# What the script of the pages adds to its requests; a form that is sent does not have it.
WHILE_TYPING = "x-requested-with"


@dataclass(frozen=True)
class Answer:
    """A design with what it promises; `status` and `trouble` say why there is nothing, where that is so."""

    design: Design
    shown: Shown
    status: int = 200
    trouble: str = ""


@router.get("/design")
async def show_design(request: Request, session: SignedIn, parts: PartsOf) -> Response:
    """Candidates, side by side, as the address has them; buttons change the address."""
    query = dict(request.query_params)
    design = design_in(query, await _start(parts, query.get("plan", "")))
    act = query.get("do", "")
    if act == ADD:
        return RedirectResponse(design.with_another().address(), 303)
    if act.startswith(REMOVE):
        return RedirectResponse(design.without(act.removeprefix(REMOVE)).address(), 303)
    if act.startswith(SAVE) and (candidate := design.named(act.removeprefix(SAVE))) is not None:
        return RedirectResponse(_one(design, candidate).address(f"{DESIGN}/save"), 303)
    if act.startswith(TRUNCATE):
        design, is_changed = await _truncated(parts, design, act.removeprefix(TRUNCATE))
        if is_changed:
            return RedirectResponse(design.address(), 303)
    is_typing = WHILE_TYPING in request.headers
    answer = await _answer(parts, design, may_take_long=not is_typing, may_simulate=act == SIMULATE and not is_typing)
    return _page(request, session, answer)


@router.get("/design/curves.csv")
async def send_curves(request: Request, parts: PartsOf) -> Response:
    """Every point of the curves of a design as CSV."""
    design = design_in(dict(request.query_params))
    candidates, judged = await _judged(parts, design, may_take_long=True, may_simulate=False)
    faults = [Fault(f"/{each.letter}.{path}", fault) for each in candidates for path, fault in each.faults.items()]
    if faults:
        raise InvalidPlan(faults)
    return csv_answer(judged, "design")


@router.get("/design/standards")
async def show_standards(request: Request, parts: PartsOf) -> Response:
    """The catalogue of standard plans, each a start for a design."""
    entries = await computing(parts, lambda: [(entry, attained_by(entry)) for entry in catalogue()])
    return page(request, "standards.html", entries=entries)


@router.get("/design/save")
async def show_saving(request: Request, session: SignedIn) -> Response:
    """One candidate as it would be stored, and the name to store it under."""
    check_role(session, Role.ENGINEER)
    design = design_in(dict(request.query_params))
    return _saving(request, design, Typed({"name": design.candidates[0].name}))


@router.post("/design/save")
async def save(request: Request, session: SignedIn, parts: PartsOf) -> Response:
    """Store it; plans never change afterwards."""
    form = await typed(request, session)
    check_role(session, Role.ENGINEER)
    design = design_in(form.values)
    candidate = design.candidates[0]
    name = form["name"]
    if not is_name(name):
        form = Typed(form.values, {"name": f"must be {NAME_RULE}"})
    if not candidate.faults:
        try:
            document = await computing(parts, lambda: checked_content(candidate.content))
        except Invalid as error:
            candidate = candidate.with_faults(error.faults or (Fault("", str(error)),))
    if candidate.faults or form.faults:
        return _saving(request, replace(design, candidates=(candidate,)), form, status=422)
    try:
        command = CreatePlan(name, document, session.key.name, request_id_of(request))
        outcome = cast("StoredPlan", await parts.road.submit(command))
    except PlanDiffers as error:
        return _saving(request, design, Typed(form.values, {"name": str(error)}), status=status_of(error)[0])
    return RedirectResponse(f"/plans/{outcome.plan.name}", 303)


async def _start(parts: Parts, name: str) -> Plan | None:
    """
    The stored plan that a design starts from; None where it names none.

    Raises:
        UnknownPlan: There is none of this name.
    """
    if name and not is_name(name):
        raise UnknownPlan(name)
    return await known_plan(parts, name) if name else None


def _one(design: Design, candidate: Candidate) -> Design:
    """A design of this candidate alone, as the first."""
    return replace(design, candidates=(replace(candidate, letter=LETTERS[0]),))


async def _truncated(parts: Parts, design: Design, letter: str) -> tuple[Design, bool]:
    """With a suggested truncation, or with the reason why there is none beside its field."""
    candidate = design.named(letter)
    if candidate is None or candidate.faults:
        return design, False
    try:
        suggestion = await computing(parts, lambda: suggestion_for(design, candidate))
    except (ValueError, Invalid) as error:
        said = "; ".join(fault.detail for fault in getattr(error, "faults", ())) or str(error)
        return replace(design, faults={**design.faults, "inflation": f"{letter.upper()}: {said}"}), False
    return design.truncated(letter, suggestion), True


async def _judged(
    parts: Parts, design: Design, *, may_take_long: bool, may_simulate: bool
) -> tuple[tuple[Candidate, ...], list[Judged]]:
    candidates, judged = await computing(
        parts,
        lambda: judged_candidates(design.candidates, may_take_long=may_take_long, may_simulate=may_simulate),
    )
    return candidates, [with_simulation(parts, each, may_begin=may_simulate) for each in judged]


async def _answer(parts: Parts, design: Design, *, may_take_long: bool, may_simulate: bool) -> Answer:
    """What is shown; where too much is being computed the fields alone."""
    try:
        candidates, judged = await _judged(parts, design, may_take_long=may_take_long, may_simulate=may_simulate)
        shown = await computing(parts, lambda: shown_of(judged, design.view, design.seed))
    except TooManyQuestions as error:
        return Answer(design, Shown((), (), (), None, None, ()), status_of(error)[0], str(error))
    return Answer(replace(design, candidates=candidates), shown)


def _page(request: Request, session: Session, answer: Answer) -> Response:
    headers = {"Retry-After": str(TooManyQuestions.retry_after_seconds)} if answer.trouble else None
    return page(
        request,
        "design.html",
        status=answer.status,
        headers=headers,
        design=answer.design,
        shown=answer.shown,
        trouble=answer.trouble,
        may_save=session.may(Role.ENGINEER),
    )


def _saving(request: Request, design: Design, form: Typed, status: int = 200) -> Response:
    candidate = design.candidates[0]
    labels = {each.path: each.label for each in candidate.layout.fields}
    return page(
        request,
        "save_plan.html",
        status=status,
        form=form,
        candidate=candidate,
        labels=labels,
        back=_one(design, candidate).address(),
    )
