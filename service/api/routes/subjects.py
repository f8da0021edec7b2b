"""Subjects: all tests of one lot or experiment, and their joint decision."""

from typing import Annotated

from fastapi import APIRouter, Path

from service.api.access import requires
from service.api.description import answers_with
from service.api.schemas.subjects import SubjectStateOut
from service.domain.access import Role
from service.domain.errors import InvalidQuestion, UnknownSubject
from service.domain.joint import joint_of
from service.domain.sequential_test import SubjectKind
from service.storage.reader import TestFilters
from service.web.fields import Text
from service.web.parts import Parts, PartsOf, reading

# The name of a subject is free text, slashes included, so that this is no strict route.
router = APIRouter(prefix="/v1/subjects", tags=["tests"])

MOST_TESTS = 500


@router.get(
    "/{kind}/{name:path}",
    responses=answers_with("not-found", "invalid-question"),
    summary="The tests of one subject and their joint decision",
    dependencies=[requires(Role.VIEWER)],
)
async def show_subject(kind: SubjectKind, name: Annotated[Text, Path()], parts: PartsOf) -> SubjectStateOut:
    """Rejected when one test rejects, accepted when all accept; with the joint risks of deciding so."""
    return await reading(lambda: _subject(parts, kind, name))


def _subject(parts: Parts, kind: SubjectKind, name: str) -> SubjectStateOut:
    found = parts.reader.tests(TestFilters(kind=kind, subject=name), None, MOST_TESTS + 1)
    if not found:
        raise UnknownSubject(name)
    if len(found) > MOST_TESTS:
        raise InvalidQuestion(f"The subject {name!r} has more than {MOST_TESTS} tests; list them in pages.")
    tests = [(test, plan) for test in found if (plan := parts.reader.plan(test.plan)) is not None]
    return SubjectStateOut.of(tests, joint_of(tests))
