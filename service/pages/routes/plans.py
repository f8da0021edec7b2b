"""Plans: the list, and what each promises."""

from dataclasses import dataclass
from typing import Annotated

from fastapi import Path, Query, Request, Response

from service.domain.names import NAME_PATTERN
from service.domain.plan import Plan
from service.domain.procedure import procedure_of
from service.domain.sequential_test import Stage
from service.domain.standards import source_of
from service.pages.rendering import page
from service.pages.routing import page_router
from service.pages.simulating import with_simulation
from service.pages.views.curves import check_curves
from service.pages.views.figures import csv_of, table_of
from service.pages.views.judging import Judged, judged_plan
from service.pages.views.listing import stages
from service.pages.views.one_test import promises_of
from service.pages.views.picture import views_of
from service.pages.views.plan_words import family_words
from service.pages.views.showing import shown_of, view_in
from service.storage.reader import TestFilters
from service.web.lookup import known_plan
from service.web.parts import PartsOf, computing, reading

router = page_router()

Name = Annotated[str, Path(pattern=NAME_PATTERN)]
Seed = Annotated[int | None, Query(ge=0, le=2**53)]

ROWS = 50


@dataclass(frozen=True)
class Row:
    """One plan of the list."""

    plan: Plan
    family: str
    parameter: str


@router.get("/plans")
async def show_plans(
    request: Request, parts: PartsOf, after: Annotated[str | None, Query(pattern=NAME_PATTERN)] = None
) -> Response:
    """Plans by name, fifty at a time."""
    found = await reading(lambda: parts.reader.plans(after, ROWS + 1))
    rows = [_row(plan) for plan in found[:ROWS]]
    further = rows[-1].plan.name if len(found) > ROWS else None
    return page(request, "plans.html", rows=rows, further=further, is_first=after is None)


@router.get("/plans/{name}")
async def show_plan(  # noqa: PLR0913 - each argument is a part of the address
    request: Request,
    name: Name,
    parts: PartsOf,
    view: Annotated[str, Query(max_length=20)] = "",
    seed: Seed = None,
    simulate: Annotated[str, Query(max_length=20)] = "",
) -> Response:
    """What it promises in words and figures, its region and its curves."""
    plan = await known_plan(parts, name)
    procedure = procedure_of(plan)
    chosen = view_in(view)
    judged = await computing(parts, lambda: judged_plan(name, plan.document))
    judged = with_simulation(parts, judged, may_begin=bool(simulate))
    shown = await computing(parts, lambda: shown_of([judged], chosen, seed))
    headings, rows = table_of(procedure, plan.content)
    return page(
        request,
        "plan.html",
        plan=plan,
        family=family_words(plan.content["family"]),
        promises=promises_of(plan),
        source=source_of(plan.content.get("standard")),
        shown=shown,
        views=views_of(procedure),
        seed=seed,
        headings=headings,
        rows=rows,
        counts=await reading(lambda: stages(parts.reader.counts(TestFilters(plan=name)))),
        stages=tuple(Stage),
    )


@router.get("/plans/{name}/curves.csv")
async def send_curves(name: Name, parts: PartsOf) -> Response:
    """Every point of the curves as CSV."""
    plan = await known_plan(parts, name)
    judged = with_simulation(parts, await computing(parts, lambda: judged_plan(name, plan.document)), may_begin=False)
    return csv_answer([judged], name)


def csv_answer(judged: list[Judged], name: str) -> Response:
    """
    The figures as a file.

    Raises:
        Conflict, Invalid: As `check_curves`.
    """
    check_curves(judged)
    headers = {"Content-Disposition": f'attachment; filename="{name}-curves.csv"'}
    return Response(csv_of(judged), media_type="text/csv; charset=utf-8", headers=headers)


def _row(plan: Plan) -> Row:
    return Row(plan, family_words(plan.content["family"]), procedure_of(plan).family.parameter)
