"""All tests: what is running, what waits for a disposition, what is closed."""

from typing import Annotated

from fastapi import Query, Request, Response

from service.pages.rendering import page
from service.pages.routing import page_router
from service.pages.views.listing import Filters, listing_of
from service.web.fields import Sought
from service.web.parts import PartsOf, reading

router = page_router()

Words = Annotated[Sought, Query()]


@router.get("/")
async def show_tests(  # noqa: PLR0913 - each argument is a part of the address
    request: Request,
    parts: PartsOf,
    stage: Words = "",
    words: Words = "",
    decision: Words = "",
    kind: Words = "",
    plan: Words = "",
    label: Words = "",
    before: Annotated[int | None, Query(ge=0, lt=2**63)] = None,
) -> Response:
    """The tests that changed last, fifty at a time."""
    filters = Filters(stage, words.strip(), decision, kind, plan.strip(), label.strip())
    listing = await reading(lambda: listing_of(parts.reader, filters, before))
    return page(request, "tests.html", filters=filters, listing=listing, is_first=before is None)
