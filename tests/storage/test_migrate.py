"""The schema comes from the migrations, on both databases."""

from datetime import timedelta

import pytest
from alembic.autogenerate import compare_metadata
from alembic.runtime.migration import MigrationContext
from sqlalchemy import Engine, inspect, text

from service.domain.access import UNLIMITED, Role, limits_of
from service.ingest.commands import CreateKey
from service.ingest.road import perform_now
from service.storage.migrate import (
    SchemaMismatch,
    check_known,
    check_schema,
    current_revision,
    downgrade,
    head_revision,
    is_empty,
    upgrade,
)
from service.storage.reader import Reader, TestFilters
from service.storage.tables import metadata
from tests.documents import TOP
from tests.storage.test_storage import NOW, a_test, add


def test_the_tables_and_the_migrations_agree(engine: Engine) -> None:
    with engine.connect() as connection:
        context = MigrationContext.configure(connection, opts={"compare_type": True})
        assert compare_metadata(context, metadata) == []


def test_down_and_up_again_with_rows_in_it(engine: Engine) -> None:
    add(engine, a_test("lot-1"))
    downgrade(engine, "base")
    assert set(inspect(engine).get_table_names()) <= {"alembic_version"}
    upgrade(engine)
    assert Reader(engine).tests(TestFilters(), None, 10) == []
    upgrade(engine)
    assert current_revision(engine) == head_revision()


def test_an_empty_database_says_what_to_run(empty: Engine) -> None:
    assert is_empty(empty)
    with pytest.raises(SchemaMismatch, match=r"no schema yet.*sprt-monitor migrate"):
        check_schema(empty)


def test_an_unknown_schema_is_named(engine: Engine) -> None:
    check_schema(engine)
    with engine.begin() as connection:
        connection.execute(text("UPDATE alembic_version SET version_num = '9999'"))
    with pytest.raises(SchemaMismatch, match=r"9999.*does not know"):
        check_schema(engine)


@pytest.mark.parametrize(("found", "suits"), [("since {}", True), ("since 0001", True), ("since 9998", False)])
def test_a_newer_schema_that_suits_this_version_is_served(engine: Engine, found: str, suits: bool) -> None:  # noqa: FBT001
    number = head_revision()[:4]
    name = f"9999_{found.format(number).replace(' ', '_')}"
    with engine.begin() as connection:
        connection.execute(text("UPDATE alembic_version SET version_num = :name"), {"name": name})
    if suits:
        check_schema(engine)
    else:
        with pytest.raises(SchemaMismatch, match=rf"{name}.*does not know"):
            check_schema(engine)
    with pytest.raises(SchemaMismatch, match=rf"{name}.*does not know"):
        check_known(engine)


def test_an_older_schema_is_served_by_none_however_it_is_named(engine: Engine) -> None:
    with engine.begin() as connection:
        connection.execute(text("UPDATE alembic_version SET version_num = '0000_since_0000'"))
    with pytest.raises(SchemaMismatch):
        check_schema(engine)


def test_every_revision_is_numbered_in_order() -> None:
    names = sorted(path.name for path in (TOP / "migrations" / "versions").glob("*.py"))
    assert [name[:5] for name in names] == [f"{number:04}_" for number in range(1, len(names) + 1)]
    assert head_revision()[:4] == f"{len(names):04}"


def test_tests_from_before_are_numbered_by_their_last_change(engine: Engine) -> None:
    add(engine, *(a_test(key, updated_at=NOW + timedelta(hours=hour)) for key, hour in (("b", 2), ("a", 3), ("c", 1))))
    downgrade(engine, "0001")
    upgrade(engine)
    assert [(change.number, change.key) for change in Reader(engine).changes(TestFilters(), 0, 9)] == [
        (1, "c"),
        (2, "b"),
        (3, "a"),
    ]
    add(engine, a_test("d"))
    assert Reader(engine).last_change() == 4


def test_a_database_at_the_base_says_what_to_run(engine: Engine) -> None:
    downgrade(engine, "base")
    with pytest.raises(SchemaMismatch, match="sprt-monitor migrate"):
        check_schema(engine)


def test_every_constraint_has_a_name(engine: Engine) -> None:
    inspector = inspect(engine)
    for table in metadata.tables:
        assert inspector.get_pk_constraint(table)["name"], table
        assert all(key["name"] for key in inspector.get_foreign_keys(table)), table
        assert all(check["name"] for check in inspector.get_check_constraints(table)), table


def test_a_limited_key_does_not_outlive_its_limits(engine: Engine) -> None:
    limits = limits_of([], [("line", "3")])
    for name, given in (("limited", limits), ("free", UNLIMITED)):
        perform_now(engine, CreateKey(name, Role.VIEWER, limits=given))
    downgrade(engine, "0006")
    upgrade(engine)
    found = Reader(engine).keys()
    keys = {key.name: key for key in found}
    assert keys["limited"].revoked_at is not None
    assert keys["free"].revoked_at is None
