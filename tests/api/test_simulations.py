"""Simulations of one process: how many, how long kept, and how they end."""

import asyncio
from collections.abc import Callable, Coroutine
from typing import Any

import pytest

from service.domain.checking import checked_content
from service.domain.errors import TooManyQuestions, UnknownSimulation
from service.domain.simulating import question_of
from service.web.parts import Computers
from service.web.simulations import MOST_UNFINISHED, Simulation, Simulations, Status

PLAN = checked_content(
    {"family": "normal", "statistic": "invariant", "h0": 0.0, "h1": 0.8, "alpha": 0.05, "beta": 0.10}
)
# Some ten seconds of courses.
LONG = checked_content(
    {"family": "normal", "statistic": "invariant", "h0": 0.0, "h1": 0.07, "alpha": 0.01, "beta": 0.01}
)


class Clock:
    """Seconds that a test sets."""

    def __init__(self) -> None:
        self.seconds = 0.0

    def __call__(self) -> float:
        return self.seconds


def run(work: Callable[[Simulations, Clock], Coroutine[Any, Any, None]]) -> None:
    async def with_simulations() -> None:
        computers, clock = Computers(2, 8), Clock()
        simulations = Simulations(computers, clock)
        try:
            await work(simulations, clock)
        finally:
            simulations.stop()
            computers.stop()

    asyncio.run(with_simulations())


async def until(holds: Callable[[], bool]) -> None:
    async with asyncio.timeout(20.0):
        while not holds():  # noqa: ASYNC110 - what is waited for happens in another thread
            await asyncio.sleep(0.01)


async def done(simulation: Simulation) -> None:
    await until(lambda: not simulation.is_unfinished)
    assert simulation.status is Status.DONE


def test_the_same_question_is_one_simulation_and_another_seed_another() -> None:
    async def work(simulations: Simulations, _: Clock) -> None:
        first = simulations.asked(question_of(PLAN, [0.0], 1))
        assert simulations.asked(question_of(PLAN, [0.0], None)) is first
        other = simulations.asked(question_of(PLAN, [0.0], 2))
        assert other is not first
        await done(first)
        await done(other)
        assert first.promise is not None
        assert other.promise is not None
        assert first.promise.alpha != other.promise.alpha

    run(work)


def test_what_is_forgotten_is_found_again_to_the_last_digit() -> None:
    async def work(simulations: Simulations, clock: Clock) -> None:
        first = simulations.asked(question_of(PLAN, [0.0], 1))
        await done(first)
        clock.seconds = 3599.0
        assert simulations.known(first.id) is first
        clock.seconds = 3601.0
        with pytest.raises(UnknownSimulation):
            simulations.known(first.id)
        again = simulations.asked(first.question)
        await done(again)
        assert (again.id, again.promise) == (first.id, first.promise)

    run(work)


def test_one_runs_at_a_time_and_only_so_many_wait() -> None:
    async def work(simulations: Simulations, _: Clock) -> None:
        begun = [simulations.asked(question_of(LONG, [0.0], seed)) for seed in range(MOST_UNFINISHED)]
        with pytest.raises(TooManyQuestions):
            simulations.asked(question_of(PLAN, [0.0], 99))
        assert simulations.asked(begun[3].question) is begun[3]
        await until(lambda: begun[0].progress is not None)
        assert [simulation.status for simulation in begun] == [Status.RUNNING] + [Status.WAITING] * 7
        for simulation in begun:
            assert simulations.end(simulation.id).status is Status.ENDED
        quick = simulations.asked(question_of(PLAN, [0.0], 99))
        await done(quick)
        assert all(simulation.promise is None for simulation in begun)

    run(work)
