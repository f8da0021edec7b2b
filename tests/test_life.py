"""
The life of a test, in any order of steps, against a model that is a plain list, on both databases.

`bash tests/all.sh tests/test_life.py --long` lives a few hundred of them.
"""

import asyncio
import itertools
import json
from collections.abc import Iterator
from functools import partial
from pathlib import Path
from typing import Any

import httpx
import hypothesis
import pytest
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, invariant, rule, run_state_machine_as_test

from service.app import create_app
from service.domain.access import UNLIMITED, Role
from service.domain.addresses import Allowed
from service.ingest.commands import CreateReceiver
from service.ingest.road import perform_now
from service.settings import Settings
from service.storage.auditing import audited, snapshot
from service.storage.engine import create_engine_for
from service.storage.reader import Reader
from tests.api.examples import SEAL
from tests.postgres import fresh_database
from tests.running import prepared

RUNS, LONG_RUNS, STEPS = 12, 300, 20

# Wald's lines (1945) for the plan of the examples, as the README shows them.
ACCEPT, REJECT, SLOPE = 0.9388616025666593, 1.2053786463005403, 0.039747432210872506

Result, Back = st.sampled_from([None, 0, 1]), st.sampled_from([None, None, None, 0, 1])
Verdicts = st.sampled_from(["accept", "reject", "rework", "withdrawn"])
Batch = st.lists(st.sampled_from([0, 0, 0, 0, 1]), min_size=1, max_size=12)


# What follows from a decision by itself; anything else needs a reason of its own.
FOLLOWS = {"continue": [], "accept": ["accept"], "reject": ["reject", "rework", "scrap"]}


class Model:
    """
    What a test should say: the results in order, and where Wald's lines were first reached.

    `posted` is what came, `results` what counts in its place: None where it was voided.
    """

    def __init__(self) -> None:
        self.posted: list[int] = []
        self.results: list[int | None] = []
        self.submissions: dict[str, tuple[list[int], dict[str, Any]]] = {}
        self.version = 1
        self.corrections = 0
        self.decision_changed = self.corrected_after_decision = False
        self.disposition: str | None = None
        self.acts = ["registered"]
        self.told: list[tuple[str, int]] = []

    @property
    def decision(self) -> str:
        return str(self.state()["decision"])

    @property
    def counted(self) -> int:
        """The sequence of the last observation that the decision stands on."""
        number = total = 0
        for sequence, result in enumerate(self.results, start=1):
            if result is not None:
                number, total = number + 1, total + result
                if self._decision(number, total) != "continue":
                    return sequence
        return len(self.results)

    def state(self) -> dict[str, Any]:
        counted = self.counted
        used = [result for result in self.results[:counted] if result is not None]
        later = [result for result in self.results[counted:] if result is not None]
        decision = self._decision(len(used), sum(used)) if used else "continue"
        return {
            "decision": decision,
            "sample_number": len(used),
            "total": sum(used),
            "overrun": len(later),
            "voided": self.results.count(None),
            "version": self.version,
            "corrections": self.corrections,
            "decision_changed": self.decision_changed,
            "corrected_after_decision": self.corrected_after_decision,
            "status": "closed" if self.disposition else "open",
        }

    def post(self, values: list[int]) -> None:
        before = self.decision
        self.posted += values
        self.results += values
        self._acted("submitted", "test.decided", before)

    def correct(self, sequence: int, result: int | None) -> None:
        before = self.decision
        self.results[sequence - 1] = result
        self.corrections += 1
        self.corrected_after_decision |= before != "continue"
        self._acted("corrected", "test.decision_changed", before)
        self.decision_changed |= self.decision != before

    def dispose(self, verdict: str) -> None:
        self.disposition = verdict
        self._acted("disposed", "", self.decision)
        self.told.append(("test.disposed", self.version))

    def _acted(self, act: str, notice: str, before: str) -> None:
        self.version += 1
        self.acts.append(act)
        if self.decision != before:
            self.acts.append("decided")
            self.told.append((notice, self.version))

    @staticmethod
    def _decision(number: int, total: int) -> str:
        if total <= SLOPE * number - ACCEPT:
            return "accept"
        return "reject" if total >= SLOPE * number + REJECT else "continue"


class Interface:
    """The service in this process, on one event loop."""

    def __init__(self, database_url: str) -> None:
        secret = prepared(database_url, {Role.ENGINEER: "me"})["engineer"]
        self.engine = create_engine_for(database_url)
        receiver = CreateReceiver("bench", "https://bench.invalid/", UNLIMITED, Allowed(), "me")
        perform_now(self.engine, receiver)  # nobody hears anything, but all of it is to be told
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

    def told(self, key: str) -> list[tuple[str, int]]:
        """What the outbox holds of a test, in order."""
        notices = Reader(self.engine).notices
        receiver = notices.receiver("bench")
        assert receiver is not None
        found = notices.page(receiver, None, None, 10_000)
        return sorted(((each.kind.value, each.version) for each in found if each.test == key), key=lambda each: each[1])

    def difference(self, key: str) -> str | None:
        """What an audit of a test finds."""
        (audit,) = audited(partial(snapshot, self.engine), [key])
        return audit.difference

    def close(self) -> None:
        self._runner.run(self._client.aclose())
        self._runner.run(self._life.__aexit__(None, None, None))
        self._runner.close()
        self.engine.dispose()


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
            if self.model.disposition:
                assert answer.status_code == 409
                return
            assert answer.status_code == 201, answer.text
            first = len(self.model.posted) + 1
            self.model.post(values)
            expected = {**self.model.state(), "first_sequence": first, "last_sequence": first + len(values) - 1}
            assert {name: answer.json()[name] for name in expected} == expected

        @staticmethod
        def is_as_first(answer: dict[str, Any], first: dict[str, Any]) -> None:
            """But for what was done to the test since: corrections are counted and marked for good."""
            since = {"corrections", "decision_changed", "corrected_after_decision", "disposition", "status"}
            assert {name: answer[name] for name in answer.keys() - since} == {
                name: first[name] for name in first.keys() - since
            }

        @rule(values=Batch)
        def posts(self, values: list[int]) -> None:
            self.took(self.post(values), values)

        @rule(values=Batch, name=st.sampled_from("abc"))
        def posts_with_an_idempotency_key(self, values: list[int], name: str) -> None:
            answer = self.post(values, Idempotency_Key=name)
            if name not in self.model.submissions:
                self.took(answer, values)
                if not self.model.disposition:
                    self.model.submissions[name] = (values, answer.json())
            elif self.model.submissions[name][0] == values:
                assert answer.status_code == 201
                self.is_as_first(answer.json(), self.model.submissions[name][1])
                assert answer.headers["Idempotent-Replayed"] == "true"
            else:
                assert answer.status_code == 422

        @rule(name=st.sampled_from("abc"))
        def retries(self, name: str) -> None:
            if name in self.model.submissions:
                values, first = self.model.submissions[name]
                answer = self.post(values, Idempotency_Key=name, If_Match='"0"')
                assert answer.status_code == 201
                self.is_as_first(answer.json(), first)

        @rule(values=Batch, back=st.integers(0, 2))
        def posts_to_the_version_it_saw(self, values: list[int], back: int) -> None:
            answer = self.post(values, If_Match=f'"{self.model.version - back}"')
            if back:
                assert answer.status_code == 412
            else:
                self.took(answer, values)

        @rule(values=Batch, wrong=st.sampled_from([2, 0.5, -1, True, None, "0"]), at=st.integers(0, 12))
        def posts_something_wrong(self, values: list[int], wrong: Any, at: int) -> None:
            status = self.post([*values[:at], wrong, *values[at:]]).status_code
            assert status in ((409, 422) if self.model.disposition else (422,))

        @rule(
            at=st.integers(1, 40), result=st.sampled_from([None, 0, 1]), back=st.sampled_from([None, None, None, 0, 1])
        )
        def corrects(self, at: int, result: int | None, back: int | None) -> None:
            body: dict[str, Any] = {"sequence": at, "action": "void", "reason": "typo"}
            if result is not None:
                body |= {"action": "replace", "observation": {"value": result}}
            match = {} if back is None else {"If_Match": f'"{self.model.version - back}"'}
            answer = interface.call("POST", f"{self.path}/corrections", body, **match)
            before = self.model.decision
            if back:
                assert answer.status_code == 412
            elif self.model.disposition:
                assert answer.status_code == 409
            elif at > len(self.model.posted):
                assert answer.status_code == 422
            elif self.model.results[at - 1] == result:
                assert answer.status_code == 409
            else:
                assert answer.status_code == 201, answer.text
                self.model.correct(at, result)
                expected = {**self.model.state(), "decision_before": before}
                assert {name: answer.json()[name] for name in expected} == expected

        @rule(
            verdict=st.sampled_from(["accept", "reject", "rework", "withdrawn"]),
            explains=st.booleans(),
            now=st.integers(0, 3),
        )
        def disposes(self, verdict: str, explains: bool, now: int) -> None:  # noqa: FBT001
            if now:  # or few tests would live long
                return
            body = {"disposition": verdict, "reason": "sheet 12"}
            if explains:
                body["deviation_reason"] = "The customer asked."
            answer = interface.call("POST", f"{self.path}/disposition", body)
            deviates = verdict not in FOLLOWS[self.model.decision]
            if self.model.disposition:
                is_the_same = self.model.disposition == verdict and deviates == explains
                assert answer.status_code == (200 if is_the_same else 409)
            elif deviates != explains:
                assert answer.status_code == 422
            else:
                assert answer.status_code == 201, answer.text
                self.model.dispose(verdict)

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
            counted = self.model.counted
            both = zip(self.model.posted, self.model.results, strict=True)
            assert log == [
                (i, posted, i <= counted and result is not None) for i, (posted, result) in enumerate(both, start=1)
            ]
            acts = interface.call("GET", f"{self.path}/history?limit=500").json()["items"]
            assert [act["act"] for act in acts] == self.model.acts
            assert interface.told(self.key) == self.model.told
            assert interface.difference(self.key) is None

    return Life


def test_a_test_lives_as_its_model_does(interface: Interface, request: pytest.FixtureRequest) -> None:
    settings = hypothesis.settings(
        max_examples=LONG_RUNS if request.config.getoption("--long") else RUNS,
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
