"""
Each command, inside a transaction that the caller opened: load, one pure step, append.

A refusal is raised before anything is written, so that it disturbs no other command of the same transaction.
"""

import secrets
from dataclasses import replace
from datetime import datetime
from functools import partial, singledispatch
from typing import TypeVar

from service.domain.access import AccessKey, Limits, check_new_key, digest_of
from service.domain.chain import Act, Entry, bound
from service.domain.correcting import Correction
from service.domain.disposing import Disposition, check_deviation
from service.domain.errors import (
    Fault,
    IdempotencyKeyReused,
    InvalidTest,
    KeyNameTaken,
    OutsideLimits,
    PlanDiffers,
    RepeatedUnits,
    RoleTooNarrow,
    TestDiffers,
    TestIsClosed,
    UnknownKey,
    UnknownPlan,
    UnknownTest,
    VersionMoved,
)
from service.domain.history import (
    bound_correction,
    bound_submission,
    decided,
    disposed,
    key_created,
    key_revoked,
    plan_created,
    registered,
    test_registered,
)
from service.domain.notices import NoticeKind
from service.domain.observing import observe
from service.domain.plan import Plan, fingerprint_of, stated
from service.domain.procedure import procedure_of
from service.domain.sequential_test import SequentialTest, Status, Submission
from service.domain.state import State
from service.domain.units import new_units
from service.ingest.commands import (
    Command,
    Corrected,
    CreateKey,
    CreatePlan,
    Dispose,
    Disposed,
    IssuedKey,
    Outcome,
    PostCorrection,
    Posted,
    PostObservations,
    Probe,
    RegisteredTest,
    RegisterTest,
    RevokeKey,
    StoredPlan,
    Written,
)
from service.ingest.correcting import worked_out
from service.ingest.noticing import (
    create_receiver,
    drop_notices,
    remove_receiver,
    send_again,
    send_trial,
    settle_notice,
    take_notices,
    tell,
)
from service.storage.writer import Writer

SECRET_BYTES = 32

S = TypeVar("S", Submission, Correction)


@singledispatch
def perform(command: Command, writer: Writer, now: datetime) -> Outcome:  # noqa: ARG001 - the branches use them
    """
    Carry out one command at the time `now`.

    Raises:
        DomainError: The command is refused; nothing of it was written.
    """
    raise TypeError(f"no way to perform {type(command).__name__}")


@perform.register
def _(command: CreatePlan, writer: Writer, now: datetime) -> Outcome:
    stored = writer.plan(command.name)
    if stored is not None:
        if stated(stored.document) != stated(command.document):
            raise PlanDiffers(command.name)
        return StoredPlan(stored, is_new=False)
    plan = Plan(command.name, command.document, fingerprint_of(command.document), now, command.actor)
    writer.add_plan(plan)
    writer.record(plan_created(plan, command.request_id))
    return StoredPlan(plan, is_new=True)


@perform.register
def _(command: RegisterTest, writer: Writer, now: datetime) -> Outcome:
    if not command.limits.allow(command.subject, command.labels):
        raise OutsideLimits(command.actor)
    stored = writer.test(command.key)
    _check_version(command.expected_versions, stored)
    if stored is not None:
        if not _same_registration(stored, command):
            raise TestDiffers(command.key)
        return RegisteredTest(stored, _plan(writer, stored.plan), is_new=False)
    plan = writer.plan(command.plan)
    if plan is None:
        raise InvalidTest("The test names a plan that does not exist.", [Fault("/plan", f"no plan {command.plan!r}")])
    test = SequentialTest(
        key=command.key,
        plan=command.plan,
        subject=command.subject,
        labels=dict(command.labels),
        status=Status.OPEN,
        version=1,
        registered_at=now,
        registered_by=command.actor,
        updated_at=now,
        state=State(),
    )
    test = _recorded(writer, test, registered(test, plan, command.request_id))
    writer.add_test(test)
    writer.record(test_registered(test, command.request_id))
    return RegisteredTest(test, plan, is_new=True)


@perform.register
def _(command: PostObservations, writer: Writer, now: datetime) -> Outcome:
    test = _visible_test(writer, command.test, command.limits)
    plan = _plan(writer, test.plan)
    first = _first_answer(command, writer)
    if first is not None:
        then = replace(test, version=first.version, updated_at=first.received_at, state=first.state)
        return Posted(then, plan, first.first_sequence, first.last_sequence, is_replay=True)
    _check_version(command.expected_versions, test)
    if test.status is Status.CLOSED:
        raise TestIsClosed(test.key)
    state = observe(procedure_of(plan), test.state, command.document, now)
    first_sequence = test.state.sequence + 1
    units = new_units(command.document, first_sequence, partial(writer.known_units, command.test))
    moved = replace(test, version=test.version + 1, updated_at=now, state=state)
    submission = bound_submission(test.history, _submission(command, moved, first_sequence))
    moved = replace(moved, history=submission.head)
    writer.append(submission, units)
    if state.decision is not test.state.decision:
        moved = _recorded(writer, moved, decided(moved, test.state, command.actor, command.request_id, Act.SUBMITTED))
        tell(writer, NoticeKind.DECIDED, moved, plan, test.state.decision)
    writer.save(moved)
    return Posted(moved, plan, first_sequence, state.sequence, is_replay=False)


@perform.register
def _(command: PostCorrection, writer: Writer, now: datetime) -> Outcome:
    test = _visible_test(writer, command.test, command.limits)
    plan = _plan(writer, test.plan)
    first = _first_correction(command, writer)
    if first is not None:
        then = replace(test, version=first.version, updated_at=first.received_at, state=first.state)
        return Corrected(then, plan, first, is_replay=True)
    _check_version(command.expected_versions, test)
    if test.status is Status.CLOSED:
        raise TestIsClosed(test.key)
    if test.state.is_decided and not command.may_correct_decided:
        raise RoleTooNarrow(f"The test {test.key!r} has decided; from then on corrections need the role engineer.")
    correction, freed, taken = worked_out(command, test, procedure_of(plan), writer.log(), now)
    if taken is not None and (known := writer.known_units(test.key, [taken])):
        fault = Fault("/observation/unit", f"unit {taken!r} was reported as observation {known[taken]}")
        raise RepeatedUnits([fault])
    correction = bound_correction(test.history, correction)
    moved = replace(
        test,
        version=correction.version,
        updated_at=now,
        state=correction.state,
        history=correction.head,
        corrections=test.corrections + 1,
        decision_changed=test.decision_changed or correction.state.decision is not test.state.decision,
        corrected_after_decision=test.corrected_after_decision or test.state.is_decided,
    )
    writer.correct(correction, freed, taken)
    if moved.state.decision is not test.state.decision:
        moved = _recorded(writer, moved, decided(moved, test.state, command.actor, command.request_id, Act.CORRECTED))
        tell(writer, NoticeKind.DECISION_CHANGED, moved, plan, test.state.decision)
    writer.save(moved)
    return Corrected(moved, plan, correction, is_replay=False)


@perform.register
def _(command: Dispose, writer: Writer, now: datetime) -> Outcome:
    test = _visible_test(writer, command.test, command.limits)
    plan = _plan(writer, test.plan)
    disposition = Disposition(command.verdict, command.reason, command.deviation_reason, command.actor, now)
    if test.disposition is not None and replace(disposition, at=test.disposition.at) == test.disposition:
        return Disposed(test, plan, is_new=False)
    _check_version(command.expected_versions, test)
    if test.status is Status.CLOSED:
        raise TestIsClosed(test.key)
    check_deviation(command.verdict, command.deviation_reason, test.state.decision)
    closed = replace(test, status=Status.CLOSED, disposition=disposition, version=test.version + 1, updated_at=now)
    closed = _recorded(writer, closed, disposed(closed, disposition, command.request_id))
    tell(writer, NoticeKind.DISPOSED, closed, plan, test.state.decision)
    writer.save(closed)
    return Disposed(closed, plan, is_new=True)


@perform.register
def _(command: CreateKey, writer: Writer, now: datetime) -> Outcome:
    check_new_key(command.name, command.expires_at, now, command.role, command.limits)
    taken = writer.key_named(command.name)
    if taken is not None:
        raise KeyNameTaken(command.name)
    secret = secrets.token_urlsafe(SECRET_BYTES)
    key = AccessKey(
        id=secrets.token_hex(8),
        name=command.name,
        role=command.role,
        digest=digest_of(secret),
        created_at=now,
        expires_at=command.expires_at,
        limits=command.limits,
    )
    writer.add_key(key)
    writer.record(key_created(key, command.actor, command.request_id))
    return IssuedKey(key, secret)


@perform.register
def _(command: RevokeKey, writer: Writer, now: datetime) -> Outcome:
    key = writer.key_named(command.name)
    if key is None:
        raise UnknownKey(command.name)
    writer.revoke_key(key.id, now)
    writer.record(key_revoked(key, now, command.actor, command.request_id))
    return replace(key, revoked_at=now)


for carry_out in (
    create_receiver,
    remove_receiver,
    send_trial,
    send_again,
    take_notices,
    settle_notice,
    drop_notices,
):
    perform.register(carry_out)


@perform.register
def _(command: Probe, writer: Writer, now: datetime) -> Outcome:  # noqa: ARG001 - a probe has no content and no time
    writer.touch()
    return Written()


def _recorded(writer: Writer, test: SequentialTest, entry: Entry) -> SequentialTest:
    """The test with this act at the end of its history."""
    placed = bound(test.history, entry)
    writer.record(placed)
    return replace(test, history=placed.head)


def _check_version(expected: frozenset[str] | None, test: SequentialTest | None) -> None:
    """Refuse a write whose caller insists on another version than the one there is, or on one where there is none."""
    if expected is None or (test is not None and not expected.isdisjoint({"*", str(test.version)})):
        return
    raise VersionMoved(expected, None if test is None else test.version)


def _visible_test(writer: Writer, key: str, limits: Limits) -> SequentialTest:
    """The test of this key, where it lies inside the limits; what does not is as if it were not there."""
    test = writer.test(key)
    if test is None or not limits.allow(test.subject, test.labels):
        raise UnknownTest(key)
    return test


def _plan(writer: Writer, name: str) -> Plan:
    plan = writer.plan(name)
    if plan is None:
        raise UnknownPlan(name)
    return plan


def _same_registration(test: SequentialTest, command: RegisterTest) -> bool:
    return (test.plan, test.subject, dict(test.labels)) == (command.plan, command.subject, dict(command.labels))


def _first_answer(command: PostObservations, writer: Writer) -> Submission | None:
    """The submission that this one repeats, if its idempotency key has been used before."""
    if command.idempotency_key is None:
        return None
    return _same_again(writer.submission_with_idempotency_key(command.test, command.idempotency_key), command)


def _first_correction(command: PostCorrection, writer: Writer) -> Correction | None:
    """The correction that this one repeats, if its idempotency key has been used before."""
    if command.idempotency_key is None:
        return None
    return _same_again(writer.correction_with_idempotency_key(command.test, command.idempotency_key), command)


def _same_again(first: S | None, command: PostObservations | PostCorrection) -> S | None:
    """What an idempotency key was used for first, if that was the same."""
    key = command.idempotency_key
    if first is None or key is None:
        return None
    if first.body_digest != command.body_digest:
        raise IdempotencyKeyReused(key, "came before with another body")
    if first.actor != command.actor:
        # Two stations that number their submissions alike must not silently swallow each other's results.
        raise IdempotencyKeyReused(key, "was used by another access key")
    return first


def _submission(command: PostObservations, test: SequentialTest, first_sequence: int) -> Submission:
    return Submission(
        test=command.test,
        first_sequence=first_sequence,
        last_sequence=test.state.sequence,
        body=command.body,
        body_digest=command.body_digest,
        received_at=test.updated_at,
        actor=command.actor,
        idempotency_key=command.idempotency_key,
        version=test.version,
        state=test.state,
        request_id=command.request_id,
    )
