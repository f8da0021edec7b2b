"""Exact risks and sample numbers over HTTP."""

from typing import Any

import httpx
import pytest

from tests.api.examples import PUMP, SEAL, SHAFT, WELD, Namer, pointers, with_plan, with_test


def test_a_stored_plan_tells_what_it_promises(admin: httpx.Client, new_name: Namer) -> None:
    """NIST/SEMATECH e-Handbook, section 6.2.6; exact figures by an independent computation."""
    name = with_plan(admin, new_name("plan"), SEAL)
    found = admin.get(f"/v1/plans/{name}/characteristics?at=0.01&at=0.1&at=0&at=1").json()
    assert found["attained"]["alpha"] == pytest.approx(1 - 0.977953, abs=5e-7)
    assert found["attained"]["beta"] == pytest.approx(0.099579, abs=5e-7)
    means = [point["average_sample_number"] for point in found["points"]]
    assert means == pytest.approx([30.21273, 22.36915, 24.0, 2.0], abs=5e-6)
    assert found["points"][2]["quantiles"] == {"0.5": 24, "0.9": 24, "0.95": 24, "0.99": 24}


@pytest.mark.parametrize("plan", [SEAL, WELD, PUMP, SHAFT])
def test_every_family_has_a_curve_for_plotting(admin: httpx.Client, new_name: Namer, plan: dict[str, Any]) -> None:
    name = with_plan(admin, new_name("plan"), plan)
    found = admin.get(f"/v1/plans/{name}/characteristics").json()
    curve = [point["probability_of_acceptance"] for point in found["points"]]
    falls = plan["h1"] > plan["h0"]
    assert len(curve) == 51
    assert curve == sorted(curve, reverse=falls)
    assert found["error_bound"] < 1e-9
    designed = admin.post("/v1/characteristics", json={"name": "draft", **plan, "at": [plan["h0"]]}).json()
    assert designed["points"][0]["probability_of_acceptance"] == pytest.approx(
        1 - found["attained"]["alpha"], abs=1e-12
    )
    assert admin.get("/v1/plans/draft").status_code == 404


def test_failures_and_time_obey_their_law(admin: httpx.Client, new_name: Namer) -> None:
    """E[failures] = E[time] / mean life."""
    name = with_plan(admin, new_name("plan"), PUMP)
    point = admin.get(f"/v1/plans/{name}/characteristics?at=700").json()["points"][0]
    assert point["average_failures"] == pytest.approx(point["average_exposure"] / 700, rel=1e-14)
    assert point["average_sample_number"] is None


@pytest.mark.parametrize("at", ["-0.1", "1.1", "nan", "x"])
def test_a_parameter_outside_the_family_is_refused(admin: httpx.Client, new_name: Namer, at: str) -> None:
    name = with_plan(admin, new_name("plan"), SEAL)
    answer = admin.get(f"/v1/plans/{name}/characteristics?at={at}")
    assert answer.status_code == 422
    assert pointers(answer) == ["/at/0"]


def test_too_much_is_refused_with_the_limit(admin: httpx.Client) -> None:
    plan = {"name": "draft", **SEAL, "h0": 1e-6, "h1": 1.1e-6}
    answer = admin.post("/v1/characteristics", json=plan)
    assert answer.status_code == 422
    assert answer.json()["type"].endswith(":computation-too-large")
    assert "10000000 looks" in answer.json()["detail"]
    many = admin.post("/v1/characteristics", json={"name": "draft", **SEAL, "at": [0.1] * 501})
    assert pointers(many) == ["/at"]


def test_the_fixed_sample_and_the_approximations_stand_beside(admin: httpx.Client) -> None:
    """N = 52, c = 2 (computed independently); the normal test needs 6.92 where Wald says 5.30 and Siegmund 6.65."""
    seal = admin.post("/v1/characteristics", json={"name": "draft", **SEAL, "at": [0.01]}).json()
    assert (seal["fixed_sample"]["size"], seal["fixed_sample"]["acceptance_limit"]) == (52, 2)
    assert seal["fixed_sample"]["saving_at_h0"] == pytest.approx(1 - 30.21273 / 52, abs=1e-6)
    assert seal["points"][0]["wald"]["probability_of_acceptance"] == pytest.approx(0.95, abs=1e-12)
    shaft = {**SHAFT, "at": [10.0], "name": "draft"}
    point = admin.post("/v1/characteristics", json=shaft).json()["points"][0]
    assert point["average_sample_number"] == pytest.approx(6.92007795, abs=5e-9)
    assert point["wald"]["average"] == pytest.approx(5.29999, abs=5e-6)
    assert point["siegmund"]["average"] == pytest.approx(6.65125, abs=5e-6)
    walled = {"name": "draft", **SEAL, "truncation": {"sample_number": 100}, "at": [0.01]}
    assert admin.post("/v1/characteristics", json=walled).json()["points"][0]["wald"] is None


def test_turning_a_plan_round_turns_its_fixed_sample_round(admin: httpx.Client) -> None:
    plan = {"name": "draft", "family": "bernoulli", "h0": 0.99, "h1": 0.90, "alpha": 0.05, "beta": 0.10}
    fixed = admin.post("/v1/characteristics", json=plan).json()["fixed_sample"]
    assert (fixed["size"], fixed["acceptance_limit"], fixed["accepts_at_most"]) == (52, 50, False)


def test_a_rehearsal_answers_as_the_test_would_and_stores_nothing(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    plan = admin.get(f"/v1/tests/{key}").json()["plan"]
    body = {"values": [0, 1, *[0] * 90]}
    rehearsed = admin.post(f"/v1/plans/{plan}/rehearsal", json=body).json()
    assert admin.get(f"/v1/tests/{key}").json()["version"] == 1
    posted = admin.post(f"/v1/tests/{key}/observations", json=body).json()
    path = admin.get(f"/v1/tests/{key}/path").json()
    for name in ("decision", "log_likelihood_ratio", "sample_number", "total", "overrun"):
        assert rehearsed[name] == posted[name]
    assert (rehearsed["points"], rehearsed["region"]) == (path["points"], path["region"])
    assert rehearsed["cause"] == posted["decided"]["cause"]
    bad = admin.post(f"/v1/plans/{plan}/rehearsal", json={"values": [0, 3]})
    assert pointers(bad) == ["/values/1"]
