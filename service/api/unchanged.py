"""
Middleware: answers 304 to who asks for a test and has its present version already.

That is what dashboards and stations ask most, and it needs no route: any valid key may read what lies inside its
limits, and the version alone decides. It stands inside of the access guard; whatever it does not answer goes on to
the routes.
"""

from fastapi import Request, Response
from starlette.types import ASGIApp, Receive, Scope, Send

from service.api.conditional import etag, not_modified
from service.api.problems import response_to
from service.domain.errors import DomainError
from service.domain.names import is_name
from service.web.parts import Parts, looking_up, parts_for

TESTS, TEMPLATE = "/v1/tests/", "/v1/tests/{key}"


class UnchangedTests:
    """Answers a conditional GET of a test from one look-up of its version."""

    def __init__(self, app: ASGIApp) -> None:
        self._app = app

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Answer, or pass on."""
        if scope["type"] != "http" or scope["method"] != "GET" or not scope["path"].startswith(TESTS):
            await self._app(scope, receive, send)
            return
        key, request = scope["path"].removeprefix(TESTS), Request(scope)
        if "if-none-match" not in request.headers or not is_name(key):
            await self._app(scope, receive, send)
            return
        parts = parts_for(scope)
        try:
            version = await looking_up(parts, lambda: parts.reader.version(key))
        except DomainError as error:  # here, outside of the routes, nothing else answers it
            await response_to(error)(scope, receive, send)
            return
        unchanged = None if version is None else not_modified(request, etag(version))
        if unchanged is not None:
            scope["state"]["template"] = TEMPLATE
        await (unchanged or self._app)(scope, receive, send)


async def unchanged_test(parts: Parts, key: str, request: Request) -> Response | None:
    """The 304 answer where the caller has this version of the test already, from one look-up; else None."""
    if "if-none-match" not in request.headers:
        return None
    version = await looking_up(parts, lambda: parts.reader.version(key))
    return None if version is None else not_modified(request, etag(version))
