"""What people do to a test: correct an observation, dispose of the subject."""

import hashlib
from typing import Annotated, cast

from fastapi import APIRouter, Header, Request, Response

from service.api.access import requires
from service.api.bodies import StrictRequest, StrictRoute
from service.api.conditional import etag, expected_versions
from service.api.description import answers_with
from service.api.schemas.acts import CorrectedOut, CorrectionForm, DispositionForm
from service.api.schemas.tests import TestOut
from service.domain.access import AccessKey, Role
from service.ingest.commands import Corrected, Dispose, Disposed, PostCorrection
from service.web.parts import PartsOf
from service.web.requests import request_id_of

router = APIRouter(prefix="/v1/tests/{key}", tags=["tests"], route_class=StrictRoute)


@router.post(
    "/corrections",
    status_code=201,
    responses=answers_with(
        "invalid-correction",
        "idempotency-key-reused",
        "not-found",
        "changes-nothing",
        "unit-repeated",
        "test-closed",
        "in-progress",
        "version-moved",
        has_body=True,
    ),
    summary="Correct an observation",
)
async def post_correction(  # noqa: PLR0913 - each argument is a part of the request
    key: str,
    form: CorrectionForm,
    request: Request,
    response: Response,
    parts: PartsOf,
    access_key: Annotated[AccessKey, requires(Role.COLLECTOR)],
    idempotency_key: Annotated[str | None, Header(min_length=1, max_length=255, pattern=r"^[\x20-\x7e]+$")] = None,
) -> CorrectedOut:
    """
    Void or replace one observation, and run the log again; what was posted stays on record beside it.

    After the decision this needs the role engineer, and is marked.
    """
    command = PostCorrection(
        test=key,
        observation=form.sequence,
        replacement=cast("StrictRequest", request).document.get("observation"),
        reason=form.reason,
        body_digest=hashlib.sha256(await request.body()).hexdigest(),
        actor=access_key.name,
        may_correct_decided=access_key.role.includes(Role.ENGINEER),
        idempotency_key=idempotency_key,
        expected_versions=expected_versions(request),
        request_id=request_id_of(request),
        limits=access_key.limits,
    )
    outcome = cast("Corrected", await parts.road.submit(command))
    response.headers["ETag"] = etag(outcome.test.version)
    if outcome.is_replay:
        response.headers["Idempotent-Replayed"] = "true"
    return CorrectedOut.after(outcome)


@router.post(
    "/disposition",
    status_code=201,
    responses=answers_with("invalid-disposition", "not-found", "test-closed", "version-moved", has_body=True),
    summary="Dispose of the subject",
)
async def dispose(  # noqa: PLR0913 - each argument is a part of the request
    key: str,
    form: DispositionForm,
    request: Request,
    response: Response,
    parts: PartsOf,
    access_key: Annotated[AccessKey, requires(Role.ENGINEER)],
) -> TestOut:
    """Say what was finally done with the subject, and close the test; the same again by the same key answers 200."""
    command = Dispose(
        test=key,
        verdict=form.disposition,
        reason=form.reason,
        deviation_reason=form.deviation_reason,
        actor=access_key.name,
        expected_versions=expected_versions(request),
        request_id=request_id_of(request),
        limits=access_key.limits,
    )
    outcome = cast("Disposed", await parts.road.submit(command))
    response.status_code = 201 if outcome.is_new else 200
    response.headers["ETag"] = etag(outcome.test.version)
    return TestOut.of(outcome.test, outcome.plan)
