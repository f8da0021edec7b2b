"""Dispositions over HTTP: who may, when a deviation must be explained, and that they close the test."""

from typing import Any

import httpx

from tests.api.examples import SEAL, Namer, pointers, with_test
from tests.api.test_history import history
from tests.running import Running, command


def dispose(client: httpx.Client, key: str, **body: Any) -> httpx.Response:
    return client.post(f"/v1/tests/{key}/disposition", json={"reason": "sheet 12", **body})


def decided(admin: httpx.Client, new_name: Namer, values: list[int]) -> str:
    key = with_test(admin, new_name, SEAL)
    admin.post(f"/v1/tests/{key}/observations", json={"values": values}).raise_for_status()
    return key


def test_a_disposition_closes_the_test_for_good(admin: httpx.Client, service: Running, new_name: Namer) -> None:
    key = decided(admin, new_name, [0] * 24)
    answer = dispose(admin, key, disposition="accept")
    assert answer.status_code == 201, answer.text
    state = answer.json()
    assert (state["status"], state["version"], state["decision"]) == ("closed", 3, "accept")
    told = state["disposition"]
    assert (told["disposition"], told["deviates"], told["by"]) == ("accept", False, "the-administrator")
    assert dispose(admin, key, disposition="accept").status_code == 200
    assert admin.get(f"/v1/tests/{key}").json() == state
    for path, body in (
        ("observations", {"values": [0]}),
        ("corrections", {"sequence": 1, "action": "void", "reason": "late"}),
        ("disposition", {"disposition": "scrap", "reason": "other", "deviation_reason": "why"}),
    ):
        refused = admin.post(f"/v1/tests/{key}/{path}", json=body)
        assert (refused.status_code, refused.json()["type"].rpartition(":")[2]) == (409, "test-closed")
    act = history(admin, key)[-1]
    assert (act["act"], act["details"]["disposition"], act["details"]["deviates"]) == ("disposed", "accept", False)
    done = command("verify", "--test", key, database_url=service.database_url)
    assert done.returncode == 0, done.stderr


def test_what_does_not_follow_from_the_decision_needs_a_reason_of_its_own(admin: httpx.Client, new_name: Namer) -> None:
    follows = {"continue": set(), "accept": {"accept"}, "reject": {"reject", "rework", "scrap"}}
    values = {"continue": [0], "accept": [0] * 24, "reject": [1, 1]}
    for decision, fitting in follows.items():
        for verdict in ("accept", "reject", "concession", "rework", "scrap", "withdrawn"):
            key = decided(admin, new_name, values[decision])
            wrong = {} if verdict not in fitting else {"deviation_reason": "none needed"}
            refused = dispose(admin, key, disposition=verdict, **wrong)
            assert (refused.status_code, pointers(refused)) == (422, ["/deviation_reason"])
            right = {"deviation_reason": "the customer asked"} if verdict not in fitting else {}
            told = dispose(admin, key, disposition=verdict, **right).json()["disposition"]
            assert told["deviates"] == (verdict not in fitting)
    listed = admin.get(f"/v1/tests?disposition=withdrawn&subject={key}/A").json()["items"]
    assert [(item["key"], item["disposition"]["deviation_reason"]) for item in listed] == [(key, "the customer asked")]
    assert admin.get(f"/v1/tests?disposition=accept&subject={key}/A").json()["items"] == []


def test_a_disposition_takes_an_engineer_a_reason_and_the_version_that_was_seen(
    admin: httpx.Client, service: Running, new_name: Namer
) -> None:
    key = decided(admin, new_name, [0] * 24)
    with service.client("collector") as collector:
        assert dispose(collector, key, disposition="accept").status_code == 403
    for body, pointer in (({"reason": " "}, "/reason"), ({"disposition": "sell"}, "/disposition")):
        answer = dispose(admin, key, **{"disposition": "accept", **body})
        assert (answer.status_code, pointers(answer)) == (422, [pointer])
    body = {"disposition": "accept", "reason": "x"}
    moved = admin.post(f"/v1/tests/{key}/disposition", json=body, headers={"If-Match": '"1"'})
    assert moved.status_code == 412
    assert admin.get(f"/v1/tests/{key}").json()["status"] == "open"
    assert dispose(admin, "nowhere-at-all", disposition="accept").status_code == 404
