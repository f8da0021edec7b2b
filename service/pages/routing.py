"""Routes of pages: who asks is found first, and whatever goes wrong is answered by a page that helps."""

import logging
import time
from collections.abc import Callable, Coroutine
from typing import Any, cast
from urllib.parse import quote, urlsplit

from fastapi import APIRouter, Request, Response
from fastapi.exceptions import RequestValidationError
from fastapi.responses import RedirectResponse
from fastapi.routing import APIRoute
from starlette.exceptions import HTTPException
from starlette.requests import ClientDisconnect

from service.domain.errors import DomainError
from service.pages.failing import (
    BAD_ADDRESS,
    NOT_YOURS,
    NOTHING_HERE,
    TOO_OFTEN,
    page_of_error,
    unexpected_page,
)
from service.pages.rendering import failure
from service.pages.session import NEEDS_SIGN_IN, NotYours, SignInNeeded, session_of
from service.web.parts import Parts

logger = logging.getLogger(__name__)

SIGN_IN = "/sign-in"


class PageRoute(APIRoute):
    """A route whose every answer is for people."""

    def get_route_handler(self) -> Callable[[Request], Coroutine[Any, Any, Response]]:
        """Find the session, answer, and turn errors into pages."""
        handle = super().get_route_handler()

        async def handler(request: Request) -> Response:  # noqa: PLR0911 - each kind of error has its page
            request.state.session = None
            try:
                return await _answered(request, handle)
            except SignInNeeded:
                return _to_sign_in(request)
            except (ClientDisconnect, TimeoutError):
                raise
            except NotYours as error:
                return failure(request, 403, NOT_YOURS, str(error))
            except DomainError as error:
                return page_of_error(request, error)
            except RequestValidationError:
                return failure(request, 404, *BAD_ADDRESS)
            except HTTPException as error:
                return failure(request, error.status_code, *NOTHING_HERE)
            except Exception:
                logger.exception("page %s failed", request.state.request_id)
                return unexpected_page(request)

        return handler


def page_router(*, is_open: bool = False) -> APIRouter:
    """A router for pages, for those who are signed in unless it is open; they are no part of the API's description."""
    return APIRouter(route_class=PageRoute, include_in_schema=False, dependencies=[] if is_open else [NEEDS_SIGN_IN])


def local(address: str) -> str:
    """An address of this service to go to, as somebody sent it; the first page where it is none."""
    is_path = address.startswith("/") and not address.startswith("//")
    return address if is_path and address.isprintable() and "\\" not in address else "/"


async def _answered(request: Request, handle: Callable[[Request], Coroutine[Any, Any, Response]]) -> Response:
    session = request.state.session = await session_of(request)
    if session is not None:
        request.state.access_key = session.key
        parts = cast("Parts", request.app.state.parts)
        wait = parts.rates.seconds_to_wait(session.key.id, time.monotonic())
        if wait:
            return failure(request, 429, *TOO_OFTEN, headers={"Retry-After": str(wait)})
    return await handle(request)


def _to_sign_in(request: Request) -> Response:
    """Back to the same place afterwards; what a form sent is not sent again."""
    came = request.url.path if request.method == "GET" else _path_of(request.headers.get("referer", "/"))
    query = f"?{request.url.query}" if request.method == "GET" and request.url.query else ""
    return RedirectResponse(f"{SIGN_IN}?next={quote(local(came + query), safe='')}", 303)


def _path_of(address: str) -> str:
    """The path of an address as somebody sent it; the first page where it is none."""
    try:
        return urlsplit(address).path
    except ValueError:
        return "/"
