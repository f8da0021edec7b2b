"""Tests: register, list, show."""

from dataclasses import replace
from typing import Annotated, cast

from fastapi import APIRouter, Query, Request, Response

from service.api.access import requires
from service.api.bodies import StrictRoute
from service.api.conditional import etag, expected_versions
from service.api.description import answers_with
from service.api.filters import FiltersQuery
from service.api.paging import Cursor, Limit, encoded, link_next, text_after
from service.api.schemas.assumptions import AssumptionsOut
from service.api.schemas.outlook import OutlookOut
from service.api.schemas.tests import TestForm, TestOut, TestsOut
from service.api.unchanged import unchanged_test
from service.domain.access import AccessKey, Role
from service.domain.disposing import Verdict
from service.domain.outlook import outlook_of
from service.domain.plan import Plan
from service.domain.procedure import procedure_of
from service.domain.sequential_test import SequentialTest
from service.ingest.commands import RegisteredTest, RegisterTest
from service.storage.reader import TestFilters
from service.web.asking import assumptions_for
from service.web.fields import Moment
from service.web.lookup import known_test
from service.web.parts import Parts, PartsOf, computing, reading
from service.web.requests import request_id_of

router = APIRouter(prefix="/v1/tests", tags=["tests"], route_class=StrictRoute)


class TestsQuery(FiltersQuery):
    """The filters and the page of the list."""

    __test__ = False
    updated_after: Moment | None = None
    disposition: Verdict | None = None
    limit: Limit = 100
    cursor: Cursor = None

    def filters(self) -> TestFilters:
        """For the reader."""
        return replace(super().filters(), updated_after=self.updated_after, disposition=self.disposition)


@router.post(
    "",
    status_code=201,
    responses={
        **answers_with("invalid-test", "key-limited", "test-differs", "version-moved", has_body=True),
        200: {"description": "The test exists already with this content", "model": TestOut},
    },
    summary="Register a test",
)
async def register_test(
    form: TestForm,
    request: Request,
    response: Response,
    parts: PartsOf,
    key: Annotated[AccessKey, requires(Role.ENGINEER)],
) -> TestOut:
    """The same key with the same content answers 200 with the test as it stands; with other content, 409."""
    command = RegisterTest(
        key=form.key,
        plan=form.plan,
        subject=form.subject.subject(),
        labels=form.labels,
        actor=key.name,
        expected_versions=expected_versions(request),
        request_id=request_id_of(request),
        limits=key.limits,
    )
    outcome = cast("RegisteredTest", await parts.road.submit(command))
    response.status_code = 201 if outcome.is_new else 200
    response.headers["Location"] = f"/v1/tests/{outcome.test.key}"
    response.headers["ETag"] = etag(outcome.test.version)
    return TestOut.of(outcome.test, outcome.plan)


@router.get("", responses=answers_with(), summary="List tests by key", dependencies=[requires(Role.VIEWER)])
async def list_tests(
    request: Request, response: Response, parts: PartsOf, query: Annotated[TestsQuery, Query()]
) -> TestsOut:
    """A page of the tests that match every filter given."""
    after, filters = text_after(query.cursor), query.filters()
    items, next_cursor = await reading(lambda: _page(parts, filters, after, query.limit))
    link_next(request, response, next_cursor)
    return TestsOut(items=items, next_cursor=next_cursor)


@router.get(
    "/{key}",
    responses=answers_with("not-found"),
    response_model=TestOut,
    summary="Show a test",
    dependencies=[requires(Role.VIEWER)],
)
async def show_test(key: str, response: Response, parts: PartsOf) -> TestOut:
    """Where a test stands: continue, accept or reject. With the ETag of this version in `If-None-Match`, 304."""
    test, plan = await known_test(parts, key)
    response.headers["ETag"] = etag(test.version)
    return TestOut.of(test, plan)


@router.get(
    "/{key}/outlook",
    responses=answers_with("not-found", "computation-too-large"),
    response_model=OutlookOut,
    summary="What is still needed",
    dependencies=[requires(Role.VIEWER)],
)
async def show_outlook(key: str, request: Request, response: Response, parts: PartsOf) -> OutlookOut | Response:
    """The shortest ways to each decision, and exactly what is to be expected from here."""
    if (unchanged := await unchanged_test(parts, key, request)) is not None:
        return unchanged
    test, plan = await known_test(parts, key)
    response.headers["ETag"] = etag(test.version)
    outlook = await computing(parts, lambda: outlook_of(plan.document, test.state))
    return OutlookOut.of(outlook, test.state)


@router.get(
    "/{key}/assumptions",
    responses=answers_with("not-found"),
    response_model=AssumptionsOut,
    summary="Whether the observations look as the plan supposes",
    dependencies=[requires(Role.VIEWER)],
)
async def show_assumptions(key: str, request: Request, response: Response, parts: PartsOf) -> AssumptionsOut | Response:
    """Checks of independence, steadiness, dispersion, spread and shape; they never change the decision."""
    if (unchanged := await unchanged_test(parts, key, request)) is not None:
        return unchanged
    test, plan = await known_test(parts, key)
    response.headers["ETag"] = etag(test.version)
    return await computing(parts, lambda: _assumptions(parts, test, plan))


def _assumptions(parts: Parts, test: SequentialTest, plan: Plan) -> AssumptionsOut:
    found = assumptions_for(parts.reader, test, plan)
    return AssumptionsOut.of(found, procedure_of(plan).family.name, test)


def _page(parts: Parts, filters: TestFilters, after: str | None, limit: int) -> tuple[list[TestOut], str | None]:
    tests = parts.reader.tests(filters, after, limit + 1)
    page = tests[:limit]
    plans = {name: parts.reader.plan(name) for name in {test.plan for test in page}}
    items = [TestOut.of(test, plan) for test in page if (plan := plans[test.plan]) is not None]
    return items, encoded(page[-1].key) if len(tests) > len(page) else None
