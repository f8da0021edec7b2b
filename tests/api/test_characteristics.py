"""Exact risks and sample numbers over HTTP."""

from typing import Any

import httpx
import pytest

from tests.api.examples import PUMP, SEAL, SHAFT, WELD, Namer, pointers, with_plan


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
    assert "100000 steps" in answer.json()["detail"]
    many = admin.post("/v1/characteristics", json={"name": "draft", **SEAL, "at": [0.1] * 501})
    assert pointers(many) == ["/at"]
