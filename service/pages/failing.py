"""What a page says when something cannot be done: what is wrong, and where to go from there."""

from fastapi import Request, Response

from service.domain import errors
from service.domain.errors import DomainError
from service.pages.rendering import failure
from service.web.requests import request_id_of

BAD_ADDRESS = ("This address cannot be right", "A part of it is missing, or has a value that it cannot have.")
NOTHING_HERE = ("There is nothing here", "The address leads nowhere.")
NOT_YOURS = "Your key may not do this"
TOO_OFTEN = ("Too many requests", "This key has asked more often than the service allows; wait a moment.")

# The first that fits; a title says what it is for people.
OF_ERRORS: tuple[tuple[type[DomainError], int, str], ...] = (
    (errors.UnknownTest, 404, "There is no such test"),
    (errors.UnknownPlan, 404, "There is no such plan"),
    (errors.Unknown, 404, "There is no such thing"),
    (errors.ComputationTooLarge, 422, "This would take too long to compute"),
    (errors.Invalid, 422, "This cannot be right"),
    (errors.NotDecided, 409, "Not before the decision"),
    (errors.Conflict, 409, "This cannot be done now"),
    (errors.VersionMoved, 412, "The test has changed meanwhile"),
    (errors.OutsideLimits, 403, "Your key is for other tests"),
    (errors.RoleTooNarrow, 403, NOT_YOURS),
    (errors.Unavailable, 503, "Not just now"),
)


def status_of(error: DomainError) -> tuple[int, str]:
    """The status and the title of a page about an error."""
    return next((status, title) for kind, status, title in OF_ERRORS if isinstance(error, kind))


def page_of_error(request: Request, error: DomainError) -> Response:
    """The page about an error that the caller can be told."""
    status, title = status_of(error)
    headers = {"Retry-After": str(error.retry_after_seconds)} if isinstance(error, errors.Unavailable) else None
    faults = [f"{fault.pointer}: {fault.detail}" for fault in getattr(error, "faults", ())]
    return failure(request, status, title, str(error), faults, headers=headers)


def page_of_nothing(request: Request) -> Response:
    """The page at an address that leads nowhere."""
    return failure(request, 404, *NOTHING_HERE)


def unexpected_page(request: Request) -> Response:
    """The page about an error that nobody foresaw."""
    detail = f"The log of the service has the reason, under the request id {request_id_of(request)}."
    return failure(request, 500, "Something went wrong in the service", detail)
