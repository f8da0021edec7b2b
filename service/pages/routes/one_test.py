"""One test: where it stands, its picture, its results and what happened to it."""

import asyncio
from typing import Annotated

from fastapi import Path, Query, Request, Response

from service.domain.access import Role
from service.domain.anytime import confidence_at
from service.domain.errors import ComputationTooLarge, TooManyQuestions
from service.domain.names import NAME_PATTERN
from service.domain.plan import Plan
from service.domain.procedure import procedure_of
from service.domain.sequential_test import SequentialTest, Status
from service.pages.charts.svg import markup
from service.pages.charts.walk import walk_drawing
from service.pages.rendering import page
from service.pages.routing import page_router
from service.pages.session import SignedIn
from service.pages.views.one_test import Expectation, expectation_of, facts_of, others_of, promises_of
from service.pages.views.picture import View, picture_of, views_of
from service.pages.views.results import results_of
from service.pages.views.saying import saying_of
from service.pages.views.telling import acts_of, figures_of
from service.web.asking import assumptions_for, inference_for
from service.web.lookup import known_test
from service.web.parts import Parts, PartsOf, computing, reading

router = page_router()

Key = Annotated[str, Path(pattern=NAME_PATTERN)]

Number = Query(ge=0, lt=2**53)

# Levels of confidence to choose from.
LEVELS = (0.8, 0.9, 0.95, 0.99)
# How long a page waits for what it can do without.
PATIENCE_SECONDS = 3.0
# Points of a drawing: more than its pixels would show nothing new.
POINTS = 1600


@router.get("/tests/{key}")
async def show_test(
    request: Request, key: Key, parts: PartsOf, view: Annotated[str, Query(max_length=20)] = ""
) -> Response:
    """The decision in words, the picture and the figures."""
    test, plan = await known_test(parts, key)
    procedure = procedure_of(plan)
    views = views_of(procedure)
    chosen = View(view) if view in views else views[0]
    path = await reading(lambda: parts.walks.path_of(parts.reader, test, plan, POINTS))
    drawing = walk_drawing(picture_of(test, plan, path, chosen))
    return page(
        request,
        "test.html",
        test=test,
        plan=plan,
        saying=saying_of(test, plan),
        drawing=markup(drawing),
        views=views,
        view=chosen,
        others=await reading(lambda: others_of(parts.reader, test)),
        facts=facts_of(test, plan),
        promises=promises_of(plan),
        axis=procedure.family.axis,
        expectation=await _expected_soon(parts, test, plan),
    )


async def _expected_soon(parts: Parts, test: SequentialTest, plan: Plan) -> Expectation:
    """What is to be expected, if it is known soon: the decision and the picture wait for nobody's questions."""
    try:
        async with asyncio.timeout(PATIENCE_SECONDS):
            return await computing(parts, lambda: expectation_of(test, plan))
    except (TimeoutError, TooManyQuestions):
        return Expectation(None, "This takes longer to compute just now; load the page again in a moment.")


@router.get("/tests/{key}/results")
async def show_results(
    request: Request, key: Key, session: SignedIn, parts: PartsOf, after: Annotated[int | None, Number] = None
) -> Response:
    """The log, the latest results unless asked for others, with what was corrected."""
    test, plan = await known_test(parts, key)
    results = await reading(lambda: results_of(parts.reader, test, plan, after))
    least = Role.ENGINEER if test.state.is_decided else Role.COLLECTOR
    may_correct = test.status is Status.OPEN and session.may(least)
    return page(request, "results.html", test=test, results=results, may_correct=may_correct)


@router.get("/tests/{key}/assumptions")
async def show_assumptions(request: Request, key: Key, parts: PartsOf) -> Response:
    """Whether the results look as the plan supposes."""
    test, plan = await known_test(parts, key)
    found = await computing(parts, lambda: assumptions_for(parts.reader, test, plan))
    checks = list(zip(found.checks, found.adjusted, strict=True))
    return page(request, "assumptions.html", test=test, found=found, checks=checks)


@router.get("/tests/{key}/estimates")
async def show_estimates(
    request: Request, key: Key, parts: PartsOf, level: Annotated[float, Query(gt=0.0, le=0.999999)] = 0.95
) -> Response:
    """What may be said once the test has decided."""
    test, plan = await known_test(parts, key)
    procedure, found, reason = procedure_of(plan), None, None
    if test.state.is_decided:
        try:
            found = await computing(parts, lambda: inference_for(parts.reader, test, plan, level))
        except ComputationTooLarge as error:
            reason = str(error)
    return page(
        request,
        "estimates.html",
        test=test,
        parameter=procedure.family.parameter,
        has_sequence=confidence_at(procedure, test.state) is not None,
        figures=() if found is None else figures_of(found, plan),
        looks="" if found is None else found.looks,
        reason=reason,
        level=level,
        levels=sorted({*LEVELS, level}),
    )


@router.get("/tests/{key}/history")
async def show_history(
    request: Request,
    key: Key,
    parts: PartsOf,
    after: Annotated[int, Number] = 0,
    sequence: Annotated[int, Number] = 0,
) -> Response:
    """Every act on the test, in order."""
    test, _ = await known_test(parts, key)
    acts, further = await reading(lambda: acts_of(parts.reader, test, after, sequence))
    return page(request, "history.html", test=test, acts=acts, further=further, after=after)
