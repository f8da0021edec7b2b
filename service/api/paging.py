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


def encoded(after: str | int) -> str:
    """A cursor that stands for the last row of a page."""
    return base64.urlsafe_b64encode(json.dumps([after]).encode()).decode().rstrip("=")


def text_after(cursor: str | None) -> str | None:
    """
    The name after which the page begins.

    Raises:
        RequestProblem: The cursor is none of ours.
    """
    after = _decoded(cursor) if cursor is not None else None
    if after is not None and not (isinstance(after, str) and is_name(after)):
        raise _bad(cursor)
    return after


def number_after(cursor: str | None) -> int:
    """
    The sequence after which the page begins; 0 without a cursor.

    Raises:
        RequestProblem: The cursor is none of ours.
    """
    after = _decoded(cursor) if cursor is not None else 0
    if not isinstance(after, int) or isinstance(after, bool) or not 0 <= after < 2**63:
        raise _bad(cursor)
    return after


def link_next(request: Request, response: Response, next_cursor: str | None) -> None:
    """Add the Link header of the next page, relative: how a caller reached the service is the caller's to know."""
    if next_cursor is None:
        return
    url = request.url.include_query_params(cursor=next_cursor)
    reference = f"{url.path}?{url.query}"
    response.headers["Link"] = f'<{quote(reference, safe=":/?&=%+,;@!$()*~-._[]")}>; rel="next"'


def _decoded(cursor: str) -> object:
    try:
        padded = cursor.encode("ascii") + b"=" * (-len(cursor) % 4)
        (after,) = json.loads(base64.b64decode(padded, altchars=b"-_", validate=True))
    except (ValueError, TypeError, binascii.Error, UnicodeError, RecursionError):
        raise _bad(cursor) from None
    return after


def _bad(cursor: str | None) -> RequestProblem:
    fault = Fault("/cursor", f"must be the next_cursor of an earlier page; received {cursor!r}")
    return RequestProblem("invalid-parameter", "The cursor is none that this service gave.", [fault])
