"""
Access: every call under /v1 needs a key, and each route says which role.

The key is looked up before the body is read, and afresh for each request, so that a revoked key ends at once.
"""

import time
from typing import Any, cast

from fastapi import Depends, Request
from fastapi.security.utils import get_authorization_scheme_param
from starlette.types import ASGIApp, Receive, Scope, Send

from service.api.problems import RequestProblem, response, response_to
from service.domain.access import AccessKey, Role
from service.domain.errors import DomainError
from service.settings import Settings
from service.web.keys import valid_key
from service.web.parts import Parts
from service.web.rates import Rates

GUARDED, METRICS = "/v1", "/metrics"


class AccessGuard:
    """Middleware: finds the access key of a request, or answers 401; answers 429 to one that asks too often."""

    def __init__(self, app: ASGIApp, rates: Rates) -> None:
        self._app, self._rates = app, rates

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Let through what carries a valid key, and what lies outside the guarded part."""
        if scope["type"] != "http":
            await self._app(scope, receive, send)
            return
        parts = cast("Parts", scope["app"].state.parts)
        if not _is_guarded(scope["path"], parts.settings):
            await self._app(scope, receive, send)
            return
        try:
            key = await _key_of(Request(scope), parts)
        except DomainError as error:  # here, outside of the routes, nothing else answers it
            await response_to(error)(scope, receive, send)
            return
        if key is None:
            detail = "Send the header Authorization: Bearer <key> with a key that is neither revoked nor expired."
            refusal = response("key-required", detail, headers={"WWW-Authenticate": "Bearer"})
            await refusal(scope, receive, send)
            return
        scope.setdefault("state", {})["access_key"] = key
        wait = self._rates.seconds_to_wait(key.id, time.monotonic())
        if wait:
            detail = f"The key {key.name!r} may ask {parts.settings.rate_limit:g} times a second; try again later."
            await response("too-many-requests", detail, headers={"Retry-After": str(wait)})(scope, receive, send)
            return
        await self._app(scope, receive, send)


def requires(role: Role) -> Any:  # noqa: ANN401 - what Depends returns is opaque
    """
    A dependency that lets only keys of this role or a wider one pass, and returns the key.

    Raises:
        RequestProblem: role-required.
    """

    async def check(request: Request) -> AccessKey:
        key = cast("AccessKey", request.state.access_key)
        if not key.role.includes(role):
            raise RequestProblem("role-required", f"This needs the role {role}; the key {key.name!r} has {key.role}.")
        return key

    check.role = role  # type: ignore[attr-defined]
    return Depends(check)


def requires_metrics() -> Any:  # noqa: ANN401
    """
    A dependency for the figures: a viewer's key, or none where the settings show them to all.

    Raises:
        RequestProblem: role-required, or key-limited.
    """
    check = requires(Role.VIEWER).dependency

    async def check_unless_open(request: Request) -> None:
        if request.app.state.parts.settings.metrics_open:
            return
        key = await check(request)
        if key.limits.is_limited:
            raise RequestProblem(
                "key-limited", f"The figures count all tests; the key {key.name!r} is limited to some."
            )

    return Depends(check_unless_open)


def _is_guarded(path: str, settings: Settings) -> bool:
    if path == METRICS:
        return not settings.metrics_open
    return path == GUARDED or path.startswith(GUARDED + "/")


async def _key_of(request: Request, parts: Parts) -> AccessKey | None:
    scheme, secret = get_authorization_scheme_param(request.headers.get("authorization"))
    return await valid_key(parts, secret) if scheme.lower() == "bearer" else None
