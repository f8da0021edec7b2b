"""
Receivers and their notices, inside a transaction that the caller opened.

What a test tells is written in the transaction that decides it, so that there is no decision without its notices and no
notice of what was never decided. Where no receiver is registered, that costs one look at an empty table.
"""

import secrets
from datetime import datetime, timedelta

from service.domain.access import digest_of
from service.domain.errors import (
    NoticeWaiting,
    ReceiverNameTaken,
    TooManyReceivers,
    UnknownNotice,
    UnknownReceiver,
)
from service.domain.history import receiver_created, receiver_removed
from service.domain.notices import (
    Delivery,
    Notice,
    NoticeKind,
    NoticeState,
    after_attempt,
    again,
    message_of,
    notice_id,
    trial_message,
)
from service.domain.plan import Plan
from service.domain.receivers import MOST_RECEIVERS, Receiver, check_new_receiver, secret_of
from service.domain.sequential_test import SequentialTest
from service.domain.state import Decision
from service.ingest.commands import (
    Addressed,
    CreateReceiver,
    DropNotices,
    Dropped,
    IssuedReceiver,
    Outcome,
    RemoveReceiver,
    SendAgain,
    SendTrial,
    Settled,
    SettleNotice,
    Taken,
    TakeNotices,
)
from service.storage.writer import Writer

SECRET_BYTES = 32


def tell(writer: Writer, kind: NoticeKind, test: SequentialTest, plan: Plan, before: Decision) -> None:
    """Put what happened to a test into the outbox, for each receiver that is told of it."""
    told = [each for each in writer.outbox.receivers() if each.is_told_of(test.subject, test.labels)]
    if told:
        body = message_of(kind, test, plan, before)
        at = test.updated_at
        writer.outbox.add(_notice(each, kind, body, at, test) for each in told)


def create_receiver(command: CreateReceiver, writer: Writer, now: datetime) -> Outcome:
    """Register a receiver."""
    check_new_receiver(command.name, command.address, command.limits, command.allowed)
    if writer.outbox.receiver_named(command.name) is not None:
        raise ReceiverNameTaken(command.name)
    if writer.outbox.receiver_count() >= MOST_RECEIVERS:
        raise TooManyReceivers(MOST_RECEIVERS)
    secret = secret_of(secrets.token_bytes(SECRET_BYTES))
    receiver = Receiver(
        id=secrets.token_hex(8),
        name=command.name,
        address=command.address,
        secret=secret,
        fingerprint=digest_of(secret),
        created_at=now,
        created_by=command.actor,
        limits=command.limits,
    )
    writer.outbox.add_receiver(receiver)
    writer.record(receiver_created(receiver, command.request_id))
    return IssuedReceiver(receiver)


def remove_receiver(command: RemoveReceiver, writer: Writer, now: datetime) -> Outcome:
    """End a receiver."""
    receiver = _receiver(writer, command.name)
    removed = writer.outbox.remove_receiver(receiver, now)
    writer.record(receiver_removed(receiver, now, command.actor, command.request_id))
    return removed


def send_trial(command: SendTrial, writer: Writer, now: datetime) -> Outcome:
    """Put a trial notice into the outbox."""
    receiver = _receiver(writer, command.receiver)
    notice = _notice(receiver, NoticeKind.TRIAL, trial_message(receiver, now), now)
    writer.outbox.add([notice])
    return Addressed(notice, receiver.name)


def send_again(command: SendAgain, writer: Writer, now: datetime) -> Outcome:
    """Let a notice wait once more."""
    notice = writer.outbox.notice(command.notice)
    receiver = None if notice is None else _present(writer, notice.receiver)
    if notice is None or receiver is None:
        raise UnknownNotice(command.notice)
    if notice.state is NoticeState.WAITING:
        raise NoticeWaiting(command.notice)
    waiting = again(notice, now)
    writer.outbox.send_again(waiting)
    return Addressed(waiting, receiver.name)


def take_notices(command: TakeNotices, writer: Writer, now: datetime) -> Outcome:
    """Lease what is due to receivers that are still there."""
    until, lease = now + timedelta(seconds=command.lease_seconds), secrets.token_hex(8)
    deliveries: list[Delivery] = []
    for receiver in writer.outbox.receivers():
        room = command.room.get(receiver.id, 0)
        if room:
            taken = writer.outbox.take(receiver.id, room, now, until, lease)
            deliveries += (Delivery(notice, receiver) for notice in taken)
    return Taken(tuple(deliveries))


def settle_notice(command: SettleNotice, writer: Writer, now: datetime) -> Outcome:
    """Record how an attempt ended, for whoever still has the lease."""
    notice = after_attempt(command.notice, command.attempt, command.schedule, command.jitter, now)
    lease = command.notice.lease
    return Settled(notice, is_recorded=lease is not None and writer.outbox.settle(notice, lease))


def drop_notices(command: DropNotices, writer: Writer, now: datetime) -> Outcome:  # noqa: ARG001 - the time is asked for
    """Drop what was delivered long ago."""
    return Dropped(writer.outbox.drop_delivered(command.before))


def _receiver(writer: Writer, name: str) -> Receiver:
    receiver = writer.outbox.receiver_named(name)
    if receiver is None:
        raise UnknownReceiver(name)
    return receiver


def _present(writer: Writer, receiver_id: str) -> Receiver | None:
    return next((each for each in writer.outbox.receivers() if each.id == receiver_id), None)


def _notice(
    receiver: Receiver, kind: NoticeKind, body: str, at: datetime, test: SequentialTest | None = None
) -> Notice:
    return Notice(
        id=notice_id(at, secrets.token_hex(8)),
        receiver=receiver.id,
        test=None if test is None else test.key,
        version=0 if test is None else test.version,
        kind=kind,
        body=body,
        created_at=at,
        due_at=at,
    )
