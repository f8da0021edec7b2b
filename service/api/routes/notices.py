"""Receivers of notices: register, list, remove, try; and what was told them."""

from typing import Annotated, cast

from fastapi import APIRouter, Path, Query, Request, Response
from pydantic import BaseModel, ConfigDict

from service.api.access import requires
from service.api.bodies import StrictRoute
from service.api.description import answers_with
from service.api.paging import Cursor, Limit, encoded, link_next, text_after
from service.api.schemas.notices import (
    IssuedReceiverOut,
    NoticeOut,
    NoticesOut,
    ReceiverForm,
    ReceiverOut,
    ReceiversOut,
)
from service.domain.access import AccessKey, Role
from service.domain.errors import UnknownReceiver
from service.domain.notices import NoticeState
from service.domain.receivers import Receiver
from service.ingest.commands import (
    Addressed,
    CreateReceiver,
    IssuedReceiver,
    RemoveReceiver,
    SendAgain,
    SendTrial,
)
from service.web.parts import PartsOf, reading
from service.web.requests import request_id_of

router = APIRouter(prefix="/v1", tags=["notices"], route_class=StrictRoute)


class NoticesQuery(BaseModel):
    """Which notices, and which page of them."""

    model_config = ConfigDict(extra="forbid")

    state: NoticeState | None = None
    limit: Limit = 100
    cursor: Cursor = None


@router.post(
    "/receivers",
    status_code=201,
    responses=answers_with("receiver-name-taken", "too-many-receivers", "invalid-receiver", has_body=True),
    summary="Register a receiver",
)
async def create_receiver(
    form: ReceiverForm,
    request: Request,
    response: Response,
    parts: PartsOf,
    key: Annotated[AccessKey, requires(Role.ADMINISTRATOR)],
) -> IssuedReceiverOut:
    """
    It is told of decisions, of corrections that change one, and of dispositions, from now on.

    With `subjects` or `labels` it is told of tests of one of the subjects, and with one of the values of each label.
    The secret, with which it verifies what it is told, is in this answer and nowhere else.
    """
    allowed = parts.settings.notices_allowed
    command = CreateReceiver(form.name, form.address, form.limits(), allowed, key.name, request_id_of(request))
    receiver = cast("IssuedReceiver", await parts.road.submit(command)).receiver
    response.headers["Cache-Control"] = "no-store"
    return IssuedReceiverOut(**dict(ReceiverOut.of(receiver)), secret=receiver.secret or "")


@router.get(
    "/receivers",
    responses=answers_with(),
    summary="List receivers",
    dependencies=[requires(Role.ADMINISTRATOR)],
)
async def list_receivers(parts: PartsOf) -> ReceiversOut:
    """Every receiver that was ever registered; never a secret."""
    receivers = await reading(parts.reader.notices.receivers)
    return ReceiversOut(items=[ReceiverOut.of(receiver) for receiver in receivers])


@router.delete("/receivers/{name}", responses=answers_with("not-found"), summary="Remove a receiver")
async def remove_receiver(
    name: str, request: Request, parts: PartsOf, key: Annotated[AccessKey, requires(Role.ADMINISTRATOR)]
) -> ReceiverOut:
    """It is told nothing more; what waits for it is forgotten, and so are its secret and its notices."""
    command = RemoveReceiver(name, key.name, request_id_of(request))
    return ReceiverOut.of(cast("Receiver", await parts.road.submit(command)))


@router.post(
    "/receivers/{name}/trial",
    status_code=202,
    responses=answers_with("not-found"),
    summary="Send a trial notice",
    dependencies=[requires(Role.ADMINISTRATOR)],
)
async def send_trial(name: str, parts: PartsOf) -> NoticeOut:
    """A notice of the type notice.trial goes to this receiver; its list of notices shows how that went."""
    addressed = cast("Addressed", await parts.road.submit(SendTrial(name)))
    return NoticeOut.of(addressed.notice, addressed.receiver)


@router.get(
    "/receivers/{name}/notices",
    responses=answers_with("not-found"),
    summary="What a receiver was told",
    dependencies=[requires(Role.ADMINISTRATOR)],
)
async def list_notices(
    name: str, request: Request, response: Response, parts: PartsOf, query: Annotated[NoticesQuery, Query()]
) -> NoticesOut:
    """Its notices in the order in which they were made, with how far each has come; delivered ones for some days."""
    after = text_after(query.cursor)
    notices = parts.reader.notices
    receiver = await reading(lambda: notices.receiver(name))
    if receiver is None:
        raise UnknownReceiver(name)
    found = await reading(lambda: notices.page(receiver, query.state, after, query.limit + 1))
    page = found[: query.limit]
    next_cursor = encoded(page[-1].id) if len(found) > len(page) else None
    link_next(request, response, next_cursor)
    return NoticesOut(items=[NoticeOut.of(notice, receiver.name) for notice in page], next_cursor=next_cursor)


@router.post(
    "/notices/{id}/again",
    status_code=202,
    responses=answers_with("not-found", "notice-waiting"),
    summary="Send a notice again",
    dependencies=[requires(Role.ADMINISTRATOR)],
)
async def send_again(notice: Annotated[str, Path(alias="id")], parts: PartsOf) -> NoticeOut:
    """A dead notice, or a delivered one that got lost at the other end, waits once more, from its first attempt on."""
    addressed = cast("Addressed", await parts.road.submit(SendAgain(notice)))
    return NoticeOut.of(addressed.notice, addressed.receiver)
