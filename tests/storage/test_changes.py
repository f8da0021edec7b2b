"""Changed tests are told by numbers that never grow out of the order in which they become visible."""

import threading
from dataclasses import replace

import pytest
from sqlalchemy import Engine

from service.domain.state import Decision
from service.storage.reader import Change, Reader, TestFilters
from service.storage.writer import writing
from tests.storage.test_storage import NOW, STATE, a_submission, a_test, add

ALL = TestFilters()


def told(engine: Engine, after: int = 0) -> list[tuple[int, str, int]]:
    return [(change.number, change.key, change.version) for change in Reader(engine).changes(ALL, after, 1000)]


def test_every_write_gives_the_test_the_next_number(engine: Engine) -> None:
    assert Reader(engine).last_change() == 0
    add(engine, a_test("b"), a_test("a"))
    assert told(engine) == [(1, "a", 1), (2, "b", 1)]
    with writing(engine) as writer:
        writer.save(a_test("a", version=2, state=STATE))
        writer.add_test(a_test("c"))
    assert told(engine) == [(2, "b", 1), (3, "c", 1), (4, "a", 2)]
    assert Reader(engine).changes(ALL, 3, 9) == [Change(4, "a", 2, "accept", "open", NOW)]
    with writing(engine) as writer:
        writer.append(a_submission("a", 1, 5, "{}"), {})
    assert Reader(engine).last_change() == 4, "a log entry alone is no change; its test is always saved beside it"


def test_what_is_rolled_back_takes_no_number_from_what_comes(engine: Engine) -> None:
    add(engine, a_test("a"))

    def fail() -> None:
        with writing(engine) as writer:
            writer.save(a_test("a", version=2))
            writer.flush()
            raise ZeroDivisionError

    with pytest.raises(ZeroDivisionError):
        fail()
    assert told(engine) == [(1, "a", 1)]
    add(engine, a_test("b"))
    assert told(engine) == [(1, "a", 1), (2, "b", 1)]


def test_a_later_number_is_never_seen_before_an_earlier_one(engine: Engine) -> None:
    """The second writer waits from its numbering until the first has committed; readers wait for neither."""
    add(engine, a_test("a"), a_test("b"))
    seen_by_second: list[list[tuple[int, str, int]]] = []

    def second() -> None:
        with writing(engine) as writer:
            writer.save(a_test("b", version=2))
        seen_by_second.append(told(engine, 2))

    thread = threading.Thread(target=second)
    with writing(engine) as writer:
        writer.save(a_test("a", version=2))
        writer.flush()
        thread.start()
        thread.join(0.3)
        assert thread.is_alive()
        assert told(engine, 2) == []
    thread.join(20)
    assert seen_by_second == [[(3, "a", 2), (4, "b", 2)]]


def test_whoever_reads_on_from_the_newest_number_misses_nothing(engine: Engine) -> None:
    """Several writers at once, each on tests of its own, and a reader that looks all the time."""
    writers, rounds = 4, 15
    tests = {name: [a_test(f"{name}-{i}") for i in range(3)] for name in "abcd"[:writers]}
    add(engine, *(test for own in tests.values() for test in own))
    start, position = threading.Barrier(writers + 1), 0
    last_told: dict[str, int] = {}

    def write(name: str) -> None:
        start.wait()
        for version in range(2, rounds + 2):
            with writing(engine) as writer:
                for test in tests[name][: 1 + version % 3]:
                    writer.save(replace(test, version=version))

    threads = [threading.Thread(target=write, args=(name,)) for name in tests]
    for thread in threads:
        thread.start()
    start.wait()
    is_running = True
    while is_running:
        is_running = any(thread.is_alive() for thread in threads)
        for number, key, version in told(engine, position):
            assert number > position
            assert version > last_told.get(key, 0)
            last_told[key], position = version, number
    reader = Reader(engine)
    assert last_told == {test.key: test.version for test in reader.tests(ALL, None, 100)}


@pytest.mark.parametrize("labels", [(("line", "3"),), (("line", "3"), ("shift", "a"))])
def test_changes_are_narrowed_as_lists_are(engine: Engine, labels: tuple[tuple[str, str], ...]) -> None:
    both = {"line": "3", "shift": "a"}
    add(
        engine, a_test("a"), a_test("b", labels=both), a_test("c", labels={**both, "line": "4"}), a_test("d", labels={})
    )
    filters = [TestFilters(labels=labels), TestFilters(key="b"), TestFilters(plan="seal", decision=Decision.ACCEPT)]
    reader = Reader(engine)
    for each in filters:
        assert {change.key for change in reader.changes(each, 0, 9)} == {t.key for t in reader.tests(each, None, 9)}
