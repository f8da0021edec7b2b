"""
Middleware: gives each request an id, for the answer's header and the log.

It stands outside of everything else, so that the answer to an unexpected error carries the id as well.
"""

import logging
import uuid
from typing import cast

from starlette.datastructures import MutableHeaders
from starlette.requests import ClientDisconnect, Request
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from service.api.problems import response

logger = logging.getLogger(__name__)


def request_id_of(request: Request) -> str:
    """The id that the answer to this request will carry."""
    return cast("str", request.state.request_id)


class RequestId:
    """Adds `X-Request-Id` to every answer, and answers what nothing else did."""

    def __init__(self, app: ASGIApp) -> None:
        self._app = app

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Pass the request on with an id of its own."""
        if scope["type"] != "http":
            await self._app(scope, receive, send)
            return
        request_id = uuid.uuid4().hex
        scope.setdefault("state", {})["request_id"] = request_id
        has_started = False

        async def send_with_id(message: Message) -> None:
            nonlocal has_started
            if message["type"] == "http.response.start":
                MutableHeaders(scope=message)["X-Request-Id"] = request_id
                has_started = True
            await send(message)

        try:
            await self._app(scope, receive, send_with_id)
        except ClientDisconnect:
            logger.info("request %s: the caller left before its end", request_id)
        except Exception:
            if has_started:
                raise  # half an answer can only be broken off, which is the server's part
            logger.exception("request %s failed", request_id)
            detail = f"The log of the service has the reason, under the request id {request_id}."
            await response("internal-error", detail)(scope, receive, send_with_id)
