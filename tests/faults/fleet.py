"""Posting stations that keep their own books: what they posted, what was acknowledged, and what must be tried again."""

import json
import threading
from dataclasses import dataclass, field

import httpx
from sqlalchemy import text

from service.domain.observing import observe
from service.domain.procedure import procedure_of
from service.domain.state import State
from service.storage.engine import create_engine_for
from service.storage.reader import Reader

PLAN = {
    "name": "wide",
    "family": "normal",
    "h0": 0.0,
    "h1": 0.001,
    "alpha": 0.05,
    "beta": 0.05,
    "boundaries": "given",
    "thresholds": {"accept": -1e6, "reject": 1e6},
    "known": {"sigma": 1.0},
}
PATIENCE_SECONDS = 30.0


@dataclass
class Station:
    """One poster: a submission is tried with the same idempotency key until it is acknowledged."""

    number: int
    test: str
    posted: int = 0
    acknowledged: dict[str, tuple[int, int]] = field(default_factory=dict)
    refusals: set[int] = field(default_factory=set)
    retry_after: set[str | None] = field(default_factory=set)
    open_key: str | None = None

    def run(self, client: httpx.Client, stop: threading.Event) -> None:
        while not stop.is_set():
            if self.open_key is None:
                self.posted += 1
                self.open_key = f"s{self.number}-{self.posted}"
            if not self.post_once(client):
                stop.wait(0.02)

    def post_once(self, client: httpx.Client) -> bool:
        """Send what is open; true once it is acknowledged."""
        assert self.open_key is not None
        values = [self.number + 0.001 * self.posted, 0.5]
        try:
            answer = client.post(
                f"/v1/tests/{self.test}/observations",
                json={"values": values},
                headers={"Idempotency-Key": self.open_key},
                timeout=PATIENCE_SECONDS,
            )
        except httpx.TransportError:
            return False
        if answer.status_code != 201:
            self.refusals.add(answer.status_code)
            self.retry_after.add(answer.headers.get("Retry-After"))
            return False
        body = answer.json()
        self.acknowledged[self.open_key] = (body["first_sequence"], body["last_sequence"])
        self.open_key = None
        return True


class Fleet:
    """Stations on some tests of one service, which may go away and come back at the same address."""

    def __init__(self, tests: int, stations: int) -> None:
        self.tests = [f"lot-{i}" for i in range(tests)]
        self.stations = [Station(i, self.tests[i % tests]) for i in range(stations)]

    def register(self, client: httpx.Client) -> None:
        client.post("/v1/plans", json=PLAN).raise_for_status()
        for test in self.tests:
            subject = {"kind": "lot", "name": test}
            client.post("/v1/tests", json={"key": test, "plan": "wide", "subject": subject}).raise_for_status()

    def post_during(self, url: str, key: str, event: threading.Event) -> list[threading.Thread]:
        """Let all stations post until the event is set; join the threads that are returned."""
        threads = []
        for station in self.stations:
            client = httpx.Client(base_url=url, headers={"Authorization": f"Bearer {key}"})
            threads.append(threading.Thread(target=_run_and_close, args=(station, client, event)))
        for thread in threads:
            thread.start()
        return threads

    def finish(self, url: str, key: str) -> None:
        """Try what is still open until all is acknowledged."""
        with httpx.Client(base_url=url, headers={"Authorization": f"Bearer {key}"}) as client:
            for station in self.stations:
                while station.open_key is not None:
                    station.post_once(client)

    def check(self, database_url: str) -> int:
        """Hold the log against the stations' books; the number of submissions in it."""
        engine = create_engine_for(database_url)
        reader, counted = Reader(engine), 0
        for key in self.tests:
            test = reader.test(key)
            assert test is not None
            plan = reader.plan(test.plan)
            assert plan is not None
            books = {
                name: where
                for station in self.stations
                if station.test == key
                for name, where in station.acknowledged.items()
            }
            state, last, seen = State(), 0, set()
            for submission in reader.log.submissions(key):
                name = submission.idempotency_key
                assert name is not None
                assert name not in seen
                seen.add(name)
                assert submission.first_sequence == last + 1, "sequences have neither gaps nor repeats"
                last = submission.last_sequence
                assert last == submission.first_sequence + 1, "a submission is stored whole"
                assert books[name] == (submission.first_sequence, last), "the answer said where it is"
                state = observe(procedure_of(plan), state, json.loads(submission.body), submission.received_at)
                assert state == submission.state
            assert seen == books.keys(), "whatever was acknowledged is there"
            assert test.state == state
            counted += len(seen)
        with engine.connect() as connection:
            total = connection.execute(text("SELECT count(*) FROM submissions")).scalar()
        engine.dispose()
        assert total == counted
        return counted


def _run_and_close(station: Station, client: httpx.Client, stop: threading.Event) -> None:
    station.run(client, stop)
    client.close()
