"""
Writes of receivers and of the outbox, inside the transaction of a `Writer`.

A notice is taken by giving it a lease: it is not due again before the lease runs out, so that of several processes one
sends it, and another where that one was killed. Whoever says how an attempt ended must hold the lease.
"""

from collections.abc import Iterable
from dataclasses import replace
from datetime import datetime
from typing import Any

from sqlalchemy import Connection, Delete, RowMapping, Select, Update, bindparam, delete, func, insert, select, update

from service.domain.notices import Notice, NoticeState, ids_before
from service.domain.receivers import Receiver
from service.storage import rows, tables
from service.storage.notices import next_in_line

# Rows that are dropped in one transaction, which others wait for.
MOST_DROPPED = 1000

_notice, _receiver = tables.notices.c, tables.receivers.c

_PRESENT = select(tables.receivers).where(_receiver.removed_at.is_(None)).order_by(_receiver.created_at, _receiver.id)
_NAMED = (
    select(tables.receivers)
    .where(_receiver.name == bindparam("name"), _receiver.removed_at.is_(None))
    .with_for_update()
)
_COUNT = select(func.count().label("n")).select_from(tables.receivers).where(_receiver.removed_at.is_(None))
# What another process is just taking is passed over.
_DUE = (
    select(tables.notices)
    .where(_notice.receiver == bindparam("of"), _notice.due_at <= bindparam("now"), next_in_line())
    .order_by(_notice.due_at, _notice.id)
    .limit(bindparam("room"))
    .with_for_update(skip_locked=True)
)
_NOTICE = select(tables.notices).where(_notice.id == bindparam("which")).with_for_update()


class Outbox:
    """Reads that lock and writes, on the connection of a transaction."""

    def __init__(self, connection: Connection) -> None:
        self._connection = connection
        self._present: list[Receiver] | None = None
        self._added: list[Notice] = []
        self.has_news = False

    def receivers(self) -> list[Receiver]:
        """Those that are not removed; read once in a transaction."""
        if self._present is None:
            found = self._connection.execute(_PRESENT).mappings()
            self._present = [rows.receiver_of(row) for row in found]
        return self._present

    def receiver_count(self) -> int:
        """How many are not removed."""
        return int(self._connection.execute(_COUNT).scalar_one())

    def receiver_named(self, name: str) -> Receiver | None:
        """The receiver of this name that is not removed, locked until the transaction ends."""
        row = self._first(_NAMED, name=name)
        return None if row is None else rows.receiver_of(row)

    def add_receiver(self, receiver: Receiver) -> None:
        """A new receiver."""
        self._connection.execute(insert(tables.receivers), rows.row_of_receiver(receiver))
        self._present = None

    def remove_receiver(self, receiver: Receiver, at: datetime) -> Receiver:
        """End a receiver: its secret and its notices are forgotten."""
        self.flush()
        self._connection.execute(delete(tables.notices).where(_notice.receiver == receiver.id))
        ended = update(tables.receivers).where(_receiver.id == receiver.id).values(removed_at=at, secret=None)
        self._connection.execute(ended)
        self._present = None
        return replace(receiver, removed_at=at, secret=None)

    def add(self, notices: Iterable[Notice]) -> None:
        """New notices."""
        self._added += notices
        self.has_news = self.has_news or bool(self._added)

    def take(self, receiver: str, room: int, now: datetime, until: datetime, lease: str) -> list[Notice]:
        """Lease what is due for a receiver, at most `room` notices, so that nobody else sends them meanwhile."""
        found = self._connection.execute(_DUE, {"of": receiver, "room": room, "now": now}).mappings()
        due = [rows.notice_of(row) for row in found]
        taken = [replace(each, due_at=until, attempts=each.attempts + 1, lease=lease) for each in due]
        for notice in taken:
            self._change(notice)
        return taken

    def settle(self, notice: Notice, lease: str) -> bool:
        """The notice after an attempt; false where the lease is no longer the one that it was taken with."""
        return self._change(notice, _notice.lease == lease) == 1

    def notice(self, notice_id: str) -> Notice | None:
        """The notice of this id, locked until the transaction ends."""
        self.flush()
        row = self._first(_NOTICE, which=notice_id)
        return None if row is None else rows.notice_of(row)

    def send_again(self, notice: Notice) -> None:
        """A notice that waits once more."""
        self._change(notice)
        self.has_news = True

    def drop_delivered(self, before: datetime) -> int:
        """Drop some of the delivered notices that were made before a time, and what is left of removed receivers."""
        removed = select(_receiver.id).where(_receiver.removed_at.is_not(None))
        old = select(_notice.id).where(_notice.state == NoticeState.DELIVERED.value, _notice.id < ids_before(before))
        left = select(_notice.id).where(_notice.receiver.in_(removed))
        count = 0
        for found in (old, left):
            some = found.limit(MOST_DROPPED).scalar_subquery()
            count += self._count(delete(tables.notices).where(_notice.id.in_(some)))
        return count

    def flush(self) -> None:
        """Write what was added."""
        if self._added:
            self._connection.execute(insert(tables.notices), [rows.row_of_notice(notice) for notice in self._added])
            self._added = []

    def _change(self, notice: Notice, *conditions: Any) -> int:  # noqa: ANN401 - of SQL
        values = {
            "state": notice.state.value,
            "due_at": notice.due_at,
            "attempts": notice.attempts,
            "lease": notice.lease,
            "outcome": notice.outcome,
        }
        return self._count(update(tables.notices).where(_notice.id == notice.id, *conditions).values(values))

    def _count(self, change: Update | Delete) -> int:
        return self._connection.execute(change).rowcount

    def _first(self, found: Select[Any], **parameters: str) -> RowMapping | None:
        return self._connection.execute(found, parameters).mappings().first()
