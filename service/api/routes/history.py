"""What happened to a test: every act, in order."""

from itertools import islice
from typing import Annotated

from fastapi import APIRouter, Query, Request, Response
from pydantic import BaseModel, ConfigDict

from service.api.access import requires
from service.api.bodies import StrictRoute
from service.api.conditional import etag, not_modified
from service.api.description import answers_with
from service.api.paging import Cursor, Limit, encoded, link_next, numbers_after
from service.api.schemas.history import ActOut, HistoryOut
from service.domain.access import Role
from service.domain.chain import Entry
from service.domain.sequential_test import SequentialTest
from service.web.lookup import known_test
from service.web.parts import Parts, PartsOf, reading

router = APIRouter(prefix="/v1/tests/{key}", tags=["tests"], route_class=StrictRoute)


class HistoryQuery(BaseModel):
    """The page of the history."""

    model_config = ConfigDict(extra="forbid")

    limit: Limit = 100
    cursor: Cursor = None


@router.get(
    "/history",
    responses=answers_with("not-found"),
    response_model=HistoryOut,
    summary="What happened to a test",
    dependencies=[requires(Role.VIEWER)],
)
async def show_history(
    key: str, request: Request, response: Response, parts: PartsOf, query: Annotated[HistoryQuery, Query()]
) -> HistoryOut | Response:
    """Every act on the test in order: who, when, which request, and what; chained, so that a change shows."""
    test, _ = await known_test(parts, key)
    tag = etag(test.version)
    if (unchanged := not_modified(request, tag)) is not None:
        return unchanged
    after, sequence = numbers_after(query.cursor)
    entries = await reading(lambda: _acts(parts, test, after, sequence, query.limit + 1))
    page = entries[: query.limit]
    next_cursor = None
    if len(entries) > len(page):
        sequence = max([sequence, *(entry.details.get("last_sequence", 0) for entry in page)])
        next_cursor = encoded(page[-1].number, sequence)
    links = ["" if after == 0 else None, *(entry.link for entry in page)]
    response.headers["ETag"] = tag
    link_next(request, response, next_cursor)
    return HistoryOut(
        key=test.key,
        length=test.history.length,
        link=test.history.link,
        items=[ActOut.of(entry, previous) for entry, previous in zip(page, links, strict=False)],
        next_cursor=next_cursor,
    )


def _acts(parts: Parts, test: SequentialTest, after: int, sequence: int, limit: int) -> list[Entry]:
    return list(islice(parts.reader.log.acts(test.key, after, sequence, test.history.length), limit))
