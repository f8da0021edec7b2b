"""The road: groups, refusals, errors, a full queue, and stopping."""

import asyncio
import threading
from collections.abc import AsyncIterator, Awaitable, Callable, Iterator
from contextlib import asynccontextmanager
from datetime import UTC, datetime
from pathlib import Path

import pytest
from sqlalchemy import Connection, Engine, event, text
from sqlalchemy.exc import OperationalError, StatementError

from service.domain.checking import checked_content
from service.domain.errors import (
    DomainError,
    InvalidObservations,
    OutcomeUnknown,
    QueueFull,
    ShuttingDown,
    StorageFailed,
    SubmissionInProgress,
    TestIsClosed,
)
from service.domain.sequential_test import Subject, SubjectKind
from service.ingest.commands import CreatePlan, Posted, PostObservations, RegisterTest
from service.ingest.road import Road, perform_now
from service.storage.engine import create_engine_for
from service.storage.migrate import upgrade
from service.storage.reader import Reader

NOW = datetime(2031, 5, 4, 9, 30, tzinfo=UTC)
PLAN = {
    "family": "normal",
    "h0": 0.0,
    "h1": 1.0,
    "alpha": 1e-9,
    "beta": 1e-9,
    "boundaries": "wald",
    "statistic": "simple",
    "known": {"sigma": 1.0},
}

FAILING_B = (
    "CREATE TRIGGER no_b BEFORE INSERT ON submissions WHEN new.test = 'b' "
    "BEGIN SELECT RAISE(ABORT, 'disk on fire'); END"
)


@pytest.fixture
def engine(tmp_path: Path) -> Iterator[Engine]:
    engine = create_engine_for(f"sqlite:///{tmp_path / 'road.sqlite3'}")
    upgrade(engine)
    perform_now(engine, CreatePlan("p", checked_content(PLAN), "me"))
    for key in ("a", "b"):
        perform_now(engine, RegisterTest(key, "p", Subject(SubjectKind.LOT, key), {}, "me"))
    yield engine
    engine.dispose()


def post(test: str, value: float = 0.5, key: str | None = None) -> PostObservations:
    body = f'{{"values": [{value}]}}'
    return PostObservations(test, body, {"values": [value]}, body, "me", key)


@asynccontextmanager
async def opened(engine: Engine, queue_limit: int = 100, group_limit: int = 50) -> AsyncIterator[Road]:
    road = Road(engine, lambda: NOW, queue_limit, group_limit)
    road.start()
    yield road
    await road.stop()


def run(engine: Engine, work: Callable[[Road], Awaitable[None]], **limits: int) -> None:
    async def main() -> None:
        async with opened(engine, **limits) as road:
            await work(road)

    asyncio.run(main())


class Gate:
    """Holds the writer inside its first transaction until told to go on, and counts commits."""

    def __init__(self, engine: Engine) -> None:
        self.commits = 0
        self._entered, self._go_on = threading.Event(), threading.Event()
        event.listen(engine, "begin", self._hold)
        event.listen(engine, "commit", self._count)

    def _hold(self, _connection: object) -> None:
        self._entered.set()
        assert self._go_on.wait(10)

    def _count(self, _connection: object) -> None:
        self.commits += 1

    async def entered(self) -> None:
        assert await asyncio.to_thread(self._entered.wait, 10)

    def open(self) -> None:
        self._go_on.set()


def test_what_waits_is_committed_together_and_in_order(engine: Engine) -> None:
    gate = Gate(engine)

    async def work(road: Road) -> None:
        first = asyncio.create_task(road.submit(post("a")))
        await gate.entered()
        rest = [asyncio.create_task(road.submit(post("a"))) for _ in range(20)]
        await asyncio.sleep(0)
        gate.open()
        outcomes = await asyncio.gather(first, *rest)
        assert [o.first_sequence for o in outcomes if isinstance(o, Posted)] == list(range(1, 22))

    run(engine, work)
    assert gate.commits == 2


def test_a_refusal_disturbs_no_other(engine: Engine) -> None:
    async def work(road: Road) -> None:
        results = await asyncio.gather(
            road.submit(post("a")), road.submit(post("a", float("nan"))), road.submit(post("a")), return_exceptions=True
        )
        assert isinstance(results[1], InvalidObservations)
        assert all(isinstance(results[i], Posted) for i in (0, 2))

    run(engine, work)
    assert [s.last_sequence for s in Reader(engine).log.submissions("a")] == [1, 2]


def test_an_error_of_the_database_fails_only_its_own_command(engine: Engine) -> None:
    with engine.begin() as connection:
        connection.execute(text(FAILING_B))
    gate = Gate(engine)

    async def work(road: Road) -> None:
        first = asyncio.create_task(road.submit(post("a")))
        await gate.entered()
        rest = [asyncio.create_task(road.submit(post(test))) for test in ("a", "b", "a")]
        await asyncio.sleep(0)
        gate.open()
        results = await asyncio.gather(first, *rest, return_exceptions=True)
        assert [type(result) for result in results] == [Posted, Posted, StorageFailed, Posted]

    run(engine, work)
    assert [s.last_sequence for s in Reader(engine).log.submissions("a")] == [1, 2, 3]
    assert list(Reader(engine).log.submissions("b")) == []


def refusing_after(engine: Engine, count: int) -> list[int]:
    """Have the database say that it is locked once so many transactions began; what is returned grows with each try."""
    tries: list[int] = []

    def begin(_connection: Connection) -> None:
        tries.append(len(tries))
        if len(tries) > count:
            raise OperationalError("BEGIN IMMEDIATE", {}, Exception("database is locked"))

    event.listen(engine, "begin", begin)
    return tries


def test_a_busy_database_is_waited_for_once_for_the_whole_group(engine: Engine) -> None:
    gate, begun = Gate(engine), refusing_after(engine, 1)

    async def work(road: Road) -> None:
        first = asyncio.create_task(road.submit(post("a")))
        await gate.entered()
        rest = [asyncio.create_task(road.submit(post("a"))) for _ in range(20)]
        await asyncio.sleep(0)
        gate.open()
        results = await asyncio.gather(first, *rest, return_exceptions=True)
        assert [type(result) for result in results] == [Posted] + [StorageFailed] * 20

    run(engine, work)
    assert len(begun) == 2


def test_members_run_one_by_one_are_answered_as_they_are_done_until_no_transaction_can_be_begun(engine: Engine) -> None:
    with engine.begin() as connection:
        connection.execute(text(FAILING_B))
    # The one that holds the writer, the group, its first member and its second.
    gate, begun = Gate(engine), refusing_after(engine, 4)

    async def work(road: Road) -> None:
        first = asyncio.create_task(road.submit(post("a")))
        await gate.entered()
        rest = [asyncio.create_task(road.submit(post(test))) for test in ("a", "b", "a", "a", "a")]
        await asyncio.sleep(0)
        gate.open()
        results = await asyncio.gather(first, *rest, return_exceptions=True)
        assert [type(result) for result in results] == [Posted, Posted] + [StorageFailed] * 4

    run(engine, work)
    assert len(begun) == 5


def test_a_value_that_no_database_takes_is_a_mistake_of_ours_and_not_of_the_database(engine: Engine) -> None:
    async def main() -> None:
        road = Road(engine, lambda: NOW.replace(tzinfo=None), 10, 5)  # moments need a zone
        road.start()
        with pytest.raises(StatementError, match="time zone"):
            await road.submit(post("a"))
        await road.stop()

    asyncio.run(main())


def test_a_full_queue_and_a_repeated_key_in_progress_are_refused_at_once(engine: Engine) -> None:
    gate = Gate(engine)

    async def work(road: Road) -> None:
        first = asyncio.create_task(road.submit(post("a", key="k")))
        await gate.entered()
        with pytest.raises(SubmissionInProgress):
            await road.submit(post("a", key="k"))
        waiting = [asyncio.create_task(road.submit(post("b"))) for _ in range(2)]
        await asyncio.sleep(0)
        with pytest.raises(QueueFull):
            await road.submit(post("b"))
        gate.open()
        await asyncio.gather(first, *waiting)
        again = await road.submit(post("a", key="k"))
        assert isinstance(again, Posted)
        assert again.is_replay

    run(engine, work, queue_limit=2)


def test_stopping_finishes_what_was_accepted_and_refuses_the_rest(engine: Engine) -> None:
    gate = Gate(engine)

    async def main() -> None:
        road = Road(engine, lambda: NOW, 100, 50)
        road.start()
        accepted = [asyncio.create_task(road.submit(post("a"))) for _ in range(5)]
        await gate.entered()
        stopping = asyncio.create_task(road.stop())
        await asyncio.sleep(0)
        with pytest.raises(ShuttingDown):
            await road.submit(post("a"))
        gate.open()
        await stopping
        assert all(isinstance(outcome, Posted) for outcome in await asyncio.gather(*accepted))

    asyncio.run(main())
    assert len(list(Reader(engine).log.submissions("a"))) == 5


def test_a_caller_that_left_is_no_error(engine: Engine) -> None:
    gate = Gate(engine)

    async def work(road: Road) -> None:
        leaving = asyncio.create_task(road.submit(post("a")))
        await gate.entered()
        leaving.cancel()
        gate.open()
        outcome = await road.submit(post("a"))
        assert isinstance(outcome, Posted)
        assert outcome.first_sequence == 2

    run(engine, work)


def test_a_closed_test_takes_nothing(engine: Engine) -> None:
    with engine.begin() as connection:
        connection.execute(text("UPDATE tests SET status = 'closed' WHERE key = 'a'"))
    with pytest.raises(TestIsClosed):
        perform_now(engine, post("a"))
    assert list(Reader(engine).log.submissions("a")) == []


def test_every_refusal_is_an_error_of_the_domain() -> None:
    assert issubclass(QueueFull, DomainError)


def test_a_commit_that_is_not_confirmed_is_never_tried_again(engine: Engine) -> None:
    """The commit happens and the confirmation is lost, as when a connection breaks at that moment."""
    has_failed = threading.Event()

    def lose_the_confirmation(connection: Connection) -> None:
        if not has_failed.is_set():
            has_failed.set()
            connection.exec_driver_sql("COMMIT")
            raise OperationalError("COMMIT", {}, Exception("connection lost"))

    event.listen(engine, "commit", lose_the_confirmation)

    async def work(road: Road) -> None:
        with pytest.raises(OutcomeUnknown):
            await road.submit(post("a", key="k"))
        again = await road.submit(post("a", key="k"))
        assert isinstance(again, Posted)
        assert again.is_replay

    run(engine, work)
    assert [s.last_sequence for s in Reader(engine).log.submissions("a")] == [1]
