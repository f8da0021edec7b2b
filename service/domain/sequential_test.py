"""One sequential test of one subject under one plan, and one entry of its log."""

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from enum import StrEnum

from service.domain.chain import EMPTY, Head
from service.domain.disposing import Disposition
from service.domain.state import State


class SubjectKind(StrEnum):
    """What may be tested."""

    LOT = "lot"
    EXPERIMENT = "experiment"


class Status(StrEnum):
    """Open tests take observations; a closed one takes none."""

    OPEN = "open"
    CLOSED = "closed"


class Stage(StrEnum):
    """Where a test is on its way: sampling goes on, somebody must dispose of the subject, or that is done."""

    RUNNING = "running"
    WAITING = "waiting"
    CLOSED = "closed"


@dataclass(frozen=True)
class Subject:
    """A lot or an experiment, by name."""

    kind: SubjectKind
    name: str


@dataclass(frozen=True)
class SequentialTest:
    """
    A registered test and where it stands. `version` counts the writes to it, registration being the first.

    The plan is named, not held: plans are immutable and shared.

    Attributes:
        history: The end of the test's chain of acts.
        corrections: How many were made.
        decision_changed: True once a correction has made the decision another.
        corrected_after_decision: True once a decided test was corrected.
        disposition: What was finally done with the subject, once somebody did; it closes the test.
    """

    key: str
    plan: str
    subject: Subject
    labels: Mapping[str, str]
    status: Status
    version: int
    registered_at: datetime
    registered_by: str
    updated_at: datetime
    state: State
    history: Head = EMPTY
    corrections: int = 0
    decision_changed: bool = False
    corrected_after_decision: bool = False
    disposition: Disposition | None = None

    @property
    def stage(self) -> Stage:
        """What the test waits for."""
        if self.status is Status.CLOSED:
            return Stage.CLOSED
        return Stage.WAITING if self.state.is_decided else Stage.RUNNING


@dataclass(frozen=True)
class Submission:
    """
    One row of the log: what one POST brought, as received, and the test right after it.

    Attributes:
        body: The JSON text as posted.
        body_digest: SHA-256 of the posted bytes, hexadecimal.
        version: The version of the test after this submission.
        request_id: Of the HTTP request that brought it.
        number, link: Its place in the history of the test (see `chain`).
    """

    test: str
    first_sequence: int
    last_sequence: int
    body: str
    body_digest: str
    received_at: datetime
    actor: str
    idempotency_key: str | None
    version: int
    state: State
    request_id: str | None = None
    number: int = 0
    link: str = ""

    @property
    def head(self) -> Head:
        """The end of the test's history while this is its last act."""
        return Head(self.number, self.link)
