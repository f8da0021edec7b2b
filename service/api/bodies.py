"""Requests, read strictly: names that can be names; bodies of the right media type, bounded in size, sound JSON."""

import asyncio
from collections.abc import Callable, Coroutine
from functools import partial
from typing import Any

from fastapi import Request, Response
from fastapi.exceptions import RequestValidationError
from fastapi.routing import APIRoute

from service.api.decoding import decoded
from service.api.problems import RequestProblem
from service.domain.names import is_name
from service.settings import Settings
from service.web.bodies import BodyTooLarge, BodyTooSlow, body_within

# What decodes within a millisecond is not worth a thread.
LARGE_BODY_BYTES = 65_536

# A decoded body in; the form, or the framework's errors where it has another form.
FormCheck = Callable[[Any], tuple[Any, list[dict[str, Any]]]]


class StrictRequest(Request):
    """A request whose body has been read by `load`."""

    document: Any = None
    _form: Any = None

    async def json(self) -> Any:  # noqa: ANN401 - JSON is anything
        """What the framework validates: the decoded body, or the form where that was made already."""
        return self.document if self._form is None else self._form

    async def load(self, settings: Settings, check: FormCheck) -> None:
        """
        Read and decode the body; a large one is checked off the event loop too, which others wait for.

        Raises:
            RequestProblem: The body is too large, of another media type, or not sound JSON.
            RequestValidationError: A large body does not have the form asked for.
        """
        self._body = await self._read_in_time(settings)
        media_type = self.headers.get("content-type", "")
        if media_type.partition(";")[0].strip().lower() != "application/json":
            raise RequestProblem("media-type", f"Send Content-Type: application/json; received {media_type!r}.")
        if len(self._body) > LARGE_BODY_BYTES:
            self.document = await asyncio.to_thread(decoded, self._body, settings.max_batch)
            self._form, faults = await asyncio.to_thread(check, self.document)
            if faults:
                raise RequestValidationError(faults)
        else:
            self.document = decoded(self._body, settings.max_batch)

    async def _read_in_time(self, settings: Settings) -> bytes:
        """
        The whole body.

        Raises:
            RequestProblem: It is too large, or takes too long.
        """
        try:
            return await body_within(self, settings.max_body_bytes, settings.body_seconds)
        except BodyTooSlow:
            detail = f"The body did not arrive within {settings.body_seconds:g} seconds; nothing was stored."
            raise RequestProblem("body-too-slow", detail, headers={"Connection": "close"}) from None
        except BodyTooLarge:
            detail = f"A body may have at most {settings.max_body_bytes} bytes."
            raise RequestProblem("body-too-large", detail, headers={"Connection": "close"}) from None


class StrictRoute(APIRoute):
    """A route whose address and body are read strictly."""

    def get_route_handler(self) -> Callable[[Request], Coroutine[Any, Any, Response]]:
        """Check the names and read the body before the framework sees the request."""
        handle = super().get_route_handler()
        field = self.body_field

        async def handler(request: Request) -> Response:
            _check_names(request)
            if field is None:
                return await handle(request)
            strict = StrictRequest(request.scope, request.receive)
            await strict.load(request.app.state.parts.settings, partial(field.validate, loc=("body",)))
            return await handle(strict)

        return handler


def _check_names(request: Request) -> None:
    """Whatever an address leaves open is a name, and nothing bears a name that cannot be one."""
    for name in request.path_params.values():
        if not is_name(name):
            raise RequestProblem("not-found", f"There is nothing named {name!r}.")
