"""Lists, changes and counts of a hundred thousand tests, on both databases, in milliseconds and against one look-up."""

import statistics
import time
from collections.abc import Callable
from pathlib import Path

import pytest
from sqlalchemy.engine import URL

from service.storage.engine import create_engine_for
from service.storage.migrate import upgrade
from service.storage.reader import Reader
from tests.postgres import fresh_database
from tests.storage.many import fill
from tests.storage.test_query_plans import FILTERS

TESTS, ROUNDS = 100_000, 7

pytestmark = pytest.mark.benchmark


def milliseconds(work: Callable[[], object]) -> float:
    """The median of some rounds, in processor time of this process and waiting together."""
    took = []
    for _ in range(ROUNDS):
        begin = time.perf_counter()
        work()
        took.append(1000 * (time.perf_counter() - begin))
    return statistics.median(took)


def reported(url: str) -> None:
    engine = create_engine_for(url)
    upgrade(engine)
    fill(engine, TESTS)
    reader = Reader(engine)
    one = milliseconds(lambda: reader.test("lot-1050000"))
    pages = [milliseconds(lambda f=each: reader.tests(f, None, 101)) for each in FILTERS]  # type: ignore[misc]
    changes = [milliseconds(lambda f=each: reader.changes(f, TESTS - 30, 200)) for each in FILTERS]  # type: ignore[misc]
    counts = milliseconds(reader.counts)
    worst = FILTERS[pages.index(max(pages))]
    print(f"\n{engine.dialect.name}, {TESTS} tests: a look-up {one:.2f} ms")
    print(f"first page of 100 {statistics.median(pages):.0f} ms")
    print(f"worst page {max(pages):.0f} ms = {max(pages) / one:.0f} look-ups: {worst}")
    print(f"last 30 changes at most {max(changes):.1f} ms; counts {counts:.0f} ms = {counts / one:.0f} look-ups")
    engine.dispose()


def test_lists_of_many_tests_on_sqlite(tmp_path: Path) -> None:
    reported(f"sqlite:///{tmp_path / 'many.sqlite3'}")


def test_lists_of_many_tests_on_postgresql(server: URL) -> None:
    with fresh_database(server) as url:
        reported(url)
