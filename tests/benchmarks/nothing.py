"""
The service with a road that stores nothing: `python -m tests.benchmarks.nothing PORT`.

Access, validation, the domain's step and the response are those of the real route; only the queue, the writer and the
database's commit are missing. One more route answers a constant.
"""

import sys
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from dataclasses import replace

import uvicorn
from fastapi import FastAPI

from service.app import create_app
from service.domain.observing import observe
from service.domain.plan import Plan
from service.domain.procedure import procedure_of
from service.domain.sequential_test import SequentialTest
from service.ingest.commands import Command, Outcome, Posted, PostObservations
from service.ingest.road import utc_now
from service.settings import read_settings
from service.storage.reader import Reader


class Nowhere:
    """Answers a submission as if the test had only its first state, and keeps nothing."""

    has_failed = False

    def __init__(self, reader: Reader) -> None:
        self._reader = reader
        self._known: dict[str, tuple[SequentialTest, Plan]] = {}

    async def submit(self, command: Command) -> Outcome:
        assert isinstance(command, PostObservations)
        if command.test not in self._known:
            self._known[command.test] = self._read(command.test)
        test, plan = self._known[command.test]
        now = utc_now()
        state = observe(procedure_of(plan), test.state, command.document, now)
        moved = replace(test, version=test.version + 1, updated_at=now, state=state)
        return Posted(moved, plan, test.state.sequence + 1, state.sequence, is_replay=False)

    def _read(self, key: str) -> tuple[SequentialTest, Plan]:
        test = self._reader.test(key)
        assert test is not None
        plan = self._reader.plan(test.plan)
        assert plan is not None
        return test, plan


def build() -> FastAPI:
    app = create_app(read_settings())
    real = app.router.lifespan_context

    @asynccontextmanager
    async def lifespan(started: FastAPI) -> AsyncIterator[None]:
        async with real(started):
            parts = started.state.parts
            started.state.parts = replace(parts, road=Nowhere(parts.reader))
            yield

    app.router.lifespan_context = lifespan

    @app.get("/constant")
    async def constant() -> dict[str, str]:
        return {"constant": "yes"}

    return app


if __name__ == "__main__":
    uvicorn.run(build(), port=int(sys.argv[1]), access_log=False, log_level="warning")
