"""The schema comes from the migrations, on both databases."""

import pytest
from alembic.autogenerate import compare_metadata
from alembic.runtime.migration import MigrationContext
from sqlalchemy import Engine, inspect, text

from service.storage.migrate import (
    SchemaMismatch,
    check_schema,
    current_revision,
    downgrade,
    head_revision,
    is_empty,
    upgrade,
)
from service.storage.reader import Reader, TestFilters
from service.storage.tables import metadata
from tests.storage.test_storage import a_test, add


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
