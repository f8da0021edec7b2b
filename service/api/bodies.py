"""
Bodies, read strictly: JSON in UTF-8, bounded in size and depth, no key twice in one object.

Numbers that are not finite get through the parser on purpose, so that the schema can name where they stand.
"""

import json
from collections.abc import Callable, Coroutine
from typing import Any

from fastapi import Request, Response
from fastapi.routing import APIRoute

from service.api.problems import RequestProblem
from service.domain.errors import Fault

LARGEST_DEPTH = 20


class _DoubledKey(dict[str, Any]):
    """An object in which a key stands twice."""

    def __init__(self, pairs: list[tuple[str, Any]], key: str) -> None:
        super().__init__(pairs)
        self.key = key


class StrictRequest(Request):
    """A request whose body has been read by `load`."""

    document: Any = None

    async def json(self) -> Any:  # noqa: ANN401 - JSON is anything
        """The decoded body."""
        return self.document

    async def load(self, limit: int) -> None:
        """
        Read and decode the body.

        Raises:
            RequestProblem: The body is too large, of another media type, or not sound JSON.
        """
        self._body = await self._read(limit)
        media_type = self.headers.get("content-type", "")
        if media_type.partition(";")[0].strip().lower() != "application/json":
            raise RequestProblem("media-type", f"Send Content-Type: application/json; received {media_type!r}.")
        self.document = decoded(self._body)

    async def _read(self, limit: int) -> bytes:
        detail = f"A body may have at most {limit} bytes."
        announced = self.headers.get("content-length", "0")
        if announced.isdigit() and int(announced) > limit:
            raise RequestProblem("body-too-large", detail, headers={"Connection": "close"})
        chunks, size = [], 0
        async for chunk in self.stream():
            size += len(chunk)
            if size > limit:
                raise RequestProblem("body-too-large", detail, headers={"Connection": "close"})
            chunks.append(chunk)
        return b"".join(chunks)


class StrictRoute(APIRoute):
    """A route whose body is read strictly."""

    def get_route_handler(self) -> Callable[[Request], Coroutine[Any, Any, Response]]:
        """Read the body before the framework sees the request."""
        handle = super().get_route_handler()
        has_body = self.body_field is not None

        async def handler(request: Request) -> Response:
            if not has_body:
                return await handle(request)
            strict = StrictRequest(request.scope, request.receive)
            await strict.load(request.app.state.parts.settings.max_body_bytes)
            return await handle(strict)

        return handler


def decoded(body: bytes) -> Any:  # noqa: ANN401 - JSON is anything
    """
    Decode JSON.

    Raises:
        RequestProblem: It is not JSON in UTF-8, nests too deep, or gives a key twice.
    """
    try:
        text = body.decode("utf-8")
        document = json.loads(text, object_pairs_hook=_object)
        if "\\u" in text:
            json.dumps(document, ensure_ascii=False).encode("utf-8")  # finds half of a surrogate pair
    except RecursionError:
        raise RequestProblem("malformed-body", f"The body nests deeper than {LARGEST_DEPTH} levels.") from None
    except UnicodeError:
        raise RequestProblem("malformed-body", "The body is not text in UTF-8.") from None
    except ValueError as error:
        raise RequestProblem("malformed-body", f"The body is not JSON: {error}.") from None
    _check_structure(document, "", 1)
    return document


def _object(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    result = dict(pairs)
    if len(result) == len(pairs):
        return result
    seen: set[str] = set()
    doubled = next(key for key, _ in pairs if key in seen or seen.add(key))  # type: ignore[func-returns-value]
    return _DoubledKey(pairs, doubled)


def _check_structure(node: Any, pointer: str, depth: int) -> None:  # noqa: ANN401 - JSON is anything
    """Refuse doubled keys and deep nesting, naming the place."""
    if not isinstance(node, dict | list):
        return
    if depth > LARGEST_DEPTH:
        raise RequestProblem("malformed-body", f"The body nests deeper than {LARGEST_DEPTH} levels.")
    if isinstance(node, _DoubledKey):
        fault = Fault(f"{pointer}/{node.key}", "stands more than once in its object")
        raise RequestProblem("malformed-body", f"The key {node.key!r} stands more than once in one object.", [fault])
    items = node.items() if isinstance(node, dict) else enumerate(node)
    for name, child in items:
        if isinstance(child, dict | list):
            _check_structure(child, f"{pointer}/{name}", depth + 1)
