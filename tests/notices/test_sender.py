"""The sender on a road of its own: order, retries, leases, and receivers that are slow, gone or away."""

import asyncio
import itertools
import shutil
import threading
import time
from collections.abc import AsyncIterator, Awaitable, Callable, Iterator
from contextlib import asynccontextmanager
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import cast

import pytest
from sqlalchemy import Engine
from sqlalchemy.engine import URL

from service.domain.access import UNLIMITED, limits_of
from service.domain.addresses import Allowed
from service.domain.checking import checked_content
from service.domain.disposing import Verdict
from service.domain.notices import Notice, NoticeState, Schedule
from service.domain.sequential_test import Subject, SubjectKind
from service.ingest.commands import (
    CreatePlan,
    CreateReceiver,
    Dispose,
    IssuedReceiver,
    PostCorrection,
    RegisterTest,
    RemoveReceiver,
    SendAgain,
    SendTrial,
    Taken,
    TakeNotices,
)
from service.ingest.road import Road, perform_now, utc_now
from service.notices import sender
from service.notices.courier import Courier
from service.notices.resolving import Resolver
from service.notices.sender import PLACES, Sender
from service.storage.engine import create_engine_for
from service.storage.migrate import upgrade
from service.storage.reader import Reader
from tests.api.examples import SEAL
from tests.notices.receiving import Heard, Receiver, listening
from tests.postgres import fresh_database
from tests.storage.test_history import post

ANYTHING = Allowed(plain_http=True, private_targets=True)
QUICK = Schedule(attempts=3, first_wait_seconds=0.05)
SUBJECT = Subject(SubjectKind.LOT, "x")


@pytest.fixture(scope="module")
def template(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A migrated database with a plan, to copy."""
    file = tmp_path_factory.mktemp("notices") / "template.sqlite3"
    engine = create_engine_for(f"sqlite:///{file}")
    prepare(engine)
    engine.dispose()
    return file


@pytest.fixture
def engine(template: Path, tmp_path: Path) -> Iterator[Engine]:
    shutil.copy(template, tmp_path / "notices.sqlite3")
    engine = create_engine_for(f"sqlite:///{tmp_path / 'notices.sqlite3'}")
    yield engine
    engine.dispose()


def prepare(engine: Engine) -> None:
    upgrade(engine)
    perform_now(engine, CreatePlan("seal", checked_content(SEAL), "me"))


def register(engine: Engine, receiver: Receiver, name: str = "bench") -> str:
    command = CreateReceiver(name, receiver.url, UNLIMITED, ANYTHING, "me")
    return cast("IssuedReceiver", perform_now(engine, command)).receiver.secret or ""


def decide(engine: Engine, key: str, **labels: str) -> None:
    """A test that is accepted at once: version 2."""
    perform_now(engine, RegisterTest(key, "seal", SUBJECT, labels, "me"))
    perform_now(engine, post(key, *[0] * 24))


def void(engine: Engine, key: str, at: int) -> None:
    perform_now(engine, PostCorrection(key, at, None, "typo", "d" * 64, "me", may_correct_decided=True))


@asynccontextmanager
async def sending(
    engine: Engine, seconds: float = 20.0, schedule: Schedule = QUICK, keep: timedelta = timedelta(days=30)
) -> AsyncIterator[Road]:
    """A road and a sender; each attempt has so many seconds."""
    loop, resolver = asyncio.get_running_loop(), Resolver()
    road = Road(engine, utc_now, 100, 50, on_notices=lambda: loop.call_soon_threadsafe(own.wake))
    courier = Courier(ANYTHING, seconds, resolver)
    own = Sender(
        road, Reader(engine).notices, courier, utc_now, schedule, timeout_seconds=seconds, keep=keep, draw=lambda: 0.0
    )
    road.start()
    own.start()
    try:
        yield road
    finally:
        await own.stop()
        await road.stop()


async def until(holds: Callable[[], bool], seconds: float = 30.0) -> None:
    deadline = time.monotonic() + seconds
    while not await asyncio.to_thread(holds):
        assert time.monotonic() < deadline
        await asyncio.sleep(0.01)


def run(
    engine: Engine, work: Callable[[Road], Awaitable[None]], seconds: float = 20.0, schedule: Schedule = QUICK
) -> None:
    async def main() -> None:
        async with sending(engine, seconds, schedule) as road:
            await work(road)

    asyncio.run(main())


def outbox(engine: Engine, name: str = "bench") -> list[Notice]:
    reader = Reader(engine).notices
    receiver = reader.receiver(name)
    assert receiver is not None
    return reader.page(receiver, None, None, 1000)


def states(engine: Engine, name: str = "bench") -> list[str]:
    return [notice.state.value for notice in outbox(engine, name)]


def test_decisions_their_changes_and_dispositions_are_told_in_order(engine: Engine) -> None:
    with listening() as receiver:
        secret = register(engine, receiver)
        decide(engine, "lot-1")
        perform_now(engine, post("lot-1", 0))
        void(engine, "lot-1", 3)  # the overrun decides in its place: no change of the decision
        void(engine, "lot-1", 4)
        perform_now(engine, post("lot-1", 0))
        perform_now(engine, Dispose("lot-1", Verdict.ACCEPT, "sheet 12", None, "me"))
        run(engine, lambda _: until(lambda: states(engine) == ["delivered"] * 4))
        told = [(heard.message["type"], *heard.about, heard.message["data"]["decision"]) for heard in receiver.heard]
        assert told == [
            ("test.decided", "lot-1", 2, "accept"),
            ("test.decision_changed", "lot-1", 5, "continue"),
            ("test.decided", "lot-1", 6, "accept"),
            ("test.disposed", "lot-1", 7, "accept"),
        ]
        assert [heard.message["data"]["previous_decision"] for heard in receiver.heard] == [
            "continue",
            "accept",
            "continue",
            "accept",
        ]
        for heard in receiver.heard:
            assert heard.is_signed_with(secret)
            assert abs(int(heard.headers["webhook-timestamp"]) - time.time()) < 60
            assert (heard.path, heard.headers["content-type"]) == ("/told", "application/json")
            assert heard.headers["host"] == f"127.0.0.1:{receiver.port}"
        assert len({heard.id for heard in receiver.heard}) == 4


def test_a_receiver_that_fails_or_is_silent_is_tried_again_with_the_same_notice(engine: Engine) -> None:
    attempts = itertools.count(1)
    rest = threading.Event()

    def answer(_: Heard) -> int:
        attempt = next(attempts)
        if attempt == 2:
            rest.wait(30)
        return 500 if attempt < 3 else 204

    with listening(answer) as receiver:
        secret = register(engine, receiver)
        decide(engine, "lot-1")
        patient = Schedule(attempts=20, first_wait_seconds=0.05)
        run(engine, lambda _: until(lambda: states(engine) == ["delivered"]), seconds=0.8, schedule=patient)
        rest.set()
        first, second, third = receiver.heard[:3]
        assert len({(heard.id, heard.body) for heard in receiver.heard}) == 1
        assert all(heard.is_signed_with(secret) for heard in receiver.heard)
        assert second.at - first.at >= 0.05
        assert third.at - second.at >= 0.15
        (notice,) = outbox(engine)
        assert (notice.attempts, notice.outcome, notice.lease) == (len(receiver.heard), "answered 204", None)


def test_of_one_test_nothing_overtakes_what_is_tried_again_and_other_tests_do(engine: Engine) -> None:
    attempts = itertools.count(1)

    def answer(heard: Heard) -> int:
        return 503 if heard.about == ("lot-1", 2) and next(attempts) < 3 else 200

    with listening(answer) as receiver:
        register(engine, receiver)
        decide(engine, "lot-1")
        void(engine, "lot-1", 1)
        decide(engine, "lot-2")
        run(engine, lambda _: until(lambda: states(engine) == ["delivered"] * 3))
        assert [about for about in receiver.told if about[0] == "lot-1"] == [("lot-1", 2)] * 3 + [("lot-1", 3)]
        assert receiver.told.index(("lot-2", 2)) < 3


def test_after_the_last_attempt_a_notice_is_dead_until_it_is_sent_again(engine: Engine) -> None:
    status = [500]
    with listening(lambda _: status[0]) as receiver:
        register(engine, receiver)
        decide(engine, "lot-1")
        void(engine, "lot-1", 1)

        async def work(road: Road) -> None:
            await until(lambda: states(engine) == ["dead", "dead"])
            assert receiver.told == [("lot-1", 2)] * 3 + [("lot-1", 3)] * 3
            figures = Reader(engine).notices.figures()
            assert (figures.dead, figures.waiting, figures.oldest_waiting_at) == (2, 0, None)
            status[0] = 200
            first = outbox(engine)[0]
            await road.submit(SendAgain(first.id))
            await until(lambda: states(engine) == ["delivered", "dead"])
            assert receiver.told[6:] == [("lot-1", 2)]
            assert receiver.heard[-1].id == first.id

        run(engine, work)


def test_a_receiver_that_wants_no_more_is_not_asked_again(engine: Engine) -> None:
    with listening(lambda _: 410) as receiver:
        register(engine, receiver)
        decide(engine, "lot-1")
        run(engine, lambda _: until(lambda: states(engine) == ["dead"]))
        assert len(receiver.heard) == 1


def test_a_slow_receiver_holds_up_nobody_else(engine: Engine) -> None:
    """It holds as many connections as it has places, for longer than anybody waits here."""
    let_go = threading.Event()

    def hold(_: Heard) -> int:
        let_go.wait(60)
        return 200

    with listening(hold) as slow, listening() as quick:
        register(engine, slow, "slow")
        register(engine, quick, "quick")
        for i in range(3 * PLACES):
            decide(engine, f"lot-{i}")

        async def work(_: Road) -> None:
            await until(lambda: states(engine, "quick") == ["delivered"] * 3 * PLACES)
            await until(lambda: len(slow.heard) == PLACES)
            assert states(engine, "slow") == ["waiting"] * 3 * PLACES
            let_go.set()
            await until(lambda: states(engine, "slow") == ["delivered"] * 3 * PLACES)

        run(engine, work, seconds=60.0)
        assert len(slow.heard) == 3 * PLACES


def test_a_removed_receiver_is_sent_nothing_more(engine: Engine) -> None:
    """Neither what waits, nor again what was being sent when it was removed, nor what comes later."""
    let_go = threading.Event()

    def hold(_: Heard) -> int:
        let_go.wait(60)
        return 500

    with listening(hold) as removed, listening() as other:
        register(engine, removed, "removed")
        register(engine, other, "other")
        decide(engine, "lot-1")
        void(engine, "lot-1", 1)
        perform_now(engine, RegisterTest("lot-2", "seal", SUBJECT, {}, "me"))

        async def work(road: Road) -> None:
            await until(lambda: len(removed.heard) == 1 and states(engine, "other") == ["delivered"] * 2)
            await road.submit(RemoveReceiver("removed", "me"))
            let_go.set()
            await road.submit(post("lot-2", *[0] * 24))
            await until(lambda: states(engine, "other") == ["delivered"] * 3)
            await asyncio.sleep(0.3)

        run(engine, work)
        assert removed.told == [("lot-1", 2)]
        (stored,) = [each for each in Reader(engine).notices.receivers() if each.name == "removed"]
        assert stored.secret is None


def test_what_was_delivered_is_dropped_after_its_time_and_what_is_dead_is_not(engine: Engine) -> None:
    with listening(lambda heard: 200 if heard.about[0] == "lot-1" else 410) as receiver:
        register(engine, receiver)
        decide(engine, "lot-1")
        decide(engine, "lot-2")
        run(engine, lambda _: until(lambda: sorted(states(engine)) == ["dead", "delivered"]))

        async def drop() -> None:
            async with sending(engine, keep=timedelta(0)):
                await until(lambda: states(engine) == ["dead"])

        asyncio.run(drop())


def test_a_receiver_is_told_of_the_tests_inside_its_limits(engine: Engine) -> None:
    with listening() as receiver:
        limits = limits_of([], [("line", "3")])
        perform_now(engine, CreateReceiver("bench", receiver.url, limits, ANYTHING, "me"))
        decide(engine, "lot-1", line="4")
        decide(engine, "lot-2", line="3")
        decide(engine, "lot-3")
        run(engine, lambda _: until(lambda: states(engine) == ["delivered"]))
        assert receiver.told == [("lot-2", 2)]


def test_a_redirect_is_not_followed(engine: Engine) -> None:
    with listening() as elsewhere:

        def redirect(handler: object) -> None:
            handler.send_response(307)  # type: ignore[attr-defined]
            handler.send_header("Location", elsewhere.url)  # type: ignore[attr-defined]
            handler.end_headers()  # type: ignore[attr-defined]

        with listening(lambda _: redirect) as receiver:
            register(engine, receiver)
            decide(engine, "lot-1")
            run(engine, lambda _: until(lambda: states(engine) == ["dead"]))
            assert len(receiver.heard) == 3
            assert outbox(engine)[0].outcome == "answered 307"
        assert elsewhere.connections == 0


def test_of_an_endless_answer_little_is_read(engine: Engine) -> None:
    sent = [0]

    def talk(handler: object) -> None:
        handler.send_response(200)  # type: ignore[attr-defined]
        handler.end_headers()  # type: ignore[attr-defined]
        while sent[0] < 2**28:
            handler.wfile.write(b"x" * 65536)  # type: ignore[attr-defined]
            sent[0] += 65536

    with listening(lambda _: talk) as receiver:
        register(engine, receiver)
        decide(engine, "lot-1")
        run(engine, lambda _: until(lambda: states(engine) == ["delivered"]))
        assert len(receiver.heard) == 1
        assert sent[0] < 2**25, "what the buffers of the connection hold"


def test_an_answer_counts_by_its_head_though_its_body_never_ends(engine: Engine) -> None:
    let_go = threading.Event()

    def trickle(handler: object) -> None:
        handler.send_response(200)  # type: ignore[attr-defined]
        handler.end_headers()  # type: ignore[attr-defined]
        let_go.wait(30)

    with listening(lambda _: trickle) as receiver:
        register(engine, receiver)
        decide(engine, "lot-1")
        patient = Schedule(attempts=20, first_wait_seconds=0.05)
        run(engine, lambda _: until(lambda: states(engine) == ["delivered"]), seconds=0.8, schedule=patient)
        let_go.set()
        assert outbox(engine)[0].outcome == "answered 200"


def test_what_comes_while_the_sender_runs_is_told_at_once(engine: Engine, monkeypatch: pytest.MonkeyPatch) -> None:
    """By word of the commit: of itself it would look again after an hour."""
    monkeypatch.setattr(sender, "LOOK_SECONDS", 3600.0)
    with listening() as receiver:
        register(engine, receiver)

        async def work(road: Road) -> None:
            await asyncio.sleep(0.1)
            await road.submit(SendTrial("bench"))
            await until(lambda: states(engine) == ["delivered"])

        run(engine, work)
        (heard,) = receiver.heard
        assert (heard.message["type"], heard.message["data"]) == ("notice.trial", {"receiver": "bench"})


def test_two_senders_on_one_database_send_nothing_twice(server: URL) -> None:
    """Each with connections and a road of its own, as two processes have."""
    with fresh_database(server) as url, listening() as receiver:
        engines = [create_engine_for(url) for _ in range(2)]
        prepare(engines[0])
        register(engines[0], receiver)
        for i in range(12):
            decide(engines[0], f"lot-{i}")
            void(engines[0], f"lot-{i}", 1)

        async def main() -> None:
            async with sending(engines[0]), sending(engines[1]):
                await until(lambda: states(engines[0]) == ["delivered"] * 24)

        asyncio.run(main())
        assert sorted(receiver.told) == sorted((f"lot-{i}", version) for i in range(12) for version in (2, 3))
        for i in range(12):
            mine = [version for key, version in receiver.told if key == f"lot-{i}"]
            assert mine == [2, 3]
        assert {notice.attempts for notice in outbox(engines[0])} == {1}
        for engine in engines:
            engine.dispose()


def test_a_lease_that_ran_out_is_taken_by_somebody_else(engine: Engine) -> None:
    """As after a process was killed in the middle of an attempt."""
    with listening() as receiver:
        register(engine, receiver)
        decide(engine, "lot-1")
        (notice,) = outbox(engine)
        now = datetime.now(UTC)
        take = TakeNotices({notice.receiver: 4}, lease_seconds=30.0)

        def taken(seconds: float) -> int:
            at = now + timedelta(seconds=seconds)
            return len(cast("Taken", perform_now(engine, take, lambda: at)).deliveries)

        assert [taken(0), taken(29.9), taken(30), taken(59.9), taken(60)] == [1, 0, 1, 0, 1]
        assert outbox(engine)[0].state is NoticeState.WAITING
