"""What tells an open page that it should look again."""

import json
from typing import Annotated

from fastapi import Query

from service.pages.routing import page_router
from service.pages.session import SignedIn
from service.storage.reader import Change, TestFilters
from service.web.fields import Name
from service.web.parts import PartsOf, reading
from service.web.streams import EventStream, Stream

router = page_router()


@router.get("/live")
async def stream_changes(
    parts: PartsOf, session: SignedIn, test: Annotated[Name | None, Query()] = None
) -> EventStream:
    """Server-sent events: one for each test that changes from now on, or for one test alone."""
    leave = parts.streams.enter()
    try:
        newest = await reading(parts.reader.last_change)
    except BaseException:
        leave()
        raise
    return EventStream(Stream(parts, session.key, TestFilters(key=test), newest, _event).told(), leave)


def _event(change: Change) -> str:
    told = json.dumps({"key": change.key, "version": change.version})
    return f"id: {change.number}\nevent: test\ndata: {told}\n\n"
