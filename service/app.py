"""Builds and connects everything; the only module that knows all parts."""

import asyncio
import logging
import signal
import threading
from collections.abc import AsyncIterator, Callable, Iterator
from contextlib import asynccontextmanager, contextmanager
from datetime import timedelta
from types import FrameType

from fastapi import FastAPI, Request, Response
from starlette.middleware.cors import CORSMiddleware
from starlette.staticfiles import StaticFiles

from service.api import problems
from service.api.access import AccessGuard
from service.api.description import describe
from service.api.routes import (
    acts,
    administration,
    characteristics,
    events,
    health,
    history,
    inference,
    metrics,
    notices,
    observations,
    plans,
    simulations,
    subjects,
    tests,
)
from service.api.unchanged import UnchangedTests
from service.domain.notices import Schedule
from service.ingest.road import Clock, Road, utc_now
from service.logs import set_up_log
from service.notices.courier import Courier
from service.notices.resolving import Resolve, Resolver
from service.notices.sender import Sender
from service.pages.failing import page_of_nothing
from service.pages.rendering import STATIC
from service.pages.routes import acts as page_acts
from service.pages.routes import design as page_design
from service.pages.routes import drawings, live, one_test, record, registering, signing
from service.pages.routes import plans as page_plans
from service.pages.routes import tests as all_tests
from service.settings import Settings, read_settings
from service.storage.engine import create_engine_for
from service.storage.migrate import check_schema
from service.storage.reader import Reader
from service.storage.watching import Watcher
from service.web.hardening import CORS_ASKED, CORS_METHODS, CORS_SHOWN
from service.web.metrics import Metrics
from service.web.parts import Computers, Parts
from service.web.rates import Rates
from service.web.requests import RequestId, accounts
from service.web.simulations import Simulations
from service.web.streams import Streams
from service.web.walks import Walks

# Exact computations that run at once; more wait.
COMPUTERS, MOST_WAITING = 2, 8

VERSION = "0.1.0"

DESCRIPTION = (
    "Sequential probability ratio tests: register a lot or an experiment under a plan, post results as they come, "
    "and learn after each whether to continue, accept or reject."
)


def create_served_app() -> FastAPI:
    """The service as one of several processes builds it, from the environment that they share."""
    settings = read_settings()
    set_up_log(settings)
    return create_app(settings)


@contextmanager
def at_a_signal_to_end(act: Callable[[], object]) -> Iterator[None]:
    """
    Act as soon as the process is told to end, and before the server does what it does then.

    The server waits for open connections before it tells the application, and a stream stays open until it is told.
    """
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = {number: signal.getsignal(number) for number in (signal.SIGINT, signal.SIGTERM)}

    def end(number: int, frame: FrameType | None) -> None:
        act()
        handler = before[signal.Signals(number)]
        if callable(handler):
            handler(number, frame)

    for number in before:
        signal.signal(number, end)
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def sender_for(settings: Settings, road: Road, reader: Reader, resolve: Resolve, clock: Clock) -> Sender:
    """The sender of notices as the settings want it."""
    return Sender(
        road,
        reader.notices,
        Courier(settings.notices_allowed, settings.notice_timeout_seconds, resolve),
        clock,
        Schedule(settings.notice_attempts, settings.notice_wait_seconds),
        timeout_seconds=settings.notice_timeout_seconds,
        keep=timedelta(days=settings.notice_keep_days),
    )


async def nothing_here(request: Request, error: Exception) -> Response:
    """An address that leads nowhere: a page for who looks with a browser, a problem document for all others."""
    wants_page = "text/html" in request.headers.get("accept", "") and not request.url.path.startswith("/v1")
    return page_of_nothing(request) if wants_page else await problems.on_http_exception(request, error)


def create_app(settings: Settings, clock: Clock = utc_now) -> FastAPI:
    """
    The service as an ASGI application; it opens its database when it starts.

    Raises:
        SchemaMismatch: At start, when the database has another schema than this version knows.
    """
    figures, rates = Metrics(), Rates(settings.rate_limit, settings.rate_burst)

    @asynccontextmanager
    async def lifespan(app: FastAPI) -> AsyncIterator[None]:
        engine = create_engine_for(settings.database_url)
        check_schema(engine)
        computers, resolver = Computers(COMPUTERS, MOST_WAITING), Resolver()
        streams, loop = Streams(settings.stream_limit, figures.streaming), asyncio.get_running_loop()
        road = Road(
            engine,
            clock,
            settings.queue_limit,
            settings.group_limit,
            settings.queue_bytes,
            figures,
            on_notices=lambda: loop.call_soon_threadsafe(sender.wake),
        )
        watcher = Watcher(engine, lambda: loop.call_soon_threadsafe(streams.wake))
        simulating = Simulations(computers)
        reader, check = Reader(engine), lambda: check_schema(engine)
        sender = sender_for(settings, road, reader, resolver, clock)
        app.state.parts = Parts(
            settings, reader, road, clock, check, computers, streams, simulating, figures, rates, Walks()
        )
        road.start()
        watcher.start()
        sender.start()
        try:
            with at_a_signal_to_end(lambda: loop.call_soon_threadsafe(streams.stop)):
                yield
        finally:
            streams.stop()
            simulating.stop()
            await asyncio.to_thread(watcher.stop)
            await sender.stop()
            await road.stop()
            computers.stop()
            engine.dispose()

    logging.getLogger("service").setLevel(settings.log_level)
    app = FastAPI(
        title="SPRT Monitor",
        version=VERSION,
        description=DESCRIPTION,
        docs_url=None,
        redoc_url=None,
        redirect_slashes=False,  # behind a proxy that ends TLS it would send callers, and their keys, to plain HTTP
        lifespan=lifespan,
        separate_input_output_schemas=False,
    )
    problems.install(app)
    app.add_exception_handler(404, nothing_here)
    app.add_middleware(UnchangedTests)
    app.add_middleware(AccessGuard, rates=rates)
    if settings.origins:
        app.add_middleware(
            CORSMiddleware,
            allow_origins=settings.origins,
            allow_methods=CORS_METHODS,
            allow_headers=CORS_ASKED,
            expose_headers=CORS_SHOWN,
        )
    app.add_middleware(
        RequestId, failed=problems.internal_error, account=accounts(figures, writes_lines=settings.access_log)
    )
    for module in (
        plans,
        characteristics,
        simulations,
        tests,
        observations,
        acts,
        inference,
        history,
        subjects,
        events,
        administration,
        notices,
        health,
        metrics,
    ):
        app.include_router(module.router)
    app.include_router(plans.standards_router)
    for pages in (
        signing,
        all_tests,
        one_test,
        page_acts,
        drawings,
        record,
        page_plans,
        page_design,
        registering,
        live,
    ):
        app.include_router(pages.router)
    app.mount("/static", StaticFiles(directory=STATIC), name="static")
    app.openapi = describe(app)  # type: ignore[method-assign]
    return app
