"""
Every error as a problem document (RFC 9457): the one place that knows a status.

`PROBLEMS` lists all types; `OF_ERRORS` translates the domain's errors. An unexpected error becomes a 500 in `requests`.
"""

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from fastapi import FastAPI, Request
from fastapi.exceptions import RequestValidationError
from fastapi.responses import JSONResponse
from starlette.exceptions import HTTPException

from service.domain import errors
from service.domain.errors import DomainError, Fault

MEDIA_TYPE = "application/problem+json"
TYPE_PREFIX = "urn:sprt-monitor:problem:"
LONGEST_ECHO = 60

# Rules in the words of this service where the validator has words of a programmer.
RULES = {
    "missing": "is required",
    "extra_forbidden": "is not a field of this body or parameter of this address",
    "dict_type": "must be an object",
    "model_attributes_type": "must be an object",
    "list_type": "must be an array",
    "too_short": "must not be empty",
    "float_type": "must be a number",
    "int_type": "must be a whole number",
    "string_type": "must be a text",
    "bool_type": "must be true or false",
}
# What callers send comes back in these; an answer stays small whatever it was.
LONGEST_TEXT = 1000


@dataclass(frozen=True)
class ProblemType:
    """A stable type with its status and title, and an example of a detail for the API description."""

    name: str
    status: int
    title: str
    example: str
    pointer: str | None = None

    @property
    def uri(self) -> str:
        """The `type` member."""
        return TYPE_PREFIX + self.name


_TYPES = (
    ProblemType(
        "malformed-body", 400, "The body is not sound JSON", "The body is not JSON: Expecting value at line 1."
    ),
    ProblemType("key-required", 401, "A valid access key is required", "Send the header Authorization: Bearer <key>."),
    ProblemType(
        "role-required", 403, "The access key may not do this", "This needs the role engineer; the key has viewer."
    ),
    ProblemType(
        "key-limited",
        403,
        "The access key is for other tests",
        "The key 'line-3' is limited to other subjects or labels.",
    ),
    ProblemType("not-found", 404, "There is no such thing", "There is no test 'lot-7'."),
    ProblemType("method-not-allowed", 405, "The address does not take this method", "This address does not take PUT."),
    ProblemType("body-too-slow", 408, "The body took too long", "The body did not arrive within 30 seconds."),
    ProblemType(
        "plan-differs", 409, "The plan exists with other content", "The plan 'seal-leak' exists with other content."
    ),
    ProblemType(
        "test-differs", 409, "The test exists with other content", "The test 'lot-7' exists with another plan."
    ),
    ProblemType("key-name-taken", 409, "The name of the access key is taken", "A valid access key is named 'line-2'."),
    ProblemType(
        "receiver-name-taken", 409, "The name of the receiver is taken", "A receiver is already named 'line-2'."
    ),
    ProblemType(
        "too-many-receivers", 409, "There are as many receivers as there may be", "There are 50 receivers; remove one."
    ),
    ProblemType("notice-waiting", 409, "The notice waits to be sent", "The notice waits to be sent, or is being sent."),
    ProblemType(
        "unit-repeated",
        409,
        "A unit was counted already",
        "A unit may be counted once in a test.",
        "/observations/0/unit",
    ),
    ProblemType(
        "test-closed", 409, "The test is closed", "The test 'lot-7' is closed and takes no further observations."
    ),
    ProblemType(
        "in-progress",
        409,
        "The first submission is still in progress",
        "A submission with the key 'a1' is in progress.",
    ),
    ProblemType(
        "not-decided",
        409,
        "The test is not decided yet",
        "The test 'lot-7' is not decided yet; until then ask for its outlook.",
    ),
    ProblemType(
        "changes-nothing",
        409,
        "The correction would change nothing",
        "Observation 7 is already what this correction would make it.",
    ),
    ProblemType("version-moved", 412, "The state has moved on", "If-Match gave 3, its version is now 4."),
    ProblemType("body-too-large", 413, "The body is too large", "A body may have at most 8388608 bytes."),
    ProblemType(
        "media-type", 415, "The body must be JSON", "Send Content-Type: application/json; received text/plain."
    ),
    ProblemType(
        "invalid-body",
        422,
        "The body cannot be right",
        "The body does not have the form asked for; see errors.",
        "/values/17",
    ),
    ProblemType(
        "invalid-parameter", 422, "A parameter cannot be right", "A parameter cannot be right; see errors.", "/limit"
    ),
    ProblemType("invalid-plan", 422, "The plan cannot be right", "The plan cannot be right; see errors.", "/h1"),
    ProblemType("invalid-test", 422, "The test cannot be right", "The test names a plan that does not exist.", "/plan"),
    ProblemType(
        "invalid-observations",
        422,
        "An observation cannot be right",
        "The submission is refused as a whole.",
        "/values/17",
    ),
    ProblemType(
        "invalid-correction", 422, "The correction cannot be right", "The correction is refused.", "/observation/value"
    ),
    ProblemType(
        "invalid-disposition",
        422,
        "The disposition does not say what it must",
        "The disposition is refused and the test stays open; see errors.",
        "/deviation_reason",
    ),
    ProblemType("invalid-key", 422, "The access key cannot be made", "The expiry must lie in the future."),
    ProblemType(
        "invalid-receiver", 422, "The receiver cannot be registered", "The receiver is refused; see errors.", "/address"
    ),
    ProblemType(
        "invalid-question",
        422,
        "The plan cannot answer this",
        "A parameter lies outside the family's range; see errors.",
        "/at/0",
    ),
    ProblemType(
        "computation-too-large",
        422,
        "The exact computation would be too large",
        "The exact computation would need more than 10000000 looks.",
    ),
    ProblemType(
        "idempotency-key-reused",
        422,
        "The idempotency key was used for something else",
        "The idempotency key 'a1' came before with another body.",
    ),
    ProblemType(
        "too-many-requests", 429, "The access key asks too often", "The key 'line-3' may ask 20 times a second."
    ),
    ProblemType(
        "internal-error", 500, "The service failed", "The log of the service has the reason, under this request id."
    ),
    ProblemType(
        "outcome-unknown",
        503,
        "The database did not confirm the write",
        "It is not known whether the write is stored; send it again with the same idempotency key.",
    ),
    ProblemType("overloaded", 503, "Not at this moment", "Too many submissions are waiting; try again shortly."),
)

PROBLEMS: Mapping[str, ProblemType] = {problem.name: problem for problem in _TYPES}

OF_ERRORS: Mapping[type[DomainError], str] = {
    errors.InvalidPlan: "invalid-plan",
    errors.InvalidTest: "invalid-test",
    errors.InvalidObservations: "invalid-observations",
    errors.InvalidCorrection: "invalid-correction",
    errors.InvalidDisposition: "invalid-disposition",
    errors.InvalidKey: "invalid-key",
    errors.InvalidReceiver: "invalid-receiver",
    errors.InvalidQuestion: "invalid-question",
    errors.ComputationTooLarge: "computation-too-large",
    errors.IdempotencyKeyReused: "idempotency-key-reused",
    errors.UnknownPlan: "not-found",
    errors.UnknownTest: "not-found",
    errors.UnknownKey: "not-found",
    errors.UnknownSimulation: "not-found",
    errors.UnknownSubject: "not-found",
    errors.UnknownReceiver: "not-found",
    errors.UnknownNotice: "not-found",
    errors.PlanDiffers: "plan-differs",
    errors.TestDiffers: "test-differs",
    errors.KeyNameTaken: "key-name-taken",
    errors.ReceiverNameTaken: "receiver-name-taken",
    errors.TooManyReceivers: "too-many-receivers",
    errors.NoticeWaiting: "notice-waiting",
    errors.RepeatedUnits: "unit-repeated",
    errors.TestIsClosed: "test-closed",
    errors.SubmissionInProgress: "in-progress",
    errors.NotDecided: "not-decided",
    errors.OutsideLimits: "key-limited",
    errors.ChangesNothing: "changes-nothing",
    errors.RoleTooNarrow: "role-required",
    errors.VersionMoved: "version-moved",
    errors.QueueFull: "overloaded",
    errors.ShuttingDown: "overloaded",
    errors.TooManyQuestions: "overloaded",
    errors.TooManyStreams: "overloaded",
    errors.DatabaseAway: "overloaded",
    errors.StorageFailed: "overloaded",
    errors.OutcomeUnknown: "outcome-unknown",
}


class RequestProblem(Exception):
    """A request that is refused before the domain sees it."""

    def __init__(
        self, name: str, detail: str, faults: Sequence[Fault] = (), headers: Mapping[str, str] | None = None
    ) -> None:
        super().__init__(detail)
        self.name = name
        self.detail = detail
        self.faults = tuple(faults)
        self.headers = dict(headers or {})


def document(name: str, detail: str, faults: Sequence[Fault] = ()) -> dict[str, Any]:
    """The members of a problem document."""
    problem = PROBLEMS[name]
    members: dict[str, Any] = {
        "type": problem.uri,
        "title": problem.title,
        "status": problem.status,
        "detail": _cut(detail),
    }
    if faults:
        members["errors"] = [{"pointer": _cut(fault.pointer), "detail": _cut(fault.detail)} for fault in faults]
    return members


def response(
    name: str, detail: str, faults: Sequence[Fault] = (), headers: Mapping[str, str] | None = None
) -> JSONResponse:
    """The answer that carries a problem document."""
    return JSONResponse(
        document(name, detail, faults), PROBLEMS[name].status, headers=dict(headers or {}), media_type=MEDIA_TYPE
    )


def pointer_to(location: Sequence[str | int]) -> str:
    """A JSON pointer (RFC 6901) to an element of a body."""
    return "".join("/" + str(part).replace("~", "~0").replace("/", "~1") for part in location)


def internal_error(request_id: str) -> JSONResponse:
    """What is said of an unexpected error."""
    detail = f"The log of the service has the reason, under the request id {request_id}."
    return response("internal-error", detail)


def install(app: FastAPI) -> None:
    """Have every refusal answered by a problem document."""
    app.add_exception_handler(DomainError, _on_domain_error)
    app.add_exception_handler(RequestProblem, _on_request_problem)
    app.add_exception_handler(RequestValidationError, _on_validation_error)
    app.add_exception_handler(HTTPException, on_http_exception)


async def _on_domain_error(_request: Request, error: Exception) -> JSONResponse:
    assert isinstance(error, DomainError)
    return response_to(error)


def document_of(error: DomainError) -> dict[str, Any]:
    """The members of a domain error's problem document."""
    return document(OF_ERRORS[type(error)], str(error), getattr(error, "faults", ()))


def response_to(error: DomainError) -> JSONResponse:
    """The problem document of a domain error."""
    headers = {"Retry-After": str(error.retry_after_seconds)} if isinstance(error, errors.Unavailable) else None
    faults = getattr(error, "faults", ())
    return response(OF_ERRORS[type(error)], str(error), faults, headers)


async def _on_request_problem(_request: Request, error: Exception) -> JSONResponse:
    assert isinstance(error, RequestProblem)
    return response(error.name, error.detail, error.faults, error.headers)


async def _on_validation_error(_request: Request, error: Exception) -> JSONResponse:
    assert isinstance(error, RequestValidationError)
    items = error.errors()
    is_body = all(item["loc"][:1] == ("body",) for item in items)
    faults = [
        Fault(pointer_to([part for part in item["loc"][1:] if part != "[key]"]), _rule(item)) for item in items[:20]
    ]
    if is_body:
        return response("invalid-body", "The body does not have the form asked for; see errors.", faults)
    return response("invalid-parameter", "A parameter cannot be right; see errors.", faults)


async def on_http_exception(request: Request, error: Exception) -> JSONResponse:
    """The problem document of a refusal by the framework."""
    assert isinstance(error, HTTPException)
    name = {404: "not-found", 405: "method-not-allowed"}.get(error.status_code, "malformed-body")
    details = {
        "not-found": "There is nothing at this address.",
        "method-not-allowed": f"This address does not take {request.method}.",
    }
    detail = details.get(name, str(error.detail))
    return response(name, detail, headers=error.headers)


def _rule(item: Mapping[str, Any]) -> str:
    """The rule that was broken and, for plain values, what was received instead."""
    received = item.get("input")
    message = RULES.get(item["type"], str(item["msg"]).removeprefix("Value error, "))
    if item["type"] in ("missing", "extra_forbidden") or isinstance(received, dict | list):
        return message
    return f"{message}; received {_cut(_as_json(received), LONGEST_ECHO)}"


def _as_json(received: object) -> str:
    """A plain value as the caller wrote it; others as they name themselves."""
    is_plain = received is None or isinstance(received, bool | int | float | str)
    return json.dumps(received, ensure_ascii=False) if is_plain else repr(received)


def _cut(text: str, longest: int = LONGEST_TEXT) -> str:
    return text if len(text) <= longest else text[:longest] + "…"
