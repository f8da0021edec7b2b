"""What the routes need, built once by the application and handed to each request."""

import asyncio
from collections.abc import Callable
from concurrent.futures import Executor
from dataclasses import dataclass
from typing import Annotated, TypeVar, cast

from fastapi import Depends, Request

from service.ingest.road import Clock, Road
from service.settings import Settings
from service.storage.reader import Reader

T = TypeVar("T")


@dataclass(frozen=True)
class Parts:
    """The connected parts of a running service."""

    settings: Settings
    reader: Reader
    road: Road
    clock: Clock
    check_ready: Callable[[], None]
    computers: Executor


async def _parts(request: Request) -> Parts:
    return cast("Parts", request.app.state.parts)


PartsOf = Annotated[Parts, Depends(_parts)]


async def reading(work: Callable[[], T]) -> T:
    """Run a read of the database off the event loop."""
    return await asyncio.to_thread(work)


async def looking_up(parts: Parts, work: Callable[[], T]) -> T:
    """Look up single rows: at once where the database is in this process, else off the event loop."""
    return work() if parts.reader.looks_up_at_once else await reading(work)


async def computing(parts: Parts, work: Callable[[], T]) -> T:
    """Run a long computation on threads of its own, so that neither the event loop nor reads wait for it."""
    return await asyncio.get_running_loop().run_in_executor(parts.computers, work)
