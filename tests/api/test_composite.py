"""Composite hypotheses over HTTP, from plan to decision."""

from typing import Any

import httpx
import pytest

from tests.api.examples import Namer, pointers, with_test

DRIFT: dict[str, Any] = {
    "family": "normal",
    "h0": 10.0,
    "alpha": 0.05,
    "statistic": "mixture",
    "sides": 2,
    "known": {"sigma": 0.6, "prior": {"tau": 0.3}},
}
LEAK: dict[str, Any] = {
    "family": "bernoulli",
    "h0": 0.05,
    "alpha": 0.05,
    "statistic": "generalised",
    "truncation": {"sample_number": 60},
}


def test_a_two_sided_mixture_goes_from_plan_to_a_rejection_with_a_direction(
    admin: httpx.Client, new_name: Namer
) -> None:
    key = with_test(admin, new_name, DRIFT)
    state = admin.get(f"/v1/tests/{key}").json()
    plan = admin.get(f"/v1/plans/{state['plan']}").json()
    assert (plan["h1"], plan["beta"], plan["sides"], plan["boundaries"]) == (None, None, 2, "strict")
    assert plan["known"] == DRIFT["known"]
    assert plan["thresholds"] == {"accept": None, "reject": pytest.approx(2.995732273553991)}
    assert (plan["lines"], plan["attained"]) == (None, None)
    assert state["outlook"]["accept"] is None
    assert state["outlook"]["reject"].startswith("a measurement of at least ")
    assert state["outlook"]["reject_below"].startswith("a measurement of at most ")
    assert state["confidence_sequence"] == {"level": 0.95, "lower": None, "upper": None}

    state = admin.post(f"/v1/tests/{key}/observations", json={"values": [9.6, 9.4, 9.7]}).json()
    assert state["decision"] == "continue"
    assert state["always_valid_p_value"] < 1.0
    limits = state["confidence_sequence"]
    assert limits["lower"] < 9.5667 < limits["upper"]
    decided = admin.post(f"/v1/tests/{key}/observations", json={"values": [9.2, 9.3, 9.1, 9.4, 9.2, 9.0]}).json()
    assert (decided["decision"], decided["decided"]["direction"]) == ("reject", "below")
    assert decided["always_valid_p_value"] <= 0.05
    assert decided["confidence_sequence"]["upper"] < 10.0
    path = admin.get(f"/v1/tests/{key}/path").json()
    assert path["points"][0]["confidence_sequence"] == {"level": 0.95, "lower": None, "upper": None}
    assert path["points"][-1]["always_valid_p_value"] == decided["always_valid_p_value"]
    assert path["region"][-1]["reject_below"] < path["region"][-1]["reject"]
    outlook = admin.get(f"/v1/tests/{key}/outlook").json()
    assert (outlook["accept"], outlook["reject_below"], outlook["expected"]) == (None, None, [])


def test_a_plan_that_may_go_on_for_ever_says_so_when_asked(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, DRIFT)
    plan = admin.get(f"/v1/tests/{key}").json()["plan"]
    answer = admin.get(f"/v1/plans/{plan}/characteristics")
    assert (answer.status_code, pointers(answer)) == (422, ["/truncation"])
    assert "go on for ever" in answer.json()["detail"]
    assert admin.get(f"/v1/tests/{key}/outlook").json()["expected"] == []
    closed = admin.post("/v1/characteristics", json={**DRIFT, "truncation": {"sample_number": 40}, "at": [10.0]})
    assert closed.status_code == 200
    assert closed.json()["attained"]["beta"] is None
    assert closed.json()["attained"]["alpha"] < 0.05
    assert closed.json()["fixed_sample"] is None


def test_a_generalised_plan_is_calibrated_accepts_at_its_wall_and_names_its_worst_point(
    admin: httpx.Client, new_name: Namer
) -> None:
    key = with_test(admin, new_name, LEAK)
    name = admin.get(f"/v1/tests/{key}").json()["plan"]
    plan = admin.get(f"/v1/plans/{name}").json()
    assert (plan["boundaries"], plan["statistic"], plan["h1"]) == ("calibrated", "generalised", None)
    assert 0.03 < plan["attained"]["alpha"] <= 0.05
    assert (plan["attained"]["alpha_at"], plan["attained"]["beta"]) == (0.05, None)
    found = admin.get(f"/v1/plans/{name}/characteristics").json()
    assert found["points"][0]["probability_of_acceptance"] > found["points"][-1]["probability_of_acceptance"]
    state = admin.post(f"/v1/tests/{key}/observations", json={"values": [0] * 59}).json()
    assert (state["decision"], state["always_valid_p_value"]) == ("continue", None)
    assert state["outlook"]["accept"] == "1 unit, whatever they show"
    outlook = admin.get(f"/v1/tests/{key}/outlook").json()
    assert [expected["under"] for expected in outlook["expected"]] == ["h0", "estimate"]
    decided = admin.post(f"/v1/tests/{key}/observations", json={"values": [0]}).json()
    assert (decided["decision"], decided["decided"]["cause"]) == ("accept", "truncation")
    rehearsal = admin.post(f"/v1/plans/{name}/rehearsal", json={"values": [1, 1, 1]}).json()
    assert rehearsal["decision"] == "reject"


@pytest.mark.parametrize(
    ("change", "pointer"),
    [
        ({"known": {"sigma": 0.6}}, "/known/prior"),
        ({"known": {"sigma": 0.6, "prior": {"tau": 0.0}}}, "/known/prior/tau"),
        ({"known": {"sigma": 0.6, "prior": 3.0}}, "/known/prior"),
        ({"known": {"sigma": {"tau": 1.0}, "prior": {"tau": 0.3}}}, "/known/sigma"),
        ({"h1": 11.0}, "/h1"),
        ({"boundaries": "wald"}, "/boundaries"),
        ({"direction": "above"}, "/direction"),
        ({"sides": "two"}, "/sides"),
    ],
)
def test_what_does_not_fit_is_refused_and_nothing_is_stored(
    admin: httpx.Client, new_name: Namer, change: dict[str, Any], pointer: str
) -> None:
    name = new_name("plan")
    answer = admin.post("/v1/plans", json={"name": name, **DRIFT, **change})
    assert (answer.status_code, pointers(answer)[0]) == (422, pointer)
    assert admin.get(f"/v1/plans/{name}").status_code == 404
