"""Lists in pages: an opaque cursor, a limit and a link to the next page (RFC 8288)."""

import base64
import binascii
import json
from typing import Annotated
from urllib.parse import quote

from fastapi import Request, Response
from pydantic import Field

from service.api.problems import RequestProblem
from service.domain.errors import Fault
from service.domain.names import is_name

Limit = Annotated[int, Field(ge=1, le=500, description="Rows on a page, at most 500.")]
Cursor = Annotated[
    str | None, Field(max_length=500, description="Where the page begins: `next_cursor` of the one before.")
]


def encoded(*after: str | int) -> str:
    """A cursor that stands for the last row of a page."""
    return base64.urlsafe_b64encode(json.dumps(after).encode()).decode().rstrip("=")


def text_after(cursor: str | None) -> str | None:
    """
    The name after which the page begins.

    Raises:
        RequestProblem: The cursor is none of ours.
    """
    (after,) = _decoded(cursor, 1) if cursor is not None else (None,)
    if after is not None and not (isinstance(after, str) and is_name(after)):
        raise _bad(cursor)
    return after


def number_after(cursor: str | None) -> int:
    """
    The sequence after which the page begins; 0 without a cursor.

    Raises:
        RequestProblem: The cursor is none of ours.
    """
    (after,) = _numbers(cursor, 1)
    return after


def numbers_after(cursor: str | None) -> tuple[int, int]:
    """
    The two numbers after which the page begins; zeros without a cursor.

    Raises:
        RequestProblem: The cursor is none of ours.
    """
    first, second = _numbers(cursor, 2)
    return first, second


def link_next(request: Request, response: Response, next_cursor: str | None) -> None:
    """Add the Link header of the next page, relative: how a caller reached the service is the caller's to know."""
    if next_cursor is None:
        return
    url = request.url.include_query_params(cursor=next_cursor)
    reference = f"{url.path}?{url.query}"
    response.headers["Link"] = f'<{quote(reference, safe=":/?&=%+,;@!$()*~-._[]")}>; rel="next"'


def _numbers(cursor: str | None, count: int) -> list[int]:
    if cursor is None:
        return [0] * count
    numbers = [each for each in _decoded(cursor, count) if isinstance(each, int) and not isinstance(each, bool)]
    if len(numbers) != count or not all(0 <= number < 2**63 for number in numbers):
        raise _bad(cursor)
    return numbers


def _decoded(cursor: str, count: int) -> list[object]:
    """The parts of a cursor, of which there are so many."""
    try:
        padded = cursor.encode("ascii") + b"=" * (-len(cursor) % 4)
        after = json.loads(base64.b64decode(padded, altchars=b"-_", validate=True))
    except (ValueError, TypeError, binascii.Error, UnicodeError, RecursionError):
        raise _bad(cursor) from None
    if not isinstance(after, list) or len(after) != count:
        raise _bad(cursor)
    return after


def _bad(cursor: str | None) -> RequestProblem:
    fault = Fault("/cursor", f"must be the next_cursor of an earlier page; received {cursor!r}")
    return RequestProblem("invalid-parameter", "The cursor is none that this service gave.", [fault])
