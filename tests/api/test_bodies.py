"""Bodies that are not what a body may be."""

import json

import httpx
import pytest

from tests.api.examples import SEAL, Namer, pointers, with_test

JSON = "application/json"


@pytest.mark.parametrize(
    ("content", "media_type", "status", "name"),
    [
        (b"{", JSON, 400, "malformed-body"),
        (b"", JSON, 400, "malformed-body"),
        (b"\xff\xfe", JSON, 400, "malformed-body"),
        (b'{"values": [0], "values": [1]}', JSON, 400, "malformed-body"),
        (b'{"observations": [{"value": 0, "value": 1}]}', JSON, 400, "malformed-body"),
        (b"[" * 30 + b"]" * 30, JSON, 400, "malformed-body"),
        (b"[" * 100_000, JSON, 400, "malformed-body"),
        (b'{"observations": [{"value": 0, "unit": "\\ud800"}]}', JSON, 400, "malformed-body"),
        (b'{"values": [0]}', "text/plain", 415, "media-type"),
        (b'{"values": [0]}', None, 415, "media-type"),
        (b'{"values": [' + b"0," * 100_000 + b"0]}", JSON, 413, "body-too-large"),
        (b"[1]", JSON, 422, "invalid-body"),
        (b"null", JSON, 422, "invalid-body"),
        (b'"text"', JSON, 422, "invalid-body"),
    ],
)
def test_a_body_that_is_not_sound_is_a_problem(
    admin: httpx.Client, new_name: Namer, content: bytes, media_type: str | None, status: int, name: str
) -> None:
    key = with_test(admin, new_name, SEAL)
    headers = {"Content-Type": media_type} if media_type else {}
    answer = admin.post(f"/v1/tests/{key}/observations", content=content, headers=headers)
    assert answer.status_code == status, answer.text
    assert answer.headers["Content-Type"] == "application/problem+json"
    problem = answer.json()
    assert problem["type"] == f"urn:sprt-monitor:problem:{name}"
    assert problem["status"] == status
    assert admin.get(f"/v1/tests/{key}").json()["version"] == 1


def test_a_doubled_key_is_named(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    body = b'{"observations": [{"value": 0}, {"value": 0, "value": 1}]}'
    answer = admin.post(f"/v1/tests/{key}/observations", content=body, headers={"Content-Type": JSON})
    assert answer.json()["errors"][0]["pointer"] == "/observations/1/value"


def test_a_doubled_key_is_pointed_to_in_escapes(admin: httpx.Client) -> None:
    answer = admin.post("/v1/plans", content=b'{"a/b~c": 1, "a/b~c": 2}', headers={"Content-Type": JSON})
    assert answer.json()["errors"][0]["pointer"] == "/a~1b~0c"


def test_an_answer_is_small_whatever_was_sent(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    long = "k" * 60_000
    plan = {"name": new_name("plan"), **SEAL}
    bodies = [f'{{"{long}": 1}}', f'{{"{long}": 1, "{long}": 2}}', f'{{"observations": [{{"{long}": 1}}]}}']
    for body in (*bodies, json.dumps({**plan, "family": long}), json.dumps({**plan, "known": {long: 1}})):
        path = "/v1/plans" if "family" in body else f"/v1/tests/{key}/observations"
        answer = admin.post(path, content=body, headers={"Content-Type": JSON})
        assert answer.status_code in {400, 422}
        assert len(answer.content) < 5000


def test_a_body_too_large_is_refused_while_it_comes(admin: httpx.Client, new_name: Namer) -> None:
    """Sent in chunks, so that no length announces it."""
    key = with_test(admin, new_name, SEAL)
    chunks = (b" " * 50_000 for _ in range(10))
    answer = admin.post(f"/v1/tests/{key}/observations", content=chunks, headers={"Content-Type": JSON})
    assert answer.status_code == 413


def test_a_fault_of_a_large_body_is_named_as_in_a_small_one(admin: httpx.Client, new_name: Namer) -> None:
    """Large bodies are checked apart, so that others need not wait for them."""
    key = with_test(admin, new_name, SEAL)
    observations: list[dict[str, object]] = [{"value": 0, "unit": f"unit-of-a-long-name-{i}"} for i in range(2000)]
    answer = admin.post(f"/v1/tests/{key}/observations", json={"observations": [*observations[:-1], {"colour": 1}]})
    assert (answer.status_code, pointers(answer)) == (422, ["/observations/1999/colour"])
    accepted = admin.post(f"/v1/tests/{key}/observations", json={"observations": observations})
    assert (accepted.status_code, accepted.json()["last_sequence"]) == (201, 2000)


@pytest.mark.parametrize("number", ["1e999", "1e-999", "0." + "0" * 500 + "1"])
def test_a_number_that_no_double_holds_is_no_object(admin: httpx.Client, new_name: Namer, number: str) -> None:
    key = with_test(admin, new_name, SEAL)
    refused = {
        f"/v1/tests/{key}/observations": [f'{{"observations": [{number}]}}', f'{{"observations": {number}}}', number],
        "/v1/characteristics": [f'{{"truncation": {number}}}', f'{{"candidates": [{number}, {number}]}}', number],
        "/v1/rehearsal": [f'{{"plan": {number}, "submission": {number}}}'],
        "/v1/tests": [f'{{"key": "k", "plan": "p", "subject": {number}}}'],
        "/v1/keys": [f'{{"name": "k", "role": "viewer", "subjects": [{number}]}}'],
    }
    for path, bodies in refused.items():
        for body in bodies:
            answer = admin.post(path, content=body, headers={"Content-Type": JSON})
            assert (answer.status_code, answer.json()["type"]) == (422, "urn:sprt-monitor:problem:invalid-body"), body
            assert "must be an" in answer.text, body


def test_unknown_addresses_and_methods_are_problems(admin: httpx.Client) -> None:
    assert admin.get("/v1/nothing").json()["type"].endswith(":not-found")
    answer = admin.put("/v1/plans", json={})
    assert answer.status_code == 405
    assert answer.headers["Allow"]
    assert answer.json()["type"].endswith(":method-not-allowed")
