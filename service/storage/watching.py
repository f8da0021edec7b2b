"""
Word of changed tests, whichever process on whichever host wrote them.

A thread on a connection of its own waits for the database to say that something was committed: PostgreSQL notifies
those who listen; SQLite counts the commits of others. It says that, and never what, so that nothing depends on its
having said it: whoever is woken reads what is new, and reads it now and then without being woken as well.
"""

import logging
import threading
from collections.abc import Callable

import psycopg
from sqlalchemy import Engine

from service.storage.engine import CHANNEL, is_sqlite

# Rests after each word, so that a busy service does not wake its readers for every commit.
PAUSE_SECONDS = 0.2
# Waits between two attempts to reach a database that is away, and for a notification before looking for the end.
AGAIN_SECONDS = 1.0

logger = logging.getLogger(__name__)


class Watcher:
    """Calls `wake`, in its thread, after others have committed, and when it may have missed that they did."""

    def __init__(self, engine: Engine, wake: Callable[[], object]) -> None:
        self._engine, self._wake = engine, wake
        self._is_stopped = threading.Event()
        self._is_away = False
        self._thread = threading.Thread(target=self._run, name="watcher", daemon=True)

    def start(self) -> None:
        """Begin to watch."""
        self._thread.start()

    def stop(self) -> None:
        """End the thread; takes a moment."""
        self._is_stopped.set()
        self._thread.join()

    def _run(self) -> None:
        watch = self._watch_file if is_sqlite(self._engine) else self._listen
        while not self._is_stopped.is_set():
            try:
                watch()
            except Exception as error:  # noqa: BLE001 - whatever it is, the streams must not fall silent for ever
                if not self._is_away:
                    logger.warning("changes are not watched until the database answers: %s", error)
                self._is_away = True
                self._is_stopped.wait(AGAIN_SECONDS)

    def _watch_file(self) -> None:
        with self._engine.connect().execution_options(isolation_level="AUTOCOMMIT") as connection:
            seen = None
            while not self._is_stopped.is_set():
                count = connection.exec_driver_sql("PRAGMA data_version").scalar()
                self._is_away = False
                if count != seen:
                    self._wake()
                seen = count
                self._is_stopped.wait(PAUSE_SECONDS)

    def _listen(self) -> None:
        address = self._engine.url.set(drivername="postgresql").render_as_string(hide_password=False)
        with psycopg.connect(address, autocommit=True) as connection:
            connection.execute(f"LISTEN {CHANNEL}")
            self._is_away = False
            self._wake()  # for what was missed until now
            while not self._is_stopped.is_set():
                for _ in connection.notifies(timeout=AGAIN_SECONDS, stop_after=1):
                    self._wake()
                    self._is_stopped.wait(PAUSE_SECONDS)
