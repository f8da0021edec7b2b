"""Reads of receivers and of the outbox. `outbox` writes them."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any, NamedTuple

from sqlalchemy import ColumnElement, RowMapping, Select, and_, func, select

from service.domain.notices import Notice, NoticeState
from service.domain.receivers import Receiver
from service.storage import rows, tables

_notice = tables.notices.c
_receiver = tables.receivers.c
_earlier = tables.notices.alias("earlier")


class Due(NamedTuple):
    """When the next notice to a receiver may be sent."""

    receiver: str
    at: datetime


@dataclass(frozen=True)
class OutboxFigures:
    """What stands in the outbox of the receivers that there are."""

    waiting: int
    dead: int
    oldest_waiting_at: datetime | None


def next_in_line(state: str = NoticeState.WAITING) -> ColumnElement[bool]:
    """True for a waiting notice before which no other waits for the same receiver about the same test."""
    ahead = select(_earlier.c.id).where(
        _earlier.c.receiver == _notice.receiver,
        _earlier.c.test == _notice.test,
        _earlier.c.state == state,
        _earlier.c.version < _notice.version,
    )
    return and_(_notice.state == state, ~ahead.exists())


_NEXT = (
    select(_notice.due_at)
    .where(_notice.receiver == _receiver.id, next_in_line())
    .order_by(_notice.due_at)
    .limit(1)
    .scalar_subquery()
)
_DUE = select(_receiver.id, _NEXT.label("due_at")).where(_receiver.removed_at.is_(None))

_COUNTS = (
    select(_notice.state, func.count().label("notices"), func.min(_notice.created_at).label("oldest"))
    .join(tables.receivers, _receiver.id == _notice.receiver)
    .where(_receiver.removed_at.is_(None), _notice.state.in_([NoticeState.WAITING.value, NoticeState.DEAD.value]))
    .group_by(_notice.state)
)


class Notices:
    """Typed answers about receivers and their notices."""

    def __init__(self, ask: Callable[[Select[Any]], Sequence[RowMapping]]) -> None:
        self._ask = ask

    def receivers(self) -> list[Receiver]:
        """Every receiver ever registered, oldest first."""
        found = select(tables.receivers).order_by(_receiver.created_at, _receiver.id)
        return [rows.receiver_of(row) for row in self._ask(found)]

    def receiver(self, name: str) -> Receiver | None:
        """The receiver of this name that is not removed."""
        found = select(tables.receivers).where(_receiver.name == name, _receiver.removed_at.is_(None))
        return next(iter([rows.receiver_of(row) for row in self._ask(found)]), None)

    def page(self, receiver: Receiver, state: NoticeState | None, after: str | None, limit: int) -> list[Notice]:
        """The notices of a receiver in the order in which they were made, those after `after`."""
        found = select(tables.notices).where(_notice.receiver == receiver.id).order_by(_notice.id).limit(limit)
        if state is not None:
            found = found.where(_notice.state == state.value)
        if after is not None:
            found = found.where(_notice.id > after)
        return [rows.notice_of(row) for row in self._ask(found)]

    def due(self) -> list[Due]:
        """For each receiver that a notice waits for, when the next one may be sent."""
        return [Due(row["id"], row["due_at"]) for row in self._ask(_DUE) if row["due_at"] is not None]

    def figures(self) -> OutboxFigures:
        """How many notices wait and how many are dead, and since when the oldest waits."""
        found = {row["state"]: row for row in self._ask(_COUNTS)}
        waiting, dead = found.get(NoticeState.WAITING), found.get(NoticeState.DEAD)
        return OutboxFigures(
            waiting=waiting["notices"] if waiting else 0,
            dead=dead["notices"] if dead else 0,
            oldest_waiting_at=waiting["oldest"] if waiting else None,
        )
