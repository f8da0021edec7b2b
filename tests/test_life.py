"""The life of a test, in any order of steps, against a model that is a plain list, on both databases."""

import asyncio
import itertools
import json
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import httpx
import hypothesis
import pytest
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, invariant, rule, run_state_machine_as_test

from service.app import create_app
from service.domain.access import Role
from service.settings import Settings
from tests.api.examples import SEAL
from tests.postgres import fresh_database
from tests.running import prepared

RUNS, STEPS = 12, 20

# Wald's lines (1945) for the plan of the examples, as the README shows them.
ACCEPT, REJECT, SLOPE = 0.9388616025666593, 1.2053786463005403, 0.039747432210872506

Batch = st.lists(st.sampled_from([0, 0, 0, 0, 1]), min_size=1, max_size=12)


class Model:
    """What a test should say: the results in order, and where Wald's lines were first reached."""

    def __init__(self) -> None:
        self.results: list[int] = []
        self.submissions: dict[str, tuple[list[int], dict[str, Any]]] = {}
        self.version = 1

    def state(self) -> dict[str, Any]:
        total = 0
        for number, result in enumerate(self.results, start=1):
            total += result
            decision = self._decision(number, total)
            if decision != "continue":
                return self._shown(decision, number, total)
        return self._shown("continue", len(self.results), total)

    def _shown(self, decision: str, number: int, total: int) -> dict[str, Any]:
        overrun = len(self.results) - number
        return {
            "decision": decision,
            "sample_number": number,
            "total": total,
            "overrun": overrun,
            "version": self.version,
        }

    @staticmethod
    def _decision(number: int, total: int) -> str:
        if total <= SLOPE * number - ACCEPT:
            return "accept"
        return "reject" if total >= SLOPE * number + REJECT else "continue"


class Interface:
    """The service in this process, on one event loop."""

    def __init__(self, database_url: str) -> None:
        secret = prepared(database_url, {Role.ENGINEER: "me"})["engineer"]
        self._runner = asyncio.Runner()
        app = create_app(Settings(database_url=database_url, access_log=False))
        self._life = app.router.lifespan_context(app)
        self._runner.run(self._life.__aenter__())
        headers = {"Authorization": f"Bearer {secret}"}
        transport = httpx.ASGITransport(app=app)
        self._client = httpx.AsyncClient(transport=transport, base_url="http://x", headers=headers)
        self._names = itertools.count(1)
        self.call("POST", "/v1/plans", {"name": "seal", **SEAL})

    def call(self, method: str, path: str, body: Any = None, **headers: str) -> httpx.Response:
        sent = {name.replace("_", "-"): value for name, value in headers.items()}
        return self._runner.run(self._client.request(method, path, json=body, headers=sent))

    def new_key(self) -> str:
        return f"lot-{next(self._names)}"

    def close(self) -> None:
        self._runner.run(self._client.aclose())
        self._runner.run(self._life.__aexit__(None, None, None))
        self._runner.close()


@pytest.fixture(params=["sqlite", "postgresql"])
def interface(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[Interface]:
    if request.param == "sqlite":
        started = Interface(f"sqlite:///{tmp_path / 'life.sqlite3'}")
        yield started
        started.close()
        return
    with fresh_database(request.getfixturevalue("server")) as url:
        started = Interface(url)
        yield started
        started.close()


def life(interface: Interface) -> type[RuleBasedStateMachine]:
    class Life(RuleBasedStateMachine):
        """One test; each run of the machine registers its own."""

        def __init__(self) -> None:
            super().__init__()
            self.key, self.model = interface.new_key(), Model()
            self.path = f"/v1/tests/{self.key}"
            assert self.register().status_code == 201

        def register(self, name: str = "x") -> httpx.Response:
            body = {"key": self.key, "plan": "seal", "subject": {"kind": "lot", "name": name}}
            return interface.call("POST", "/v1/tests", body)

        def post(self, values: list[Any], **headers: str) -> httpx.Response:
            return interface.call("POST", f"{self.path}/observations", {"values": values}, **headers)

        def took(self, answer: httpx.Response, values: list[int]) -> None:
            """The model takes the same, and says the same."""
            assert answer.status_code == 201, answer.text
            first = len(self.model.results) + 1
            self.model.results += values
            self.model.version += 1
            expected = {**self.model.state(), "first_sequence": first, "last_sequence": first + len(values) - 1}
            assert {name: answer.json()[name] for name in expected} == expected

        @rule(values=Batch)
        def posts(self, values: list[int]) -> None:
            self.took(self.post(values), values)

        @rule(values=Batch, name=st.sampled_from("abc"))
        def posts_with_an_idempotency_key(self, values: list[int], name: str) -> None:
            answer = self.post(values, Idempotency_Key=name)
            if name not in self.model.submissions:
                self.took(answer, values)
                self.model.submissions[name] = (values, answer.json())
            elif self.model.submissions[name][0] == values:
                assert (answer.status_code, answer.json()) == (201, self.model.submissions[name][1])
                assert answer.headers["Idempotent-Replayed"] == "true"
            else:
                assert answer.status_code == 422

        @rule(name=st.sampled_from("abc"))
        def retries(self, name: str) -> None:
            if name in self.model.submissions:
                values, first = self.model.submissions[name]
                answer = self.post(values, Idempotency_Key=name, If_Match='"0"')
                assert (answer.status_code, answer.json()) == (201, first)

        @rule(values=Batch, back=st.integers(0, 2))
        def posts_to_the_version_it_saw(self, values: list[int], back: int) -> None:
            answer = self.post(values, If_Match=f'"{self.model.version - back}"')
            if back:
                assert answer.status_code == 412
            else:
                self.took(answer, values)

        @rule(values=Batch, wrong=st.sampled_from([2, 0.5, -1, True, None, "0"]), at=st.integers(0, 12))
        def posts_something_wrong(self, values: list[int], wrong: Any, at: int) -> None:
            assert self.post([*values[:at], wrong, *values[at:]]).status_code == 422

        @rule()
        def registers_again(self) -> None:
            answer = self.register()
            assert (answer.status_code, answer.json()["version"]) == (200, self.model.version)
            assert self.register("y").status_code == 409

        @invariant()
        def says_what_the_model_says(self) -> None:
            expected = self.model.state()
            shown = interface.call("GET", self.path).json()
            assert {name: shown[name] for name in expected} == expected
            unchanged = interface.call("GET", self.path, If_None_Match=f'"{self.model.version}"')
            assert unchanged.status_code == 304

        def teardown(self) -> None:
            log, cursor = [], ""
            while cursor is not None:
                page = interface.call("GET", f"{self.path}/observations?limit=7{cursor}").json()
                log += [(entry["sequence"], entry["value"], entry["counted"]) for entry in page["items"]]
                cursor = page["next_cursor"] and f"&cursor={page['next_cursor']}"
            counted = len(self.model.results) - self.model.state()["overrun"]
            assert log == [(i, result, i <= counted) for i, result in enumerate(self.model.results, start=1)]

    return Life


def test_a_test_lives_as_its_model_does(interface: Interface) -> None:
    settings = hypothesis.settings(
        max_examples=RUNS,
        stateful_step_count=STEPS,
        deadline=None,
        database=None,
        suppress_health_check=list(hypothesis.HealthCheck),
    )
    run_state_machine_as_test(life(interface), settings=settings)
    plan = interface.call("GET", "/v1/plans/seal").json()
    assert json.dumps(plan["lines"]) == json.dumps(
        {"slope": SLOPE, "accept_intercept": ACCEPT, "reject_intercept": REJECT}
    )
