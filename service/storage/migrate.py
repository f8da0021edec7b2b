"""
The schema: which revision a database has, which this version knows, and how to get there.

A revision that services of an older schema may go on running on says so in its name: `0005_since_0003` suits those that
know 0003 or 0004. So a database is migrated first and its services are replaced one by one, while all of them run.
"""

import io
from collections.abc import Callable
from pathlib import Path

from alembic import command
from alembic.config import Config
from alembic.runtime.migration import MigrationContext
from alembic.script import ScriptDirectory
from sqlalchemy import Connection, Engine, inspect, text

from service.storage.engine import WRITES, is_sqlite

SINCE = "_since_"

# Any number that no other program on the same server locks by.
ADVISORY_LOCK = 5_397_204_186


class SchemaMismatch(Exception):
    """The database has another schema than this version knows; the text says what to do."""


def head_revision() -> str:
    """The newest revision that this version knows."""
    return str(_scripts().get_current_head())


def current_revision(engine: Engine) -> str | None:
    """The revision of the database; None where it has none."""
    with engine.connect() as connection:
        return MigrationContext.configure(connection).get_current_revision()


def is_empty(engine: Engine) -> bool:
    """True for a database without a table."""
    return not inspect(engine).get_table_names()


def check_known(engine: Engine) -> None:
    """
    Ask whether the database has no schema yet or one that this version knows how to bring up to date.

    Raises:
        SchemaMismatch: It was migrated by a newer version.
    """
    revision, head = current_revision(engine), head_revision()
    if revision is not None and revision not in {script.revision for script in _scripts().walk_revisions()}:
        raise SchemaMismatch(
            f"The database has the schema {revision}, which this version does not know (it knows {head}). "
            "Install the version that migrated it, or a newer one."
        )


def check_schema(engine: Engine) -> None:
    """
    Ask whether the database has the schema that this version knows, or a newer one that declares to suit it.

    Raises:
        SchemaMismatch: It has none, an older one, or a newer one that this version must not run on.
    """
    revision, head = current_revision(engine), head_revision()
    if revision != head and not _suits(revision, head):
        check_known(engine)
        has = "no schema yet" if revision is None else f"the older schema {revision}"
        raise SchemaMismatch(f"The database has {has} (wanted: {head}). Run: sprt-monitor migrate")


def _suits(revision: str | None, head: str) -> bool:
    """True for a newer revision that services of the schema `head` may run on; numbers in names have four digits."""
    number, _, oldest = (revision or "").partition(SINCE)
    return bool(oldest) and oldest <= head.partition(SINCE)[0] < number


def upgrade(engine: Engine, revision: str = "head") -> None:
    """Bring the database up to a revision; processes that do so at once wait for each other."""
    _move(engine, lambda config: command.upgrade(config, revision))


def downgrade(engine: Engine, revision: str) -> None:
    """Bring the database back to a revision."""
    _move(engine, lambda config: command.downgrade(config, revision))


def _move(engine: Engine, move: Callable[[Config], None]) -> None:
    with engine.connect().execution_options(**{WRITES: True}) as connection, connection.begin():
        if not is_sqlite(engine):
            connection.execute(text("SELECT pg_advisory_xact_lock(:number)"), {"number": ADVISORY_LOCK})
        move(_config(connection))


def _scripts() -> ScriptDirectory:
    return ScriptDirectory.from_config(_config())


def _config(connection: Connection | None = None) -> Config:
    config = Config(stdout=io.StringIO())
    config.set_main_option("script_location", str(_location()).replace("%", "%%"))
    config.attributes["connection"] = connection
    return config


def _location() -> Path:
    """The scripts: beside the package in a checkout, inside it where it was installed from a wheel."""
    package = Path(__file__).resolve().parents[1]
    inside = package / "_migrations"
    return inside if inside.is_dir() else package.parent / "migrations"
