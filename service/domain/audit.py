"""
Is what is stored still what was recorded, and does the log still say what the tests say? Pure.

A test is run again from its log by the same function that ran it live, and its history is bound again link by link; the
first place that differs is named. Nothing is kept but the present state and the last link, however long the log is.
"""

import hashlib
import json
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, replace
from datetime import datetime
from typing import Any

from service.domain.access import AccessKey, digest_of
from service.domain.chain import EMPTY, Act, Entry, Head, link_of
from service.domain.correcting import Correction, Piece, replayed, settled
from service.domain.disposing import Disposition
from service.domain.errors import InvalidCorrection, InvalidObservations
from service.domain.history import (
    corrected,
    decision_of,
    disposed,
    key_created,
    key_revoked,
    plan_created,
    receiver_created,
    receiver_removed,
    registered,
    submitted,
)
from service.domain.observing import observe
from service.domain.plan import Plan, fingerprint_of
from service.domain.procedure import Procedure, procedure_of
from service.domain.receivers import Receiver
from service.domain.sequential_test import SequentialTest, Status, Submission
from service.domain.state import State

Record = Submission | Correction | Entry

# The observations after one and up to another as they counted before an act of this number, and with it.
ReadAgain = Callable[[int, int, int], Iterable[Piece]]


class Differs(Exception):
    """Something is not as it was recorded; the text names the place."""


START = State()


@dataclass(frozen=True)
class Walked:
    """How far a history was followed: its end, and what the test must be after it."""

    head: Head = EMPTY
    state: State = START
    version: int = 0
    updated_at: datetime | None = None
    status: Status = Status.OPEN
    corrections: int = 0
    decision_changed: bool = False
    corrected_after_decision: bool = False
    disposition: Disposition | None = None
    undeclared: Mapping[str, Any] | None = None


class TestAudit:
    """The audit of one test, one record after another; then `finish`."""

    __test__ = False

    def __init__(
        self, test: SequentialTest, plan: Plan | None, read_again: ReadAgain, first_corrected: int | None
    ) -> None:
        """
        Begin.

        Args:
            test: As stored.
            plan: As stored, None where there is none.
            read_again: Reads a part of the log as it counted after an act of the history.
            first_corrected: The first observation that was ever corrected; the log is run again from before it.
        """
        self._read_again, self._first_corrected, self._uncorrected = read_again, first_corrected, START
        if plan is None or fingerprint_of(plan.document) != plan.fingerprint:
            raise Differs(f"test {test.key}: its plan {test.plan} is missing or not the one that was checked")
        self._test, self._plan = test, plan
        self._procedure: Procedure = procedure_of(plan)
        self.walked = Walked()

    def follow(self, record: Record) -> None:
        """
        Take the next record of the test's history.

        Raises:
            Differs: It does not follow from those before it.
        """
        entry = entry_of(record)
        head = next_head(self._test.key, self.walked.head, entry)
        where = place(self._test.key, entry)
        if (self.walked.undeclared is not None) != (entry.act is Act.DECIDED):
            raise Differs(f"{where}: a decision is recorded where none fell, or is not recorded where one did")
        if isinstance(record, Submission):
            self._take_submission(where, record)
        elif isinstance(record, Correction):
            self._take_correction(where, record)
        elif entry.act is Act.DECIDED:
            if entry.details != self.walked.undeclared:
                raise Differs(f"{where}: the log decides otherwise")
            self.walked = replace(self.walked, undeclared=None)
        elif entry.act is Act.REGISTERED:
            self._take_registration(where, entry)
        elif entry.act is Act.DISPOSED:
            self._take_disposition(where, entry)
        else:
            raise Differs(f"{where}: it is no act of a test")
        self.walked = replace(self.walked, head=head)

    def finish(self, labels: Mapping[str, str]) -> None:
        """
        Compare the row of the test, and its labels as lists find them, with what its history comes to.

        Raises:
            Differs: They are not the same.
        """
        test, walked = self._test, self.walked
        if walked.head != test.history:
            raise Differs(
                f"test {test.key}: its history ends with act {walked.head.length}, "
                f"and its row says {test.history.length} acts, or another last link"
            )
        if walked.undeclared is not None:
            raise Differs(f"test {test.key}: its decision is not recorded")
        held = {
            "state": (test.state, walked.state),
            "version": (test.version, walked.version),
            "updated_at": (test.updated_at, walked.updated_at),
            "status": (test.status, walked.status),
            "corrections": (test.corrections, walked.corrections),
            "decision_changed": (test.decision_changed, walked.decision_changed),
            "corrected_after_decision": (test.corrected_after_decision, walked.corrected_after_decision),
            "disposition": (test.disposition, walked.disposition),
            "labels": (dict(test.labels), dict(labels)),
        }
        for name, (stored, found) in held.items():
            if stored != found:
                raise Differs(f"test {test.key}: its {name} is not what the log gives")

    def _take_registration(self, where: str, entry: Entry) -> None:
        expected = registered(self._test, self._plan, entry.request_id)
        if (entry.details, entry.at, entry.actor) != (expected.details, expected.at, expected.actor):
            raise Differs(f"{where}: the test or its plan is not what was registered")
        self.walked = replace(self.walked, version=1, updated_at=entry.at)

    def _take_submission(self, where: str, submission: Submission) -> None:
        before = self.walked.state
        if hashlib.sha256(submission.body.encode()).hexdigest() != submission.body_digest:
            raise Differs(f"{where}: what was posted is not what its digest says")
        if submission.first_sequence != before.sequence + 1:
            raise Differs(f"{where}: observation {before.sequence + 1} was to come, not {submission.first_sequence}")
        try:
            state = observe(self._procedure, before, json.loads(submission.body), submission.received_at)
        except InvalidObservations as error:
            raise Differs(f"{where}: it cannot be run again: {error} {error.faults}") from error
        if submission.last_sequence != state.sequence:
            raise Differs(f"{where}: it holds observations to {state.sequence}, not {submission.last_sequence}")
        if self._first_corrected is not None and submission.last_sequence < self._first_corrected:
            self._uncorrected = state
        self._move(where, submission.version, submission.received_at, state, submission.state, Act.SUBMITTED)

    def _take_correction(self, where: str, correction: Correction) -> None:
        before, at = self.walked.state, correction.received_at

        def read(after: int, through: int) -> Iterable[Piece]:
            return self._read_again(after, through, correction.number)

        if correction.before is not before.decision or not 1 <= correction.observation <= before.sequence:
            raise Differs(f"{where}: there was no such observation, or the decision before it was another")
        try:
            state = settled(before, replayed(self._procedure, self._uncorrected, read, before.sequence), at)
        except InvalidCorrection as error:
            raise Differs(f"{where}: {error} {error.faults}") from error
        self._move(where, correction.version, at, state, correction.state, Act.CORRECTED)
        self.walked = replace(
            self.walked,
            corrections=self.walked.corrections + 1,
            decision_changed=self.walked.decision_changed or state.decision is not before.decision,
            corrected_after_decision=self.walked.corrected_after_decision or before.is_decided,
        )

    def _take_disposition(self, where: str, entry: Entry) -> None:
        told, version = self._test.disposition, self.walked.version + 1
        if told is None or entry.details != disposed(replace(self._test, version=version), told, None).details:
            raise Differs(f"{where}: the test's row says otherwise")
        if self.walked.status is Status.CLOSED:
            raise Differs(f"{where}: the test was closed before")
        disposition = replace(told, by=entry.actor, at=entry.at)
        self.walked = replace(
            self.walked, version=version, updated_at=entry.at, status=Status.CLOSED, disposition=disposition
        )

    def _move(self, where: str, version: int, at: datetime, state: State, stored: State, cause: Act) -> None:  # noqa: PLR0913 - what a log entry says
        """The test after an entry of its log."""
        if state != stored:
            raise Differs(f"{where}: run again, the log gives {difference(stored, state)}")
        if version != self.walked.version + 1:
            raise Differs(f"{where}: version {self.walked.version + 1} was to come, not {version}")
        before = self.walked.state
        decision = None if state.decision is before.decision else decision_of(before, state, cause)
        self.walked = replace(self.walked, state=state, version=version, updated_at=at, undeclared=decision)


@dataclass(frozen=True)
class Found:
    """What is stored of the things that the history of the service tells of."""

    plans: Mapping[str, Plan]
    keys: Mapping[str, AccessKey]
    tests: frozenset[str]
    receivers: Mapping[str, Receiver]


class ServiceAudit:
    """The audit of what belongs to no test: some entries at a time, with what is stored of their things."""

    def __init__(self) -> None:
        self.head = EMPTY
        self._counts = dict.fromkeys(("plans", "api_keys", "tests", "receivers"), 0)
        self._ended: dict[str, set[str]] = {"api_keys": set(), "receivers": set()}

    def follow(self, entries: Iterable[Entry], found: Found) -> None:
        """
        Take the next entries.

        Raises:
            Differs: One does not follow from those before it, or what it tells of is gone or another.
        """
        for entry in entries:
            self.head = next_head("", self.head, entry)
            if not self._fits(entry, found):
                raise Differs(f"{place('', entry)}: what it tells of is missing or not what was recorded")

    def finish(self, head: Head, counts: Mapping[str, int], ended: Mapping[str, int]) -> None:
        """
        Compare the stored end of the chain, and how many things there are, with what was followed.

        Raises:
            Differs: They are not the same.
        """
        if self.head != head:
            raise Differs(f"the service's history ends with act {self.head.length}, and {head.length} are on record")
        for table, count in counts.items():
            if count != self._counts[table]:
                raise Differs(f"{table}: {count} rows, and {self._counts[table]} are on record")
        for table, count in ended.items():
            if count != len(self._ended[table]):
                word = "revoked" if table == "api_keys" else "removed"
                raise Differs(f"{table}: {count} are {word}, and {len(self._ended[table])} such acts are on record")

    def _fits(self, entry: Entry, found: Found) -> bool:
        about = entry.details
        if entry.act is Act.PLAN_CREATED:
            self._counts["plans"] += 1
            plan = found.plans.get(about["plan"])
            is_sound = plan is not None and fingerprint_of(plan.document) == plan.fingerprint
            return is_sound and _same(entry, plan_created(plan, None))  # type: ignore[arg-type]
        if entry.act is Act.TEST_REGISTERED:
            self._counts["tests"] += 1
            return about["test"] in found.tests
        if entry.act in (Act.RECEIVER_CREATED, Act.RECEIVER_REMOVED):
            receiver = found.receivers.get(about["id"])
            return receiver is not None and self._fits_receiver(entry, receiver)
        key = found.keys.get(about["id"])
        if key is None:
            return False
        if entry.act is Act.KEY_CREATED:
            self._counts["api_keys"] += 1
            return _same(entry, key_created(key, entry.actor, None))
        self._ended["api_keys"].add(key.id)
        return key.revoked_at is not None and _same(entry, key_revoked(key, key.revoked_at, entry.actor, None))

    def _fits_receiver(self, entry: Entry, receiver: Receiver) -> bool:
        if entry.act is Act.RECEIVER_CREATED:
            self._counts["receivers"] += 1
            is_its_secret = receiver.secret is None or digest_of(receiver.secret) == receiver.fingerprint
            has_one = (receiver.secret is None) == (receiver.removed_at is not None)
            return has_one and is_its_secret and _same(entry, receiver_created(receiver, None))
        self._ended["receivers"].add(receiver.id)
        at = receiver.removed_at
        return at is not None and _same(entry, receiver_removed(receiver, at, entry.actor, None))


def entry_of(record: Record) -> Entry:
    """What the history says of a record."""
    if isinstance(record, Submission):
        return submitted(record)
    return corrected(record) if isinstance(record, Correction) else record


def next_head(chain: str, head: Head, entry: Entry) -> Head:
    """
    The end of a chain after its next entry.

    Raises:
        Differs: The entry is not the next one, or its link is not that of what it says.
    """
    where = place(chain, entry)
    if entry.number != head.length + 1:
        raise Differs(
            f"{where}: act {head.length + 1} was to come; it is missing, or this one stands twice or elsewhere"
        )
    if entry.link != link_of(head.link, entry):
        raise Differs(f"{where}: its link is not that of what it says and of the act before")
    return entry.head


def place(chain: str, entry: Entry) -> str:
    """Where an entry stands, for people."""
    extent = ""
    if entry.act is Act.SUBMITTED:
        extent = f" of observations {entry.details['first_sequence']} to {entry.details['last_sequence']}"
    elif entry.act is Act.CORRECTED:
        extent = f" observation {entry.details['sequence']}"
    return f"{f'test {chain}' if chain else 'service'}, act {entry.number} ({entry.act}{extent})"


def difference(stored: State, found: State) -> str:
    """The first member in which two states differ."""
    name = next(name for name in vars(stored) if getattr(stored, name) != getattr(found, name))
    return f"{name} {getattr(found, name)}, and {getattr(stored, name)} is stored"


def _same(entry: Entry, expected: Entry) -> bool:
    return (entry.details, entry.at, entry.actor) == (expected.details, expected.at, expected.actor)
