"""What drawing a test of a million observations costs, the first time and when some more have come."""

import json
import statistics
import time
from pathlib import Path

import numpy as np
import pytest
from sqlalchemy import Engine, text

from service.domain.access import Role
from service.domain.checking import checked_content
from service.domain.gathering import gathered
from service.domain.path import path_of
from service.domain.procedure import procedure_of
from service.domain.sequential_test import Subject, SubjectKind
from service.ingest.commands import CreateKey, CreatePlan, PostObservations, RegisterTest
from service.ingest.road import perform_now
from service.storage.engine import WRITES, create_engine_for
from service.storage.migrate import upgrade
from service.storage.reader import Reader
from service.web.walks import Walks

MILLION, ROUNDS, POINTS = 1_000_000, 7, 1600
# So careful that a million observations between the hypotheses leave it undecided.
PLAN = {"family": "bernoulli", "h0": 0.01, "h1": 0.011, "alpha": 1e-9, "beta": 1e-9}

pytestmark = pytest.mark.benchmark


def seconds(begin: float) -> float:
    return time.perf_counter() - begin


def post(engine: Engine, values: list[int]) -> None:
    body = json.dumps({"values": values})
    perform_now(engine, PostObservations("long", body, json.loads(body), "d", "me", None))


def long_test(folder: Path, each: int) -> Engine:
    """
    A test of a million observations, so many in each submission, on a SQLite file.

    All but the first and the last submission are written by one statement, with the row of the first: what is timed
    reads nothing else of them than what was posted.
    """
    engine = create_engine_for(f"sqlite:///{folder / f'{each}.sqlite3'}")
    upgrade(engine)
    perform_now(engine, CreateKey("me", Role.ENGINEER))
    perform_now(engine, CreatePlan("careful", checked_content(PLAN), "me"))
    perform_now(engine, RegisterTest("long", "careful", Subject(SubjectKind.LOT, "long"), {}, "me"))
    drawn = np.random.default_rng(1).random((MILLION // each, each)) < 0.0105
    values = [row.astype(int).tolist() for row in drawn]
    post(engine, values[0])
    rows = [
        {"first": 1 + i * each, "last": (i + 1) * each, "body": json.dumps({"values": some})}
        for i, some in enumerate(values[:-1])
        if i
    ]
    with engine.connect().execution_options(**{WRITES: True}) as connection, connection.begin():
        names = [str(row[1]) for row in connection.execute(text("PRAGMA table_info(submissions)"))]
        own = {"first_sequence": ":first", "last_sequence": ":last", "body": ":body", "idempotency_key": "NULL"}
        chosen = ", ".join(own.get(name, name) for name in names)
        copied = f"INSERT INTO submissions ({', '.join(names)}) SELECT {chosen} FROM submissions"
        connection.execute(text(f"{copied} WHERE test = 'long' AND first_sequence = 1"), rows)
        connection.execute(
            text("UPDATE tests SET sequence = :n, sample_number = :n, total = :total"),
            {"n": MILLION - each, "total": sum(map(sum, values[:-1]))},
        )
    post(engine, values[-1])
    return engine


@pytest.mark.parametrize("each", [1000, 100, 1])
def test_drawing_a_million_observations_again_costs_what_is_new(tmp_path: Path, each: int) -> None:
    engine = long_test(tmp_path, each)
    reader, walks = Reader(engine), Walks()
    first, again, decoding = [], [], []
    plan = reader.plan("careful")
    assert plan is not None
    for _ in range(ROUNDS if each > 1 else 3):
        test = reader.test("long")
        assert test is not None
        begin = time.perf_counter()
        for _, body in reader.log.bodies(test, 0, test.state.sequence):
            json.loads(body)
        decoding.append(seconds(begin))
        begin = time.perf_counter()
        fresh = Walks().path_of(reader, test, plan, POINTS)
        first.append(seconds(begin))
        walks.path_of(reader, test, plan, POINTS)
        post(engine, [0] * 10)
        test = reader.test("long")
        assert test is not None
        begin = time.perf_counter()
        path = walks.path_of(reader, test, plan, POINTS)
        again.append(seconds(begin))
        assert path.sequence[-1] == fresh.sequence[-1] + 10 == test.state.sequence
    assert test is not None
    log = gathered(reader.log.bodies(test, 0, test.state.sequence))
    whole = path_of(procedure_of(plan), log, POINTS)
    assert whole.log_likelihood_ratio.tolist() == path.log_likelihood_ratio.tolist()
    middle = statistics.median
    log_alone = 1000 * middle(decoding)
    print(f"\n{each} in each submission: {1000 * middle(first):.0f} ms, decoding the log alone {log_alone:.0f} ms")
    print(f"with ten observations more {1000 * middle(again):.1f} ms")
    assert middle(again) < middle(first) / 5.0
    engine.dispose()
