"""Posting observations and reading them back over HTTP."""

import csv
import io
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import httpx
import pytest
from sqlalchemy import create_engine, text

from tests.api.examples import PUMP, SEAL, SHAFT, WELD, Namer, pointers, with_plan, with_test
from tests.running import Running


def post(client: httpx.Client, key: str, body: dict[str, Any], **headers: str) -> httpx.Response:
    return client.post(f"/v1/tests/{key}/observations", json=body, headers=headers)


def test_twenty_four_conforming_units_are_accepted(admin: httpx.Client, new_name: Namer) -> None:
    """NIST/SEMATECH e-Handbook, section 6.2.6: the first acceptance number, 0, stands at n = 24."""
    key = with_test(admin, new_name, SEAL)
    assert post(admin, key, {"values": [0] * 23}).json()["decision"] == "continue"
    answer = post(admin, key, {"values": [0, 0, 1]}).json()
    assert answer["decision"] == "accept"
    assert (answer["first_sequence"], answer["last_sequence"]) == (24, 26)
    assert (answer["sample_number"], answer["total"], answer["overrun"]) == (24, 0, 2)
    assert answer["decided"]["cause"] == "boundary"
    assert answer["decided"]["sample_number"] == 24


def test_a_decided_test_counts_no_further_observation(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    decided = post(admin, key, {"values": [1, 1]}).json()
    later = post(admin, key, {"values": [0] * 50}).json()
    assert decided["decision"] == later["decision"] == "reject"
    moved = {"overrun", "version", "updated_at", "first_sequence", "last_sequence"}
    assert {k: v for k, v in later.items() if k not in moved} == {k: v for k, v in decided.items() if k not in moved}
    assert later["overrun"] == 50


def test_acceptance_may_fall_inside_a_report(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, PUMP)
    answer = post(admin, key, {"observations": [{"time": 9000.0, "failed": True}]}).json()
    # Epstein and Sobel (1955): without a failure, accept at -ln B / (1/500 - 1/1000) unit-hours.
    assert answer["decision"] == "accept"
    assert answer["exposure"] == pytest.approx(2197.2245773362196, rel=1e-12)
    assert answer["total"] == 0


def test_every_family_reads_back_what_was_posted(admin: httpx.Client, new_name: Namer) -> None:
    cases: list[tuple[dict[str, Any], list[dict[str, Any]], list[str]]] = [
        (SEAL, [{"value": 1, "size": 40, "unit": "t-1"}], ["value", "size"]),
        (WELD, [{"value": 2, "exposure": 1.5, "observed_at": "2031-05-04T09:30:00+02:00"}], ["value", "exposure"]),
        (PUMP, [{"time": 12.25, "failed": True}, {"time": 0.1, "failed": False}], ["time", "failed"]),
        (SHAFT, [{"value": 10.1}, {"value": 10.2}], ["value"]),
    ]
    for plan, observations, fields in cases:
        key = with_test(admin, new_name, plan)
        assert post(admin, key, {"observations": observations}).status_code == 201
        items = admin.get(f"/v1/tests/{key}/observations").json()["items"]
        assert [item["sequence"] for item in items] == list(range(1, len(observations) + 1))
        for item, posted in zip(items, observations, strict=True):
            assert {name: item[name] for name in posted} == posted
            assert set(fields) <= item.keys()
        table = admin.get(f"/v1/tests/{key}/observations", headers={"Accept": "text/csv"})
        rows = list(csv.DictReader(io.StringIO(table.text)))
        assert [row["sequence"] for row in rows] == [str(item["sequence"]) for item in items]
        assert rows[0][fields[0]] == str(observations[0][fields[0]])
        assert rows[0]["submitted_by"] == "the-administrator"


def test_the_log_is_paged_and_marks_overrun(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    post(admin, key, {"values": [0] * 20})
    post(admin, key, {"values": [0] * 10})
    seen: list[dict[str, Any]] = []
    url: str | None = f"/v1/tests/{key}/observations?limit=7"
    while url:
        page = admin.get(url)
        seen += page.json()["items"]
        url = page.links.get("next", {}).get("url")
    assert [item["sequence"] for item in seen] == list(range(1, 31))
    assert [item["counted"] for item in seen] == [True] * 24 + [False] * 6


def test_an_unchanged_log_says_as_well_what_it_varies_by(admin: httpx.Client, new_name: Namer) -> None:
    path = f"/v1/tests/{with_test(admin, new_name, SEAL)}/observations"
    for accept in ("application/json", "text/csv"):
        full = admin.get(path, headers={"Accept": accept})
        unchanged = admin.get(path, headers={"Accept": accept, "If-None-Match": full.headers["ETag"]})
        assert (unchanged.status_code, unchanged.headers["Vary"]) == (304, full.headers["Vary"])


def test_a_repeated_submission_is_answered_as_before(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    first = post(admin, key, {"values": [0, 1]}, **{"Idempotency-Key": "a-1"})
    post(admin, key, {"values": [1]})
    again = post(admin, key, {"values": [0, 1]}, **{"Idempotency-Key": "a-1"})
    assert again.json() == first.json()
    assert again.status_code == first.status_code
    assert again.headers["Idempotent-Replayed"] == "true"
    assert admin.get(f"/v1/tests/{key}").json()["sample_number"] == 3
    other = post(admin, key, {"values": [0, 0]}, **{"Idempotency-Key": "a-1"})
    assert other.status_code == 422
    assert other.json()["type"].endswith(":idempotency-key-reused")


def test_two_stations_with_one_idempotency_key_do_not_swallow_each_other(
    admin: httpx.Client, service: Running, new_name: Namer
) -> None:
    key = with_test(admin, new_name, SEAL)
    post(admin, key, {"values": [0]}, **{"Idempotency-Key": "1"}).raise_for_status()
    with service.client("collector") as other:
        assert post(other, key, {"values": [0]}, **{"Idempotency-Key": "1"}).status_code == 422


def test_many_retries_at_once_count_once(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    with ThreadPoolExecutor(16) as pool:
        answers = list(
            pool.map(lambda _: post(admin, key, {"values": [0, 0]}, **{"Idempotency-Key": "one"}), range(64))
        )
    assert {answer.status_code for answer in answers} <= {201, 409}
    assert any(answer.status_code == 201 for answer in answers)
    assert admin.get(f"/v1/tests/{key}").json()["sample_number"] == 2


def test_many_writers_leave_no_gap(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SHAFT)
    with ThreadPoolExecutor(16) as pool:
        answers = list(pool.map(lambda _: post(admin, key, {"values": [10.25]}).json(), range(64)))
    assert sorted(answer["first_sequence"] for answer in answers) == list(range(1, 65))
    assert admin.get(f"/v1/tests/{key}").json()["log_likelihood_ratio"] == 0.0


def test_a_unit_is_counted_once(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    post(admin, key, {"observations": [{"value": 0, "unit": "u1"}, {"value": 0, "unit": "u2"}]}).raise_for_status()
    body = {"observations": [{"value": 0, "unit": "u3"}, {"value": 0, "unit": "u2"}, {"value": 0, "unit": "u3"}]}
    answer = post(admin, key, body)
    assert answer.status_code == 409
    assert pointers(answer) == ["/observations/0/unit", "/observations/1/unit", "/observations/2/unit"]
    assert "'u2' was reported as observation 2" in answer.text
    assert admin.get(f"/v1/tests/{key}").json()["sample_number"] == 2
    post(admin, key, {"observations": [{"value": 0, "unit": "u3"}]}).raise_for_status()
    assert post(admin, key, {"observations": [{"value": 0, "unit": " u3 "}]}).status_code == 409


def test_a_rehearsal_counts_a_unit_once_too(admin: httpx.Client, new_name: Namer) -> None:
    plan = with_plan(admin, new_name("plan"), SEAL)
    body = {"observations": [{"value": 0, "unit": "u1"}, {"value": 0, "unit": "u1 "}]}
    answer = admin.post(f"/v1/plans/{plan}/rehearsal", json=body)
    assert (answer.status_code, pointers(answer)) == (409, ["/observations/0/unit", "/observations/1/unit"])


def test_a_write_can_insist_on_the_state_it_saw(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    tag = admin.get(f"/v1/tests/{key}").headers["ETag"]
    accepted = post(admin, key, {"values": [0]}, **{"If-Match": tag})
    assert accepted.status_code == 201
    refused = post(admin, key, {"values": [0]}, **{"If-Match": tag})
    assert refused.status_code == 412
    for malformed in ("something", "1", '"1', '"1" "2"', "", '*, "1"'):
        answer = post(admin, key, {"values": [0]}, **{"If-Match": malformed})
        assert (answer.status_code, pointers(answer)) == (422, ["/If-Match"]), malformed
    for stale in (tag, '"0"', 'W/"2"', '"two"', '"0", "1"'):
        assert post(admin, key, {"values": [0]}, **{"If-Match": stale}).status_code == 412, stale
    assert admin.get(f"/v1/tests/{key}").json()["sample_number"] == 1
    assert post(admin, key, {"values": [0]}, **{"If-Match": '"1" ,, "2",'}).status_code == 201
    assert post(admin, key, {"values": [0]}, **{"If-Match": "*"}).status_code == 201
    current = admin.get(f"/v1/tests/{key}").headers["ETag"]
    assert admin.get(f"/v1/tests/{key}", headers={"If-None-Match": current}).status_code == 304
    assert admin.get(f"/v1/tests/{key}", headers={"If-None-Match": tag}).status_code == 200


BAD_SUBMISSIONS: list[tuple[dict[str, Any], dict[str, Any], str]] = [
    (SEAL, {"values": [0] * 17 + [0.5]}, "/values/17"),
    (SEAL, {"values": [0, 2]}, "/values/1"),
    (SEAL, {"values": [0, -1]}, "/values/1"),
    (SEAL, {"values": [0, "1"]}, "/values/1"),
    (SEAL, {"values": [0, True]}, "/values/1"),
    (SEAL, {"values": [0, None]}, "/values/1"),
    (SEAL, {"values": []}, "/values"),
    (SEAL, {"values": [0] * 2001}, "/values"),
    (SEAL, {"values": [0], "observations": [{"value": 0}]}, ""),
    (SEAL, {}, ""),
    (SEAL, {"values": [0], "note": "x"}, "/note"),
    (SEAL, {"observations": [{"value": 5, "size": 4}]}, "/observations/0/value"),
    (SEAL, {"observations": [{"value": 0, "size": 0}]}, "/observations/0/size"),
    (SEAL, {"observations": [{"value": 0, "exposure": 1.0}]}, "/observations/0/exposure"),
    (SEAL, {"observations": [{"value": 0, "colour": "red"}]}, "/observations/0/colour"),
    (SEAL, {"observations": [{"value": None}]}, "/observations/0/value"),
    (SEAL, {"observations": [{"size": 2}]}, "/observations/0/value"),
    (SEAL, {"observations": [{"value": 0, "unit": ""}]}, "/observations/0/unit"),
    (SEAL, {"observations": [{"value": 0, "unit": "  "}]}, "/observations/0/unit"),
    (SEAL, {"observations": [{"value": 0, "observed_at": "2031-05-04T09:30:00"}]}, "/observations/0/observed_at"),
    (SEAL, {"observations": [{"value": 0, "observed_at": 1935653400}]}, "/observations/0/observed_at"),
    *(
        (SEAL, {"observations": [{"value": 0, "observed_at": moment}]}, "/observations/0/observed_at")
        for moment in (
            "2031-05-04\x0009:30:00+00:00",
            "2031-05-04x09:30:00+00:00",
            "2031-W18-7T09:30:00+00:00",
            "20310504T093000Z",
            "2031-05-04T09:30Z",
            "2031-05-04T09:30:00+00:00:30",
            "2031-02-30T09:30:00Z",
            "0001-01-01T00:00:00+14:00",
            "9999-12-31T23:59:59-14:00",
        )
    ),
    (WELD, {"values": [1, 1.5]}, "/values/1"),
    (WELD, {"observations": [{"value": 1, "exposure": 0.0}]}, "/observations/0/exposure"),
    (WELD, {"observations": [{"value": 1, "exposure": -2.0}]}, "/observations/0/exposure"),
    (PUMP, {"values": [-1.0]}, "/values/0"),
    (PUMP, {"observations": [{"time": 1.0}]}, "/observations/0/failed"),
    (PUMP, {"observations": [{"time": 1.0, "failed": 1}]}, "/observations/0/failed"),
    (PUMP, {"observations": [{"value": 1.0, "failed": True}]}, "/observations/0/time"),
    (SHAFT, {"values": [1e200]}, "/values/0"),
]


@pytest.mark.parametrize(("plan", "body", "pointer"), BAD_SUBMISSIONS)
def test_one_bad_value_rejects_the_whole_submission(
    admin: httpx.Client, new_name: Namer, plan: dict[str, Any], body: dict[str, Any], pointer: str
) -> None:
    key = with_test(admin, new_name, plan)
    answer = post(admin, key, body)
    assert answer.status_code == 422, answer.text
    assert pointer in pointers(answer)
    assert admin.get(f"/v1/tests/{key}").json()["version"] == 1
    assert admin.get(f"/v1/tests/{key}/observations").json()["items"] == []


@pytest.mark.parametrize("number", ["NaN", "Infinity", "1e400", "1e-400", "5e-324", "1" + "0" * 400])
def test_a_value_that_is_not_finite_is_named(admin: httpx.Client, new_name: Namer, number: str) -> None:
    key = with_test(admin, new_name, SHAFT)
    answer = admin.post(
        f"/v1/tests/{key}/observations",
        content=f'{{"values": [1.0, {number}]}}',
        headers={"Content-Type": "application/json"},
    )
    assert answer.status_code == 422, answer.text
    assert pointers(answer) == ["/values/1"]


def test_the_path_begins_at_the_origin_and_ends_at_the_decision(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    post(admin, key, {"values": [0] * 10 + [1] + [0] * 100})
    test = admin.get(f"/v1/tests/{key}").json()
    path = admin.get(f"/v1/tests/{key}/path").json()
    first, last = path["points"][0], path["points"][-1]
    assert (first["sample_number"], first["log_likelihood_ratio"]) == (0, 0.0)
    assert last["log_likelihood_ratio"] == test["log_likelihood_ratio"]
    assert last["sample_number"] == test["decided"]["sample_number"] == len(path["points"]) - 1
    at = {point["sample_number"]: point for point in path["region"]}
    assert (at[24]["accept"], at[24]["reject"]) == (0, 3)
    assert (at[1]["accept"], at[1]["reject"]) == (None, None)
    thinned = admin.get(f"/v1/tests/{key}/path?points=8").json()["points"]
    assert len(thinned) <= 8
    assert (thinned[0], thinned[-1]) == (first, last)


def test_a_closed_test_answers_409(admin: httpx.Client, service: Running, new_name: Namer) -> None:
    """Nothing in the interface closes a test yet, so the row is closed behind the service's back."""
    key = with_test(admin, new_name, SEAL)
    engine = create_engine(service.database_url)
    with engine.begin() as connection:
        connection.execute(text("UPDATE tests SET status = 'closed' WHERE key = :key"), {"key": key})
    engine.dispose()
    answer = post(admin, key, {"values": [0]})
    assert answer.status_code == 409
    assert answer.json()["type"].endswith(":test-closed")
    assert admin.get(f"/v1/tests/{key}/observations").json()["items"] == []
