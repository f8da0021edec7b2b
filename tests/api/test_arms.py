"""Families that compare two arms, over HTTP from plan to log."""

import csv
import io
from typing import Any

import httpx
import pytest

from tests.api.examples import Namer, pointers, with_test

GRIP: dict[str, Any] = {"family": "paired", "h0": 1.0, "h1": 3.0, "alpha": 0.05, "beta": 0.10}

PAIRS: list[dict[str, Any]] = [{"a": 1, "b": 1}, {"a": 1, "b": 0}, {"a": 0, "b": 1, "unit": "p 3"}, {"a": 0, "b": 0}]

DOSE: dict[str, Any] = {**GRIP, "family": "poisson_ratio", "h1": 0.5, "known": {"exposure_ratio": 2.0}}

LENS: dict[str, Any] = {
    **GRIP,
    "family": "normal_difference",
    "h0": 0.0,
    "h1": 0.5,
    "known": {"sigma_a": 0.3, "sigma_b": 0.4},
}

CASES: list[tuple[dict[str, Any], list[dict[str, Any]], int, float]] = [
    (GRIP, PAIRS, 2, 1),
    (DOSE, [{"a": 3, "b": 4}, {"a": 0, "b": 0}, {"a": 0, "b": 1, "unit": "week 3"}], 8, 5),
    (LENS, [{"a": 10.1, "b": 10.3}, {"a": 10.0, "b": 10.2, "unit": "cut 2"}], 2, 0.4),
]


def post(client: httpx.Client, key: str, body: dict[str, Any]) -> httpx.Response:
    return client.post(f"/v1/tests/{key}/observations", json=body)


@pytest.mark.parametrize(("plan", "rows", "sample_number", "total"), CASES)
def test_two_arms_go_the_whole_way(
    admin: httpx.Client,
    new_name: Namer,
    plan: dict[str, Any],
    rows: list[dict[str, Any]],
    sample_number: int,
    total: float,
) -> None:
    key = with_test(admin, new_name, plan)
    answer = post(admin, key, {"observations": rows})
    assert answer.status_code == 201, answer.text
    state = answer.json()
    assert (state["decision"], state["sample_number"], state["observations"]) == ("continue", sample_number, len(rows))
    assert state["total"] == pytest.approx(total)
    assert state["outlook"]["accept"]
    assert state["outlook"]["reject"]

    items = admin.get(f"/v1/tests/{key}/observations").json()["items"]
    assert [{name: item[name] for name in row} for item, row in zip(items, rows, strict=True)] == rows
    table = admin.get(f"/v1/tests/{key}/observations", headers={"Accept": "text/csv"}).text
    assert [(row["a"], row["b"]) for row in csv.DictReader(io.StringIO(table))] == [
        (str(row["a"]), str(row["b"])) for row in rows
    ]

    path = admin.get(f"/v1/tests/{key}/path").json()
    assert [point["sequence"] for point in path["points"]] == list(range(len(rows) + 1))
    assert path["points"][-1]["log_likelihood_ratio"] == state["log_likelihood_ratio"]
    outlook = admin.get(f"/v1/tests/{key}/outlook").json()
    assert [expected["under"] for expected in outlook["expected"]] == ["h0", "h1", "estimate"]
    assert outlook["error_bound"] < 1e-9

    rehearsed = admin.post("/v1/rehearsal", json={"plan": plan, "submission": {"observations": rows}}).json()
    assert rehearsed["points"] == path["points"]
    found = admin.get(f"/v1/plans/{state['plan']}/characteristics").json()
    curve = [point["probability_of_acceptance"] for point in found["points"]]
    assert curve == sorted(curve, reverse=plan["h1"] > plan["h0"])
    assert found["fixed_sample"]["size"] > 0
    calibrated = {**plan, "boundaries": "calibrated", "truncation": {"sample_number": 120}}
    stored = admin.post("/v1/plans", json={"name": new_name("plan"), **calibrated}).json()
    assert stored["attained"]["alpha"] <= plan["alpha"] * (1 + 1e-9)
    assert stored["attained"]["beta"] <= plan["beta"] * (1 + 1e-9)


BAD: list[tuple[dict[str, Any], dict[str, Any], str]] = [
    (GRIP, {"values": [0, 1]}, "/values"),
    (GRIP, {"observations": [{"a": 0}]}, "/observations/0/b"),
    (GRIP, {"observations": [{"b": 0}]}, "/observations/0/a"),
    (GRIP, {"observations": [{"a": 0, "b": 1}, {"a": 0, "b": 2}]}, "/observations/1/b"),
    (GRIP, {"observations": [{"a": True, "b": 1}]}, "/observations/0/a"),
    (GRIP, {"observations": [{"a": 0, "b": None}]}, "/observations/0/b"),
    (GRIP, {"observations": [{"a": 0, "b": 1, "size": 1}]}, "/observations/0/size"),
    (DOSE, {"values": [0, 1]}, "/values"),
    (LENS, {"values": [0.5]}, "/values"),
    (LENS, {"observations": [{"a": 10.0}]}, "/observations/0/b"),
    (LENS, {"observations": [{"a": 10.0, "b": 1e200}]}, "/observations/0/b"),
    (DOSE, {"observations": [{"b": 4}]}, "/observations/0/a"),
    (DOSE, {"observations": [{"a": 3, "b": 4, "exposure": 2.0}]}, "/observations/0/exposure"),
    (DOSE, {"observations": [{"a": 3, "b": 0.5}]}, "/observations/0/b"),
]


@pytest.mark.parametrize(("plan", "body", "pointer"), BAD)
def test_a_bad_pair_refuses_the_whole_submission(
    admin: httpx.Client, new_name: Namer, plan: dict[str, Any], body: dict[str, Any], pointer: str
) -> None:
    key = with_test(admin, new_name, plan)
    answer = post(admin, key, body)
    assert (answer.status_code, pointers(answer)) == (422, [pointer]), answer.text
    assert admin.get(f"/v1/tests/{key}").json()["version"] == 1


def test_one_pair_may_carry_one_serial_number(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, GRIP)
    post(admin, key, {"observations": PAIRS}).raise_for_status()
    assert post(admin, key, {"observations": [{"a": 0, "b": 1, "unit": "p 3"}]}).status_code == 409


def test_arms_measured_one_at_a_time_go_the_whole_way(admin: httpx.Client, new_name: Namer) -> None:
    """By hand: 2 in a and 1 in b are 2/(2 + .36(1 - 2)) = 1.2195 pairs, and the averages differ by .3."""
    plan = {**LENS, "family": "normal_two_sample", "truncation": {"exposure": 40.0}}
    key = with_test(admin, new_name, plan)
    rows = [{"arm": "a", "value": 10.1}, {"arm": "a", "value": 10.3, "unit": "cut 9"}, {"arm": "b", "value": 10.5}]
    first = post(admin, key, {"observations": rows[:2]}).json()
    assert (first["log_likelihood_ratio"], first["exposure"], first["sample_number"]) == (0.0, 0.0, 2)
    state = post(admin, key, {"observations": rows[2:]}).json()
    assert state["exposure"] == pytest.approx(2 / 1.64, rel=1e-14)
    assert state["total"] == pytest.approx(0.3 * 2 / 1.64, rel=1e-12)
    assert state["outlook"]["accept"].startswith("a measurement in b of at most ")

    items = admin.get(f"/v1/tests/{key}/observations").json()["items"]
    assert [{name: item[name] for name in row} for item, row in zip(items, rows, strict=True)] == rows
    table = admin.get(f"/v1/tests/{key}/observations", headers={"Accept": "text/csv"}).text
    assert [(row["arm"], row["value"]) for row in csv.DictReader(io.StringIO(table))] == [
        ("a", "10.1"),
        ("a", "10.3"),
        ("b", "10.5"),
    ]
    path = admin.get(f"/v1/tests/{key}/path").json()
    assert path["axis"] == "exposure"
    assert path["points"][-1]["exposure"] == state["exposure"]
    outlook = admin.get(f"/v1/tests/{key}/outlook").json()
    assert outlook["room"]["exposure"] == pytest.approx(40 - 2 / 1.64)
    assert outlook["expected"][0]["further_sample_number"] is None
    assert outlook["expected"][0]["further_exposure"]["average"] > 0
    rehearsed = admin.post("/v1/rehearsal", json={"plan": plan, "submission": {"observations": rows}}).json()
    assert rehearsed["log_likelihood_ratio"] == state["log_likelihood_ratio"]
    point = admin.get(f"/v1/plans/{state['plan']}/characteristics?at=0.25").json()["points"][0]
    assert point["average_sample_number"] is None
    assert point["average_exposure"] > 10


@pytest.mark.parametrize(
    ("row", "pointer"),
    [
        ({"arm": "c", "value": 1.0}, "/observations/0/arm"),
        ({"arm": None, "value": 1.0}, "/observations/0/arm"),
        ({"arm": 1, "value": 1.0}, "/observations/0/arm"),
        ({"value": 1.0}, "/observations/0/arm"),
        ({"arm": "a"}, "/observations/0/value"),
    ],
)
def test_an_arm_that_is_not_there_is_named(
    admin: httpx.Client, new_name: Namer, row: dict[str, Any], pointer: str
) -> None:
    key = with_test(admin, new_name, {**LENS, "family": "normal_two_sample"})
    answer = post(admin, key, {"observations": [row]})
    assert (answer.status_code, pointers(answer)) == (422, [pointer]), answer.text
