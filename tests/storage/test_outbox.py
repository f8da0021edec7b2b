"""The outbox on both databases: what is due, in order, leased once, and dropped when it is old."""

from collections.abc import Iterator
from contextlib import contextmanager
from datetime import timedelta

import pytest
from sqlalchemy import Engine, event, text
from sqlalchemy.exc import IntegrityError

from service.domain.access import UNLIMITED, Limits, limits_of
from service.domain.notices import Notice, NoticeKind, NoticeState, notice_id
from service.domain.receivers import Receiver
from service.domain.sequential_test import Subject, SubjectKind
from service.storage.engine import is_sqlite
from service.storage.reader import Reader
from service.storage.writer import writing
from tests.storage.test_storage import NOW, a_test, add

SECOND = timedelta(seconds=1)


def a_receiver(name: str, limits: Limits = UNLIMITED) -> Receiver:
    return Receiver(f"id-{name}", name, "https://x.example/", f"whsec_{name}", "f" * 64, NOW, "me", None, limits)


def a_notice(receiver: str, test: str | None, version: int, number: int = 0) -> Notice:
    at = NOW + number * SECOND
    kind = NoticeKind.DECIDED if test else NoticeKind.TRIAL
    name = notice_id(at, f"{receiver}-{test}-{version}")
    return Notice(name, f"id-{receiver}", test, version, kind, '{"ü": 1}', at, at)


@pytest.fixture
def filled(engine: Engine) -> Engine:
    """Two receivers, of which one is told two things of one test and one of another, and two trials."""
    add(engine, a_test("a"), a_test("b"))
    with writing(engine) as writer:
        for name in ("x", "y"):
            writer.outbox.add_receiver(a_receiver(name))
        writer.outbox.add([a_notice("x", "a", 3, 1), a_notice("x", "a", 2), a_notice("x", "b", 2, 2)])
        writer.outbox.add([a_notice("y", "a", 2), a_notice("y", None, 0, 3), a_notice("y", None, 0, 4)])
    return engine


def taken(engine: Engine, receiver: str, seconds: float, room: int = 9, lease: str = "l") -> list[tuple[object, int]]:
    now = NOW + seconds * SECOND
    with writing(engine) as writer:
        found = writer.outbox.take(f"id-{receiver}", room, now, now + 30 * SECOND, lease)
    return [(notice.test, notice.version) for notice in found]


def page(engine: Engine, receiver: str = "x", state: NoticeState | None = None) -> list[Notice]:
    return Reader(engine).notices.page(a_receiver(receiver), state, None, 100)


def ended(engine: Engine, notice: Notice, state: NoticeState, lease: str = "l") -> bool:
    with writing(engine) as writer:
        values = {**vars(notice), "state": state, "lease": None}
        return writer.outbox.settle(Notice(**values), lease)


def test_receivers_and_notices_come_back_as_they_went_in(engine: Engine) -> None:
    limits = limits_of([Subject(SubjectKind.LOT, "ü/7")], [("line", "3"), ("line", "4")])
    receiver, notice = a_receiver("x", limits), a_notice("x", "a", 2)
    add(engine, a_test("a"))
    with writing(engine) as writer:
        writer.outbox.add_receiver(receiver)
        writer.outbox.add([notice])
        assert writer.outbox.receivers() == [receiver]
        assert writer.outbox.receiver_named("x") == receiver
        assert writer.outbox.notice(notice.id) == notice
        assert writer.outbox.notice("none") is None
    assert Reader(engine).notices.receivers() == [receiver]
    assert page(engine) == [notice]


def test_what_is_due_is_taken_in_the_order_of_the_test_and_leased_once(filled: Engine) -> None:
    notices = Reader(filled).notices
    assert notices.due() == [("id-x", NOW), ("id-y", NOW)]
    assert taken(filled, "x", -1) == []
    assert taken(filled, "x", 9) == [("a", 2), ("b", 2)]
    assert taken(filled, "x", 9) == []
    assert dict(notices.due())["id-x"] == NOW + 39 * SECOND
    first = page(filled)[0]
    assert (first.attempts, first.lease, first.due_at) == (1, "l", NOW + 39 * SECOND)
    assert not ended(filled, first, NoticeState.DELIVERED, "another lease")
    assert ended(filled, first, NoticeState.DELIVERED)
    assert not ended(filled, first, NoticeState.DEAD)
    assert taken(filled, "x", 9) == [("a", 3)]
    assert taken(filled, "x", 38.9) == []
    assert taken(filled, "x", 39, 1, "m") == [("a", 3)]
    assert taken(filled, "x", 39, 1, "m") == [("b", 2)]
    assert taken(filled, "y", 9) == [("a", 2), (None, 0), (None, 0)]
    for receiver, name in (("x", "uq_receivers_present_name"), ("a", "uq_notices_receiver_test_version")):
        with pytest.raises(IntegrityError), writing(filled) as writer:
            if receiver == "x":
                writer.outbox.add_receiver(Receiver("other", "x", "https://x.example/", name, "f", NOW, "me"))
            else:
                writer.outbox.add([a_notice("x", "a", 2, 9)])


def test_old_delivered_notices_are_dropped_and_what_is_dead_stays_and_holds_up_nothing(filled: Engine) -> None:
    taken(filled, "x", 9)
    first, second, _ = page(filled)
    assert (first.version, second.version) == (2, 3)
    ended(filled, first, NoticeState.DEAD)
    assert taken(filled, "x", 9) == [("a", 3)]
    figures = Reader(filled).notices.figures()
    assert (figures.waiting, figures.dead, figures.oldest_waiting_at) == (5, 1, NOW)
    ended(filled, second, NoticeState.DELIVERED)
    with writing(filled) as writer:
        assert writer.outbox.drop_delivered(NOW + SECOND) == 0
        assert writer.outbox.drop_delivered(NOW + 2 * SECOND) == 1
        assert writer.outbox.drop_delivered(NOW + 99 * SECOND) == 0
    assert [(notice.test, notice.state) for notice in page(filled)] == [("a", "dead"), ("b", "waiting")]
    assert page(filled, state=NoticeState.DEAD) == page(filled)[:1]


def test_a_removed_receiver_leaves_its_row_without_its_secret_and_no_notice(filled: Engine) -> None:
    """Nor does what a decision adds that read the receivers before, and committed after; and that is dropped, too."""
    notices = Reader(filled).notices
    with writing(filled) as writer:
        writer.outbox.add([a_notice("x", "b", 7)])
        removed = writer.outbox.remove_receiver(a_receiver("x"), NOW)
        assert [receiver.name for receiver in writer.outbox.receivers()] == ["y"]
    assert (removed.secret, removed.removed_at) == (None, NOW)
    assert removed in notices.receivers()
    assert (page(filled), len(page(filled, "y"))) == ([], 3)
    with writing(filled) as writer:
        writer.outbox.add([a_notice("x", "a", 5)])
    assert [due.receiver for due in notices.due()] == ["id-y"]
    assert notices.figures().waiting == 3
    with writing(filled) as writer:
        assert writer.outbox.drop_delivered(NOW) == 1
    assert page(filled) == []


@contextmanager
def explained(engine: Engine) -> Iterator[list[str]]:
    """The plans of the statements that are run inside, where there is enough for an index to be worth it."""
    steps: list[str] = []
    seen: list[tuple[str, object]] = []
    record = event.listens_for(engine, "before_cursor_execute")
    listener = record(lambda _c, _u, sql, parameters, *_: seen.append((sql, parameters)))
    yield steps
    event.remove(engine, "before_cursor_execute", listener)
    with engine.connect() as connection:
        for sql, parameters in seen:
            if "notices" in sql and "FOR UPDATE" not in sql:
                explain = "EXPLAIN QUERY PLAN" if is_sqlite(engine) else "EXPLAIN"
                steps += [str(row[-1]) for row in connection.exec_driver_sql(f"{explain} {sql}", parameters)]  # type: ignore[arg-type]


def test_nothing_reads_the_whole_outbox(filled: Engine) -> None:
    with writing(filled) as writer:
        many = [a_notice("x", None, 0, 10 + number) for number in range(3000)]
        writer.outbox.add(Notice(**{**vars(each), "state": NoticeState.DELIVERED}) for each in many)
    with filled.begin() as connection:
        connection.execute(text("ANALYZE"))
    notices = Reader(filled).notices
    with explained(filled) as steps:
        notices.due()
        notices.figures()
        notices.page(a_receiver("x"), NoticeState.DEAD, None, 10)
        notices.page(a_receiver("x"), None, many[-3].id, 10)
    assert steps
    assert not [step for step in steps if "Seq Scan on notices" in step or step == "SCAN notices"], steps
