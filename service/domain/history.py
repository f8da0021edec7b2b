"""What each act says of itself in the history of its test, or of the service. Pure."""

import json
from collections.abc import Mapping
from dataclasses import replace
from datetime import datetime
from typing import Any

from service.domain.access import AccessKey, digest_of
from service.domain.chain import SERVICE, Act, Entry, Head, bound, shown
from service.domain.correcting import Correction
from service.domain.disposing import Disposition
from service.domain.plan import Plan
from service.domain.receivers import Receiver
from service.domain.sequential_test import SequentialTest, Submission
from service.domain.state import State, Sum


def registered(test: SequentialTest, plan: Plan, request_id: str | None) -> Entry:
    """The first entry of a test."""
    details = {
        "plan": plan.name,
        "fingerprint": plan.fingerprint,
        "subject": {"kind": test.subject.kind.value, "name": test.subject.name},
        "labels": dict(test.labels),
    }
    return Entry(test.key, Act.REGISTERED, test.registered_at, test.registered_by, request_id, details)


def test_registered(test: SequentialTest, request_id: str | None) -> Entry:
    """The service's own record of a test, so that a test cannot vanish as a whole."""
    return Entry(SERVICE, Act.TEST_REGISTERED, test.registered_at, test.registered_by, request_id, {"test": test.key})


def plan_created(plan: Plan, request_id: str | None) -> Entry:
    """A new plan."""
    details = {"plan": plan.name, "fingerprint": plan.fingerprint}
    return Entry(SERVICE, Act.PLAN_CREATED, plan.created_at, plan.created_by, request_id, details)


def key_created(key: AccessKey, actor: str, request_id: str | None) -> Entry:
    """A new access key; its digest is told by a digest of its own."""
    details = {
        "id": key.id,
        "name": key.name,
        "role": key.role.value,
        "fingerprint": digest_of(key.digest),
        "expires_at": None if key.expires_at is None else shown(key.expires_at),
    }
    return Entry(SERVICE, Act.KEY_CREATED, key.created_at, actor, request_id, details)


def key_revoked(key: AccessKey, at: datetime, actor: str, request_id: str | None) -> Entry:
    """The end of an access key."""
    return Entry(SERVICE, Act.KEY_REVOKED, at, actor, request_id, {"id": key.id, "name": key.name})


def receiver_created(receiver: Receiver, request_id: str | None) -> Entry:
    """A new receiver: where its notices go, and of which tests it is told; its secret is told by a digest alone."""
    limits = receiver.limits
    details = {
        "id": receiver.id,
        "name": receiver.name,
        "address": receiver.address,
        "fingerprint": receiver.fingerprint,
        "subjects": [{"kind": subject.kind.value, "name": subject.name} for subject in limits.subjects],
        "labels": {name: list(values) for name, values in limits.labels.items()},
    }
    return Entry(SERVICE, Act.RECEIVER_CREATED, receiver.created_at, receiver.created_by, request_id, details)


def receiver_removed(receiver: Receiver, at: datetime, actor: str, request_id: str | None) -> Entry:
    """The end of a receiver."""
    return Entry(SERVICE, Act.RECEIVER_REMOVED, at, actor, request_id, {"id": receiver.id, "name": receiver.name})


def decided(test: SequentialTest, before: State, actor: str, request_id: str | None, cause: Act) -> Entry:
    """The decision is another than before; `cause` is the act that made it so."""
    return Entry(test.key, Act.DECIDED, test.updated_at, actor, request_id, decision_of(before, test.state, cause))


def decision_of(before: State, state: State, cause: Act) -> Mapping[str, Any]:
    """What is recorded of a decision that is another than before."""
    return {
        "decision": state.decision.value,
        "before": before.decision.value,
        "sequence": state.decided.sequence if state.decided else None,
        "sample_number": state.sample_number,
        "cause": cause.value,
    }


def submitted(submission: Submission) -> Entry:
    """A submission is its own entry: what was posted, and the state after it."""
    details = {
        "first_sequence": submission.first_sequence,
        "last_sequence": submission.last_sequence,
        "body_digest": submission.body_digest,
        "idempotency_key": submission.idempotency_key,
        "version": submission.version,
        "state": facts_of(submission.state),
    }
    return Entry(
        chain=submission.test,
        act=Act.SUBMITTED,
        at=submission.received_at,
        actor=submission.actor,
        request_id=submission.request_id,
        details=details,
        number=submission.number,
        link=submission.link,
    )


def corrected(correction: Correction) -> Entry:
    """A correction is its own entry: which observation, what counts in its place, why, and the state after it."""
    details = {
        "sequence": correction.observation,
        "action": correction.action.value,
        "observation": None if correction.replacement is None else json.loads(correction.replacement),
        "reason": correction.reason,
        "body_digest": correction.body_digest,
        "idempotency_key": correction.idempotency_key,
        "version": correction.version,
        "decision_before": correction.before.value,
        "state": facts_of(correction.state),
    }
    return Entry(
        chain=correction.test,
        act=Act.CORRECTED,
        at=correction.received_at,
        actor=correction.actor,
        request_id=correction.request_id,
        details=details,
        number=correction.number,
        link=correction.link,
    )


def disposed(test: SequentialTest, disposition: Disposition, request_id: str | None) -> Entry:
    """What was finally done with the subject, and what the test had decided by then."""
    details = {
        "disposition": disposition.verdict.value,
        "decision": test.state.decision.value,
        "deviates": disposition.deviates,
        "reason": disposition.reason,
        "deviation_reason": disposition.deviation_reason,
        "version": test.version,
    }
    return Entry(test.key, Act.DISPOSED, disposition.at, disposition.by, request_id, details)


def bound_correction(head: Head, correction: Correction) -> Correction:
    """The correction in its place in the history of its test."""
    entry = bound(head, corrected(correction))
    return replace(correction, number=entry.number, link=entry.link)


def bound_submission(head: Head, submission: Submission) -> Submission:
    """The submission in its place in the history of its test."""
    entry = bound(head, submitted(submission))
    return replace(submission, number=entry.number, link=entry.link)


def facts_of(state: State) -> Mapping[str, Any]:
    """A state as JSON, to the last bit, but for the sign of a zero, which not every database keeps."""
    decided = state.decided
    return {
        "sequence": state.sequence,
        "sample_number": state.sample_number,
        "exposure": _pair(state.exposure),
        "total": _pair(state.total),
        "carried": [_pair(number) for number in state.carried],
        "log_likelihood_ratio": state.log_likelihood_ratio + 0.0,
        "decision": state.decision.value,
        "decided": None
        if decided is None
        else {
            "sequence": decided.sequence,
            "sample_number": decided.sample_number,
            "exposure": decided.exposure,
            "at": shown(decided.at),
            "cause": decided.cause.value,
        },
        "overrun": state.overrun,
        "voided": state.voided,
    }


def _pair(number: Sum) -> list[float]:
    return [number.high + 0.0, number.low + 0.0]
