"""
Middleware: gives each request an id, for the answer's header and the log, and accounts for it once it is answered.

It stands outside of everything else, so that the answer to an unexpected error carries the id as well. An account names
the template of the route and never the address or the body as sent: those may hold secrets, and whatever callers like.
"""

import logging
import time
import uuid
from collections.abc import Callable
from dataclasses import asdict, dataclass
from typing import cast

from starlette.requests import ClientDisconnect, Request
from starlette.responses import Response
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from service.domain.access import AccessKey
from service.logs import REQUEST_ID
from service.web.hardening import hardened
from service.web.metrics import Metrics

logger = logging.getLogger(__name__)
access = logging.getLogger("service.access")

NONE = "-"


@dataclass(frozen=True)
class Answered:
    """A request that was answered, or left by its caller before: then the status is a hyphen."""

    method: str
    route: str
    status: str
    seconds: float
    key: str


Account = Callable[[Answered], None]
# The answer to an unexpected error, from the id of its request.
Failed = Callable[[str], Response]


def accounts(metrics: Metrics, *, writes_lines: bool) -> Account:
    """Counts each request and, where wanted, writes its line in the log."""

    def account(request: Answered) -> None:
        metrics.request(request.method, request.route, request.status, request.seconds)
        if writes_lines:
            access.info(
                "%s %s %s %.1f ms, key %s",
                request.method,
                request.route,
                request.status,
                request.seconds * 1000.0,
                request.key,
                extra={"fields": asdict(request)},
            )

    return account


def request_id_of(request: Request) -> str:
    """The id that the answer to this request will carry."""
    return cast("str", request.state.request_id)


class RequestId:
    """Adds `X-Request-Id` to every answer, and answers what nothing else did."""

    def __init__(self, app: ASGIApp, failed: Failed, account: Account | None = None) -> None:
        self._app = app
        self._failed = failed
        self._account = account

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Pass the request on with an id of its own."""
        if scope["type"] != "http":
            await self._app(scope, receive, send)
            return
        request_id, begin, status = uuid.uuid4().hex, time.perf_counter(), NONE
        scope.setdefault("state", {})["request_id"] = request_id
        REQUEST_ID.set(request_id)
        has_started = False

        async def send_with_id(message: Message) -> None:
            nonlocal has_started, status
            if message["type"] == "http.response.start":
                message["headers"] = hardened(message.get("headers", ()), request_id)
                has_started, status = True, str(message["status"])
            await send(message)

        try:
            await self._app(scope, receive, send_with_id)
        except ClientDisconnect:
            logger.info("the caller left before the end of the request")
        except Exception:
            if has_started:
                raise  # half an answer can only be broken off, which is the server's part
            logger.exception("request %s failed", request_id)
            await self._failed(request_id)(scope, receive, send_with_id)
        finally:
            if self._account is not None:
                self._account(_answered(scope, status, time.perf_counter() - begin))


def _answered(scope: Scope, status: str, seconds: float) -> Answered:
    key = cast("AccessKey | None", scope["state"].get("access_key"))
    return Answered(scope["method"], template_of(scope), status, seconds, NONE if key is None else key.name)


def template_of(scope: Scope) -> str:
    """The address of the route that answered, its parts by their names; a hyphen where none did."""
    template = scope["state"].get("template") or getattr(scope.get("route"), "path", NONE)
    return str(template)
