"""SQLite reads lists and look-ups through indexes."""

from datetime import UTC, datetime
from pathlib import Path

import pytest
from sqlalchemy import event, text

from service.domain.sequential_test import SubjectKind
from service.domain.state import Decision
from service.storage.engine import create_engine_for
from service.storage.migrate import upgrade
from service.storage.reader import Reader, TestFilters


@pytest.mark.parametrize(
    "filters",
    [
        TestFilters(),
        TestFilters(decision=Decision.CONTINUE),
        TestFilters(subject="x"),
        TestFilters(plan="x"),
        TestFilters(kind=SubjectKind.LOT),
        TestFilters(labels=(("line", "3"),)),
        TestFilters(updated_after=datetime(2031, 1, 1, tzinfo=UTC)),
    ],
)
def test_no_list_of_tests_reads_the_whole_table_without_an_index(tmp_path: Path, filters: TestFilters) -> None:
    engine = create_engine_for(f"sqlite:///{tmp_path / 'plans.sqlite3'}")
    upgrade(engine)
    seen: list[tuple[str, object]] = []
    event.listen(engine, "before_cursor_execute", lambda _c, _u, sql, parameters, *_: seen.append((sql, parameters)))
    Reader(engine).tests(filters, "a", 100)
    sql, parameters = next((s, p) for s, p in seen if "FROM tests" in s)
    with engine.connect() as connection:
        steps = [row[3] for row in connection.exec_driver_sql(f"EXPLAIN QUERY PLAN {sql}", parameters)]  # type: ignore[arg-type]
        connection.execute(text("SELECT 1"))
    looked_up = ("INDEX", "PRIMARY KEY", "TEMP B-TREE", "LIST SUBQUERY", "BLOOM FILTER")
    assert all(any(word in step for word in looked_up) for step in steps), steps
    engine.dispose()
