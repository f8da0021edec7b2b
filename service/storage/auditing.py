"""What an audit reads: one state of the database, while others go on writing."""

import json
from collections.abc import Callable, Iterable, Iterator, Sequence
from contextlib import AbstractContextManager, contextmanager
from dataclasses import dataclass
from typing import Any, TypeVar

from sqlalchemy import Connection, Engine, RowMapping, Select, func, select

from service.domain.access import AccessKey
from service.domain.audit import Differs, Found, ServiceAudit, TestAudit
from service.domain.chain import EMPTY, SERVICE, Act, Entry, Head
from service.domain.correcting import Piece
from service.domain.plan import Plan
from service.domain.sequential_test import SequentialTest
from service.domain.units import units_of
from service.storage import rows, tables
from service.storage.engine import is_sqlite
from service.storage.logs import Log

T = TypeVar("T")

# Values in one IN list, and entries of the service's history taken together.
AT_ONCE = 400


@dataclass(frozen=True)
class Counts:
    """Rows of the tables that the history of the service tells of, and how many of their things were ended."""

    by_table: dict[str, int]
    ended: dict[str, int]


class Snapshot:
    """Reads on one connection, in one transaction; `log` reads what a test's log holds."""

    def __init__(self, connection: Connection) -> None:
        self._connection = connection
        self.log = Log(self._ask)

    def test(self, key: str) -> SequentialTest | None:
        """The test of this key."""
        row = self._first(select(tables.tests).where(tables.tests.c.key == key))
        return None if row is None else rows.test_of(row)

    def test_keys(self, after: str) -> list[str]:
        """Some keys after this one, in order."""
        column = tables.tests.c.key
        found = select(column).where(column > after).order_by(column).limit(AT_ONCE)
        return [row["key"] for row in self._ask(found)]

    def plan(self, name: str) -> Plan | None:
        """The plan of this name."""
        row = self._first(select(tables.plans).where(tables.plans.c.name == name))
        return None if row is None else rows.plan_of(row)

    def labels(self, test: str) -> dict[str, str]:
        """The labels of a test, as lists find them."""
        labels = tables.test_labels.c
        found = self._ask(select(labels.name, labels.value).where(labels.test == test))
        return {row["name"]: row["value"] for row in found}

    def units(self, test: str, units: Iterable[str]) -> dict[str, int]:
        """Those of the units that the test has, with their sequences."""
        known: dict[str, int] = {}
        column = tables.units.c
        for some in _portions(list(units)):
            found = select(column.unit, column.sequence).where(column.test == test, column.unit.in_(some))
            known.update((row["unit"], row["sequence"]) for row in self._ask(found))
        return known

    def unit_count(self, test: str) -> int:
        """How many units the test has."""
        return self._count(select(func.count().label("n")).where(tables.units.c.test == test))

    def service_acts(self) -> Iterator[tuple[list[Entry], Found]]:
        """The history of what belongs to no test, some entries at a time, with what is stored of their things."""
        for entries in _portions(self.log.acts(SERVICE)):
            yield entries, self._found(entries)

    def service_head(self) -> Head:
        """The end of that history."""
        row = self._first(select(tables.chains).where(tables.chains.c.chain == SERVICE))
        return EMPTY if row is None else rows.head_of(row)

    def counts(self) -> Counts:
        """How many there are of what that history tells of."""
        by_table = {
            table.name: self._count(select(func.count().label("n")).select_from(table))
            for table in (tables.plans, tables.api_keys, tables.tests, tables.receivers)
        }
        ended = {
            column.table.name: self._count(select(func.count().label("n")).where(column.is_not(None)))
            for column in (tables.api_keys.c.revoked_at, tables.receivers.c.removed_at)
        }
        return Counts(by_table, ended)

    def _found(self, entries: Sequence[Entry]) -> Found:
        plans = {entry.details["plan"] for entry in entries if entry.act is Act.PLAN_CREATED}
        tests = {entry.details["test"] for entry in entries if entry.act is Act.TEST_REGISTERED}
        keys = {entry.details["id"] for entry in entries if entry.act in (Act.KEY_CREATED, Act.KEY_REVOKED)}
        of_receivers = (Act.RECEIVER_CREATED, Act.RECEIVER_REMOVED)
        receivers = {entry.details["id"] for entry in entries if entry.act in of_receivers}
        key = tables.tests.c.key
        of_plans = self._ask(select(tables.plans).where(tables.plans.c.name.in_(plans)))
        of_keys = self._ask(select(tables.api_keys).where(tables.api_keys.c.id.in_(keys)))
        found_keys: list[AccessKey] = [rows.key_of(row) for row in of_keys]
        told = self._ask(select(tables.receivers).where(tables.receivers.c.id.in_(receivers)))
        return Found(
            plans={row["name"]: rows.plan_of(row) for row in of_plans},
            keys={each.id: each for each in found_keys},
            tests=frozenset(row["key"] for row in self._ask(select(key).where(key.in_(tests)))),
            receivers={row["id"]: rows.receiver_of(row) for row in told},
        )

    def _count(self, found: Select[Any]) -> int:
        (row,) = self._ask(found)
        return int(row["n"])

    def _first(self, found: Select[Any]) -> RowMapping | None:
        return next(iter(self._ask(found)), None)

    def _ask(self, found: Select[Any]) -> list[RowMapping]:
        return list(self._connection.execute(found).mappings())


Snapshots = Callable[[], AbstractContextManager[Snapshot]]


@contextmanager
def snapshot(engine: Engine) -> Iterator[Snapshot]:
    """One state of the database; SQLite's read transactions are that by themselves."""
    options = {} if is_sqlite(engine) else {"isolation_level": "REPEATABLE READ"}
    with engine.connect().execution_options(**options) as connection, connection.begin():
        yield Snapshot(connection)


@dataclass(frozen=True)
class Audited:
    """What came out of one chain: the first difference, None without any, and how much there was."""

    difference: str | None
    is_of_test: bool
    acts: int = 0
    observations: int = 0


def audited(opened: Snapshots, tests: Iterable[str] | None = None) -> Iterator[Audited]:
    """
    Audit the service's own history and every test, each in one state of the database; or the tests named, alone.

    A row that cannot even be read is a difference too.

    Args:
        opened: Opens a snapshot, such as `partial(snapshot, engine)`; a new one for each chain, so that none stays open
            for long.
    """
    if not tests:
        yield _audited(opened, None)
    for key in tests or _keys(opened):
        yield _audited(opened, key)


def _audited(opened: Snapshots, key: str | None) -> Audited:
    with opened() as found:
        try:
            return _audit_service(found) if key is None else _audit_test(found, key)
        except Differs as difference:
            return Audited(str(difference), key is not None)
        except (ValueError, KeyError, TypeError) as error:
            where = "the service's history" if key is None else f"test {key}"
            return Audited(f"{where}: a row cannot be read: {error!r}", key is not None)


def _audit_service(found: Snapshot) -> Audited:
    audit = ServiceAudit()
    for entries, things in found.service_acts():
        audit.follow(entries, things)
    counts = found.counts()
    audit.finish(found.service_head(), counts.by_table, counts.ended)
    return Audited(None, is_of_test=False, acts=audit.head.length)


def _audit_test(found: Snapshot, key: str) -> Audited:
    test = found.test(key)
    if test is None:
        raise Differs(f"test {key}: there is none")

    def read_again(after: int, through: int, number: int) -> Iterator[Piece]:
        return found.log.pieces(test, after, through, before=number + 1)

    audit = TestAudit(test, found.plan(test.plan), read_again, found.log.first_corrected(key))
    for record in found.log.records(test):
        audit.follow(record)
    audit.finish(found.labels(key))
    _check_units(found, test)
    return Audited(None, is_of_test=True, acts=test.history.length, observations=test.state.sequence)


def _check_units(found: Snapshot, test: SequentialTest) -> None:
    """Each unit of an observation that counts now stands in the table of units with it, and none beside them."""
    count = 0
    for piece in found.log.pieces(test, 0, test.state.sequence):
        expected = units_of(json.loads(piece.body), piece.first_sequence)
        if found.units(test.key, expected) != expected:
            raise Differs(f"test {test.key}: the units of observations {piece.first_sequence} and on are not as posted")
        count += len(expected)
    if found.unit_count(test.key) != count:
        raise Differs(f"test {test.key}: {found.unit_count(test.key)} units are kept, and {count} were posted")


def _keys(opened: Snapshots) -> Iterator[str]:
    after = ""
    while True:
        with opened() as found:
            keys = found.test_keys(after)
        if not keys:
            return
        yield from keys
        after = keys[-1]


def _portions(values: Iterable[T]) -> Iterator[list[T]]:
    gathered: list[T] = []
    for value in values:
        gathered.append(value)
        if len(gathered) == AT_ONCE:
            yield gathered
            gathered = []
    if gathered:
        yield gathered
