"""Choosing among plans, standard plans, tables and what is still needed, over HTTP."""

from typing import Any

import httpx
import pytest

from tests.api.examples import PUMP, SEAL, SHAFT, WELD, Namer, pointers, with_plan, with_test

TABLE = [
    {"sample_number": 10, "accept": 0, "reject": 3},
    {"sample_number": 20, "accept": None, "reject": 4},
    {"sample_number": 30, "accept": 3, "reject": 4},
]
STAGED = {"family": "bernoulli", "h0": 0.05, "h1": 0.2, "alpha": 0.1, "beta": 0.1, "boundaries": "table"}
TIMES = [{"failures": 0, "accept_at": 3.0}, {"failures": 2, "accept_at": 6.0}, {"failures": 3, "reject_at": 6.0}]
TIMED = {"family": "exponential", "h0": 3.0, "h1": 1.0, "alpha": 0.2, "beta": 0.2, "boundaries": "table"}


def test_candidates_stand_side_by_side(admin: httpx.Client) -> None:
    """p0 = 1 %, p1 = 5 %, alpha = 5 %, beta = 10 %: what each boundary rule and truncation really promises."""
    question = {"family": "bernoulli", "h0": 0.01, "h1": 0.05, "alpha": 0.05, "beta": 0.10}
    rules: list[dict[str, Any]] = [
        {"name": "wald"},
        {"name": "strict", "boundaries": "strict"},
        {"name": "exact", "boundaries": "calibrated"},
        {"name": "exact-200", "boundaries": "calibrated", "truncation": {"sample_number": 200}},
    ]
    body = {"candidates": [{**question, **rule} for rule in rules], "at": [0.01, 0.05]}
    found = {answer["name"]: answer for answer in admin.post("/v1/characteristics", json=body).json()["candidates"]}
    assert list(found) == [rule["name"] for rule in rules]
    for name in ("strict", "exact", "exact-200"):
        assert found[name]["attained"]["alpha"] <= 0.05
        assert found[name]["attained"]["beta"] <= 0.10
    average = {name: answer["points"][0]["average_sample_number"] for name, answer in found.items()}
    assert average["exact"] < average["strict"]
    alone = admin.post("/v1/characteristics", json={**question, "at": [0.01, 0.05]}).json()
    assert alone["points"] == found["wald"]["points"]
    curve = admin.post("/v1/characteristics", json={"candidates": body["candidates"]}).json()["candidates"]
    assert len({tuple(point["parameter"] for point in answer["points"]) for answer in curve}) == 1


@pytest.mark.parametrize(
    ("body", "pointer"),
    [
        ({"candidates": [SEAL, {**SEAL, "alpha": 1.2}]}, "/candidates/1/alpha"),
        ({"candidates": [SEAL, WELD]}, "/candidates/1/family"),
        ({"candidates": [SEAL], "h0": 0.1}, "/h0"),
        ({"candidates": []}, "/candidates"),
        ({"candidates": [SEAL] * 9}, "/candidates"),
        ({"at": [0.1]}, "/family"),
        ({**SEAL, "suggest_truncation": {"inflation": 0.0}}, "/suggest_truncation/inflation"),
        ({**SEAL, "suggest_truncation": {"inflation": 7.0}}, "/suggest_truncation/inflation"),
        ({**STAGED, "table": TABLE, "suggest_truncation": {"inflation": 0.1}}, "/suggest_truncation"),
        ({**SEAL, "boundaries": "calibrated", "truncation": {"sample_number": 30}}, "/truncation"),
        ({**SEAL, "boundaries": "calibrated", "thresholds": {"accept": -1.0, "reject": 1.0}}, "/thresholds"),
    ],
)
def test_a_question_that_cannot_be_right_is_refused(admin: httpx.Client, body: dict[str, Any], pointer: str) -> None:
    answer = admin.post("/v1/characteristics", json=body)
    assert answer.status_code == 422
    assert pointer in pointers(answer)


@pytest.mark.parametrize("plan", [SEAL, SHAFT])
def test_a_suggested_truncation_keeps_both_risks_and_one_less_does_not(
    admin: httpx.Client, plan: dict[str, Any]
) -> None:
    body = {**plan, "boundaries": "calibrated", "at": [plan["h0"], plan["h1"]]}
    found = admin.post("/v1/characteristics", json={**body, "suggest_truncation": {"inflation": 0.05}}).json()
    suggested = found["suggested_truncation"]
    assert suggested["inflation"] <= 0.05
    assert suggested["attained"]["alpha"] <= plan["alpha"] * (1 + 1e-7)
    assert suggested["attained"]["beta"] <= plan["beta"] * (1 + 1e-7)
    open_ones = [point["average_sample_number"] for point in found["points"]]
    again = admin.post("/v1/characteristics", json={**body, "truncation": suggested["truncation"]}).json()
    walled = [point["average_sample_number"] for point in again["points"]]
    assert max(w / o for w, o in zip(walled, open_ones, strict=True)) - 1 == pytest.approx(
        suggested["inflation"], abs=1e-9
    )
    less = {"sample_number": suggested["truncation"]["sample_number"] - 1}
    shorter = admin.post("/v1/characteristics", json={**body, "truncation": less})
    if shorter.status_code == 200:
        averages = [point["average_sample_number"] for point in shorter.json()["points"]]
        assert max(w / o for w, o in zip(averages, open_ones, strict=True)) - 1 > 0.05


def test_a_calibrated_plan_is_stored_with_its_thresholds_and_found_again(admin: httpx.Client, new_name: Namer) -> None:
    body = {**SHAFT, "boundaries": "calibrated"}
    name = with_plan(admin, new_name("plan"), body)
    stored = admin.get(f"/v1/plans/{name}").json()
    assert stored["attained"]["alpha"] == pytest.approx(0.05, abs=1e-8)
    assert stored["attained"]["beta"] == pytest.approx(0.05, abs=1e-8)
    assert -2.95 < stored["thresholds"]["accept"] < -2.0
    assert admin.post("/v1/plans", json={"name": name, **body}).status_code == 200
    assert admin.post("/v1/plans", json={"name": name, **body, "beta": 0.06}).status_code == 409


def test_a_staged_table_looks_only_at_its_rows(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, {**STAGED, "table": TABLE})
    state = admin.post(f"/v1/tests/{key}/observations", json={"values": [1, 1, 1, 0, 0]}).json()
    assert state["decision"] == "continue"
    assert state["thresholds"] is None
    assert state["outlook"] == {"accept": None, "reject": "5 units, whatever they show", "reject_below": None}
    state = admin.post(f"/v1/tests/{key}/observations", json={"values": [0] * 5}).json()
    assert (state["decision"], state["decided"]["sample_number"], state["decided"]["cause"]) == (
        "reject",
        10,
        "boundary",
    )
    region = admin.get(f"/v1/tests/{key}/path").json()["region"]
    assert [(row["sample_number"], row["accept"], row["reject"]) for row in region[1:]] == [
        (10, 0, 3),
        (20, None, 4),
        (30, 3, 4),
    ]
    plan = admin.get(f"/v1/plans/{state['plan']}").json()
    assert (plan["lines"], plan["thresholds"]) == (None, None)
    assert plan["table"][1] == {"sample_number": 20, "reject": 4}


def test_the_last_row_of_a_table_forces_the_answer(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, {**STAGED, "table": TABLE})
    one = [1, *[0] * 9]
    state = admin.post(f"/v1/tests/{key}/observations", json={"values": one * 3}).json()
    assert (state["decision"], state["decided"]["sample_number"], state["decided"]["cause"]) == (
        "accept",
        30,
        "truncation",
    )


def test_a_standard_plan_runs_from_its_name_alone(admin: httpx.Client, new_name: Namer) -> None:
    """MIL-HDBK-781A plan VI-D at a lower test mean life of 100: accept at 267 without failure."""
    name = new_name("plan")
    answer = admin.post("/v1/plans", json={"name": name, "standard": "MIL-HDBK-781A/VI-D", "scale": 100.0})
    assert answer.status_code == 201, answer.text
    plan = answer.json()
    assert (plan["h0"], plan["h1"], plan["boundaries"]) == (300.0, 100.0, "table")
    assert {name: value for name, value in plan["attained"].items() if value is not None or name.endswith("_at")} == {
        "alpha": pytest.approx(0.182492, abs=5e-7),
        "beta": pytest.approx(0.192581, abs=5e-7),
        "alpha_at": None,
        "beta_at": None,
    }
    assert "MIL-HDBK-781A" in plan["source"]
    key = new_name("lot")
    admin.post("/v1/tests", json={"key": key, "plan": name, "subject": {"kind": "lot", "name": "7"}})
    assert admin.get(f"/v1/tests/{key}").json()["outlook"]["accept"] == "a unit-time of 267 without failure"
    body = {"observations": [{"time": 300.0, "failed": False}]}
    state = admin.post(f"/v1/tests/{key}/observations", json=body).json()
    assert (state["decision"], state["decided"]["exposure"]) == ("accept", 267.0)
    listed = admin.get("/v1/standard-plans").json()["items"]
    assert len(listed) == 10
    assert all(item["attained"]["alpha"] > 0 and item["source"] for item in listed)


@pytest.mark.parametrize(
    ("plan", "pointer"),
    [
        ({**STAGED}, "/table"),
        ({**SEAL, "table": TABLE}, "/table"),
        ({**STAGED, "table": []}, "/table"),
        ({**STAGED, "table": TABLE, "truncation": {"sample_number": 30}}, "/truncation"),
        ({**STAGED, "table": TABLE[:2]}, "/table/1"),
        ({**STAGED, "table": [TABLE[1], TABLE[0], TABLE[2]]}, "/table/1/sample_number"),
        ({**STAGED, "table": [{"sample_number": 5, "accept": 2, "reject": 2}]}, "/table/0/reject"),
        ({**STAGED, "table": [{"sample_number": 5, "accept": 6, "reject": 7}]}, "/table/0/accept"),
        ({**STAGED, "table": [{"sample_number": 5}, TABLE[2]]}, "/table/0"),
        ({**STAGED, "table": [{"sample_number": 5, "accept": 1, "reject": 4}, *TABLE]}, "/table/1/accept"),
        ({**STAGED, "table": [{"sample_number": 5, "failures": 1}]}, "/table/0/failures"),
        ({**STAGED, "table": [{"sample_number": 5, "accept": 10**390}]}, "/table/0/accept"),
        ({**SHAFT, "boundaries": "table", "table": TABLE}, "/table"),
        ({**TIMED, "table": [*TIMES[:2], {"failures": 4, "reject_at": 6.0}]}, "/table/2"),
        ({**TIMED, "table": [*TIMES[:2], {"failures": 3, "reject_at": 5.0}]}, "/table/2"),
        ({**TIMED, "table": [{"failures": 0, "accept_at": 7.0}, *TIMES[1:]]}, "/table/1/accept_at"),
        ({**TIMED, "table": [{"failures": 0, "reject_at": 1.0, "accept_at": 2.0}, *TIMES[1:]]}, "/table/0/reject_at"),
        ({**TIMED, "table": [*TIMES[:1], {"failures": 2, "reject_at": 6.5, "accept_at": 6.0}, TIMES[2]]}, "/table/1"),
        ({**TIMED, "h0": 1.0, "h1": 3.0, "table": TIMES}, "/h1"),
        ({**TIMED, "table": [{"failures": 0, "reject_at": -1.0}]}, "/table/0/reject_at"),
    ],
)
def test_a_table_that_contradicts_itself_is_refused(admin: httpx.Client, plan: dict[str, Any], pointer: str) -> None:
    answer = admin.post("/v1/plans", json={"name": "never-stored", **plan})
    assert answer.status_code == 422
    assert any(found.startswith(pointer) for found in pointers(answer)), answer.text
    assert admin.get("/v1/plans/never-stored").status_code == 404


@pytest.mark.parametrize(
    ("plan", "accept", "reject"),
    [
        (SEAL, "24 conforming units", "2 nonconforming units"),
        (WELD, "an exposure of 2.25129 without a count", "3 counts within an exposure of 0.405465"),
        (PUMP, "a unit-time of 2197.22 without failure", "4 failures within a unit-time of 575.364"),
        (SHAFT, "a measurement of at most 8.77778", "a measurement of at least 11.7222"),
    ],
)
def test_a_new_test_knows_the_shortest_ways(
    admin: httpx.Client, new_name: Namer, plan: dict[str, Any], accept: str, reject: str
) -> None:
    """By hand from the lines: PUMP: ln 9 / (1/500 - 1/1000) = 2197.22; (4 ln 2 - ln 9) * 1000 = 575.364."""
    key = with_test(admin, new_name, plan)
    assert admin.get(f"/v1/tests/{key}").json()["outlook"] == {
        "accept": accept,
        "reject": reject,
        "reject_below": None,
    }


@pytest.mark.parametrize("plan", [SEAL, WELD, PUMP, SHAFT])
def test_at_the_beginning_the_outlook_is_what_the_plan_promises(
    admin: httpx.Client, new_name: Namer, plan: dict[str, Any]
) -> None:
    key = with_test(admin, new_name, plan)
    outlook = admin.get(f"/v1/tests/{key}/outlook").json()
    name = admin.get(f"/v1/tests/{key}").json()["plan"]
    promise = admin.get(f"/v1/plans/{name}/characteristics?at={plan['h0']}&at={plan['h1']}").json()
    assert [part["under"] for part in outlook["expected"]] == ["h0", "h1"]
    for part, point in zip(outlook["expected"], promise["points"], strict=True):
        assert part["probability_of_acceptance"] == pytest.approx(point["probability_of_acceptance"], abs=1e-12)
        assert part["probability_of_rejection"] == pytest.approx(1 - point["probability_of_acceptance"], abs=1e-9)
        further = part["further_exposure"] or part["further_sample_number"]
        average = point["average_exposure"] or point["average_sample_number"]
        assert further["average"] == pytest.approx(average, rel=1e-12)
        assert further["quantiles"] == (point["exposure_quantiles"] or point["quantiles"])


def test_following_the_shortest_way_decides(admin: httpx.Client, new_name: Namer) -> None:
    for plan in (SEAL, {**SEAL, "truncation": {"sample_number": 40}}):
        key = with_test(admin, new_name, plan)
        admin.post(f"/v1/tests/{key}/observations", json={"values": [0, 0, 1, 0, 0, 0]})
        outlook = admin.get(f"/v1/tests/{key}/outlook").json()
        assert outlook["estimate"] == pytest.approx(1 / 6)
        needed = outlook["accept"]["observations"]
        state = admin.post(f"/v1/tests/{key}/observations", json={"values": [0] * (needed - 1)}).json()
        assert state["decision"] == "continue"
        assert state["outlook"]["accept"] == "1 conforming unit"
        state = admin.post(f"/v1/tests/{key}/observations", json={"values": [0]}).json()
        assert (state["decision"], state["outlook"]) == ("accept", None)
        decided = admin.get(f"/v1/tests/{key}/outlook").json()
        assert (decided["accept"], decided["expected"]) == (None, [])
    assert outlook["room"] == {"sample_number": 34, "exposure": None, "failures": None}


def test_history_can_be_rehearsed_on_a_plan_that_is_not_stored(admin: httpx.Client) -> None:
    submission = {"values": [0, 1, *[0] * 90]}
    answer = admin.post("/v1/rehearsal", json={"plan": SEAL, "submission": submission})
    assert answer.json()["decision"] == "accept"
    bad = admin.post("/v1/rehearsal", json={"plan": SEAL, "submission": {"values": [0, 3]}})
    assert pointers(bad) == ["/submission/values/1"]
    bad = admin.post("/v1/rehearsal", json={"plan": {**SEAL, "h0": 2.0}, "submission": submission})
    assert pointers(bad) == ["/plan/h0"]
