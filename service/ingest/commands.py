"""
What may be asked to be written, and what comes back once it is.

`actor` and `request_id` go into the history: whose access key it was, and which HTTP request, None without one.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from service.domain.access import UNLIMITED, AccessKey, Limits, Role
from service.domain.addresses import Allowed
from service.domain.correcting import Correction
from service.domain.disposing import Verdict
from service.domain.notices import Attempt, Delivery, Notice, Schedule
from service.domain.plan import Plan
from service.domain.receivers import Receiver
from service.domain.sequential_test import SequentialTest, Subject


@dataclass(frozen=True)
class CreatePlan:
    """
    Store a plan; the same name with the same stated content is answered with the stored one.

    `document` comes from `checked_content`: checking may compute for seconds, which the writer must not wait for.
    """

    name: str
    document: str
    actor: str
    request_id: str | None = None


@dataclass(frozen=True)
class RegisterTest:
    """
    Register a test; the same key with the same content is answered with the stored one.

    Attributes:
        expected_versions: What If-Match allows, `*` for any, if the caller sent one.
        limits: Of the access key.
    """

    key: str
    plan: str
    subject: Subject
    labels: Mapping[str, str]
    actor: str
    expected_versions: frozenset[str] | None = None
    request_id: str | None = None
    limits: Limits = UNLIMITED


@dataclass(frozen=True)
class PostObservations:
    """
    Take the observations of one submission.

    Attributes:
        body: The JSON text as received; `document` is the same, decoded and of sound form.
        body_digest: SHA-256 of the received bytes, hexadecimal.
        expected_versions: What If-Match allows, `*` for any, if the caller sent one.
        limits: Of the access key.
    """

    test: str
    body: str
    document: Mapping[str, Any]
    body_digest: str
    actor: str
    idempotency_key: str | None = None
    expected_versions: frozenset[str] | None = None
    request_id: str | None = None
    limits: Limits = UNLIMITED


@dataclass(frozen=True)
class PostCorrection:
    """
    Void or replace one observation of a test.

    Attributes:
        observation: Its sequence.
        replacement: What is to count in its place, one observation of sound form; None to void it.
        may_correct_decided: Whether the actor may correct a test that has decided.
    """

    test: str
    observation: int
    replacement: Mapping[str, Any] | None
    reason: str
    body_digest: str
    actor: str
    may_correct_decided: bool
    idempotency_key: str | None = None
    expected_versions: frozenset[str] | None = None
    request_id: str | None = None
    limits: Limits = UNLIMITED


@dataclass(frozen=True)
class Dispose:
    """Say what was finally done with the subject of a test, and close it."""

    test: str
    verdict: Verdict
    reason: str
    deviation_reason: str | None
    actor: str
    expected_versions: frozenset[str] | None = None
    request_id: str | None = None
    limits: Limits = UNLIMITED


# Who acts on the command line, where no access key says it; no key can be named so.
COMMAND_LINE = "command line"


@dataclass(frozen=True)
class CreateKey:
    """Make a named access key."""

    name: str
    role: Role
    expires_at: datetime | None = None
    limits: Limits = UNLIMITED
    actor: str = COMMAND_LINE
    request_id: str | None = None


@dataclass(frozen=True)
class RevokeKey:
    """End a valid access key, by name."""

    name: str
    actor: str = COMMAND_LINE
    request_id: str | None = None


@dataclass(frozen=True)
class CreateReceiver:
    """Register a receiver of notices, for tests inside its limits."""

    name: str
    address: str
    limits: Limits
    allowed: Allowed
    actor: str
    request_id: str | None = None


@dataclass(frozen=True)
class RemoveReceiver:
    """End a receiver, by name; what waits for it is not sent."""

    name: str
    actor: str
    request_id: str | None = None


@dataclass(frozen=True)
class SendTrial:
    """Send a receiver a notice that tells nothing."""

    receiver: str


@dataclass(frozen=True)
class SendAgain:
    """Send a notice again that is dead or was delivered."""

    notice: str


@dataclass(frozen=True)
class TakeNotices:
    """
    Take what is due, to be sent by whoever asks within the time of the lease.

    Attributes:
        room: How many notices to each receiver, by its id.
    """

    room: Mapping[str, int]
    lease_seconds: float


@dataclass(frozen=True)
class SettleNotice:
    """
    Say how the attempt to send a taken notice ended.

    Attributes:
        jitter: From 0 to 1, for the wait before the next attempt.
    """

    notice: Notice
    attempt: Attempt
    schedule: Schedule
    jitter: float


@dataclass(frozen=True)
class DropNotices:
    """Drop some of the notices that were made before a time and delivered."""

    before: datetime


@dataclass(frozen=True)
class StoredPlan:
    """A plan as stored, and whether this command made it."""

    plan: Plan
    is_new: bool


@dataclass(frozen=True)
class Probe:
    """Write something that changes nothing, to see whether the database takes writes."""


@dataclass(frozen=True)
class Written:
    """A probe went through."""


@dataclass(frozen=True)
class RegisteredTest:
    """A test as stored, its plan, and whether this command made it."""

    test: SequentialTest
    plan: Plan
    is_new: bool


@dataclass(frozen=True)
class Posted:
    """The test right after a submission; `is_replay` where an earlier answer was given again."""

    test: SequentialTest
    plan: Plan
    first_sequence: int
    last_sequence: int
    is_replay: bool


@dataclass(frozen=True)
class Corrected:
    """The test right after a correction; `is_replay` where an earlier answer was given again."""

    test: SequentialTest
    plan: Plan
    correction: Correction
    is_replay: bool


@dataclass(frozen=True)
class Disposed:
    """The test as it was closed, and whether this command did it."""

    test: SequentialTest
    plan: Plan
    is_new: bool


@dataclass(frozen=True)
class IssuedKey:
    """A new access key with its secret, which is shown this once and kept nowhere."""

    key: AccessKey
    secret: str


@dataclass(frozen=True)
class IssuedReceiver:
    """A new receiver, whose secret is shown this once."""

    receiver: Receiver


@dataclass(frozen=True)
class Addressed:
    """A notice that waits, and the receiver that it is for."""

    notice: Notice
    receiver: str


@dataclass(frozen=True)
class Taken:
    """Notices to be sent now."""

    deliveries: tuple[Delivery, ...]


@dataclass(frozen=True)
class Settled:
    """A notice after an attempt; it is not recorded where the lease was lost or the receiver removed."""

    notice: Notice
    is_recorded: bool


@dataclass(frozen=True)
class Dropped:
    """How many notices were dropped."""

    count: int


Command = (
    CreatePlan
    | RegisterTest
    | PostObservations
    | PostCorrection
    | Dispose
    | CreateKey
    | RevokeKey
    | CreateReceiver
    | RemoveReceiver
    | SendTrial
    | SendAgain
    | TakeNotices
    | SettleNotice
    | DropNotices
    | Probe
)
Outcome = (
    StoredPlan
    | RegisteredTest
    | Posted
    | Corrected
    | Disposed
    | IssuedKey
    | AccessKey
    | IssuedReceiver
    | Receiver
    | Addressed
    | Taken
    | Settled
    | Dropped
    | Written
)
