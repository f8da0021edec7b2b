"""
Connections.

SQLite: write-ahead log, every commit on disk before it returns, foreign keys on. Transactions are begun by ourselves: a
writing one says BEGIN IMMEDIATE, so that it waits for the lock at once instead of failing half-way.
"""

from collections.abc import Iterator
from contextlib import contextmanager
from sqlite3 import Connection as SqliteConnection

from sqlalchemy import Connection, Engine, create_engine, event
from sqlalchemy.engine import make_url
from sqlalchemy.exc import DBAPIError, InterfaceError, OperationalError

from service.domain.errors import DatabaseAway

LOCK_WAIT_SECONDS = 30.0
WRITES = "sprt_writes"
# Where PostgreSQL tells that tests have changed.
CHANNEL = "sprt_changes"


def create_engine_for(url: str) -> Engine:
    """An engine for `sqlite:///file` or `postgresql://…`; nothing is opened yet."""
    target = make_url(url)
    if target.get_backend_name() == "sqlite":
        engine = create_engine(target, connect_args={"timeout": LOCK_WAIT_SECONDS, "isolation_level": None})
        event.listen(engine, "connect", _prepare_sqlite)
        event.listen(engine, "begin", _begin_sqlite)
        return engine
    return create_engine(target.set(drivername="postgresql+psycopg"), pool_pre_ping=True)


# Another transaction was in the way: serialization failure, deadlock, a row that another process inserted just then.
_PASSING = {"40001", "40P01", "23505"}


def is_passing(error: Exception) -> bool:
    """True where the same transaction may go through when it is tried again at once."""
    return isinstance(error, DBAPIError) and getattr(error.orig, "sqlstate", None) in _PASSING


@contextmanager
def answering() -> Iterator[None]:
    """
    A read.

    Raises:
        DatabaseAway: The database does not answer.
    """
    try:
        yield
    except (OperationalError, InterfaceError) as error:
        raise DatabaseAway from error


def is_sqlite(engine: Engine) -> bool:
    """True for SQLite."""
    return engine.dialect.name == "sqlite"


def _prepare_sqlite(connection: SqliteConnection, _record: object) -> None:
    for pragma in ("journal_mode=WAL", "synchronous=FULL", "foreign_keys=ON"):
        connection.execute(f"PRAGMA {pragma}")


def _begin_sqlite(connection: Connection) -> None:
    options = connection.get_execution_options()
    if options.get("isolation_level") == "AUTOCOMMIT":
        return
    writes = options.get(WRITES, False)
    connection.exec_driver_sql("BEGIN IMMEDIATE" if writes else "BEGIN")
