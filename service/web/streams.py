"""
Streams of server-sent events: each tells one caller which tests have changed.

A stream remembers one number, that of the last change it has told or passed over, and reads what comes after it. So a
slow reader holds up nobody and costs no memory, and one that comes back with the number goes on where it was. Being
woken is a hint to read now; it reads every few seconds anyhow.
"""

import asyncio
import time
from collections.abc import AsyncIterator, Awaitable, Callable
from contextlib import suppress
from dataclasses import dataclass, field
from functools import partial

from starlette.responses import StreamingResponse
from starlette.types import Message, Receive, Scope, Send

from service.domain.access import AccessKey
from service.domain.errors import DatabaseAway, ShuttingDown, TooManyStreams
from service.storage.reader import Change, Reader, TestFilters
from service.web.parts import Parts, looking_up, reading

# A caller who takes nothing for so long has gone.
PATIENCE_SECONDS = 60.0
# How soon a caller who was cut off may come back, in milliseconds.
RETRY_MS = 3000
# Changes read at once.
PAGE = 200

HEADERS = {"Cache-Control": "no-store", "X-Accel-Buffering": "no"}


class Streams:
    """The open streams of this process. Belongs to one event loop."""

    def __init__(self, limit: int, told: Callable[[int], None] = lambda _: None) -> None:
        self._limit, self._open, self._told = limit, 0, told
        self._word = asyncio.Event()
        self.is_stopped = False

    def enter(self) -> Callable[[], None]:
        """
        Take a place; call what is returned to give it back.

        Raises:
            TooManyStreams: All are taken.
            ShuttingDown: The service is stopping.
        """
        if self.is_stopped:
            raise ShuttingDown
        if self._open >= self._limit:
            raise TooManyStreams(self._limit)
        self._open += 1
        self._told(1)
        return self._leave

    def _leave(self) -> None:
        self._open -= 1
        self._told(-1)

    @property
    def word(self) -> asyncio.Event:
        """Set at the next word that something has changed; take it before reading, so that none is missed."""
        return self._word

    def wake(self) -> None:
        """Let every stream read."""
        self._word.set()
        self._word = asyncio.Event()

    def stop(self) -> None:
        """End every stream, and open none any more."""
        self.is_stopped = True
        self.wake()


class EventStream(StreamingResponse):
    """The answer that carries a stream; the place is given back when it ends, however it ends."""

    media_type = "text/event-stream"

    def __init__(self, told: AsyncIterator[str], leave: Callable[[], None]) -> None:
        super().__init__(told, headers=HEADERS)
        self._leave = leave

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Send until the stream ends, the caller goes away or takes nothing any more."""
        try:
            with suppress(TimeoutError):
                await super().__call__(scope, receive, partial(_within_patience, send))
        finally:
            self._leave()


async def _within_patience(send: Callable[[Message], Awaitable[None]], message: Message) -> None:
    async with asyncio.timeout(PATIENCE_SECONDS):
        await send(message)


@dataclass
class Stream:
    """
    One caller's stream: what is asked for, and the number of the last change told or passed over.

    `event` is what is told of a change, in the format of the stream.
    """

    parts: Parts
    access_key: AccessKey
    filters: TestFilters
    position: int
    event: Callable[[Change], str]
    _seen_alive: float = field(default_factory=time.monotonic)

    async def told(self) -> AsyncIterator[str]:
        """Events as they come and signs of life between them, until the service stops or the access key ends."""
        streams = self.parts.streams
        yield f"retry: {RETRY_MS}\nid: {self.position}\n\n"
        while not streams.is_stopped:
            word = streams.word
            changes, is_all = await self._next()
            if changes:
                yield "".join(map(self.event, changes))
            if self._is_time():
                if not await self._is_allowed():
                    return
                yield f": still here\nid: {self.position}\n\n"
            if is_all:
                with suppress(TimeoutError):
                    await asyncio.wait_for(word.wait(), self._rest())

    async def _next(self) -> tuple[list[Change], bool]:
        """The next changes, and whether they are all there are by now; none while the database is away."""
        try:
            changes, self.position, is_all = await reading(
                partial(_changes, self.parts.reader, self.filters, self.position)
            )
        except DatabaseAway:
            return [], True
        return changes, is_all

    async def _is_allowed(self) -> bool:
        """Whether the access key is still valid; while the database is away it is taken to be."""
        try:
            key = await looking_up(self.parts, lambda: self.parts.reader.key_with_digest(self.access_key.digest))
        except DatabaseAway:
            key = self.access_key
        return key is not None and key.is_valid(self.parts.clock())

    def _rest(self) -> float:
        return max(0.0, self._seen_alive + self.parts.settings.heartbeat_seconds - time.monotonic())

    def _is_time(self) -> bool:
        """Whether a sign of life is due; the access key is looked up again as often."""
        if self._rest() > 0.0:
            return False
        self._seen_alive = time.monotonic()
        return True


def _changes(reader: Reader, filters: TestFilters, after: int) -> tuple[list[Change], int, bool]:
    """
    Changes after the number `after`, the number up to which they are complete, and whether that is the newest.

    Numbers become visible in their order, so whatever the newest was before reading, nothing below it comes later.
    """
    newest = reader.last_change()
    if newest <= after:
        return [], after, True
    changes = reader.changes(filters, after, PAGE)
    last = changes[-1].number if changes else after
    return (changes, last, False) if len(changes) == PAGE else (changes, max(newest, last), True)
