"""Writes, inside one transaction that `writing` opens and commits."""

from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from datetime import datetime
from typing import Any

from sqlalchemy import Connection, Engine, RowMapping, Select, bindparam, insert, select, update

from service.domain.access import AccessKey
from service.domain.plan import Plan
from service.domain.sequential_test import SequentialTest, Submission
from service.storage import rows, tables
from service.storage.engine import WRITES

# Values in one IN list; SQLite takes 999 parameters at the least.
UNITS_AT_ONCE = 500

_KEY_NAMED = select(tables.api_keys).where(
    tables.api_keys.c.name == bindparam("name"), tables.api_keys.c.revoked_at.is_(None)
)
_PLAN = select(tables.plans).where(tables.plans.c.name == bindparam("name"))
_TEST = select(tables.tests).where(tables.tests.c.key == bindparam("key")).with_for_update()
_REPEATED = select(tables.submissions).where(
    tables.submissions.c.test == bindparam("test"), tables.submissions.c.idempotency_key == bindparam("idempotency_key")
)
_UNITS = select(tables.units.c.unit, tables.units.c.sequence).where(
    tables.units.c.test == bindparam("test"), tables.units.c.unit.in_(bindparam("units", expanding=True))
)
_SAVE = update(tables.tests).where(tables.tests.c.key == bindparam("which"))


class Writer:
    """Reads that lock and writes that append, on one connection in one transaction."""

    def __init__(self, connection: Connection) -> None:
        self._connection = connection

    def key_named(self, name: str) -> AccessKey | None:
        """The key of this name that is not revoked."""
        row = self._first(_KEY_NAMED, name=name)
        return rows.key_of(row) if row is not None else None

    def add_key(self, key: AccessKey) -> None:
        """A new key."""
        self._connection.execute(insert(tables.api_keys), rows.row_of_key(key))

    def revoke_key(self, key_id: str, at: datetime) -> None:
        """End a key."""
        self._connection.execute(update(tables.api_keys).where(tables.api_keys.c.id == key_id).values(revoked_at=at))

    def plan(self, name: str) -> Plan | None:
        """The plan of this name."""
        row = self._first(_PLAN, name=name)
        return rows.plan_of(row) if row is not None else None

    def add_plan(self, plan: Plan) -> None:
        """A new plan."""
        self._connection.execute(insert(tables.plans), rows.row_of_plan(plan))

    def test(self, key: str) -> SequentialTest | None:
        """The test of this key, locked until the transaction ends."""
        row = self._first(_TEST, key=key)
        return rows.test_of(row) if row is not None else None

    def add_test(self, test: SequentialTest) -> None:
        """A new test with its labels."""
        self._connection.execute(insert(tables.tests), rows.row_of_test(test))
        labels = [{"test": test.key, "name": name, "value": value} for name, value in test.labels.items()]
        if labels:
            self._connection.execute(insert(tables.test_labels), labels)

    def submission_with_idempotency_key(self, test: str, idempotency_key: str) -> Submission | None:
        """The submission that used this idempotency key."""
        row = self._first(_REPEATED, test=test, idempotency_key=idempotency_key)
        return rows.submission_of(row) if row is not None else None

    def known_units(self, test: str, units: Sequence[str]) -> dict[str, int]:
        """Those of the units that the test has, with their sequences."""
        known: dict[str, int] = {}
        for start in range(0, len(units), UNITS_AT_ONCE):
            some = list(units[start : start + UNITS_AT_ONCE])
            found = self._connection.execute(_UNITS, {"test": test, "units": some})
            known.update((unit, sequence) for unit, sequence in found)
        return known

    def append(self, submission: Submission, units: Mapping[str, int]) -> None:
        """A new entry of the log, and its units with their sequences."""
        self._connection.execute(insert(tables.submissions), rows.row_of_submission(submission))
        if units:
            new = [{"test": submission.test, "unit": unit, "sequence": at} for unit, at in units.items()]
            self._connection.execute(insert(tables.units), new)

    def save(self, test: SequentialTest) -> None:
        """The test's status, version, time and state, as they are now."""
        moved = {"status": test.status.value, "version": test.version, "updated_at": test.updated_at}
        self._connection.execute(_SAVE, {"which": test.key, **moved, **rows.row_of_state(test.state)})

    def _first(self, found: Select[Any], **parameters: str) -> RowMapping | None:
        return self._connection.execute(found, parameters).mappings().first()


@contextmanager
def writing(engine: Engine) -> Iterator[Writer]:
    """A transaction for writing: committed at the end, rolled back on any error."""
    with engine.connect().execution_options(**{WRITES: True}) as connection, connection.begin():
        yield Writer(connection)
