"""Bodies of requests, bounded in size and time."""

import asyncio

from starlette.requests import Request


class BodyTooLarge(Exception):
    """More bytes than are taken."""


class BodyTooSlow(Exception):
    """It did not arrive in time."""


async def body_within(request: Request, most_bytes: int, seconds: float) -> bytes:
    """
    The whole body.

    Raises:
        BodyTooLarge: It is, or says so.
        BodyTooSlow: It is.
    """
    try:
        async with asyncio.timeout(seconds):
            return await _read(request, most_bytes)
    except TimeoutError:
        raise BodyTooSlow from None


async def _read(request: Request, most_bytes: int) -> bytes:
    announced = request.headers.get("content-length", "0")
    if announced.isdigit() and int(announced) > most_bytes:
        raise BodyTooLarge
    chunks, size = [], 0
    async for chunk in request.stream():
        size += len(chunk)
        if size > most_bytes:
            raise BodyTooLarge
        chunks.append(chunk)
    return b"".join(chunks)
