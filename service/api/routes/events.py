"""Events: which tests have changed, told as it happens."""

from dataclasses import replace
from typing import Annotated, Any

from fastapi import APIRouter, Header, Query
from pydantic import Field

from service.api.access import requires
from service.api.bodies import StrictRoute
from service.api.description import answers_with
from service.api.filters import FiltersQuery
from service.api.schemas.events import EXAMPLE, TestEventOut
from service.domain.access import AccessKey, Role
from service.storage.reader import Change, TestFilters
from service.web.fields import Name
from service.web.parts import PartsOf, reading
from service.web.streams import EventStream, Stream

router = APIRouter(prefix="/v1", tags=["events"], route_class=StrictRoute)

# Numbers of changes fit into 63 bits.
Position = Annotated[int, Field(ge=0, lt=2**63)]


class EventsQuery(FiltersQuery):
    """The filters, and where to begin."""

    key: Name | None = None
    after: Annotated[Position | None, Field(description="Begin after this `id`; 0 tells of every test there is.")] = (
        None
    )

    def filters(self) -> TestFilters:
        """For the reader."""
        return replace(super().filters(), key=self.key)


STREAM: dict[int | str, dict[str, Any]] = {
    200: {
        "description": "A stream of events, open until the caller leaves",
        "content": {EventStream.media_type: {"schema": {"type": "string"}, "example": EXAMPLE}},
    }
}


@router.get(
    "/events",
    status_code=200,
    responses={**answers_with(), **STREAM},
    response_class=EventStream,
    summary="Be told which tests change",
)
async def stream_events(
    parts: PartsOf,
    query: Annotated[EventsQuery, Query()],
    access_key: Annotated[AccessKey, requires(Role.VIEWER)],
    last_event_id: Annotated[Position | None, Header(description="As `after`, and before it.")] = None,
) -> EventStream:
    """
    Server-sent events: one of the type `test` for each test that was registered or has changed.

    Without `Last-Event-ID` or `after` it begins now. With one of them, each test that has changed since is told first,
    once, as it is now. Changes that follow each other closely are told as one. A test may be told again as it was
    before: the same `key` and `version` say the same. An `id` that is newer than anything stored, as after a backup was
    restored, begins at 0.
    """
    filters = query.filters()
    leave = parts.streams.enter()
    try:
        newest = await reading(parts.reader.last_change)
    except BaseException:
        leave()
        raise
    after = query.after if last_event_id is None else last_event_id
    position = newest if after is None else after if after <= newest else 0
    return EventStream(Stream(parts, access_key, filters, position, _event).told(), leave)


def _event(change: Change) -> str:
    return f"id: {change.number}\nevent: test\ndata: {TestEventOut.model_validate(change).model_dump_json()}\n\n"
