"""
Notices: what receivers are told of a test, how it is signed, and when it is tried again. Pure.

Signed by the open Standard Webhooks scheme: HMAC-SHA256, with the bytes that the secret encodes, over the text
`id.timestamp.body`, in base64 behind the version `v1,`.
"""

import base64
import hashlib
import hmac
from dataclasses import dataclass, replace
from datetime import datetime, timedelta
from enum import StrEnum
from typing import Any

from service.domain.chain import json_of, shown
from service.domain.disposing import Disposition
from service.domain.observing import direction_of_rejection
from service.domain.plan import Plan
from service.domain.procedure import procedure_of
from service.domain.receivers import SECRET_PREFIX, Receiver
from service.domain.sequential_test import SequentialTest
from service.domain.state import Decision

# Waits grow by this from attempt to attempt, up to a limit.
GROWTH = 3.0
MOST_WAIT_SECONDS = 6 * 3600.0


class NoticeKind(StrEnum):
    """What a notice tells."""

    DECIDED = "test.decided"
    DECISION_CHANGED = "test.decision_changed"
    DISPOSED = "test.disposed"
    TRIAL = "notice.trial"


class NoticeState(StrEnum):
    """Waiting for its next attempt, delivered, or dead: given up until somebody has it sent again."""

    WAITING = "waiting"
    DELIVERED = "delivered"
    DEAD = "dead"


@dataclass(frozen=True)
class Notice:
    """
    One message to one receiver.

    Attributes:
        id: Grows with the time at which notices are made; the receiver sees it and may drop what it has seen.
        receiver: The id of the receiver.
        test, version: What it is about, in the order in which it is told; no test for a trial.
        body: The JSON text that is sent, the same at each attempt.
        attempts: Begun since it was made or sent again.
        due_at: Not tried before; while an attempt is under way, when that one counts as lost.
        lease: Of the attempt under way; only who has it may say how it ended.
        outcome: How the last attempt ended.
    """

    id: str
    receiver: str
    test: str | None
    version: int
    kind: NoticeKind
    body: str
    created_at: datetime
    due_at: datetime
    state: NoticeState = NoticeState.WAITING
    attempts: int = 0
    lease: str | None = None
    outcome: str | None = None


@dataclass(frozen=True)
class Delivery:
    """A notice to be carried to its receiver now."""

    notice: Notice
    receiver: Receiver


@dataclass(frozen=True)
class Attempt:
    """How an attempt ended; after a final one it is not tried again."""

    is_delivered: bool
    outcome: str
    is_final: bool = False


@dataclass(frozen=True)
class Schedule:
    """How often a notice is tried, and how long is waited after the first attempt."""

    attempts: int
    first_wait_seconds: float


def notice_id(at: datetime, random: str) -> str:
    """An id that sorts by the time at which it is made, to the millisecond."""
    return f"{_milliseconds(at):012x}{random}"


def ids_before(at: datetime) -> str:
    """What is above every id made before this time and below every later one."""
    return f"{_milliseconds(at):012x}"


def message_of(kind: NoticeKind, test: SequentialTest, plan: Plan, before: Decision) -> str:
    """The body of a notice about a test as it is now; what people wrote as their reasons is not in it."""
    procedure, state = procedure_of(plan), test.state
    decided = state.decided
    data = {
        "key": test.key,
        "plan": test.plan,
        "subject": {"kind": test.subject.kind.value, "name": test.subject.name},
        "labels": dict(test.labels),
        "decision": state.decision.value,
        "previous_decision": before.value,
        "log_likelihood_ratio": state.log_likelihood_ratio,
        "sample_number": state.sample_number,
        "exposure": state.exposure.value if procedure.family.has_exposure else None,
        "decided": None
        if decided is None
        else {
            "sample_number": decided.sample_number,
            "exposure": decided.exposure,
            "at": shown(decided.at),
            "cause": decided.cause.value,
            "direction": direction_of_rejection(procedure, state),
        },
        "overrun": state.overrun,
        "disposition": _disposition(test.disposition),
        "status": test.status.value,
        "version": test.version,
    }
    return _body(kind, test.updated_at, data)


def trial_message(receiver: Receiver, at: datetime) -> str:
    """The body of a notice that tells nothing but that notices arrive."""
    return _body(NoticeKind.TRIAL, at, {"receiver": receiver.name})


def signature_of(secret: str, notice: str, timestamp: int, body: str) -> str:
    """
    The signature of a notice sent at this time, in whole seconds since 1970.

    Source: Standard Webhooks, version 1.0.0, "signature scheme", symmetric (recalled).
    """
    key = base64.b64decode(secret.removeprefix(SECRET_PREFIX))
    digest = hmac.new(key, f"{notice}.{timestamp}.{body}".encode(), hashlib.sha256).digest()
    return "v1," + base64.b64encode(digest).decode()


def wait_seconds(schedule: Schedule, attempts: int, jitter: float) -> float:
    """
    How long to wait after so many attempts.

    Args:
        jitter: From 0 to 1, drawn for each wait: from the whole wait down to half of it, so that what failed together
            is not tried again together.
    """
    # The power is bounded before it is taken: attempts may be many, and a double ends at 1e308.
    longest = min(schedule.first_wait_seconds * GROWTH ** min(attempts - 1, 100), MOST_WAIT_SECONDS)
    return longest * (1.0 - jitter / 2.0)


def after_attempt(notice: Notice, attempt: Attempt, schedule: Schedule, jitter: float, now: datetime) -> Notice:
    """The notice after an attempt: delivered, dead, or waiting for the next one."""
    ended = replace(notice, lease=None, outcome=attempt.outcome, due_at=now)
    if attempt.is_delivered:
        return replace(ended, state=NoticeState.DELIVERED)
    if attempt.is_final or notice.attempts >= schedule.attempts:
        return replace(ended, state=NoticeState.DEAD)
    wait = timedelta(seconds=wait_seconds(schedule, notice.attempts, jitter))
    return replace(ended, due_at=now + wait)


def again(notice: Notice, now: datetime) -> Notice:
    """The notice as it waits to be sent again, from the first attempt on."""
    return replace(notice, state=NoticeState.WAITING, attempts=0, lease=None, due_at=now)


def _milliseconds(at: datetime) -> int:
    return int(at.timestamp() * 1000)


def _disposition(disposition: Disposition | None) -> dict[str, Any] | None:
    if disposition is None:
        return None
    return {
        "disposition": disposition.verdict.value,
        "deviates": disposition.deviates,
        "by": disposition.by,
        "at": shown(disposition.at),
    }


def _body(kind: NoticeKind, at: datetime, data: dict[str, Any]) -> str:
    return json_of({"type": kind.value, "timestamp": shown(at), "data": data})
