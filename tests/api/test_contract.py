"""
The description is kept, whatever is sent: requests made from it, sound and unsound, with keys of every role.

`bash tests/all.sh tests/api/test_contract.py --long` makes ten times as many, other ones each time.
"""

from collections import Counter
from collections.abc import Callable, Iterator
from typing import Any

import httpx
import hypothesis
import pytest
import schemathesis
from hypothesis import strategies as st
from schemathesis import GenerationMode
from schemathesis.checks import not_a_server_error
from schemathesis.specs.openapi import checks

from service.app import create_app
from service.cli.connections import HEAD_BYTES
from service.settings import Settings
from tests.api.examples import PUMP, SEAL, SHAFT
from tests.running import Running, running

CASES_OF_EACH, LONG_CASES_OF_EACH = 33, 330
WITHOUT_INPUT = {"/healthz", "/readyz"}
TOO_LONG = 431
ENDLESS = "/v1/events"  # its form is tested where it is read

# All but those that would call every refusal of a rule that a schema cannot state a fault of the service.
CHECKS = [
    not_a_server_error,
    checks.status_code_conformance,
    checks.content_type_conformance,
    checks.response_headers_conformance,
    checks.response_schema_conformance,
    checks.negative_data_rejection,
    checks.missing_required_header,
    checks.unsupported_method,
    checks.ignored_auth,
]

KNOWN = {
    "/v1/plans": ["seal", "pump", "shaft"],
    "/v1/tests": ["seal-lot", "pump-lot", "shaft-lot"],
    "/v1/keys": ["spare"],
}
BODIES: dict[str, list[Any]] = {
    "/v1/tests/{key}/observations": [
        {"values": [0, 1]},
        {"values": [10.25]},
        {"observations": [{"time": 12.5, "failed": False, "unit": "u"}]},
    ]
}


@pytest.fixture(scope="module")
def described(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Running]:
    """A service of its own, for requests made at random may do anything."""
    with running(tmp_path_factory.mktemp("contract"), SPRT_MAX_BATCH="2000") as service, service.client() as client:
        for name, plan in (("seal", SEAL), ("pump", PUMP), ("shaft", SHAFT)):
            client.post("/v1/plans", json={"name": name, **plan}).raise_for_status()
            subject = {"kind": "lot", "name": name}
            body = {"key": f"{name}-lot", "plan": name, "subject": subject}
            client.post("/v1/tests", json=body).raise_for_status()
        client.post("/v1/keys", json={"name": "spare", "role": "viewer"}).raise_for_status()
        yield service


def aimed(case: Any, data: st.DataObject) -> None:
    """Point it at something that exists, most of the time, and send something sound, now and then."""
    known = next((names for start, names in KNOWN.items() if case.path.startswith(start)), [])
    if case.path_parameters and known and data.draw(st.integers(0, 3)):
        case.path_parameters = {name: data.draw(st.sampled_from(known)) for name in case.path_parameters}
    if case.path in BODIES and case.method == "POST" and data.draw(st.booleans()):
        case.body = data.draw(st.sampled_from(BODIES[case.path]))


def attack(operation: Any, service: Running, cases: int, *, is_long: bool) -> int:
    """Send so many requests of an operation; how many there were."""
    sent = 0
    roles = st.sampled_from([*service.keys, "administrator", None])
    settings = hypothesis.settings(
        max_examples=cases,
        deadline=None,
        database=None,
        derandomize=not is_long,
        suppress_health_check=list(hypothesis.HealthCheck),
        phases=[hypothesis.Phase.explicit, hypothesis.Phase.generate],
    )

    def sends(mode: GenerationMode) -> Callable[[], None]:
        @settings
        @hypothesis.given(case=operation.as_strategy(generation_mode=mode), role=roles, data=st.data())
        def send(case: Any, role: str | None, data: st.DataObject) -> None:
            nonlocal sent
            is_aimed = mode is GenerationMode.POSITIVE
            if is_aimed:
                aimed(case, data)
            headers = {"Authorization": f"Bearer {service.keys[role]}"} if role else {}
            answer = case.call(base_url=service.url, headers=headers)
            sent += 1
            if answer.status_code == TOO_LONG:  # refused by the connection, before there is a request to describe
                assert len(answer.request.url) > HEAD_BYTES - 1000
                return
            unauthorised = answer.status_code in {401, 403}
            left_out = [checks.negative_data_rejection] if is_aimed or unauthorised else []
            case.validate_response(answer, checks=CHECKS, excluded_checks=left_out, headers=headers)

        return send

    sends(GenerationMode.POSITIVE)()
    if operation.path not in WITHOUT_INPUT:
        sends(GenerationMode.NEGATIVE)()
    return sent


def test_every_answer_is_one_that_the_description_promises(described: Running, request: pytest.FixtureRequest) -> None:
    is_long = request.config.getoption("--long")
    schema = schemathesis.openapi.from_dict(create_app(Settings()).openapi())
    cases = LONG_CASES_OF_EACH if is_long else CASES_OF_EACH
    sent = Counter[str]()
    for found in schema.get_all_operations():
        operation = found.ok()  # type: ignore[union-attr]
        if operation.path != ENDLESS:
            sent[operation.label] = attack(operation, described, cases, is_long=is_long)
    assert sent.total() >= (20_000 if is_long else 2_000), sent
    assert httpx.get(f"{described.url}/readyz", timeout=10).status_code == 200
