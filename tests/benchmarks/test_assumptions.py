"""What the checks of a million observations cost, against reading them from their log."""

import itertools
import json
import statistics
import time
import tracemalloc
from typing import Any

import numpy as np
import pytest

from service.domain.assumptions import assumptions_of
from service.domain.checking import checked_content
from service.domain.observing import observe
from service.domain.procedure import procedure_of_document
from service.domain.state import State
from tests.domain.test_assumptions import KEPT, NOW, PLANS

MILLION, EACH, DIFFERENT, ROUNDS = 1_000_000, 1000, 50, 3


def a_million(kind: str) -> tuple[str, list[tuple[int, str]]]:
    """The log of a long test in submissions of at least a thousand, some of them over and over again."""
    family, draw = KEPT[kind]
    generator, pieces = np.random.default_rng(41), list[tuple[int, str]]()
    for _ in range(DIFFERENT):
        gathered: dict[str, list[Any]] = {}
        while sum(map(len, gathered.values())) < EACH:
            for form, some in draw(generator).items():
                gathered.setdefault(form, []).extend(some)
        pieces.append((sum(map(len, gathered.values())), json.dumps(gathered)))
    bodies, sequence = list[tuple[int, str]](), 0
    for count, body in itertools.cycle(pieces):
        bodies.append((sequence + 1, body))
        sequence += count
        if sequence >= MILLION:
            return family, bodies
    raise AssertionError("an endless cycle ended")


@pytest.mark.benchmark
@pytest.mark.parametrize("kind", ["uneven groups", "counts over exposures", "lives with suspensions", "measurements"])
def test_checking_a_million_observations_costs_little_more_than_reading_them(kind: str) -> None:
    """Median over rounds of the time of the whole answer to that of decoding the log alone, and the memory of it."""
    family, bodies = a_million(kind)
    procedure = procedure_of_document(checked_content({"family": family, **PLANS[family]}))
    last_first, last_body = bodies[-1]
    state = observe(procedure, State(sequence=last_first - 1), json.loads(last_body), NOW)
    assumptions_of(procedure, state, bodies[-1:])  # loads what is loaded once
    ratios, spent = [], []
    for _ in range(ROUNDS):
        start = time.perf_counter()
        for _, body in bodies:
            procedure.family.read(json.loads(body), procedure.known)
        reading = time.perf_counter() - start
        start = time.perf_counter()
        assumptions_of(procedure, state, bodies)
        spent.append(time.perf_counter() - start)
        ratios.append(spent[-1] / reading)
    tracemalloc.start()
    assumptions_of(procedure, state, bodies)
    peak = tracemalloc.get_traced_memory()[1] / 2**20
    tracemalloc.stop()
    print(f"\n{kind}: {statistics.median(ratios):.2f} times reading, {statistics.median(spent):.1f} s, {peak:.0f} MiB")
    assert statistics.median(ratios) <= 4.0
    assert peak <= 128.0
