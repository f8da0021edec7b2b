"""
Simulations that take seconds: started by whoever asks first, looked at while they run, kept for a while when done.

They live in the memory of one process. A question has one name, and the same question gives the same figures by its
seed; so what is lost with a process, or unknown to another one, is found again by asking again.
"""

import asyncio
import hashlib
import json
import logging
import time
from collections.abc import Callable
from dataclasses import dataclass, field
from enum import StrEnum

from service.domain.characteristics import Promise
from service.domain.errors import DomainError, TooManyQuestions, UnknownSimulation
from service.domain.simulating import Progress, Question, simulated_promise
from service.web.parts import Computers

log = logging.getLogger(__name__)

# Simulations that wait or run, those that are kept when they have ended, and for how long.
MOST_UNFINISHED, MOST_KEPT, KEPT_SECONDS = 8, 100, 3600.0
# How long a simulation waits before it asks again for a thread.
PAUSE_SECONDS = 0.5


class Status(StrEnum):
    """How far a simulation is."""

    WAITING = "waiting"
    RUNNING = "running"
    DONE = "done"
    FAILED = "failed"
    ENDED = "ended"


class _Cancelled(Exception):
    """Ends a simulation that nobody wants any more."""


@dataclass
class Simulation:
    """
    One simulation; the event loop alone changes it, but for `progress`, which the computing thread replaces.

    Attributes:
        problem: Why it failed; None without a reason that the caller can be told.
    """

    id: str
    question: Question
    status: Status = Status.WAITING
    progress: Progress | None = None
    promise: Promise | None = None
    problem: DomainError | None = None
    ended_at: float = 0.0
    is_cancelled: bool = field(default=False, repr=False)

    @property
    def is_unfinished(self) -> bool:
        """Waiting or running."""
        return self.status in {Status.WAITING, Status.RUNNING}

    def report(self, progress: Progress) -> None:
        """Called by the computing thread after each batch; ends it when it was cancelled."""
        if self.is_cancelled:
            raise _Cancelled
        self.progress = progress


class Simulations:
    """The simulations of one process; one at a time runs, so that exact questions find a thread."""

    def __init__(self, computers: Computers, now: Callable[[], float] = time.monotonic) -> None:
        self._computers, self._now = computers, now
        self._all: dict[str, Simulation] = {}
        self._tasks: set[asyncio.Task[None]] = set()
        self._turn = asyncio.Semaphore(1)

    def asked(self, question: Question) -> Simulation:
        """
        The simulation that answers a question, begun now where there is none.

        Raises:
            TooManyQuestions: So many are unfinished that this one would wait too long.
        """
        self._forget()
        name = _name_of(question)
        known = self._all.get(name)
        # What failed for no reason of the question's is tried again.
        if known is not None and (known.status is not Status.FAILED or known.problem is not None):
            return known
        if sum(simulation.is_unfinished for simulation in self._all.values()) >= MOST_UNFINISHED:
            raise TooManyQuestions
        begun = self._all[name] = Simulation(name, question)
        task = asyncio.create_task(self._run(begun))
        self._tasks.add(task)
        task.add_done_callback(self._tasks.discard)
        return begun

    def found(self, question: Question) -> Simulation | None:
        """The simulation that answers a question, None where nobody has asked it."""
        self._forget()
        return self._all.get(_name_of(question))

    def known(self, name: str) -> Simulation:
        """
        A simulation of this process.

        Raises:
            UnknownSimulation: There is none of this name, any more or in this process.
        """
        self._forget()
        if name not in self._all:
            raise UnknownSimulation(name)
        return self._all[name]

    def end(self, name: str) -> Simulation:
        """
        Forget a simulation; if it runs, it ends after its batch.

        Raises:
            UnknownSimulation: As for `known`.
        """
        ended = self._all.pop(self.known(name).id)
        ended.is_cancelled = True
        if ended.is_unfinished:
            ended.status = Status.ENDED
        return ended

    def stop(self) -> None:
        """Have all of them end."""
        for simulation in self._all.values():
            simulation.is_cancelled = True
        for task in self._tasks:
            task.cancel()

    async def _run(self, simulation: Simulation) -> None:
        try:
            async with self._turn:
                simulation.promise = await self._computed(simulation)
            simulation.status = Status.DONE
        except _Cancelled:
            return
        except DomainError as error:
            simulation.status, simulation.problem = Status.FAILED, error
        except Exception:
            log.exception("simulation %s failed", simulation.id)
            simulation.status = Status.FAILED
        finally:
            simulation.ended_at = self._now()

    async def _computed(self, simulation: Simulation) -> Promise:
        def work() -> Promise:
            if simulation.is_cancelled:
                raise _Cancelled
            simulation.status = Status.RUNNING
            return simulated_promise(simulation.question, simulation.report)

        while True:
            try:
                return await self._computers.run(work)
            except TooManyQuestions:
                await asyncio.sleep(PAUSE_SECONDS)

    def _forget(self) -> None:
        """Drop what ended long ago, and the oldest where too much is kept."""
        ended = sorted((s for s in self._all.values() if not s.is_unfinished), key=lambda s: s.ended_at)
        surplus = len(ended) - MOST_KEPT
        for place, simulation in enumerate(ended):
            if place < surplus or simulation.ended_at < self._now() - KEPT_SECONDS:
                del self._all[simulation.id]


def _name_of(question: Question) -> str:
    """The same for the same question, in every process."""
    text = json.dumps([question.document, question.at, question.seed])
    return hashlib.sha256(text.encode()).hexdigest()[:32]
