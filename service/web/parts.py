"""What the routes need, built once by the application and handed to each request."""

import asyncio
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Annotated, TypeVar, cast

from fastapi import Depends, Request
from starlette.types import Scope

from service.domain.access import AccessKey
from service.domain.errors import TooManyQuestions
from service.ingest.road import Clock, Road
from service.settings import Settings
from service.storage.reader import Reader
from service.web.metrics import Metrics
from service.web.rates import Rates
from service.web.walks import Walks

if TYPE_CHECKING:
    from service.web.simulations import Simulations
    from service.web.streams import Streams

T = TypeVar("T")


@dataclass(frozen=True)
class Parts:
    """The connected parts of a running service."""

    settings: Settings
    reader: Reader
    road: Road
    clock: Clock
    check_ready: Callable[[], None]
    computers: "Computers"
    streams: "Streams"
    simulations: "Simulations"
    metrics: Metrics
    rates: Rates
    walks: Walks


def parts_for(scope: Scope) -> Parts:
    """The parts as the access key of a request may use them: it reads the tests inside its limits alone."""
    parts = cast("Parts", scope["app"].state.parts)
    key = cast("AccessKey | None", scope["state"].get("access_key"))
    if key is None or not key.limits.is_limited:
        return parts
    return replace(parts, reader=parts.reader.within(key.limits))


async def _parts(request: Request) -> Parts:
    return parts_for(request.scope)


PartsOf = Annotated[Parts, Depends(_parts)]


async def reading(work: Callable[[], T]) -> T:
    """Run a read of the database off the event loop."""
    return await asyncio.to_thread(work)


async def looking_up(parts: Parts, work: Callable[[], T]) -> T:
    """Look up single rows: at once where the database is in this process, else off the event loop."""
    return work() if parts.reader.looks_up_at_once else await reading(work)


class Computers:
    """Threads for long computations, and a short queue before them."""

    def __init__(self, threads: int, most_waiting: int) -> None:
        self._executor = ThreadPoolExecutor(threads, thread_name_prefix="computer")
        self._most = threads + most_waiting
        self._asked = 0

    async def run(self, work: Callable[[], T]) -> T:
        """
        Run a computation when its turn comes.

        Raises:
            TooManyQuestions: So many are waiting that this one would wait too long.
        """
        if self._asked >= self._most:
            raise TooManyQuestions
        self._asked += 1
        try:
            return await asyncio.get_running_loop().run_in_executor(self._executor, work)
        finally:
            self._asked -= 1

    def stop(self) -> None:
        """Drop what waits."""
        self._executor.shutdown(wait=False, cancel_futures=True)


async def computing(parts: Parts, work: Callable[[], T]) -> T:
    """Run a long computation on threads of its own, so that neither the event loop nor reads wait for it."""
    return await parts.computers.run(work)
