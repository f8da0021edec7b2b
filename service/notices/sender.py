"""
The sender: one for each process, in its event loop.

It looks for notices that are due, takes them by a lease (a command on the road, like every write), sends them, and
records how that went. Word of a commit wakes it; besides, it looks once a second, for notices whose wait is over and
for those that a process left behind which was killed. Each receiver has a few places of its own, so that a slow one
holds up nobody else; of one test's notices to one receiver none is sent before those ahead of it are delivered or dead.
"""

import asyncio
import logging
import random
from collections import Counter
from collections.abc import Callable
from contextlib import suppress
from datetime import timedelta
from typing import cast

from service.domain.errors import DomainError, Unavailable
from service.domain.notices import Attempt, Delivery, NoticeState, Schedule
from service.ingest.commands import DropNotices, Dropped, Settled, SettleNotice, Taken, TakeNotices
from service.ingest.road import Clock, Road
from service.notices.courier import Courier
from service.storage.notices import Notices

logger = logging.getLogger(__name__)

# Deliveries to one receiver at once, from one process.
PLACES = 4
# Looks this often when nobody wakes it, and rests so long when the database is away.
LOOK_SECONDS = 1.0
# A lease holds for so many timeouts: an attempt takes one at the most, the rest is for recording it.
LEASE_TIMEOUTS = 3.0
# What is under way when the service stops has so long to end.
GRACE_SECONDS = 5.0
# Looks this often for old notices to drop.
DROP_SECONDS = 3600.0


class Sender:
    """Start it in a running event loop; stop it before the road."""

    def __init__(  # noqa: PLR0913 - it connects what others are
        self,
        road: Road,
        notices: Notices,
        courier: Courier,
        clock: Clock,
        schedule: Schedule,
        *,
        timeout_seconds: float,
        keep: timedelta,
        draw: Callable[[], float] = random.random,
    ) -> None:
        """
        Build it.

        Args:
            road: Takes its commands.
            notices: Tells what is due.
            courier: Makes one attempt.
            clock: Tells what time it is.
            schedule: When an attempt is followed by another.
            timeout_seconds: The longest that the courier takes.
            keep: How long a delivered notice is kept.
            draw: A number from 0 to 1, for each wait.
        """
        self._road, self._notices, self._courier, self._clock = road, notices, courier, clock
        self._schedule, self._keep, self._draw = schedule, keep, draw
        self._lease_seconds = LEASE_TIMEOUTS * timeout_seconds
        self._busy: Counter[str] = Counter()
        self._under_way: set[asyncio.Task[None]] = set()
        self._word = asyncio.Event()
        self._is_stopped = False
        self._dropped_at: float | None = None
        self._task: asyncio.Task[None] | None = None

    def start(self) -> None:
        """Begin to send."""
        self._task = asyncio.get_running_loop().create_task(self._run())

    def wake(self) -> None:
        """Look now."""
        self._word.set()

    async def stop(self) -> None:
        """Take nothing more, and let what is under way end; what takes too long is sent again by whoever comes next."""
        self._is_stopped = True
        self.wake()
        if self._task is not None:
            await self._task
        if self._under_way:
            _, late = await asyncio.wait(self._under_way, timeout=GRACE_SECONDS)
            for task in late:
                task.cancel()
            await asyncio.gather(*late, return_exceptions=True)

    async def _run(self) -> None:
        is_away = False
        while not self._is_stopped:
            self._word.clear()
            try:
                rest = await self._round()
                is_away = False
            except Exception as error:
                if not is_away:
                    logger.warning("notices wait until the database answers: %s", error, exc_info=not _is_known(error))
                rest, is_away = LOOK_SECONDS, True
            with suppress(TimeoutError):
                async with asyncio.timeout(rest):
                    await self._word.wait()

    async def _round(self) -> float:
        """Take what is due and has a place, begin to send it, and say after how long to look again."""
        now, rest = self._clock(), LOOK_SECONDS
        room: dict[str, int] = {}
        for receiver, at in await asyncio.to_thread(self._notices.due):
            if at > now:
                rest = min(rest, (at - now).total_seconds())
            elif self._busy[receiver] < PLACES:
                room[receiver] = PLACES - self._busy[receiver]
        if room:
            taken = cast("Taken", await self._road.submit(TakeNotices(room, self._lease_seconds)))
            for delivery in taken.deliveries:
                self._begin(delivery)
        await self._drop()
        return rest

    def _begin(self, delivery: Delivery) -> None:
        self._busy[delivery.receiver.id] += 1
        task = asyncio.get_running_loop().create_task(self._deliver(delivery))
        self._under_way.add(task)
        task.add_done_callback(lambda ended: self._end(ended, delivery.receiver.id))

    def _end(self, task: "asyncio.Task[None]", receiver: str) -> None:
        self._under_way.discard(task)
        self._busy[receiver] -= 1
        if not task.cancelled() and (error := task.exception()) is not None:
            logger.error("a notice was not settled", exc_info=error)
        self.wake()

    async def _deliver(self, delivery: Delivery) -> None:
        """Send one notice, and record how it went."""
        try:
            attempt = await self._courier.carry(delivery, self._clock())
        except Exception:
            logger.exception("a notice could not be sent")
            attempt = Attempt(is_delivered=False, outcome="not sent: the service failed, see its log")
        settled = await self._settle(SettleNotice(delivery.notice, attempt, self._schedule, self._draw()))
        notice, name = settled.notice, delivery.receiver.name
        if notice.state is NoticeState.DELIVERED:
            logger.info("notice %s delivered to receiver %s", notice.id, name)
        else:
            what = "is dead" if notice.state is NoticeState.DEAD else "waits"
            logger.warning("notice %s to receiver %s %s: %s", notice.id, name, what, notice.outcome)

    async def _settle(self, command: SettleNotice) -> Settled:
        """
        Record it, however often that takes before the lease runs out; after that it would be sent again anyway.

        Raises:
            TimeoutError: The lease has run out.
        """
        async with asyncio.timeout(self._lease_seconds):
            while True:
                try:
                    return cast("Settled", await self._road.submit(command))
                except Unavailable:
                    await asyncio.sleep(0.2)

    async def _drop(self) -> None:
        """Drop what was delivered long ago, now and then, some at a time."""
        now = asyncio.get_running_loop().time()
        if self._dropped_at is not None and now < self._dropped_at + DROP_SECONDS:
            return
        dropped = cast("Dropped", await self._road.submit(DropNotices(self._clock() - self._keep)))
        self._dropped_at = None if dropped.count else now


def _is_known(error: Exception) -> bool:
    """True where the text of an error says all."""
    return isinstance(error, DomainError)
