"""Both databases read lists, changes and counts through indexes, with many tests and statistics about them."""

from collections.abc import Callable, Iterator
from datetime import UTC, datetime
from typing import Any

import pytest
from sqlalchemy import Engine, event

from service.domain.disposing import Verdict
from service.domain.sequential_test import SubjectKind
from service.domain.state import Decision
from service.storage.engine import create_engine_for, is_sqlite
from service.storage.migrate import upgrade
from service.storage.reader import Reader, TestFilters
from tests.postgres import fresh_database
from tests.storage.many import fill

TESTS = 20_000
LAST_KEY = f"lot-{1_000_000 + TESTS // 2}"
RECENT, EARLY = datetime(2031, 1, 14, 20, tzinfo=UTC), datetime(2031, 1, 2, tzinfo=UTC)

FILTERS = [
    TestFilters(),
    TestFilters(key="lot-1000007"),
    TestFilters(decision=Decision.CONTINUE),
    TestFilters(decision=Decision.ACCEPT),
    TestFilters(subject="subject-70"),
    TestFilters(plan="plan-7"),
    TestFilters(kind=SubjectKind.LOT),
    TestFilters(kind=SubjectKind.EXPERIMENT),
    TestFilters(labels=(("line", "3"),)),
    TestFilters(labels=(("line", "3"), ("shift", "2"))),
    TestFilters(updated_after=RECENT),
    TestFilters(updated_after=EARLY),
    TestFilters(plan="plan-3", decision=Decision.REJECT),
    TestFilters(kind=SubjectKind.EXPERIMENT, decision=Decision.CONTINUE),
    TestFilters(labels=(("line", "3"),), decision=Decision.CONTINUE),
    TestFilters(decision=Decision.REJECT, updated_after=RECENT),
    TestFilters(disposition=Verdict.SCRAP),
]


@pytest.fixture(scope="module", params=["sqlite", "postgresql"])
def filled(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Iterator[Engine]:
    if request.param == "sqlite":
        engine = create_engine_for(f"sqlite:///{tmp_path_factory.mktemp('plans') / 'plans.sqlite3'}")
        upgrade(engine)
        fill(engine, TESTS)
        yield engine
        engine.dispose()
        return
    with fresh_database(request.getfixturevalue("server")) as url:
        engine = create_engine_for(url)
        upgrade(engine)
        fill(engine, TESTS)
        yield engine
        engine.dispose()


def steps(engine: Engine, ask: Callable[[Reader], object]) -> list[str]:
    """How the database says that it answers what the reader asks."""
    seen: list[tuple[str, Any]] = []
    with engine.connect() as connection:  # of an engine that nothing listens to yet
        listening = event.listens_for(engine, "before_cursor_execute")
        record = listening(lambda _c, _u, sql, parameters, *_: seen.append((sql, parameters)))
        try:
            ask(Reader(engine))
        finally:
            event.remove(engine, "before_cursor_execute", record)
        explain = "EXPLAIN QUERY PLAN" if is_sqlite(engine) else "EXPLAIN"
        return [
            str(row[-1])
            for sql, parameters in seen
            if "FROM tests" in sql
            for row in connection.exec_driver_sql(f"{explain} {sql}", parameters)
        ]


def is_through_an_index(step: str) -> bool:
    """False where a step goes through a table from one end to the other."""
    return "Seq Scan" not in step and not (step.startswith("SCAN ") and "INDEX" not in step)


@pytest.mark.parametrize("filters", FILTERS, ids=str)
@pytest.mark.parametrize("after", [None, LAST_KEY], ids=["first", "later"])
def test_no_page_of_a_list_reads_the_whole_table(filled: Engine, filters: TestFilters, after: str | None) -> None:
    found = steps(filled, lambda reader: reader.tests(filters, after, 101))
    assert found
    assert all(map(is_through_an_index, found)), found


@pytest.mark.parametrize(
    "filters", [each for each in FILTERS if each.updated_after is None and each.disposition is None], ids=str
)
def test_changes_are_read_from_the_last_one_on(filled: Engine, filters: TestFilters) -> None:
    found = steps(filled, lambda reader: reader.changes(filters, TESTS - 30, 200))
    assert all(map(is_through_an_index, found)), found
    by_key = "sqlite_autoindex_tests_1" if is_sqlite(filled) else "pk_tests"
    assert any((by_key if filters.key else "ix_tests_change") in step for step in found), found


def test_the_newest_change_and_the_counts_are_read_from_an_index_alone(filled: Engine) -> None:
    for ask in (Reader.last_change, Reader.counts):
        found = steps(filled, ask)
        assert any("COVERING INDEX" in step or "Index Only Scan" in step for step in found), found
        assert all(map(is_through_an_index, found)), found
