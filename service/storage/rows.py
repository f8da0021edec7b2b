"""Rows to domain values and back."""

import json
from typing import Any

from sqlalchemy import RowMapping

from service.domain.access import UNLIMITED, AccessKey, Limits, Role
from service.domain.chain import Act, Entry, Head, json_of
from service.domain.correcting import Action, Correction
from service.domain.disposing import Disposition, Verdict
from service.domain.notices import Notice, NoticeKind, NoticeState
from service.domain.plan import Plan
from service.domain.receivers import Receiver
from service.domain.sequential_test import SequentialTest, Status, Subject, SubjectKind, Submission
from service.domain.state import Cause, Decided, Decision, State, Sum

Row = dict[str, Any]


def row_of_state(state: State) -> Row:
    """The columns that tests and submissions share."""
    decided = state.decided
    return {
        "sequence": state.sequence,
        "sample_number": state.sample_number,
        "exposure": state.exposure.high,
        "exposure_low": state.exposure.low,
        "total": state.total.high,
        "total_low": state.total.low,
        "log_likelihood_ratio": state.log_likelihood_ratio,
        "decision": state.decision.value,
        "decided_sequence": decided.sequence if decided else None,
        "decided_sample_number": decided.sample_number if decided else None,
        "decided_exposure": decided.exposure if decided else None,
        "decided_at": decided.at if decided else None,
        "decided_cause": decided.cause.value if decided else None,
        "overrun": state.overrun,
        "voided": state.voided,
        "carried": json.dumps([[number.high, number.low] for number in state.carried]) if state.carried else None,
    }


def state_of(row: RowMapping) -> State:
    """The state in a row of tests or submissions."""
    return State(
        sequence=row["sequence"],
        sample_number=row["sample_number"],
        exposure=Sum(row["exposure"], row["exposure_low"]),
        total=Sum(row["total"], row["total_low"]),
        log_likelihood_ratio=row["log_likelihood_ratio"],
        decision=Decision(row["decision"]),
        decided=_decided_of(row),
        overrun=row["overrun"],
        carried=tuple(Sum(high, low) for high, low in json.loads(row["carried"] or "[]")),
        voided=row["voided"],
    )


def row_of_test(test: SequentialTest) -> Row:
    """A row of tests."""
    return {
        "key": test.key,
        "plan": test.plan,
        "subject_kind": test.subject.kind.value,
        "subject_name": test.subject.name,
        "labels": json.dumps(dict(test.labels), ensure_ascii=False, sort_keys=True),
        "registered_at": test.registered_at,
        "registered_by": test.registered_by,
        **row_of_what_moves(test),
    }


def row_of_what_moves(test: SequentialTest) -> Row:
    """The columns of tests that change with what happens to it."""
    disposition = test.disposition
    return {
        "status": test.status.value,
        "version": test.version,
        "updated_at": test.updated_at,
        "corrections": test.corrections,
        "decision_changed": test.decision_changed,
        "corrected_after_decision": test.corrected_after_decision,
        "disposition": disposition.verdict.value if disposition else None,
        "disposition_reason": disposition.reason if disposition else None,
        "deviation_reason": disposition.deviation_reason if disposition else None,
        "disposed_by": disposition.by if disposition else None,
        "disposed_at": disposition.at if disposition else None,
        **row_of_head(test.history),
        **row_of_state(test.state),
    }


def test_of(row: RowMapping) -> SequentialTest:
    """The test in a row."""
    return SequentialTest(
        key=row["key"],
        plan=row["plan"],
        subject=Subject(SubjectKind(row["subject_kind"]), row["subject_name"]),
        labels=json.loads(row["labels"]),
        status=Status(row["status"]),
        version=row["version"],
        registered_at=row["registered_at"],
        registered_by=row["registered_by"],
        updated_at=row["updated_at"],
        state=state_of(row),
        history=head_of(row),
        corrections=row["corrections"],
        decision_changed=row["decision_changed"],
        corrected_after_decision=row["corrected_after_decision"],
        disposition=_disposition_of(row),
    )


def _disposition_of(row: RowMapping) -> Disposition | None:
    if row["disposition"] is None:
        return None
    return Disposition(
        verdict=Verdict(row["disposition"]),
        reason=row["disposition_reason"],
        deviation_reason=row["deviation_reason"],
        by=row["disposed_by"],
        at=row["disposed_at"],
    )


def row_of_correction(correction: Correction) -> Row:
    """A row of corrections."""
    return {
        "test": correction.test,
        "observation": correction.observation,
        "action": correction.action.value,
        "replacement": correction.replacement,
        "reason": correction.reason,
        "body_digest": correction.body_digest,
        "received_at": correction.received_at,
        "actor": correction.actor,
        "idempotency_key": correction.idempotency_key,
        "version": correction.version,
        "decision_before": correction.before.value,
        "request_id": correction.request_id,
        "number": correction.number,
        "link": correction.link,
        **row_of_state(correction.state),
    }


def correction_of(row: RowMapping) -> Correction:
    """The correction in a row."""
    return Correction(
        test=row["test"],
        observation=row["observation"],
        action=Action(row["action"]),
        replacement=row["replacement"],
        reason=row["reason"],
        body_digest=row["body_digest"],
        received_at=row["received_at"],
        actor=row["actor"],
        idempotency_key=row["idempotency_key"],
        version=row["version"],
        before=Decision(row["decision_before"]),
        state=state_of(row),
        request_id=row["request_id"],
        number=row["number"],
        link=row["link"],
    )


def row_of_submission(submission: Submission) -> Row:
    """A row of submissions."""
    return {
        "test": submission.test,
        "first_sequence": submission.first_sequence,
        "last_sequence": submission.last_sequence,
        "body": submission.body,
        "body_digest": submission.body_digest,
        "received_at": submission.received_at,
        "actor": submission.actor,
        "idempotency_key": submission.idempotency_key,
        "version": submission.version,
        "request_id": submission.request_id,
        "number": submission.number,
        "link": submission.link,
        **row_of_state(submission.state),
    }


def submission_of(row: RowMapping) -> Submission:
    """The submission in a row."""
    return Submission(
        test=row["test"],
        first_sequence=row["first_sequence"],
        last_sequence=row["last_sequence"],
        body=row["body"],
        body_digest=row["body_digest"],
        received_at=row["received_at"],
        actor=row["actor"],
        idempotency_key=row["idempotency_key"],
        version=row["version"],
        state=state_of(row),
        request_id=row["request_id"],
        number=row["number"],
        link=row["link"],
    )


def row_of_head(head: Head) -> Row:
    """The columns of the end of a chain."""
    return {"history_length": head.length, "history_link": head.link}


def head_of(row: RowMapping) -> Head:
    """The end of the chain in a row."""
    return Head(row["history_length"], row["history_link"])


def row_of_entry(entry: Entry) -> Row:
    """A row of history."""
    return {
        "chain": entry.chain,
        "number": entry.number,
        "link": entry.link,
        "act": entry.act.value,
        "at": entry.at,
        "actor": entry.actor,
        "request_id": entry.request_id,
        "details": json_of(entry.details),
    }


def entry_of(row: RowMapping) -> Entry:
    """The act in a row of history."""
    return Entry(**{**row, "act": Act(row["act"]), "details": json.loads(row["details"])})


def row_of_plan(plan: Plan) -> Row:
    """A row of plans."""
    return {
        "name": plan.name,
        "document": plan.document,
        "fingerprint": plan.fingerprint,
        "created_at": plan.created_at,
        "created_by": plan.created_by,
    }


def plan_of(row: RowMapping) -> Plan:
    """The plan in a row."""
    return Plan(**row)


def row_of_key(key: AccessKey) -> Row:
    """A row of api_keys."""
    return {
        "id": key.id,
        "name": key.name,
        "role": key.role.value,
        "digest": key.digest,
        "created_at": key.created_at,
        "expires_at": key.expires_at,
        "revoked_at": key.revoked_at,
        **_row_of_limits(key.limits),
    }


def key_of(row: RowMapping) -> AccessKey:
    """The key in a row."""
    values = {**row, "role": Role(row["role"]), "limits": _limits_of(row)}
    del values["subjects"], values["labels"]
    return AccessKey(**values)


def row_of_receiver(receiver: Receiver) -> Row:
    """A row of receivers."""
    return {
        "id": receiver.id,
        "name": receiver.name,
        "address": receiver.address,
        "secret": receiver.secret,
        "fingerprint": receiver.fingerprint,
        "created_at": receiver.created_at,
        "created_by": receiver.created_by,
        "removed_at": receiver.removed_at,
        **_row_of_limits(receiver.limits),
    }


def receiver_of(row: RowMapping) -> Receiver:
    """The receiver in a row."""
    values = {**row, "limits": _limits_of(row)}
    del values["subjects"], values["labels"]
    return Receiver(**values)


def row_of_notice(notice: Notice) -> Row:
    """A row of notices."""
    return {**vars(notice), "kind": notice.kind.value, "state": notice.state.value}


def notice_of(row: RowMapping) -> Notice:
    """The notice in a row."""
    return Notice(**{**row, "kind": NoticeKind(row["kind"]), "state": NoticeState(row["state"])})


def _row_of_limits(limits: Limits) -> Row:
    subjects = [[subject.kind.value, subject.name] for subject in limits.subjects]
    return {
        "subjects": json.dumps(subjects, ensure_ascii=False) if subjects else None,
        "labels": json.dumps(dict(limits.labels), ensure_ascii=False, sort_keys=True) if limits.labels else None,
    }


def _limits_of(row: RowMapping) -> Limits:
    if row["subjects"] is None and row["labels"] is None:
        return UNLIMITED
    subjects = tuple(Subject(SubjectKind(kind), name) for kind, name in json.loads(row["subjects"] or "[]"))
    labels = {name: tuple(values) for name, values in json.loads(row["labels"] or "{}").items()}
    return Limits(subjects, labels)


def _decided_of(row: RowMapping) -> Decided | None:
    if row["decided_sequence"] is None:
        return None
    return Decided(
        sequence=row["decided_sequence"],
        sample_number=row["decided_sample_number"],
        exposure=row["decided_exposure"],
        at=row["decided_at"],
        cause=Cause(row["decided_cause"]),
    )
