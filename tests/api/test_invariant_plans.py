"""Standardised means and spread about an unknown mean, over HTTP from plan to figures."""

import json
import math
import time
from typing import Any

import httpx
import numpy as np
import pytest

from tests.api.examples import SEAL, Namer, pointers, with_plan, with_test

SHIM: dict[str, Any] = {
    "family": "normal",
    "statistic": "invariant",
    "h0": 0.0,
    "h1": 0.5,
    "alpha": 0.05,
    "beta": 0.10,
    "known": {"reference": 10.0},
}
WIDE: dict[str, Any] = {**SHIM, "boundaries": "given", "thresholds": {"accept": -50.0, "reject": 50.0}}


def post(client: httpx.Client, key: str, body: dict[str, Any]) -> dict[str, Any]:
    answer = client.post(f"/v1/tests/{key}/observations", json=body)
    assert answer.status_code == 201, answer.text
    assert "NaN" not in answer.text
    return answer.json()  # type: ignore[no-any-return]


def ended(client: httpx.Client, location: str) -> dict[str, Any]:
    """The simulation once it is done; the courses made never become fewer."""
    courses, deadline = 0, time.monotonic() + 30.0
    while time.monotonic() < deadline:
        found: dict[str, Any] = client.get(location).json()
        if found["progress"]:
            assert found["progress"]["courses"] >= courses
            courses = found["progress"]["courses"]
        if found["status"] not in {"waiting", "running"}:
            return found
        time.sleep(0.05)
    raise AssertionError("the simulation takes too long")


def with_t(count: int, t: float) -> list[float]:
    """Measurements whose Student's t against 10 is this one."""
    values = np.random.default_rng(count).normal(size=count)
    values = (values - values.mean()) / values.std(ddof=1)
    return [float(10.0 + v + t / math.sqrt(count)) for v in values]


@pytest.mark.parametrize(
    ("count", "t", "delta", "ratio"),
    [(10, 2.5, 0.5, 8.4608086839), (20, 1.0, 0.3, 1.5643150353), (5, -0.7, 1.0, 0.0192493608)],
)
def test_the_state_has_the_ratio_of_the_noncentral_t(
    admin: httpx.Client, new_name: Namer, count: int, t: float, delta: float, ratio: float
) -> None:
    """f(t; n - 1, delta sqrt(n)) / f(t; n - 1), by two independent computations that agree to the digits given."""
    key = with_test(admin, new_name, {**WIDE, "h1": delta})
    state = post(admin, key, {"values": with_t(count, t)})
    assert state["total"] == pytest.approx(t, rel=1e-12)
    assert math.exp(state["log_likelihood_ratio"]) == pytest.approx(ratio, abs=5e-11)


def test_a_test_of_unknown_spread_goes_the_whole_way(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SHIM)
    first = post(admin, key, {"values": [10.4]})
    assert (first["decision"], first["log_likelihood_ratio"], first["total"]) == ("continue", 0.0, 0.0)
    equal = post(admin, key, {"values": [10.4, 10.4]})
    assert (equal["log_likelihood_ratio"], equal["total"], equal["sample_number"]) == (0.0, 0.0, 3)
    state = post(admin, key, {"values": [10.6, 10.1, 10.5]})
    assert state["decision"] == "continue"
    assert state["total"] > 0
    assert state["thresholds"] == {"accept": pytest.approx(-2.2513, abs=1e-4), "reject": pytest.approx(2.89, abs=1e-2)}
    outlook = admin.get(f"/v1/tests/{key}/outlook").json()
    assert outlook["expected"] == []
    assert "simulated" in outlook["reason"]
    for decision in ("accept", "reject"):
        assert (outlook[decision] or {}).get("words") == state["outlook"][decision]
    path = admin.get(f"/v1/tests/{key}/path").json()
    assert path["axis"] == "sample_number"
    assert [point["total"] for point in path["points"]][:4] == [0.0, 0.0, 0.0, 0.0]
    assert path["points"][-1]["total"] == state["total"]
    late = path["region"][-1]
    assert late["accept"] < late["reject"]
    done = post(admin, key, {"values": [10.6, 10.4, 10.6, 10.5, 10.3, 10.7]})
    assert done["decision"] == "reject"
    assert done["overrun"] > 0
    plan = admin.get(f"/v1/plans/{done['plan']}").json()
    assert (plan["family"], plan["parameter"]) == ("normal", "standardised mean, (mean - reference)/sigma")
    assert (plan["lines"], plan["attained"]) == (None, None)
    names = [check["name"] for check in admin.get(f"/v1/tests/{key}/assumptions").json()["checks"]]
    assert names == ["runs", "autocorrelation", "trend", "shape"]


@pytest.mark.parametrize(("sign", "direction"), [(1.0, "above"), (-1.0, "below")])
def test_a_two_sided_rejection_says_its_direction(
    admin: httpx.Client, new_name: Namer, sign: float, direction: str
) -> None:
    key = with_test(admin, new_name, {**SHIM, "family": "normal_two_sample", "known": None, "h1": 1.0, "sides": 2})
    source = np.random.default_rng(2)
    rows = [{"arm": "ab"[i % 2], "value": 5.0 + sign * 2.0 * (i % 2) + source.normal(0, 0.5)} for i in range(40)]
    state = post(admin, key, {"observations": rows})
    assert (state["decision"], state["decided"]["direction"]) == ("reject", direction)
    assert state["total"] * sign > 0
    assert state["exposure"] is None


def test_pairs_have_the_reference_zero(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, {**WIDE, "family": "normal_difference", "known": None})
    differences = with_t(6, 1.5)
    state = post(admin, key, {"observations": [{"a": 0.0, "b": d - 10.0} for d in differences]})
    assert state["total"] == pytest.approx(1.5, rel=1e-12)
    assert [item["a"] for item in admin.get(f"/v1/tests/{key}/observations").json()["items"]] == [0.0] * 6


@pytest.mark.parametrize(
    ("change", "pointer"),
    [({"known": {"sigma": 0.5}}, "/known/sigma"), ({"h1": 0.0}, "/h1"), ({"beta": None}, "/beta")],
)
def test_what_cannot_be_right_is_named_and_not_stored(
    admin: httpx.Client, new_name: Namer, change: dict[str, Any], pointer: str
) -> None:
    name = new_name("bad")
    answer = admin.post("/v1/plans", json={"name": name, **SHIM, **change})
    assert (answer.status_code, pointers(answer)) == (422, [pointer])
    assert admin.get(f"/v1/plans/{name}").status_code == 404


def test_figures_are_simulated_once_and_looked_at_meanwhile(admin: httpx.Client, new_name: Namer) -> None:
    name = with_plan(admin, new_name("plan"), {**SHIM, "h1": 0.8})
    address = f"/v1/plans/{name}/characteristics?at=0&at=0.8&seed=7"
    asked = admin.get(address)
    assert asked.status_code == 202
    assert asked.headers["retry-after"] == "1"
    assert asked.json()["result"] is None
    again = admin.get(address)
    assert again.status_code in {200, 202}
    found = ended(admin, asked.headers["location"])
    assert (found["status"], found["seed"]) == ("done", 7)
    done = admin.get(address)
    assert (done.status_code, done.json()) == (200, found["result"])
    result = found["result"]
    assert (result["method"], result["error_bound"], result["simulation"]["seed"]) == ("simulation", None, 7)
    low, high = result["points"]
    assert result["attained"]["alpha"] == pytest.approx(1 - low["probability_of_acceptance"])
    assert result["attained"]["beta"] == pytest.approx(high["probability_of_acceptance"])
    assert 0 < high["probability_standard_error"] <= 5e-4
    assert high["average_standard_error"] > 0
    assert result["simulation"]["least_average_sample_number"]["h1"] < high["average_sample_number"]
    # What an unstored plan is asked in the same words is the same question.
    draft = admin.post("/v1/characteristics", json={**SHIM, "h1": 0.8, "at": [0.0, 0.8], "seed": 7})
    assert (draft.status_code, draft.json()) == (200, result)


def test_a_simulation_can_be_ended(admin: httpx.Client) -> None:
    asked = admin.post("/v1/characteristics", json={**SHIM, "h1": 0.07, "alpha": 0.01})
    assert asked.status_code == 202
    location = asked.headers["location"]
    assert admin.delete(location).json()["status"] == "ended"
    gone = admin.get(location)
    assert gone.status_code == 404
    assert "again" in gone.json()["detail"]
    assert admin.delete(location).status_code == 404


def test_questions_that_cannot_be_simulated_are_refused(admin: httpx.Client, new_name: Namer) -> None:
    long = admin.post("/v1/characteristics", json={**SHIM, "h1": 0.001})
    assert long.json()["type"].endswith(":computation-too-large")
    far = admin.post("/v1/characteristics", json={**SHIM, "at": [0.0, 500.0]})
    assert pointers(far) == ["/at/1"]
    assert pointers(admin.post("/v1/characteristics", json={**SEAL, "seed": 1})) == ["/seed"]
    name = with_plan(admin, new_name("plan"), SEAL)
    assert pointers(admin.get(f"/v1/plans/{name}/characteristics?seed=1")) == ["/seed"]
    beside = admin.post("/v1/characteristics", json={"candidates": [SHIM, SHIM]})
    assert beside.json()["type"].endswith(":invalid-question")
    suggested = admin.post("/v1/characteristics", json={**SHIM, "suggest_truncation": {"inflation": 0.1}})
    assert pointers(suggested) == ["/suggest_truncation"]


def test_a_calibrated_plan_is_stored_with_what_the_simulation_found(admin: httpx.Client, new_name: Namer) -> None:
    content = {**SHIM, "h1": 2.0, "boundaries": "calibrated", "truncation": {"sample_number": 9}}
    name = with_plan(admin, new_name("plan"), content)
    stored = admin.get(f"/v1/plans/{name}").json()
    attained = stored["attained"]
    assert attained["alpha"] < attained["alpha_limit"] <= 0.05
    assert attained["beta"] < attained["beta_limit"] <= 0.10
    assert (attained["confidence"], attained["seed"]) == (0.95, 1)
    assert attained["alpha_standard_error"] > 0
    assert admin.post("/v1/plans", json={"name": name, **content}).status_code == 200


def test_spread_about_an_unknown_mean_goes_the_whole_way(admin: httpx.Client, new_name: Namer) -> None:
    plan = {"family": "normal_variance", "h0": 1.0, "h1": 2.0, "alpha": 0.05, "beta": 0.10}
    key = with_test(admin, new_name, {**plan, "truncation": {"sample_number": 12}})
    state = post(admin, key, {"values": [1e6 - 1.0, 1e6, 1e6 + 1.0]})
    assert (state["sample_number"], state["total"]) == (3, 2.0)
    assert state["log_likelihood_ratio"] == pytest.approx(2.0 * 3 / 8 - 2 * math.log(2.0), rel=1e-12)
    path = admin.get(f"/v1/tests/{key}/path").json()
    assert path["region"][-1]["sample_number"] == 12
    outlook = admin.get(f"/v1/tests/{key}/outlook").json()
    assert outlook["room"]["sample_number"] == 9
    assert outlook["estimate"] == 1.0
    found = admin.get(f"/v1/plans/{state['plan']}/characteristics?at=1.0").json()
    assert 2 <= found["points"][0]["quantiles"]["0.5"] <= 12
    assert json.dumps(found, allow_nan=False)
