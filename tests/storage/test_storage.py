"""Rows go in and come out the same on both databases."""

import sys
from dataclasses import replace
from datetime import UTC, datetime, timedelta, timezone
from typing import Any

import pytest
from sqlalchemy import Engine, event, text
from sqlalchemy.exc import IntegrityError

from service.api.decoding import UnfitNumber, decoded
from service.domain.access import UNLIMITED, AccessKey, Role, limits_of
from service.domain.plan import Plan
from service.domain.sequential_test import SequentialTest, Status, Subject, SubjectKind, Submission
from service.domain.state import Cause, Decided, Decision, State, Sum
from service.ingest.commands import CreateKey, IssuedKey
from service.ingest.road import perform_now
from service.storage.logs import PAGE_CHARACTERS
from service.storage.reader import Reader, TestFilters
from service.storage.writer import writing

NOW = datetime(2031, 5, 4, 9, 30, 0, 123456, tzinfo=UTC)
PLAN = Plan("seal", '{"family":"bernoulli"}', "f" * 64, NOW, "me")
STATE = State(
    sequence=5,
    sample_number=4,
    exposure=Sum(0.1 + 0.2, 2.0**-60),
    total=Sum(1e16, -1.0 / 3.0),
    log_likelihood_ratio=-2.3000000000000003,
    decision=Decision.ACCEPT,
    decided=Decided(4, 4, 0.30000000000000004, NOW + timedelta(microseconds=1), Cause.BOUNDARY),
    overrun=1,
)


def a_test(key: str, **changes: Any) -> SequentialTest:
    test = SequentialTest(
        key, "seal", Subject(SubjectKind.LOT, "ü/7 'x'"), {"line": "3"}, Status.OPEN, 1, NOW, "me", NOW, State()
    )
    return replace(test, **changes)


def a_submission(test: str, first: int, last: int, body: str, state: State = STATE, **changes: Any) -> Submission:
    submission = Submission(test, first, last, body, "d" * 64, NOW, "me", None, 2, state)
    return replace(submission, **changes)


def add(engine: Engine, *tests: SequentialTest) -> None:
    with writing(engine) as writer:
        if writer.plan("seal") is None:
            writer.add_plan(PLAN)
        for test in tests:
            writer.add_test(test)


def test_everything_comes_back_to_the_last_bit(engine: Engine) -> None:
    test = a_test("lot-1", state=STATE, version=7)
    add(engine, test)
    submission = a_submission("lot-1", 1, 5, '{"values": [0, 0, 0, 0, 0]}', idempotency_key="ä?".encode().hex())
    with writing(engine) as writer:
        writer.append(submission, {})
        assert writer.submission_with_idempotency_key("lot-1", submission.idempotency_key or "") == submission
        assert writer.submission_with_idempotency_key("lot-2", submission.idempotency_key or "") is None
    reader = Reader(engine)
    assert reader.test("lot-1") == test
    assert reader.plan("seal") == PLAN
    assert list(reader.log.submissions("lot-1")) == [submission]
    assert reader.test("nowhere") is None
    assert reader.plan("nowhere") is None


def test_a_saved_test_is_what_was_saved(engine: Engine) -> None:
    add(engine, a_test("lot-1"), a_test("lot-2"))
    moved = a_test("lot-1", state=STATE, version=2, status=Status.CLOSED, updated_at=NOW + timedelta(days=1))
    with writing(engine) as writer:
        writer.save(moved)
    assert Reader(engine).test("lot-1") == moved
    assert Reader(engine).test("lot-2") == a_test("lot-2")


def test_moments_keep_their_instant_and_need_a_zone(engine: Engine) -> None:
    elsewhere = NOW.astimezone(timezone(timedelta(hours=-7)))
    add(engine, a_test("lot-1", updated_at=elsewhere))
    assert getattr(Reader(engine).test("lot-1"), "updated_at", None) == NOW
    with pytest.raises(Exception, match="time zone"):
        add(engine, a_test("lot-2", updated_at=NOW.replace(tzinfo=None)))


def test_an_error_leaves_nothing_behind(engine: Engine) -> None:
    add(engine, a_test("lot-1"))
    with pytest.raises(IntegrityError), writing(engine) as writer:
        writer.append(a_submission("lot-1", 1, 1, '{"values": [0]}'), {"u1": 1})
        writer.append(a_submission("lot-1", 1, 1, '{"values": [0]}'), {})
    assert list(Reader(engine).log.submissions("lot-1")) == []
    with writing(engine) as writer:
        assert writer.known_units("lot-1", ["u1"]) == {}


def test_known_units_are_found_among_very_many(engine: Engine) -> None:
    add(engine, a_test("lot-1"), a_test("lot-2"))
    units = {f"u{i}": i for i in range(1, 1801)}
    with writing(engine) as writer:
        writer.append(a_submission("lot-1", 1, 1800, "{}"), units)
    with writing(engine) as writer:
        asked = [f"u{i}" for i in range(1200, 2600)]
        assert writer.known_units("lot-1", asked) == {f"u{i}": i for i in range(1200, 1801)}
        assert writer.known_units("lot-2", asked) == {}


def test_an_idempotency_key_is_unique_within_its_test(engine: Engine) -> None:
    add(engine, a_test("lot-1"), a_test("lot-2"))
    with writing(engine) as writer:
        writer.append(a_submission("lot-1", 1, 1, "{}", idempotency_key="k"), {})
        writer.append(a_submission("lot-2", 1, 1, "{}", idempotency_key="k"), {})
    with pytest.raises(IntegrityError), writing(engine) as writer:
        writer.append(a_submission("lot-1", 2, 2, "{}", idempotency_key="k"), {})


def test_lists_are_sorted_alike_and_paged_by_key(engine: Engine) -> None:
    keys = ["a", "B", "a-1", "a.1", "A", "b", "a_1", "10", "9"]
    add(engine, *(a_test(key) for key in keys))
    reader = Reader(engine)
    ordered = sorted(keys)
    assert [test.key for test in reader.tests(TestFilters(), None, 100)] == ordered
    assert [test.key for test in reader.tests(TestFilters(), ordered[3], 2)] == ordered[4:6]


def test_each_filter_narrows(engine: Engine) -> None:
    add(
        engine,
        a_test("one", labels={"line": "3", "shift": "late"}),
        a_test("two", labels={"line": "3"}, state=STATE, updated_at=NOW + timedelta(hours=1)),
        a_test("three", labels={}, subject=Subject(SubjectKind.EXPERIMENT, "rig")),
    )
    reader = Reader(engine)

    def found(**filters: Any) -> set[str]:
        return {test.key for test in reader.tests(TestFilters(**filters), None, 100)}

    assert found() == {"one", "two", "three"}
    assert found(decision=Decision.ACCEPT) == {"two"}
    assert found(kind=SubjectKind.EXPERIMENT) == {"three"}
    assert found(subject="rig") == {"three"}
    assert found(plan="seal") == {"one", "two", "three"}
    assert found(plan="other") == set()
    assert found(labels=(("line", "3"),)) == {"one", "two"}
    assert found(labels=(("line", "3"), ("shift", "late"))) == {"one"}
    assert found(updated_after=NOW) == {"two"}
    assert {(c.kind, c.decision, c.tests) for c in reader.counts()} == {
        ("lot", "continue", 1),
        ("lot", "accept", 1),
        ("experiment", "continue", 1),
    }


def test_a_long_log_comes_in_order_from_any_place(engine: Engine) -> None:
    add(engine, a_test("lot-1"))
    with writing(engine) as writer:
        for i in range(450):
            writer.append(a_submission("lot-1", 2 * i + 1, 2 * i + 2, "{}"), {})
    reader = Reader(engine)
    assert [s.first_sequence for s in reader.log.submissions("lot-1")] == list(range(1, 900, 2))
    assert [s.first_sequence for s in reader.log.submissions("lot-1", 501)] == list(range(501, 900, 2))
    assert [s.first_sequence for s in reader.log.submissions("lot-1", 501, 510)] == [501, 503, 505, 507, 509]
    assert list(reader.log.submissions("lot-1", 0, 0)) == []
    assert list(reader.log.bodies(a_test("lot-1"), 501, 510)) == [(first, "{}") for first in (501, 503, 505, 507, 509)]


def test_few_heavy_submissions_are_held_at_once(engine: Engine) -> None:
    add(engine, a_test("lot-1"))
    with writing(engine) as writer:
        for i in range(1, 13):
            writer.append(a_submission("lot-1", i, i, " " * (PAGE_CHARACTERS // 3)), {})
    held: list[int] = []

    def count(_connection: object, _cursor: object, statement: str, *_rest: object) -> None:
        if "length(" not in statement and "FROM submissions" in statement:
            held.append(1)

    event.listen(engine, "after_cursor_execute", count)
    assert [s.first_sequence for s in Reader(engine).log.submissions("lot-1")] == list(range(1, 13))
    assert len(held) >= 4


def test_the_view_shows_each_observation_of_the_log(engine: Engine) -> None:
    test = a_test("lot-1", state=replace(STATE, decided=replace(STATE.decided, sequence=3)))  # type: ignore[type-var]
    add(engine, test)
    objects = (
        '{"observations": [{"value": 2, "size": 50, "unit": "u 1", "observed_at": "2031-05-04T09:30:00Z"}, '
        '{"time": 1.5, "failed": true}, {"value": 0, "exposure": 2.25}, {"a": 1, "b": 4.5}, {"arm": "b", "value": 3}]}'
    )
    with writing(engine) as writer:
        writer.append(a_submission("lot-1", 1, 2, '{"values": [0, 1.5]}'), {})
        writer.append(a_submission("lot-1", 3, 7, objects), {})
    query = text(
        "SELECT sequence, value, exposure, size, failed, unit, observed_at, actor, counted, a, b, arm "
        "FROM observations WHERE test = 'lot-1' ORDER BY sequence"
    )
    with engine.connect() as connection:
        rows = [tuple(row) for row in connection.execute(query)]
    assert rows == [
        (1, 0, None, None, None, None, None, "me", True, None, None, None),
        (2, 1.5, None, None, None, None, None, "me", True, None, None, None),
        (3, 2, None, 50, None, "u 1", "2031-05-04T09:30:00Z", "me", True, None, None, None),
        (4, 1.5, None, None, True, None, None, "me", False, None, None, None),
        (5, 0, 2.25, None, None, None, None, "me", False, None, None, None),
        (6, None, None, None, None, None, None, "me", False, 1, 4.5, None),
        (7, 3, None, None, None, None, None, "me", False, None, None, "b"),
    ]


def test_the_view_reads_every_number_that_the_interface_lets_in(engine: Engine) -> None:
    smallest, largest = repr(sys.float_info.min), repr(sys.float_info.max)
    numbers = ", ".join(["0e-400", "-0.0E+400", smallest, largest, "0." + "3" * 398])
    body = f'{{"values": [{numbers}]}}'
    assert not any(isinstance(value, UnfitNumber) for value in decoded(body.encode(), 10)["values"])
    add(engine, a_test("lot-1"))
    with writing(engine) as writer:
        writer.append(a_submission("lot-1", 1, 5, body), {})
    with engine.connect() as connection:
        values = connection.execute(text("SELECT value FROM observations ORDER BY sequence")).scalars().all()
    assert values == [0.0, 0.0, sys.float_info.min, sys.float_info.max, 1 / 3]


def test_only_one_valid_key_bears_a_name(engine: Engine) -> None:
    first = AccessKey("1", "line", Role.COLLECTOR, "1" * 64, NOW)
    second = AccessKey("2", "line", Role.VIEWER, "2" * 64, NOW, expires_at=NOW)
    with writing(engine) as writer:
        writer.add_key(first)
    with pytest.raises(IntegrityError), writing(engine) as writer:
        writer.add_key(second)
    with writing(engine) as writer:
        writer.revoke_key("1", NOW)
        assert writer.key_named("line") is None
        writer.add_key(second)
        assert writer.key_named("line") == second
    reader = Reader(engine)
    assert reader.key_with_digest("1" * 64) == replace(first, revoked_at=NOW)
    assert reader.key_with_digest("3" * 64) is None
    assert reader.keys() == [replace(first, revoked_at=NOW), second]


def test_a_reader_within_limits_knows_no_other_test(engine: Engine) -> None:
    subject = Subject(SubjectKind.LOT, "2041/B")
    add(
        engine,
        a_test("in", subject=subject, labels={"line": "3", "shift": "a"}),
        a_test("line", subject=Subject(SubjectKind.LOT, "other"), labels={"line": "3"}),
        a_test("kind", subject=Subject(SubjectKind.EXPERIMENT, "2041/B"), labels={"line": "4"}),
        a_test("bare", subject=subject, labels={}),
    )
    reader = Reader(engine)
    assert reader.within(UNLIMITED) is reader
    for limits, keys in (
        (limits_of([], [("line", "3")]), ["in", "line"]),
        (limits_of([], [("line", "3"), ("line", "4")]), ["in", "kind", "line"]),
        (limits_of([], [("line", "3"), ("shift", "a")]), ["in"]),
        (limits_of([subject], []), ["bare", "in"]),
        (limits_of([subject], [("line", "3")]), ["in"]),
        (limits_of([Subject(SubjectKind.LOT, "none")], []), []),
    ):
        limited = reader.within(limits)
        assert [test.key for test in limited.tests(TestFilters(), None, 10)] == keys
        assert sorted(change.key for change in limited.changes(TestFilters(), 0, 10)) == keys
        assert sum(count.tests for count in limited.counts()) == len(keys)
        for key in ("in", "line", "kind", "bare"):
            assert (limited.test(key) is not None) == (limited.version(key) is not None) == (key in keys)
    assert len(reader.tests(TestFilters(), None, 10)) == 4


def test_a_key_comes_back_with_its_limits(engine: Engine) -> None:
    limits = limits_of([Subject(SubjectKind.LOT, "ü/7 <b>")], [("line", "3"), ("line", "4"), ("shift", "a")])
    for name, given in (("limited", limits), ("free", UNLIMITED)):
        issued = perform_now(engine, CreateKey(name, Role.VIEWER, limits=given))
        assert isinstance(issued, IssuedKey)
        stored = Reader(engine).key_with_digest(issued.key.digest)
        assert stored is not None
        assert stored.limits == given
