"""
The road itself: callers wait in a queue, one thread decides and commits what waits as one group.

Nobody is answered before the commit. A refusal disturbs no other command of its group; any other error rolls the
group back and its members are run one by one, so that only the one at fault fails; where another process was in the
way they are tried again. Tests are locked in the order of their keys. Where no transaction can be begun,
all of them fail at once: each would only wait for the same lock again. A commit that the database does not confirm is
never tried again, for it may have happened: its callers are told so. Stopping finishes what was accepted and takes
nothing new.
"""

import asyncio
import logging
import queue
import threading
import time
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime

from sqlalchemy import Engine
from sqlalchemy.exc import DataError, DBAPIError, SQLAlchemyError, StatementError

from service.domain.errors import (
    DomainError,
    OutcomeUnknown,
    QueueFull,
    ShuttingDown,
    StorageFailed,
    SubmissionInProgress,
)
from service.ingest.commands import Command, Dispose, Outcome, PostCorrection, PostObservations
from service.ingest.measures import Measures, Unmeasured
from service.ingest.performing import perform
from service.storage.engine import is_passing
from service.storage.writer import writing

logger = logging.getLogger(__name__)

Clock = Callable[[], datetime]


def utc_now() -> datetime:
    """The wall clock, in UTC."""
    return datetime.now(UTC)


def perform_now(engine: Engine, command: Command, clock: Clock = utc_now) -> Outcome:
    """
    Carry out one command in a transaction of its own, for callers without a running road.

    Raises:
        DomainError: The command is refused; nothing was written.
    """
    with writing(engine) as writer:
        return perform(command, writer, clock())


@dataclass(frozen=True)
class _Waiting:
    """A command and the caller who waits for it."""

    command: Command
    answer: asyncio.Future[Outcome] = field(compare=False)


# Bytes of bodies that are committed together; one body may be larger.
GROUP_BYTES = 16 * 1024 * 1024
# Times that a command is tried while other processes are in its way.
MOST_TRIES = 5


class _NotBegun(Exception):
    """No transaction could be begun: the database is busy or away."""


class _CommitFailed(Exception):
    """Everything was performed, but the commit was not confirmed."""


Answer = tuple[_Waiting, Outcome | BaseException]


class Road:
    """A bounded queue, one writer thread, one commit for a group. Start it in a running event loop; then submit."""

    def __init__(  # noqa: PLR0913 - limits are numbers
        self,
        engine: Engine,
        clock: Clock,
        queue_limit: int,
        group_limit: int,
        queue_bytes: int = 2**28,
        measures: Measures | None = None,
        on_notices: Callable[[], object] = lambda: None,
    ) -> None:
        """
        Build it.

        Args:
            engine: The database.
            clock: Tells when a command is performed.
            queue_limit, queue_bytes: Commands that may wait, and the bytes of their bodies.
            group_limit: Commands committed together.
            measures: Told of what happens.
            on_notices: Called in the writer thread once notices are committed that wait to be sent.
        """
        self._engine = engine
        self._on_notices = on_notices
        self._clock = clock
        self._measures = measures or Unmeasured()
        self._group_limit = group_limit
        self._queue_bytes, self._waiting_bytes = queue_bytes, 0
        self._waiting: queue.Queue[_Waiting | None] = queue.Queue(queue_limit)
        self._in_progress: set[tuple[str, str]] = set()
        self._thread = threading.Thread(target=self._run, name="writer", daemon=True)
        self._is_open = self._has_failed = False
        self._loop: asyncio.AbstractEventLoop | None = None

    @property
    def has_failed(self) -> bool:
        """True since a write failed at the database, until one goes through again."""
        return self._has_failed

    def start(self) -> None:
        """Begin to take commands; the callers' event loop must be running."""
        self._loop = asyncio.get_running_loop()
        self._is_open = True
        self._thread.start()

    async def stop(self) -> None:
        """Refuse what comes from now on, and finish what was accepted."""
        self._is_open = False
        await asyncio.to_thread(self._waiting.put, None)
        await asyncio.to_thread(self._thread.join)

    async def submit(self, command: Command) -> Outcome:
        """
        Have a command carried out; the outcome is returned once it is committed.

        Raises:
            DomainError: The command is refused, or cannot be taken now; nothing of it is stored.
        """
        if not self._is_open:
            raise ShuttingDown
        mark = _mark(command)
        if mark in self._in_progress:
            raise SubmissionInProgress(mark[1])
        weight = _weight(command)
        if self._waiting_bytes and self._waiting_bytes + weight > self._queue_bytes:
            raise QueueFull
        if mark is not None:
            self._in_progress.add(mark)
        self._waiting_bytes += weight
        self._measures.queued()
        try:
            answer: asyncio.Future[Outcome] = asyncio.get_running_loop().create_future()
            self._waiting.put_nowait(_Waiting(command, answer))
            return await answer
        except queue.Full:
            raise QueueFull from None
        finally:
            self._measures.answered()
            self._waiting_bytes -= weight
            if mark is not None:
                self._in_progress.discard(mark)

    def _run(self) -> None:
        """The writer thread: one group after another until told to stop."""
        is_running = True
        while is_running:
            group, is_running = self._next_group()
            if group:
                self._carry_out(group)

    def _next_group(self) -> tuple[list[_Waiting], bool]:
        """Wait for one command, then take what else waits up to the limits; false once the end was called."""
        item = self._waiting.get()
        group: list[_Waiting] = []
        weight = 0
        while item is not None:
            group.append(item)
            weight += _weight(item.command)
            if len(group) == self._group_limit or weight >= GROUP_BYTES:
                return group, True
            try:
                item = self._waiting.get_nowait()
            except queue.Empty:
                return group, True
        return group, False

    def _carry_out(self, group: Sequence[_Waiting], tries: int = MOST_TRIES) -> bool:
        """
        Run a group in one transaction, or one by one where a member fails it, and answer the callers.

        False where no transaction could be begun, so that there is no use in trying more now.
        """
        begin = time.perf_counter()
        try:
            answers = self._in_one_transaction(group)
            self._measures.grouped([outcome for _, outcome in answers], time.perf_counter() - begin)
        except _NotBegun:
            self._measures.failed()
            logger.exception("no transaction could be begun")
            self._answer([(waiting, StorageFailed()) for waiting in group])
            return False
        except _CommitFailed:
            self._measures.failed()
            logger.exception("a commit was not confirmed")
            answers = [(waiting, OutcomeUnknown()) for waiting in group]
        except Exception as error:
            self._measures.failed()
            if len(group) > 1:
                return self._carry_out_one_by_one(group)
            if is_passing(error) and tries > 1:
                return self._carry_out(group, tries - 1)
            logger.exception("a command failed")
            answers = [(group[0], _failure(error))]
        self._answer(answers)
        return True

    def _carry_out_one_by_one(self, group: Sequence[_Waiting]) -> bool:
        """Each member in a transaction of its own, answered when it is done; the rest fails once none can be begun."""
        for position, waiting in enumerate(group, start=1):
            if not self._carry_out([waiting]):
                self._answer([(later, StorageFailed()) for later in group[position:]])
                return False
        return True

    def _answer(self, answers: Sequence[Answer]) -> None:
        assert self._loop is not None
        self._has_failed = any(isinstance(outcome, StorageFailed | OutcomeUnknown) for _, outcome in answers)
        self._loop.call_soon_threadsafe(_tell, answers)

    def _in_one_transaction(self, group: Sequence[_Waiting]) -> list[Answer]:
        answers: list[Answer] = []
        is_begun = is_performed = has_news = False
        try:
            with writing(self._engine) as writer:
                is_begun = True
                writer.expect(*_reads(waiting.command for waiting in group))
                for waiting in group:
                    try:
                        answers.append((waiting, perform(waiting.command, writer, self._clock())))
                    except DomainError as refusal:
                        answers.append((waiting, refusal))
                writer.flush()
                is_performed, has_news = True, writer.outbox.has_news
        except SQLAlchemyError as error:
            if not is_begun:
                raise _NotBegun from error
            if is_performed:
                raise _CommitFailed from error
            raise
        if has_news:
            self._on_notices()
        return answers


def _failure(error: Exception) -> Exception:
    """
    What the caller is told of an error.

    The database may take the write at another time; a value that it or its driver can never take is our own mistake.
    """
    is_passing = isinstance(error, SQLAlchemyError) and not isinstance(error, DataError)
    is_of_the_value = isinstance(error, StatementError) and not isinstance(error, DBAPIError)
    return StorageFailed() if is_passing and not is_of_the_value else error


def _weight(command: Command) -> int:
    """The bytes that a waiting command holds, about."""
    return len(command.body) if isinstance(command, PostObservations) else 0


def _reads(commands: Iterable[Command]) -> tuple[list[str], list[tuple[str, str]]]:
    """The tests and idempotency keys that a group will ask for."""
    of_tests = [command for command in commands if isinstance(command, PostObservations | PostCorrection | Dispose)]
    posts = [command for command in of_tests if isinstance(command, PostObservations)]
    keys = [(post.test, post.idempotency_key) for post in posts if post.idempotency_key is not None]
    return [command.test for command in of_tests], keys


def _mark(command: Command) -> tuple[str, str] | None:
    """What no two commands in progress may share."""
    if isinstance(command, PostObservations | PostCorrection) and command.idempotency_key is not None:
        return command.test, command.idempotency_key
    return None


def _tell(answers: Sequence[Answer]) -> None:
    """Answer the callers, in the event loop; one that left is no error."""
    for waiting, outcome in answers:
        if waiting.answer.done():
            continue
        if isinstance(outcome, BaseException):
            waiting.answer.set_exception(outcome)
        else:
            waiting.answer.set_result(outcome)
