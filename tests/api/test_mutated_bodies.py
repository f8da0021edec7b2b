"""
Bodies that were sound once and have been spoilt: only 2xx and 4xx, and never a half of one stored.

`bash tests/all.sh tests/api/test_mutated_bodies.py --long` sends a hundred thousand.
"""

import asyncio
import json
import random
from collections import Counter
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import httpx
import pytest
from fastapi import FastAPI

from service.app import create_app
from service.domain.access import Role
from service.domain.observing import observe
from service.domain.procedure import procedure_of
from service.domain.state import State
from service.settings import Settings
from service.storage.reader import Reader
from tests.api.examples import PUMP, SEAL, SHAFT, WELD
from tests.postgres import fresh_database
from tests.running import prepared

SEED = 20310504
BODIES, LONG_BODIES = 1_000, 50_000  # on each database

PAIRED = {"family": "paired", "h0": 1.0, "h1": 3.0, "alpha": 0.05, "beta": 0.10}
WIDE = {"boundaries": "given", "thresholds": {"accept": -1e6, "reject": 1e6}}
PLANS: dict[str, dict[str, Any]] = {"seal": SEAL, "weld": WELD, "pump": PUMP, "shaft": SHAFT, "pair": PAIRED}
SOUND: dict[str, list[Any]] = {
    "seal": [{"values": [0, 1, 0]}, {"observations": [{"value": 2, "size": 10, "unit": "tray-1"}]}],
    "weld": [{"values": [3]}, {"observations": [{"value": 1, "exposure": 2.5}]}],
    "pump": [{"values": [12.5]}, {"observations": [{"time": 40.0, "failed": False}, {"time": 1.5, "failed": True}]}],
    "shaft": [
        {"values": [10.1, 10.3]},
        {"observations": [{"value": 9.9, "unit": "S-1", "observed_at": "2031-05-04T09:30:00+02:00"}]},
    ],
    "pair": [{"observations": [{"a": 0, "b": 1}, {"a": 1, "b": 1}]}],
}
ODD: list[Any] = [
    None, True, False, 0, -1, 1, 2, 2**53, 2**53 + 1, 2**63, 10**30, -0.0, 1e-320, 1e100, -1e100, 1.7e308, 0.1,
    "", "0", "NaN", "\u0000", "\ud800", "é", "ｖalues", "x" * 300, "2031-13-01T00:00:00Z", "' OR 1=1 --", "<b>",
    [], {}, [[]], [0], {"value": 0}, [None], {"values": [0]},
]  # fmt: skip
TOKENS = [
    b"NaN", b"Infinity", b"-Infinity", b"1e999", b"-1e-999", b"1E9", b"0x1", b"01", b"+1", b".5", b"1.", b"null", b"{",
    b"}", b"[", b"]", b",", b":", b'"', b"\\", b"\\u0000", b"\\ud800", b"\x00", b"\xff", b"\xef\xbb\xbf", b"\x1f",
    b'"value":0,', b'"values":[0],', b"[" * 50, b"9" * 500, b" " * 1000, b"\xc0\x80", b"\xed\xa0\x80",
]  # fmt: skip

Mutation = Callable[[random.Random, Any], bytes]


def places(node: Any, place: tuple[Any, ...] = ()) -> Iterator[tuple[Any, ...]]:
    """Where every part of a document stands."""
    yield place
    if isinstance(node, dict | list):
        for name, child in node.items() if isinstance(node, dict) else enumerate(node):
            yield from places(child, (*place, name))


def with_odd_part(chance: random.Random, document: Any) -> bytes:
    copy = json.loads(json.dumps(document))
    place = chance.choice(list(places(copy)))
    if not place:
        return json.dumps(chance.choice(ODD)).encode()
    node = copy
    for name in place[:-1]:
        node = node[name]
    action = chance.randrange(4)
    if action == 0:
        del node[place[-1]]
    elif action == 1 and isinstance(node, dict):
        node[chance.choice(["value", "Value", "time", "size", "a", "x", "", "\u0000", "values"])] = node.pop(place[-1])
    elif action == 2 and isinstance(node, list):
        node[place[-1] : place[-1]] = [chance.choice(ODD)] * chance.choice([1, 2, 30])
    else:
        node[place[-1]] = chance.choice(ODD)
    return json.dumps(copy).encode()


def with_odd_bytes(chance: random.Random, document: Any) -> bytes:
    body = bytearray(json.dumps(document, ensure_ascii=chance.random() < 0.5).encode())
    for _ in range(chance.choice([1, 1, 1, 2, 5])):
        at = chance.randrange(len(body) + 1)
        action = chance.randrange(4)
        if action == 0:
            body[at:at] = chance.choice(TOKENS)
        elif action == 1:
            del body[at : at + chance.choice([1, 3, 20])]
        elif action == 2 and at < len(body):
            body[at] = chance.randrange(256)
        else:
            body[at:at] = body[chance.randrange(len(body) + 1) :][:20]
    return bytes(body)


def as_it_is(_chance: random.Random, document: Any) -> bytes:
    return json.dumps(document).encode()


MUTATIONS: list[Mutation] = [with_odd_part, with_odd_part, with_odd_bytes, with_odd_bytes, as_it_is]


@dataclass
class Attack:
    """One service in this process, and what has come of the bodies sent to it."""

    client: httpx.AsyncClient
    reader: Reader
    chance: random.Random
    answers: Counter[tuple[str, int]]

    async def post(self, path: str, body: bytes) -> int:
        headers = {"Content-Type": "application/json"}
        answer = await self.client.post(path, content=body, headers=headers)
        kind = answer.headers["Content-Type"]
        assert (answer.status_code < 300) == (kind == "application/json"), (kind, body)
        assert answer.status_code < 500, (path, answer.status_code, body)
        if answer.status_code >= 400:
            assert (answer.json()["status"], kind) == (answer.status_code, "application/problem+json"), body
        self.answers[path.split("/")[2], answer.status_code] += 1
        return answer.status_code

    async def observations(self) -> None:
        """To a test: its version moves where the answer says so, and nowhere else."""
        name = self.chance.choice(list(SOUND))
        body = self.chance.choice(MUTATIONS)(self.chance, self.chance.choice(SOUND[name]))
        before = self.reader.version(name)
        assert before is not None
        status = await self.post(f"/v1/tests/{name}/observations", body)
        assert self.reader.version(name) == before + (status == 201), body

    async def registration(self) -> None:
        key = f"lot-{self.chance.randrange(10**9)}"
        subject = {"kind": "lot", "name": "2041/B"}
        document = {"key": key, "plan": self.chance.choice(list(PLANS)), "subject": subject, "labels": {"line": "3"}}
        await self.post("/v1/tests", self.chance.choice(MUTATIONS)(self.chance, document))

    async def plan(self) -> None:
        name = f"plan-{self.chance.randrange(10**9)}"
        document = {"name": name, **self.chance.choice(list(PLANS.values())), "truncation": {"sample_number": 50}}
        await self.post("/v1/plans", self.chance.choice(MUTATIONS)(self.chance, document))


def state_of_log(reader: Reader, key: str) -> tuple[State, int]:
    """What the log of a test says: its state after replaying everything, and the number of submissions."""
    test = reader.test(key)
    assert test is not None
    plan = reader.plan(test.plan)
    assert plan is not None
    state, count = State(), 0
    for count, submission in enumerate(reader.log.submissions(key), start=1):  # noqa: B007 - the last one counts
        assert submission.first_sequence == state.sequence + 1
        state = observe(procedure_of(plan), state, json.loads(submission.body), submission.received_at)
        assert submission.last_sequence == state.sequence
        assert submission.state == state
    return state, count


async def attacked(app: FastAPI, secret: str, bodies: int) -> Counter[tuple[str, int]]:
    transport = httpx.ASGITransport(app=app)
    headers = {"Authorization": f"Bearer {secret}"}
    async with (
        app.router.lifespan_context(app),
        httpx.AsyncClient(transport=transport, base_url="http://x", headers=headers, timeout=60.0) as client,
    ):
        reader = app.state.parts.reader
        attack = Attack(client, reader, random.Random(SEED), Counter())
        for name, plan in PLANS.items():
            await attack.post("/v1/plans", json.dumps({"name": name, **plan, **WIDE}).encode())
            registration = {"key": name, "plan": name, "subject": {"kind": "lot", "name": name}}
            await attack.post("/v1/tests", json.dumps(registration).encode())
        for number in range(bodies):
            doing = (
                attack.plan if number % 20 == 7 else attack.registration if number % 10 == 3 else attack.observations
            )
            await doing()
        for name in PLANS:
            test = reader.test(name)
            assert (test.state, test.version - 1) == state_of_log(reader, name), name
        plans, tests = len(reader.plans(None, 10**6)), sum(count.tests for count in reader.counts())
        assert (plans, tests) == (attack.answers["plans", 201], attack.answers["tests", 201] - submitted(reader))
        return attack.answers


def submitted(reader: Reader) -> int:
    """Submissions that were stored."""
    return sum(test.version - 1 for name in PLANS if (test := reader.test(name)) is not None)


@pytest.fixture(params=["sqlite", "postgresql"])
def database_url(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[str]:
    if request.param == "sqlite":
        yield f"sqlite:///{tmp_path / 'attacked.sqlite3'}"
        return
    with fresh_database(request.getfixturevalue("server")) as url:
        yield url


def test_spoilt_bodies_are_refused_and_no_half_of_one_is_stored(
    database_url: str, request: pytest.FixtureRequest
) -> None:
    bodies = LONG_BODIES if request.config.getoption("--long") else BODIES
    keys = prepared(database_url, {Role.ENGINEER: "me"})
    settings = Settings(database_url=database_url, access_log=False, max_batch=2000, max_body_bytes=200_000)
    answers = asyncio.run(attacked(create_app(settings), keys["engineer"], bodies))
    statuses = Counter(status for _, status in answers.elements())
    print(f"\n{bodies} bodies: {dict(sorted(statuses.items()))}")
    assert {201, 400, 409, 422} <= statuses.keys() <= {200, 201, 400, 409, 413, 422}
    assert statuses[201] > bodies / 20
