"""Whole databases: an online copy of a SQLite file, and a move of every row from one database to another."""

import sqlite3
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

from sqlalchemy import Connection, Engine, Table, func, insert, select

from service.storage import tables
from service.storage.engine import WRITES, is_sqlite

ROWS_AT_ONCE = 500
PAGES_AT_ONCE = 4096

Told = Callable[[str, int], None]


class CopyRefused(Exception):
    """What was asked cannot be copied; the text says why."""


class CopyDiffers(Exception):
    """A row of the copy is not that of the original; nothing of the copy is kept."""


def back_up(engine: Engine, file: Path) -> None:
    """
    A consistent copy of a SQLite database, taken while others go on writing.

    Raises:
        CopyRefused: The database is not SQLite, the file exists, or the copy is not sound.
    """
    if not is_sqlite(engine):
        raise CopyRefused("This is not a SQLite database; back PostgreSQL up with its own tools, such as pg_dump.")
    if file.exists():
        raise CopyRefused(f"{file} exists and is not overwritten.")
    raw = engine.raw_connection()
    try:
        source = raw.driver_connection
        assert isinstance(source, sqlite3.Connection)
        with sqlite3.connect(file) as target:
            source.backup(target, pages=PAGES_AT_ONCE)
            (answer,) = target.execute("PRAGMA integrity_check").fetchone()
        target.close()
    finally:
        raw.close()
    if answer != "ok":
        raise CopyRefused(f"The copy {file} is not sound: {answer}.")


def copy_all(source: Engine, target: Engine, tell: Told) -> None:
    """
    Copy every row to an empty database of the same schema, and compare the two row by row before it counts.

    Args:
        source: Read as it was at the beginning, whatever is written to it meanwhile.
        target: Migrated and empty.
        tell: Called with each table and its number of rows.

    Raises:
        CopyRefused: The target has rows already.
        CopyDiffers: A row did not arrive as it left.
    """
    with (
        source.connect().execution_options(**_snapshot(source)) as reading,
        reading.begin(),
        target.connect().execution_options(**{WRITES: True}) as writing,
        writing.begin(),
    ):
        for table in tables.metadata.sorted_tables:
            if writing.execute(select(func.count()).select_from(table)).scalar():
                raise CopyRefused(f"The target has rows in {table.name}; copy to a new database.")
        for table in tables.metadata.sorted_tables:
            tell(table.name, _copy(table, reading, writing))
        for table in tables.metadata.sorted_tables:
            _compare(table, reading, writing)


def _snapshot(engine: Engine) -> dict[str, Any]:
    """One state of the source for all tables; SQLite's read transactions are that by themselves."""
    return {} if is_sqlite(engine) else {"isolation_level": "REPEATABLE READ"}


def _copy(table: Table, reading: Connection, writing: Connection) -> int:
    count = 0
    for rows in _rows(table, reading):
        writing.execute(insert(table), [dict(zip(table.columns.keys(), row, strict=True)) for row in rows])
        count += len(rows)
    return count


def _compare(table: Table, reading: Connection, writing: Connection) -> None:
    originals, copies = _each(_rows(table, reading)), _each(_rows(table, writing))
    for original in originals:
        copy = next(copies, None)
        if copy != original:
            raise CopyDiffers(f"A row of {table.name} differs: {original[:2]} arrived as {copy and copy[:2]}.")
    if next(copies, None) is not None:
        raise CopyDiffers(f"The copy has rows in {table.name} that the original has not.")


def _each(portions: Iterator[list[tuple[Any, ...]]]) -> Iterator[tuple[Any, ...]]:
    for rows in portions:
        yield from rows


def _rows(table: Table, connection: Connection) -> Iterator[list[tuple[Any, ...]]]:
    """The rows in the order of their keys, some at a time."""
    found = connection.execution_options(yield_per=ROWS_AT_ONCE).execute(
        select(table).order_by(*table.primary_key.columns)
    )
    for rows in found.partitions(ROWS_AT_ONCE):
        yield [tuple(row) for row in rows]
