"""Reads, each in a transaction of its own; single rows through `lookups`."""

import copy
from dataclasses import dataclass
from datetime import datetime
from typing import Any, NamedTuple

from sqlalchemy import ColumnElement, Engine, RowMapping, Select, and_, bindparam, func, or_, select

from service.domain.access import UNLIMITED, AccessKey, Limits
from service.domain.disposing import Verdict
from service.domain.plan import Plan
from service.domain.sequential_test import SequentialTest, Stage, Status, SubjectKind
from service.domain.state import Decision
from service.storage import rows, tables
from service.storage.engine import answering
from service.storage.logs import Log
from service.storage.lookups import Lookups
from service.storage.notices import Notices

# Plans that are kept at most.
MOST_PLANS = 1024

_KEY = select(tables.api_keys).where(tables.api_keys.c.digest == bindparam("digest"))
_PLAN = select(tables.plans).where(tables.plans.c.name == bindparam("name"))
_TEST = select(tables.tests).where(tables.tests.c.key == bindparam("key"))
_VERSION = select(tables.tests.c.version).where(tables.tests.c.key == bindparam("key"))
_LAST_CHANGE = select(func.max(tables.tests.c.change).label("last"))


@dataclass(frozen=True)
class TestFilters:
    """
    What a list of tests may be narrowed by; all that is given must match.

    `words` is a part of the key or of the subject's name, in capitals or not.
    """

    __test__ = False

    key: str | None = None
    decision: Decision | None = None
    kind: SubjectKind | None = None
    subject: str | None = None
    plan: str | None = None
    labels: tuple[tuple[str, str], ...] = ()
    updated_after: datetime | None = None
    disposition: Verdict | None = None
    stage: Stage | None = None
    words: str | None = None


class Recent(NamedTuple):
    """A test and the number of its last change."""

    number: int
    test: SequentialTest


class Change(NamedTuple):
    """A test that has changed, as it is now; the number grows in the order in which changes became visible."""

    number: int
    key: str
    version: int
    decision: str
    status: str
    updated_at: datetime


class Count(NamedTuple):
    """Tests of one kind, status and decision."""

    kind: str
    status: str
    decision: str
    tests: int


class Reader:
    """
    Typed answers from the database; None says that there is no such row.

    `log` reads what a test's log holds, `notices` the outbox.
    """

    def __init__(self, engine: Engine) -> None:
        self._engine = engine
        self._lookups = Lookups(engine)
        self._plans: dict[str, Plan] = {}
        self.log = Log(self._all)
        self.notices = Notices(self._all)
        self._limits = UNLIMITED

    def within(self, limits: Limits) -> "Reader":
        """The same reader, for which the tests outside of these limits do not exist."""
        if not limits.is_limited:
            return self
        limited = copy.copy(self)
        limited._limits = limits  # noqa: SLF001 - its own class
        return limited

    @property
    def looks_up_at_once(self) -> bool:
        """True where a look-up is a few microseconds of work in this process, and no wait for another."""
        return self._lookups.are_local

    def key_with_digest(self, digest: str) -> AccessKey | None:
        """The access key with this digest."""
        row = self._lookups.first(_KEY, digest=digest)
        return rows.key_of(row) if row is not None else None

    def keys(self) -> list[AccessKey]:
        """Every key ever made, oldest first."""
        order = (tables.api_keys.c.created_at, tables.api_keys.c.id)
        return [rows.key_of(row) for row in self._all(select(tables.api_keys).order_by(*order))]

    def plan(self, name: str) -> Plan | None:
        """The plan of this name; kept once read, for plans never change."""
        plan = self._plans.get(name)
        if plan is None:
            row = self._lookups.first(_PLAN, name=name)
            if row is None:
                return None
            plan = rows.plan_of(row)
            if len(self._plans) >= MOST_PLANS:
                self._plans.clear()
            self._plans[name] = plan
        return plan

    def plans(self, after: str | None, limit: int) -> list[Plan]:
        """Plans by name, those after `after`."""
        found = select(tables.plans).order_by(tables.plans.c.name).limit(limit)
        if after is not None:
            found = found.where(tables.plans.c.name > after)
        return [rows.plan_of(row) for row in self._all(found)]

    def test(self, key: str) -> SequentialTest | None:
        """The test of this key."""
        row = self._lookups.first(_TEST, key=key)
        test = rows.test_of(row) if row is not None else None
        return test if test is not None and self._limits.allow(test.subject, test.labels) else None

    def version(self, key: str) -> int | None:
        """The version of the test of this key."""
        if self._limits.is_limited:
            test = self.test(key)
            return None if test is None else test.version
        row = self._lookups.first(_VERSION, key=key)
        return None if row is None else int(row["version"])

    def tests(self, filters: TestFilters, after: str | None, limit: int) -> list[SequentialTest]:
        """Tests by key that match the filters, those after `after`."""
        found = (
            _within(_filtered(select(tables.tests), filters), self._limits).order_by(tables.tests.c.key).limit(limit)
        )
        if after is not None:
            found = found.where(tables.tests.c.key > after)
        return [rows.test_of(row) for row in self._all(found)]

    def recent(self, filters: TestFilters, before: int | None, limit: int) -> list[Recent]:
        """Tests that match the filters, the last to have changed first; those that changed before `before`."""
        change = tables.tests.c.change
        found = _within(_filtered(select(tables.tests), filters), self._limits).order_by(change.desc()).limit(limit)
        if before is not None:
            found = found.where(change < before)
        return [Recent(row["change"], rows.test_of(row)) for row in self._all(found)]

    def last_change(self) -> int:
        """The number of the newest change; 0 without any."""
        row = self._lookups.first(_LAST_CHANGE)
        return (row["last"] if row is not None else None) or 0

    def changes(self, filters: TestFilters, after: int, limit: int) -> list[Change]:
        """Tests that match the filters and have changed since the change `after`, in the order of the changes."""
        column = tables.tests.c
        shown = (column.change, column.key, column.version, column.decision, column.status, column.updated_at)
        found = _within(_filtered_each(select(*shown), filters), self._limits)
        found = found.where(column.change > after).order_by(column.change).limit(limit)
        return [Change(*row.values()) for row in self._all(found)]

    def counts(self, filters: TestFilters = TestFilters()) -> list[Count]:
        """How many tests there are of each kind, status and decision, among those that match."""
        by = (tables.tests.c.subject_kind, tables.tests.c.status, tables.tests.c.decision)
        with answering(), self._engine.connect() as connection:
            counted = _within(_filtered(select(*by, func.count()), filters), self._limits).group_by(*by)
            return [Count(*row) for row in connection.execute(counted)]

    def _all(self, found: Select[Any]) -> list[RowMapping]:
        with answering(), self._engine.connect() as connection:
            return list(connection.execute(found).mappings())


def _filtered(found: Select[Any], filters: TestFilters) -> Select[Any]:
    column, labels = tables.tests.c, tables.test_labels
    equal = {
        column.key: filters.key,
        column.decision: filters.decision,
        column.subject_kind: filters.kind,
        column.subject_name: filters.subject,
        column.plan: filters.plan,
        column.disposition: filters.disposition,
    }
    for which, value in equal.items():
        if value is not None:
            found = found.where(which == str(value))
    for name, value in filters.labels:
        labelled = select(labels.c.test).where(labels.c.name == name, labels.c.value == value)
        found = found.where(column.key.in_(labelled))
    if filters.stage is not None:
        found = found.where(*_of_stage(filters.stage))
    if filters.words is not None:
        texts = (column.key, column.subject_name)
        found = found.where(or_(*(text.icontains(filters.words, autoescape=True) for text in texts)))
    if filters.updated_after is not None:
        found = found.where(column.updated_at > filters.updated_after)
    return found


def _of_stage(stage: Stage) -> list[ColumnElement[bool]]:
    status, decision = tables.tests.c.status, tables.tests.c.decision
    if stage is Stage.CLOSED:
        return [status == Status.CLOSED.value]
    goes_on = decision == Decision.CONTINUE.value
    return [status == Status.OPEN.value, goes_on if stage is Stage.RUNNING else ~goes_on]


def _within(found: Select[Any], limits: Limits) -> Select[Any]:
    """Only tests inside the limits; labels are looked up for each test by itself."""
    column, labels = tables.tests.c, tables.test_labels.c
    if limits.subjects:
        of_one = [
            and_(column.subject_kind == subject.kind.value, column.subject_name == subject.name)
            for subject in limits.subjects
        ]
        found = found.where(or_(*of_one))
    for name, values in limits.labels.items():
        own = select(labels.test).where(labels.test == column.key, labels.name == name, labels.value.in_(values))
        found = found.where(own.exists())
    return found


def _filtered_each(found: Select[Any], filters: TestFilters) -> Select[Any]:
    """
    The same filters, but for time and disposition, asked of each test by itself: to find a few among the few that have
    changed.

    Appending nothing to a column keeps a planner from reading all tests that share its value; labels are looked up.
    """
    column, labels = tables.tests.c, tables.test_labels.c
    equal = {
        column.decision: filters.decision,
        column.subject_kind: filters.kind,
        column.subject_name: filters.subject,
        column.plan: filters.plan,
    }
    for which, value in equal.items():
        if value is not None:
            found = found.where(which.concat("") == str(value))
    for name, value in filters.labels:
        own = select(labels.test).where(labels.test == column.key, labels.name == name, labels.value == value)
        found = found.where(own.exists())
    return found if filters.key is None else found.where(column.key == filters.key)
