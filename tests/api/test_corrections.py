"""Corrections over HTTP: what was posted stays beside what counts, and all readers see what counts."""

import csv
import io
from typing import Any

import httpx
import pytest
from sqlalchemy import create_engine, text

from tests.api.examples import SEAL, SHAFT, Namer, pointers, with_test
from tests.api.test_history import history
from tests.running import Running, command


def correct(client: httpx.Client, key: str, body: dict[str, Any], **headers: str) -> httpx.Response:
    return client.post(f"/v1/tests/{key}/corrections", json={"reason": "typo", **body}, headers=headers)


def post(client: httpx.Client, key: str, body: dict[str, Any]) -> dict[str, Any]:
    answer = client.post(f"/v1/tests/{key}/observations", json=body)
    assert answer.status_code == 201, answer.text
    return answer.json()  # type: ignore[no-any-return]


VOID = {"sequence": 3, "action": "void"}


def test_voiding_an_observation_of_an_accepted_lot_puts_the_decision_off(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    assert post(admin, key, {"values": [0] * 24})["decision"] == "accept"
    answer = correct(admin, key, VOID).json()
    assert (answer["decision"], answer["decision_before"]) == ("continue", "accept")
    assert (answer["decided"], answer["sample_number"], answer["observations"], answer["voided"]) == (None, 23, 23, 1)
    assert (answer["corrections"], answer["decision_changed"], answer["corrected_after_decision"]) == (1, True, True)
    later = post(admin, key, {"values": [0]})
    assert (later["first_sequence"], later["decision"], later["sample_number"]) == (25, "accept", 24)
    acts = history(admin, key)
    assert [act["act"] for act in acts] == [
        "registered", "submitted", "decided", "corrected", "decided", "submitted", "decided",
    ]  # fmt: skip
    assert acts[3]["details"] | {"state": 0, "body_digest": ""} == {
        "sequence": 3, "action": "void", "observation": None, "reason": "typo", "body_digest": "", "state": 0,
        "idempotency_key": None, "version": 3, "decision_before": "accept",
    }  # fmt: skip
    assert (acts[4]["details"]["decision"], acts[4]["details"]["cause"]) == ("continue", "corrected")


def test_overrun_counts_after_a_void_and_the_other_way_round(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    assert post(admin, key, {"values": [1, 1] + [0] * 98})["overrun"] == 98
    answer = correct(admin, key, {"sequence": 1, "action": "replace", "observation": {"value": 0}}).json()
    assert (answer["decision"], answer["overrun"]) == ("accept", 100 - answer["decided"]["sample_number"])
    back = correct(admin, key, {"sequence": 1, "action": "replace", "observation": {"value": 1}}).json()
    assert (back["decision"], back["overrun"], back["decided"]["sample_number"]) == ("reject", 98, 2)
    assert back["corrections"] == 2


def test_all_readers_see_what_counts_and_what_was_posted(
    admin: httpx.Client, service: Running, new_name: Namer
) -> None:
    key = with_test(admin, new_name, {**SHAFT, "alpha": 1e-9, "beta": 1e-9})
    post(admin, key, {"values": [10.1, 10.2, 99.0, 10.4]})
    post(admin, key, {"observations": [{"value": 10.0, "unit": "u5"}, {"value": 10.3, "unit": "u6"}]})
    correct(admin, key, VOID)
    correct(admin, key, {"sequence": 5, "action": "replace", "observation": {"value": 10.5}})
    state = admin.get(f"/v1/tests/{key}").json()
    assert state["total"] == pytest.approx(10.1 + 10.2 + 10.4 + 10.5 + 10.3, abs=1e-12)
    path = admin.get(f"/v1/tests/{key}/path").json()
    assert [point["sequence"] for point in path["points"]] == [0, 1, 2, 4, 5, 6]
    assert path["points"][-1]["log_likelihood_ratio"] == state["log_likelihood_ratio"]
    items = admin.get(f"/v1/tests/{key}/observations").json()["items"]
    assert [item["value"] for item in items] == [10.1, 10.2, 99.0, 10.4, 10.0, 10.3]
    assert [item["counted"] for item in items] == [True, True, False, True, True, True]
    assert [(item["correction"] or {}).get("action") for item in items] == [None, None, "void", None, "replace", None]
    assert items[4]["correction"]["observation"] == {"value": 10.5, "unit": "u5"}
    assert items[2]["correction"]["by"] == "the-administrator"
    table = admin.get(f"/v1/tests/{key}/observations", headers={"Accept": "text/csv"}).text
    rows = list(csv.DictReader(io.StringIO(table)))
    assert [row["value"] for row in rows][2:5] == ["99.0", "10.4", "10.0"]
    assert [row["corrected_value"] for row in rows][2:5] == ["", "", "10.5"]
    assert [row["correction"] for row in rows][2:5] == ["void", "", "replace"]
    assert [row["correction_reason"] for row in rows][2:5] == ["typo", "", "typo"]
    assert admin.get(f"/v1/tests/{key}/assumptions").json()["observations"] == 5
    engine = create_engine(service.database_url)
    with engine.connect() as connection:
        query = text(
            "SELECT value, counted, correction, corrected_value FROM observations WHERE test = :key ORDER BY sequence"
        )
        viewed = [tuple(row) for row in connection.execute(query, {"key": key})]
    engine.dispose()
    assert viewed[2:5] == [(99.0, 0, "void", None), (10.4, 1, None, None), (10.0, 1, "replace", 10.5)]
    done = command("verify", "--test", key, database_url=service.database_url)
    assert done.returncode == 0, done.stderr


def test_the_unit_of_a_voided_observation_may_come_again_and_counts_once(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    post(admin, key, {"observations": [{"value": 0, "unit": f"u{i}"} for i in (1, 2, 3)]})
    again = {"observations": [{"value": 0, "unit": "u3"}]}
    assert admin.post(f"/v1/tests/{key}/observations", json=again).status_code == 409
    assert correct(admin, key, VOID).status_code == 201
    assert post(admin, key, again)["sample_number"] == 3
    restored = correct(admin, key, {"sequence": 3, "action": "replace", "observation": {"value": 0}})
    assert (restored.status_code, pointers(restored)) == (409, ["/observation/unit"])
    renamed = correct(admin, key, {"sequence": 3, "action": "replace", "observation": {"value": 0, "unit": "u9"}})
    assert renamed.status_code == 201
    assert admin.get(f"/v1/tests/{key}").json()["voided"] == 0


def test_after_the_decision_only_an_engineer_corrects(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    post(admin, key, {"values": [0] * 5})
    with service.client("collector") as collector, service.client("engineer") as engineer:
        before = correct(collector, key, VOID)
        assert (before.status_code, before.json()["corrected_after_decision"]) == (201, False)
        post(admin, key, {"values": [1, 1]})
        refused = correct(collector, key, {"sequence": 4, "action": "void"})
        assert (refused.status_code, refused.json()["type"].rpartition(":")[2]) == (403, "role-required")
        after = correct(engineer, key, {"sequence": 4, "action": "void"})
        assert (after.status_code, after.json()["corrected_after_decision"]) == (201, True)


BAD_CORRECTIONS: list[tuple[dict[str, Any], int, str]] = [
    ({"sequence": 6, "action": "void"}, 422, "/sequence"),
    ({"sequence": 0, "action": "void"}, 422, "/sequence"),
    ({"sequence": 1.5, "action": "void"}, 422, "/sequence"),
    ({"sequence": 1, "action": "remove"}, 422, "/action"),
    ({"sequence": 1, "action": "void", "reason": "  "}, 422, "/reason"),
    ({"sequence": 1, "action": "void", "observation": {"value": 0}}, 422, ""),
    ({"sequence": 1, "action": "replace"}, 422, ""),
    ({"sequence": 1, "action": "replace", "observation": {"value": 0.5}}, 422, "/observation/value"),
    ({"sequence": 1, "action": "replace", "observation": {"time": 1.0}}, 422, "/observation/time"),
    ({"sequence": 1, "action": "replace", "observation": {"value": 0, "colour": "red"}}, 422, "/observation/colour"),
]


def test_a_bad_correction_changes_nothing(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    post(admin, key, {"values": [0] * 5})
    before = admin.get(f"/v1/tests/{key}").json()
    for body, status, pointer in BAD_CORRECTIONS:
        answer = correct(admin, key, body)
        assert (answer.status_code, pointer in pointers(answer)) == (status, True), (body, answer.text)
    same = correct(admin, key, {"sequence": 1, "action": "replace", "observation": {"value": 0}})
    assert same.status_code == 409
    assert admin.get(f"/v1/tests/{key}").json() == before
    assert correct(admin, key, VOID).status_code == 201
    twice = correct(admin, key, VOID)
    assert (twice.status_code, twice.json()["type"].rpartition(":")[2]) == (409, "changes-nothing")
    assert correct(admin, "nowhere-at-all", VOID).status_code == 404


def test_a_correction_honours_if_match_and_idempotency_keys(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    post(admin, key, {"values": [0] * 5})
    assert correct(admin, key, VOID, **{"If-Match": '"1"'}).status_code == 412
    headers = {"If-Match": '"2"', "Idempotency-Key": "c1"}
    first = correct(admin, key, VOID, **headers)
    assert first.status_code == 201
    post(admin, key, {"values": [0]})
    again = correct(admin, key, VOID, **headers)
    assert (again.headers["Idempotent-Replayed"], again.headers["ETag"]) == ("true", first.headers["ETag"])
    assert again.json()["sample_number"] == first.json()["sample_number"] == 4
    other = correct(admin, key, {"sequence": 4, "action": "void"}, **headers)
    assert other.status_code == 422
