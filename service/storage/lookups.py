"""
Single rows by their keys, as cheaply as they can be had.

Each thread keeps a connection of its own in which every statement is its own transaction, so that a look-up costs one
statement and nothing around it. A connection that the database dropped is replaced once.
"""

import threading
from typing import Any

from sqlalchemy import Connection, Engine, RowMapping, Select, event
from sqlalchemy.exc import DBAPIError

from service.storage.engine import answering, is_sqlite


class Lookups:
    """Look-ups on one database."""

    def __init__(self, engine: Engine) -> None:
        self._engine = engine.execution_options(isolation_level="AUTOCOMMIT")
        self._local = threading.local()
        self._opened: list[Connection] = []
        self.are_local = is_sqlite(engine)
        event.listen(engine, "engine_disposed", self._close)

    def first(self, found: Select[Any], **parameters: str) -> RowMapping | None:
        """
        The row found, or None.

        Raises:
            DatabaseAway: The database does not answer.
        """
        with answering():
            try:
                return self._connection().execute(found, parameters).mappings().first()
            except DBAPIError as error:
                if not error.connection_invalidated:
                    raise
            self._local.connection = None
            return self._connection().execute(found, parameters).mappings().first()

    def _close(self, _engine: Engine) -> None:
        """The connections end with the engine."""
        for connection in self._opened:
            if not connection.closed:
                connection.invalidate()  # ends it, where closing would only hand it to a pool that is gone
                connection.close()
        self._opened.clear()
        self._local = threading.local()

    def _connection(self) -> Connection:
        connection: Connection | None = getattr(self._local, "connection", None)
        if connection is None or connection.closed:
            connection = self._local.connection = self._engine.connect()
            self._opened.append(connection)
        return connection
