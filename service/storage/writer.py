"""
Writes, inside one transaction that `writing` opens and commits.

What a group of commands reads is fetched at once, and what they append to the log is written at once, before the
commit; in between the group sees its own entries. So a group costs a few statements, however many commands it has.

Every changed test is given a number just before the commit. On PostgreSQL one lock is held from there to the end of the
transaction, so that numbers grow in the order in which changes become visible: whoever has seen one has seen all below.
It is the last lock that a transaction takes, so that nobody waits for another one while holding it.
"""

from collections.abc import Iterable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from datetime import datetime
from typing import Any, TypeVar

from sqlalchemy import (
    Connection,
    Engine,
    Executable,
    RowMapping,
    Select,
    bindparam,
    delete,
    func,
    insert,
    select,
    text,
    tuple_,
    update,
)

from service.domain.access import AccessKey
from service.domain.chain import EMPTY, SERVICE, Entry, bound
from service.domain.correcting import Correction
from service.domain.plan import Plan
from service.domain.sequential_test import SequentialTest, Submission
from service.storage import rows, tables
from service.storage.engine import CHANNEL, WRITES, is_sqlite
from service.storage.logs import Log
from service.storage.outbox import Outbox

# Any number that no other program on the same server locks by, and not that of the migrations.
NUMBERING_LOCK = 5_397_204_187

# Values in one IN list; SQLite takes 999 parameters at the least.
MOST_AT_ONCE = 400

_KEY_NAMED = select(tables.api_keys).where(
    tables.api_keys.c.name == bindparam("name"), tables.api_keys.c.revoked_at.is_(None)
)
_PLAN = select(tables.plans).where(tables.plans.c.name == bindparam("name"))
_TESTS = (
    select(tables.tests)
    .where(tables.tests.c.key.in_(bindparam("keys", expanding=True)))
    .order_by(tables.tests.c.key)
    .with_for_update()
)
_REPEATED = select(tables.submissions).where(
    tuple_(tables.submissions.c.test, tables.submissions.c.idempotency_key).in_(bindparam("pairs", expanding=True))
)
_CORRECTION = select(tables.corrections).where(
    tables.corrections.c.test == bindparam("test"), tables.corrections.c.idempotency_key == bindparam("idempotency_key")
)
_UNITS = select(tables.units.c.unit, tables.units.c.sequence).where(
    tables.units.c.test == bindparam("test"), tables.units.c.unit.in_(bindparam("units", expanding=True))
)
_SERVICE_HEAD = select(tables.chains).where(tables.chains.c.chain == SERVICE).with_for_update()
_LAST_CHANGE = select(func.max(tables.tests.c.change))
_SAVE = update(tables.tests).where(tables.tests.c.key == bindparam("which"))

Pair = tuple[str, str]
T = TypeVar("T")


class Writer:
    """Reads that lock and writes that append, on one connection in one transaction; `outbox` holds the notices."""

    def __init__(self, connection: Connection) -> None:
        self._connection = connection
        self.outbox = Outbox(connection)
        self._tests: dict[str, SequentialTest] = {}
        self._saved: set[str] = set()
        self._added: set[str] = set()
        self._repeated: dict[Pair, Submission | None] = {}
        self._appended: list[Submission] = []
        self._units: dict[str, dict[str, int]] = {}
        self._corrections: list[Correction] = []
        self._recorded: list[Entry] = []
        self._recorded_of_service: list[Entry] = []

    def expect(self, tests: Iterable[str], idempotency_keys: Iterable[Pair]) -> None:
        """
        Fetch what the commands of a group will ask for, and lock its tests until the transaction ends.

        Rows are locked in the order of their keys, so that no two processes wait for each other.
        """
        for keys in _portions(sorted(set(tests))):
            found = self._connection.execute(_TESTS, {"keys": keys}).mappings()
            self._tests.update((row["key"], rows.test_of(row)) for row in found)
        for pairs in _portions(sorted(set(idempotency_keys))):
            self._repeated.update(dict.fromkeys(pairs))
            for row in self._connection.execute(_REPEATED, {"pairs": pairs}).mappings():
                self._repeated[row["test"], row["idempotency_key"]] = rows.submission_of(row)

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
        if key not in self._tests:
            self.expect([key], [])
        return self._tests.get(key)

    def add_test(self, test: SequentialTest) -> None:
        """A new test with its labels."""
        self._connection.execute(insert(tables.tests), rows.row_of_test(test))
        self._added.add(test.key)
        labels = [{"test": test.key, "name": name, "value": value} for name, value in test.labels.items()]
        if labels:
            self._connection.execute(insert(tables.test_labels), labels)

    def submission_with_idempotency_key(self, test: str, idempotency_key: str) -> Submission | None:
        """The submission that used this idempotency key."""
        pair = (test, idempotency_key)
        if pair not in self._repeated:
            self.expect([], [pair])
        return self._repeated[pair]

    def known_units(self, test: str, units: Sequence[str]) -> dict[str, int]:
        """Those of the units that the test has, with their sequences."""
        own = self._units.get(test, {})
        known = {unit: own[unit] for unit in units if unit in own}
        for some in _portions(units):
            found = self._connection.execute(_UNITS, {"test": test, "units": some})
            known.update((unit, sequence) for unit, sequence in found)
        return known

    def append(self, submission: Submission, units: Mapping[str, int]) -> None:
        """A new entry of the log, and its units with their sequences."""
        self._appended.append(submission)
        if submission.idempotency_key is not None:
            self._repeated[submission.test, submission.idempotency_key] = submission
        if units:
            self._units.setdefault(submission.test, {}).update(units)

    def log(self) -> Log:
        """What the log holds, with what the group has appended so far."""
        self._flush_log()
        return Log(lambda found: list(self._connection.execute(found).mappings()))

    def correction_with_idempotency_key(self, test: str, idempotency_key: str) -> Correction | None:
        """The correction that used this idempotency key."""
        self._flush_log()
        row = self._first(_CORRECTION, test=test, idempotency_key=idempotency_key)
        return None if row is None else rows.correction_of(row)

    def correct(self, correction: Correction, freed: str | None, taken: str | None) -> None:
        """A new correction, which may free a unit for another observation, or take one."""
        self._flush_log()
        self._corrections.append(correction)
        units = tables.units.c
        if freed is not None:
            freeing = delete(tables.units).where(units.test == correction.test, units.unit == freed)
            self._connection.execute(freeing)
        if taken is not None:
            values = {"test": correction.test, "unit": taken, "sequence": correction.observation}
            self._connection.execute(insert(tables.units), values)

    def record(self, entry: Entry) -> None:
        """An act: one of a test in its place already; one of the service gets its place when all is written."""
        (self._recorded if entry.chain else self._recorded_of_service).append(entry)

    def save(self, test: SequentialTest) -> None:
        """The test's status, version, time and state, as they are now."""
        self._tests[test.key] = test
        self._saved.add(test.key)

    def touch(self) -> None:
        """Write a row as it is: only a database that takes writes can."""
        self._connection.execute(text("UPDATE alembic_version SET version_num = version_num"))

    def _flush_log(self) -> None:
        """Write what was appended, so that it can be read; the tests are saved and numbered when all is done."""
        self._many(insert(tables.submissions), [rows.row_of_submission(entry) for entry in self._appended])
        units = [
            {"test": test, "unit": unit, "sequence": at}
            for test, known in self._units.items()
            for unit, at in known.items()
        ]
        self._many(insert(tables.units), units)
        self._many(insert(tables.corrections), [rows.row_of_correction(entry) for entry in self._corrections])
        self._many(insert(tables.history), [rows.row_of_entry(entry) for entry in self._recorded])
        self._appended, self._units, self._corrections, self._recorded = [], {}, [], []

    def flush(self) -> None:
        """Write what was appended and saved."""
        self._flush_log()
        self.outbox.flush()
        self._extend_history_of_service()
        moved = [self._tests[key] for key in sorted(self._saved)]
        added = sorted(self._added - self._saved)
        first = self._next_change() if moved or added else 0
        self._many(_SAVE, [{"which": key, "change": first + i} for i, key in enumerate(added)])
        self._many(
            _SAVE,
            [
                {
                    "which": test.key,
                    "change": number,
                    **rows.row_of_what_moves(test),
                }
                for number, test in enumerate(moved, first + len(added))
            ],
        )
        self._saved, self._added = set(), set()

    def _extend_history_of_service(self) -> None:
        """Bind the acts that belong to no test; the end of their chain is locked until the transaction ends."""
        if not self._recorded_of_service:
            return
        row = self._connection.execute(_SERVICE_HEAD).mappings().first()
        head = EMPTY if row is None else rows.head_of(row)
        entries = []
        for entry in self._recorded_of_service:
            entries.append(bound(head, entry))
            head = entries[-1].head
        self._many(insert(tables.history), [rows.row_of_entry(entry) for entry in entries])
        changed = (
            insert(tables.chains) if row is None else update(tables.chains).where(tables.chains.c.chain == SERVICE)
        )
        self._connection.execute(changed.values(chain=SERVICE, **rows.row_of_head(head)))
        self._recorded_of_service = []

    def _next_change(self) -> int:
        """The next number; PostgreSQL tells those who listen once the transaction is committed."""
        if is_sqlite(self._connection.engine):
            last = self._connection.execute(_LAST_CHANGE).scalar()
        else:
            # Two statements: the second must see what was committed while the first waited.
            self._connection.execute(select(func.pg_advisory_xact_lock(NUMBERING_LOCK)))
            last = self._connection.execute(_LAST_CHANGE.add_columns(func.pg_notify(CHANNEL, ""))).scalar()
        return (last or 0) + 1

    def _many(self, statement: Executable, parameters: list[dict[str, Any]]) -> None:
        if parameters:
            self._connection.execute(statement, parameters)

    def _first(self, found: Select[Any], **parameters: str) -> RowMapping | None:
        return self._connection.execute(found, parameters).mappings().first()


@contextmanager
def writing(engine: Engine) -> Iterator[Writer]:
    """A transaction for writing: flushed and committed at the end, rolled back on any error."""
    with engine.connect().execution_options(**{WRITES: True}) as connection, connection.begin():
        writer = Writer(connection)
        yield writer
        writer.flush()


def _portions(values: Sequence[T]) -> Iterator[list[T]]:
    """A sequence in pieces small enough for one IN list."""
    for start in range(0, len(values), MOST_AT_ONCE):
        yield list(values[start : start + MOST_AT_ONCE])
