"""Walks that are kept: drawn again they read what is new alone, and are the same as if nothing were kept."""

import json
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from service.domain.checking import checked_content
from service.domain.path import Path as Walk
from service.domain.plan import Plan
from service.domain.sequential_test import SequentialTest, Subject, SubjectKind
from service.ingest.commands import CreatePlan, PostCorrection, PostObservations, RegisterTest
from service.ingest.road import perform_now
from service.storage.engine import create_engine_for
from service.storage.logs import Log
from service.storage.migrate import upgrade
from service.storage.reader import Reader
from service.web import walks as keeping
from service.web.walks import SHORT, Walks

PLAN = {"family": "normal", "h0": 10.0, "h1": 10.1, "alpha": 1e-12, "beta": 1e-12, "known": {"sigma": 1.0}}
POINTS = 300


class Noting(Log):
    """A log that notes after which observation it is read."""

    def __init__(self, log: Log) -> None:
        super().__init__(log._ask)  # noqa: SLF001 - reads as it does
        self.after: list[int] = []

    def bodies(self, test: SequentialTest, after: int, through: int) -> Iterator[tuple[int, str]]:
        self.after.append(after)
        return super().bodies(test, after, through)


class House:
    """A database with tests of one plan, and what its reader was asked."""

    def __init__(self, folder: Path) -> None:
        self.engine = create_engine_for(f"sqlite:///{folder / 'walks.sqlite3'}")
        upgrade(self.engine)
        perform_now(self.engine, CreatePlan("wide", checked_content(PLAN), "me"))
        self.reader = Reader(self.engine)
        self.log = self.reader.log = Noting(self.reader.log)
        self.source = np.random.default_rng(8)

    @property
    def plan(self) -> Plan:
        plan = self.reader.plan("wide")
        assert plan is not None
        return plan

    def begin(self, key: str) -> None:
        perform_now(self.engine, RegisterTest(key, "wide", Subject(SubjectKind.LOT, key), {}, "me"))

    def post(self, key: str, count: int) -> None:
        body = json.dumps({"values": self.source.normal(10.05, 1.0, count).tolist()})
        perform_now(self.engine, PostObservations(key, body, json.loads(body), "d", "me", None))

    def test(self, key: str) -> SequentialTest:
        test = self.reader.test(key)
        assert test is not None
        return test

    def drawn(self, walks: Walks, test: SequentialTest) -> list[list[float]]:
        return columns(walks.path_of(self.reader, test, self.plan, POINTS))


def columns(walk: Walk) -> list[list[float]]:
    return [column.tolist() for column in vars(walk).values()]


@pytest.fixture
def house(tmp_path: Path) -> Iterator[House]:
    built = House(tmp_path)
    yield built
    built.engine.dispose()


def test_a_long_walk_goes_on_from_where_it_ended(house: House) -> None:
    walks = Walks()
    house.begin("long")
    house.post("long", SHORT + 500)
    house.drawn(walks, house.test("long"))
    before = house.test("long")
    for count in (1, 70, 3000):
        house.post("long", count)
        house.log.after.clear()
        seen = house.test("long").state.sequence - count
        kept = house.drawn(walks, house.test("long"))
        assert house.log.after == [seen]
        assert kept == house.drawn(Walks(), house.test("long"))
    house.log.after.clear()
    assert house.drawn(walks, house.test("long")) == kept
    assert house.log.after == []
    # Somebody who read the test before the others does not see what came since.
    assert house.drawn(walks, before) == house.drawn(Walks(), before)
    assert house.drawn(walks, house.test("long")) == kept


def test_a_correction_begins_another_walk(house: House) -> None:
    walks = Walks()
    house.begin("long")
    house.post("long", SHORT + 500)
    before = house.drawn(walks, house.test("long"))
    void = PostCorrection("long", 7, None, "bench was off", "d", "me", may_correct_decided=False)
    perform_now(house.engine, void)
    after = house.drawn(walks, house.test("long"))
    assert after != before
    assert after == house.drawn(Walks(), house.test("long"))


def test_short_walks_are_not_kept_and_the_oldest_go_first(house: House, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(keeping, "MOST_WALKS", 2)
    walks = Walks()
    for key in ("a", "b", "c"):
        house.begin(key)
        house.post(key, SHORT)
        house.drawn(walks, house.test(key))
    house.begin("short")
    house.post("short", SHORT - 1)
    for key, is_kept in (("c", True), ("b", True), ("short", False), ("short", False), ("a", False)):
        house.log.after.clear()
        house.drawn(walks, house.test(key))
        assert (house.log.after == []) == is_kept, key


def test_another_plan_has_another_walk(house: House) -> None:
    """Plans of one name never change; two databases in one process may still disagree."""
    walks = Walks()
    house.begin("long")
    house.post("long", SHORT)
    house.drawn(walks, house.test("long"))
    other = replace(house.plan, document=checked_content({**PLAN, "h1": 10.2}), fingerprint="other")
    found = columns(walks.path_of(house.reader, house.test("long"), other, POINTS))
    assert found == columns(Walks().path_of(house.reader, house.test("long"), other, POINTS))
    assert found != house.drawn(walks, house.test("long"))
