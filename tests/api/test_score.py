"""Evidence that the caller brings, over HTTP: all that needs no model works, all that does says so."""

import math
from typing import Any

import httpx
import pytest

from tests.api.examples import Namer, pointers, with_plan, with_test

SCORE: dict[str, Any] = {"family": "score", "alpha": 0.05, "beta": 0.10, "boundaries": "strict"}


def test_a_score_goes_from_plan_to_decision(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SCORE)
    state = admin.post(f"/v1/tests/{key}/observations", json={"values": [0.12, -0.4]}).json()
    assert (state["decision"], state["sample_number"]) == ("continue", 2)
    assert state["log_likelihood_ratio"] == state["total"] == pytest.approx(-0.28, abs=1e-15)
    assert state["thresholds"] == {"accept": pytest.approx(math.log(0.10)), "reject": pytest.approx(math.log(20.0))}
    assert state["outlook"]["accept"] == "an increment of at most -2.02259"

    plan = admin.get(f"/v1/plans/{state['plan']}").json()
    assert (plan["h0"], plan["h1"]) == (None, None)
    assert (plan["attained"]["alpha"], plan["attained"]["beta"]) == (0.05, 0.10)
    assert plan["lines"]["slope"] == 0.0
    outlook = admin.get(f"/v1/tests/{key}/outlook").json()
    assert (outlook["expected"], outlook["estimate"]) == ([], None)
    path = admin.get(f"/v1/tests/{key}/path").json()
    assert [point["log_likelihood_ratio"] for point in path["points"]] == pytest.approx([0.0, 0.12, -0.28])
    items = admin.get(f"/v1/tests/{key}/observations").json()["items"]
    assert [item["value"] for item in items] == [0.12, -0.4]

    body = {"observations": [{"value": -2.5, "unit": "run 3"}, {"value": 0.1}]}
    decided = admin.post(f"/v1/tests/{key}/observations", json=body).json()
    assert (decided["decision"], decided["decided"]["sample_number"], decided["overrun"]) == ("accept", 3, 1)
    rehearsed = admin.post(f"/v1/plans/{state['plan']}/rehearsal", json={"values": [0.12, -0.4, -2.5, 0.1]}).json()
    assert (rehearsed["decision"], rehearsed["overrun"]) == ("accept", 1)
    again = admin.post("/v1/plans", json={"name": state["plan"], **SCORE})
    assert again.status_code == 200


def test_questions_that_need_a_model_are_answered_plainly(admin: httpx.Client, new_name: Namer) -> None:
    name = with_plan(admin, new_name("plan"), SCORE)
    for answer in (
        admin.get(f"/v1/plans/{name}/characteristics"),
        admin.get(f"/v1/plans/{name}/characteristics?at=0.5"),
        admin.post("/v1/characteristics", json={**SCORE, "at": [0.5]}),
        admin.post("/v1/characteristics", json={"candidates": [SCORE, SCORE]}),
        admin.post("/v1/characteristics", json={**SCORE, "suggest_truncation": {"inflation": 0.05}}),
    ):
        assert answer.status_code == 422
        assert answer.json()["type"].endswith(":invalid-question")
        assert "model" in answer.text


@pytest.mark.parametrize(
    ("change", "pointer"), [({"h0": 0.0}, "/h0"), ({"boundaries": None}, "/boundaries"), ({"beta": None}, "/beta")]
)
def test_a_score_states_risks_and_nothing_more(
    admin: httpx.Client, new_name: Namer, change: dict[str, Any], pointer: str
) -> None:
    body = {name: value for name, value in {**SCORE, **change}.items() if value is not None}
    answer = admin.post("/v1/plans", json={"name": new_name("plan"), **body})
    assert (answer.status_code, pointers(answer)) == (422, [pointer]), answer.text


@pytest.mark.parametrize("number", ["NaN", "-Infinity", "1e400", "1e101"])
def test_an_increment_that_is_not_finite_is_refused(admin: httpx.Client, new_name: Namer, number: str) -> None:
    key = with_test(admin, new_name, SCORE)
    headers = {"Content-Type": "application/json"}
    content = f'{{"values": [0.5, {number}]}}'
    answer = admin.post(f"/v1/tests/{key}/observations", content=content, headers=headers)
    assert (answer.status_code, pointers(answer)) == (422, ["/values/1"]), answer.text
    assert admin.get(f"/v1/tests/{key}").json()["version"] == 1
