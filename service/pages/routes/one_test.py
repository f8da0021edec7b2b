"""One test: where it stands, its picture, its results and what happened to it."""

from typing import Annotated

from fastapi import Path, Query, Request, Response

from service.domain.names import NAME_PATTERN
from service.domain.procedure import procedure_of
from service.pages.charts.svg import markup
from service.pages.charts.walk import walk_drawing
from service.pages.rendering import page
from service.pages.routing import page_router
from service.pages.views.one_test import expectation_of, facts_of, paths_of, promises_of
from service.pages.views.picture import View, picture_of, views_of
from service.pages.views.saying import saying_of
from service.web.lookup import known_test
from service.web.parts import PartsOf, computing

router = page_router()

Key = Annotated[str, Path(pattern=NAME_PATTERN)]

# Points of a drawing: more than its pixels would show nothing new.
POINTS = 1600


@router.get("/tests/{key}")
async def show_test(
    request: Request, key: Key, parts: PartsOf, view: Annotated[str, Query(max_length=20)] = ""
) -> Response:
    """The decision in words, the picture and the figures."""
    test, plan = await known_test(parts, key)
    views = views_of(procedure_of(plan))
    chosen = View(view) if view in views else views[0]
    path = await computing(parts, lambda: paths_of(parts.reader, test, plan, POINTS))
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
        facts=facts_of(test, plan),
        promises=promises_of(plan),
        expectation=await computing(parts, lambda: expectation_of(test, plan)),
    )
