"""Observations: post, read the log, draw the path."""

import csv
import hashlib
import io
from collections.abc import Iterator
from itertools import islice
from typing import Annotated, Any, cast

from fastapi import APIRouter, Header, Query, Request, Response
from fastapi.responses import StreamingResponse
from pydantic import BaseModel, ConfigDict, Field

from service.api.access import requires
from service.api.bodies import StrictRequest, StrictRoute
from service.api.conditional import etag, expected_versions, not_modified
from service.api.description import answers_with
from service.api.paging import Cursor, Limit, encoded, link_next, number_after
from service.api.schemas.observations import (
    LoggedOut,
    LogOut,
    ObservationsForm,
    PathOut,
    csv_columns,
    csv_row,
    drawn,
)
from service.api.schemas.tests import PostedOut
from service.domain.access import AccessKey, Role
from service.domain.log import expanded
from service.domain.plan import Plan
from service.domain.procedure import procedure_of
from service.domain.sequential_test import SequentialTest
from service.ingest.commands import Posted, PostObservations
from service.web.lookup import known_test
from service.web.parts import Parts, PartsOf, reading
from service.web.requests import request_id_of

router = APIRouter(prefix="/v1/tests/{key}", tags=["observations"], route_class=StrictRoute)

CSV = "text/csv"


class LogQuery(BaseModel):
    """The page of the log."""

    model_config = ConfigDict(extra="forbid")

    limit: Limit = 100
    cursor: Cursor = None


class PathQuery(BaseModel):
    """How finely to draw."""

    model_config = ConfigDict(extra="forbid")

    points: Annotated[int, Field(ge=4, le=5000, description="Largest number of points.")] = 500


@router.post(
    "/observations",
    status_code=201,
    responses=answers_with(
        "invalid-observations",
        "idempotency-key-reused",
        "not-found",
        "unit-repeated",
        "test-closed",
        "in-progress",
        "version-moved",
        has_body=True,
    ),
    summary="Post observations",
)
async def post_observations(  # noqa: PLR0913 - each argument is a part of the request
    key: str,
    form: ObservationsForm,  # noqa: ARG001 - what is stored is the body as received; this checked its form
    request: Request,
    response: Response,
    parts: PartsOf,
    access_key: Annotated[AccessKey, requires(Role.COLLECTOR)],
    idempotency_key: Annotated[str | None, Header(min_length=1, max_length=255, pattern=r"^[\x20-\x7e]+$")] = None,
) -> PostedOut:
    """
    Take the results of one submission and answer with the new state.

    With an `Idempotency-Key`, a repeated submission is answered as the first one was and changes nothing.
    """
    command = await _command(key, request, access_key, idempotency_key)
    outcome = cast("Posted", await parts.road.submit(command))
    response.headers["ETag"] = etag(outcome.test.version)
    if outcome.is_replay:
        response.headers["Idempotent-Replayed"] = "true"
    return PostedOut.after(outcome)


@router.get(
    "/observations",
    responses={
        **answers_with("not-found"),
        200: {"description": "The log", "content": {CSV: {"example": "sequence,value,size\r\n1,0,1\r\n"}}},
    },
    response_model=LogOut,
    response_model_exclude_unset=True,
    summary="Read the log",
    dependencies=[requires(Role.VIEWER)],
)
async def read_log(
    key: str, request: Request, response: Response, parts: PartsOf, query: Annotated[LogQuery, Query()]
) -> LogOut | Response:
    """One row for each observation: a page of JSON, or with `Accept: text/csv` the whole log."""
    test, plan = await known_test(parts, key)
    wants_csv = CSV in request.headers.get("accept", "")
    tag = etag(test.version, ".csv" if wants_csv else "")
    headers = {"ETag": tag, "Vary": "Accept"}
    if (unchanged := not_modified(request, tag, headers)) is not None:
        return unchanged
    if wants_csv:
        return StreamingResponse(_csv(parts, test, plan), media_type=f"{CSV}; charset=utf-8", headers=headers)
    after = number_after(query.cursor)
    items = await reading(lambda: _log_page(parts, test, plan, after, query.limit + 1))
    page = items[: query.limit]
    next_cursor = encoded(page[-1].sequence) if len(items) > len(page) else None
    response.headers.update(headers)
    link_next(request, response, next_cursor)
    return LogOut(items=page, next_cursor=next_cursor)


@router.get(
    "/path",
    responses=answers_with("not-found"),
    response_model=PathOut,
    summary="The walk of the evidence, for drawing",
    dependencies=[requires(Role.VIEWER)],
)
async def show_path(
    key: str, request: Request, response: Response, parts: PartsOf, query: Annotated[PathQuery, Query()]
) -> PathOut | Response:
    """The log-likelihood ratio and the totals after each counted observation, thinned, and the region around them."""
    test, plan = await known_test(parts, key)
    tag = etag(test.version)
    if (unchanged := not_modified(request, tag)) is not None:
        return unchanged
    response.headers["ETag"] = tag
    return await reading(lambda: _path(parts, test, plan, query.points))


async def _command(key: str, request: Request, access_key: AccessKey, idempotency_key: str | None) -> PostObservations:
    strict = cast("StrictRequest", request)
    body = await request.body()
    return PostObservations(
        test=key,
        body=body.decode("utf-8"),
        document=cast("dict[str, Any]", strict.document),
        body_digest=hashlib.sha256(body).hexdigest(),
        actor=access_key.name,
        idempotency_key=idempotency_key,
        expected_versions=expected_versions(request),
        request_id=request_id_of(request),
        limits=access_key.limits,
    )


def _log_page(parts: Parts, test: SequentialTest, plan: Plan, after: int, limit: int) -> list[LoggedOut]:
    entries = expanded(procedure_of(plan).family, test, parts.reader.log.corrected(test, after))
    return [LoggedOut.of(entry) for entry in islice((e for e in entries if e.sequence > after), limit)]


def _csv(parts: Parts, test: SequentialTest, plan: Plan) -> Iterator[str]:
    family = procedure_of(plan).family
    columns = csv_columns(family)
    yield _csv_line(columns)
    for entry in expanded(family, test, parts.reader.log.corrected(test)):
        row = csv_row(family, entry)
        yield _csv_line([_cell(row.get(column)) for column in columns])


def _csv_line(cells: list[str]) -> str:
    line = io.StringIO()
    csv.writer(line).writerow(cells)
    return line.getvalue()


def _cell(value: object) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    return "" if value is None else str(value)


def _path(parts: Parts, test: SequentialTest, plan: Plan, points: int) -> PathOut:
    procedure = procedure_of(plan)
    path = parts.walks.path_of(parts.reader, test, plan, points)
    return PathOut(key=test.key, decision=test.state.decision, **drawn(procedure, path))
