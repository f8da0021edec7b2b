"""Access keys, for administrators, and the summary, for dashboards."""

from collections import Counter, defaultdict
from typing import Annotated, cast

from fastapi import APIRouter, Request, Response

from service.api.access import requires
from service.api.bodies import StrictRoute
from service.api.description import answers_with
from service.api.schemas.administration import IssuedKeyOut, KeyForm, KeyOut, KeysOut, SummaryOut
from service.domain.access import AccessKey, Role
from service.domain.state import Decision
from service.ingest.commands import CreateKey, IssuedKey, RevokeKey
from service.web.parts import PartsOf, reading
from service.web.requests import request_id_of

router = APIRouter(prefix="/v1", tags=["administration"], route_class=StrictRoute)


@router.get("/summary", responses=answers_with(), summary="Counts of tests", dependencies=[requires(Role.VIEWER)])
async def show_summary(parts: PartsOf) -> SummaryOut:
    """How many tests there are, by decision, kind and status."""
    by_decision = Counter({decision.value: 0 for decision in Decision})
    by_kind: defaultdict[str, Counter[str]] = defaultdict(Counter)
    by_status: Counter[str] = Counter()
    for row in await reading(parts.reader.counts):
        by_decision[row.decision] += row.tests
        by_kind[row.kind][row.decision] += row.tests
        by_status[row.status] += row.tests
    return SummaryOut(
        tests=by_decision.total(),
        by_decision=dict(by_decision),
        by_kind={kind: dict(counts) for kind, counts in by_kind.items()},
        by_status=dict(by_status),
    )


@router.get("/keys", responses=answers_with(), summary="List keys", dependencies=[requires(Role.ADMINISTRATOR)])
async def list_keys(parts: PartsOf) -> KeysOut:
    """Every key that was ever made; never a secret."""
    keys = await reading(parts.reader.keys)
    return KeysOut(items=[KeyOut.of(key) for key in keys])


@router.post(
    "/keys",
    status_code=201,
    responses=answers_with("key-name-taken", "invalid-key", has_body=True),
    summary="Make a key",
)
async def create_key(
    form: KeyForm,
    request: Request,
    response: Response,
    parts: PartsOf,
    key: Annotated[AccessKey, requires(Role.ADMINISTRATOR)],
) -> IssuedKeyOut:
    """
    The secret is in this answer and nowhere else.

    With `subjects` or `labels` the key is for tests of one of the subjects, and with one of the values of each label:
    others do not exist for it, and it cannot register any.
    """
    command = CreateKey(form.name, form.role, form.expires_at, form.limits(), key.name, request_id_of(request))
    issued = cast("IssuedKey", await parts.road.submit(command))
    response.headers["Cache-Control"] = "no-store"
    return IssuedKeyOut(**dict(KeyOut.of(issued.key)), secret=issued.secret)


@router.delete(
    "/keys/{name}",
    responses=answers_with("not-found"),
    summary="Revoke a key",
)
async def revoke_key(
    name: str, request: Request, parts: PartsOf, key: Annotated[AccessKey, requires(Role.ADMINISTRATOR)]
) -> KeyOut:
    """The key of this name ends at once; the record of it stays."""
    command = RevokeKey(name, key.name, request_id_of(request))
    return KeyOut.of(cast("AccessKey", await parts.road.submit(command)))
