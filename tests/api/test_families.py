"""Every further family over HTTP: plan, test, observations, outlook, characteristics, log."""

from typing import Any

import httpx
import pytest

from tests.api.examples import SHAFT, Namer, pointers, with_plan, with_test

FILL = {"family": "lognormal", "h0": 10.0, "h1": 15.0, "alpha": 0.05, "beta": 0.10, "known": {"sigma": 0.5}}

# Scratches of a panel: counts with variance m + m**2 / 2.
SCRATCH = {
    "family": "negative_binomial",
    "h0": 0.5,
    "h1": 1.5,
    "alpha": 0.05,
    "beta": 0.10,
    "known": {"dispersion": 2.0},
}

# Bearings that wear out, in hours.
BEARING = {"family": "weibull", "h0": 1000.0, "h1": 500.0, "alpha": 0.10, "beta": 0.10, "known": {"shape": 2.0}}

# The diameter of a bore, in micrometres from its nominal value: is it even enough?
BORE = {"family": "normal_variance", "h0": 1.0, "h1": 2.0, "alpha": 0.05, "beta": 0.10, "known": {"mean": -3.0}}

PLANS = [FILL, SCRATCH, BEARING, BORE]
# A plan, observations that accept it, the number that it takes, and the total then.
ACCEPTED: list[tuple[dict[str, Any], dict[str, Any], int, float]] = [
    # By hand: each measurement gives .375 * .25 - ln 2 = -.5994, and -2.2513 is passed at the fourth.
    (BORE, {"values": [-3.5, -2.5, -2.5, -3.5, -3.0]}, 4, 1.0),
    # By hand: ln(10.5) - ln(150)/2 = -.1540 each; the line lies at -.25 * 2.2513 / ln 1.5 = -1.388: ten.
    (FILL, {"values": [10.5] * 12}, 10, 23.513752571634),
    # By hand: ln(9.5) / (2 ln(3.5/2.5)) = 3.345 units without a count; one count weighs ln(15/7) = .762, as 1.13 units.
    (SCRATCH, {"values": [0, 1, 0, 0, 0, 0]}, 5, 1),
]
BAD_PLANS: list[tuple[dict[str, Any], dict[str, Any], str]] = [
    (BORE, {"h0": 0.0}, "/h0"),
    (BORE, {"h1": -2.0}, "/h1"),
    (BORE, {"known": {"sigma": 1.0}}, "/known/sigma"),
    (BORE, {"known": {"mean": 1e101}}, "/known/mean"),
    (BORE, {"known": {"mean": 0.0, "sigma": 1.0}}, "/known/sigma"),
    (BORE, {"h1": 1.0000000000000002, "h0": 1.0, "truncation": {"exposure": 3.0}}, "/truncation/exposure"),
    (BEARING, {"known": {"shape": 0.0}}, "/known/shape"),
    (BEARING, {"known": {"shape": 101.0}}, "/known/shape"),
    (BEARING, {"known": {"shape": 2.0, "life": 3.0}}, "/known/life"),
    (BEARING, {"h0": 0.0}, "/h0"),
    (BEARING, {"h0": 1e90, "h1": 1e-90, "known": {"shape": 50.0}}, "/h1"),
    (BEARING, {"truncation": {"sample_number": 4}}, "/truncation/sample_number"),
    (SCRATCH, {"h0": 0.0}, "/h0"),
    (SCRATCH, {"known": {"dispersion": 0.0}}, "/known/dispersion"),
    (SCRATCH, {"known": {"dispersion": 1.0, "sigma": 1.0}}, "/known/sigma"),
    (SCRATCH, {"known": None}, "/known/dispersion"),
    (SCRATCH, {"known": {"dispersion": 1e-100}}, "/known/dispersion"),
    (FILL, {"h0": 0.0}, "/h0"),
    (FILL, {"h1": -1.0}, "/h1"),
    (FILL, {"known": {}}, "/known/sigma"),
    (FILL, {"truncation": {"exposure": 4.0}}, "/truncation/exposure"),
    (FILL, {"boundaries": "table", "table": [{"sample_number": 5, "accept": 1, "reject": 2}]}, "/table"),
]
BAD_OBSERVATIONS: list[tuple[dict[str, Any], dict[str, Any], str]] = [
    (BORE, {"values": [0.0, 1e101]}, "/values/1"),
    (BORE, {"observations": [{"value": 5.0, "size": 2}]}, "/observations/0/size"),
    (BEARING, {"observations": [{"time": 5.0}]}, "/observations/0/failed"),
    (BEARING, {"observations": [{"time": -5.0, "failed": False}]}, "/observations/0/time"),
    (BEARING, {"observations": [{"time": 5.0, "from": 6.0, "failed": False}]}, "/observations/0/time"),
    (BEARING, {"observations": [{"time": 5.0, "from": -6.0, "failed": False}]}, "/observations/0/from"),
    (BEARING, {"observations": [{"time": 5.0, "from": None, "failed": False}]}, "/observations/0/from"),
    (BEARING, {"values": [10.0, 1e90]}, "/values/1"),
    (SHAFT, {"observations": [{"value": 5.0, "from": 1.0}]}, "/observations/0/from"),
    (SCRATCH, {"values": [0, 1.5]}, "/values/1"),
    (SCRATCH, {"values": [-1]}, "/values/0"),
    (SCRATCH, {"observations": [{"value": 3, "exposure": 2.0}]}, "/observations/0/exposure"),
    (FILL, {"values": [3.0, 0.0]}, "/values/1"),
    (FILL, {"values": [-2.0]}, "/values/0"),
    (FILL, {"observations": [{"value": 3.0, "exposure": 2.0}]}, "/observations/0/exposure"),
]


@pytest.mark.parametrize(("plan", "body", "number", "total"), ACCEPTED)
def test_a_test_runs_from_plan_to_decision(
    admin: httpx.Client, new_name: Namer, plan: dict[str, Any], body: dict[str, Any], number: int, total: float
) -> None:
    key = with_test(admin, new_name, plan)
    new = admin.get(f"/v1/tests/{key}").json()
    assert new["outlook"]["accept"]
    assert new["outlook"]["reject"]
    state = admin.post(f"/v1/tests/{key}/observations", json=body).json()
    assert (state["decision"], state["decided"]["sample_number"]) == ("accept", number)
    assert state["total"] == pytest.approx(total, rel=1e-11)
    rehearsed = admin.post(f"/v1/plans/{state['plan']}/rehearsal", json=body).json()
    assert (rehearsed["decision"], rehearsed["total"]) == (state["decision"], state["total"])
    path = admin.get(f"/v1/tests/{key}/path").json()
    assert path["points"][-1]["log_likelihood_ratio"] == state["log_likelihood_ratio"]
    logged = admin.get(f"/v1/tests/{key}/observations").json()["items"]
    assert [row["counted"] for row in logged] == [True] * number + [False] * (len(logged) - number)
    table = admin.get(f"/v1/tests/{key}/observations", headers={"Accept": "text/csv"}).text
    assert len(table.splitlines()) == len(logged) + 1


@pytest.mark.parametrize("plan", PLANS)
def test_its_risks_are_exact_and_calibrated(admin: httpx.Client, new_name: Namer, plan: dict[str, Any]) -> None:
    name = with_plan(admin, new_name("plan"), plan)
    found = admin.get(f"/v1/plans/{name}/characteristics").json()
    curve = [point["probability_of_acceptance"] for point in found["points"]]
    assert len(curve) == 51
    assert curve == sorted(curve, reverse=plan["h1"] > plan["h0"])
    assert found["error_bound"] < 1e-8
    assert found["fixed_sample"]["saving_at_h0"] > 0
    calibrated = admin.post("/v1/characteristics", json={**plan, "boundaries": "calibrated", "at": [plan["h0"]]})
    attained = calibrated.json()["attained"]
    assert attained["alpha"] <= plan["alpha"] * (1 + 1e-7)
    assert attained["beta"] <= plan["beta"] * (1 + 1e-7)


@pytest.mark.parametrize("plan", PLANS)
def test_at_the_beginning_the_outlook_is_what_the_plan_promises(
    admin: httpx.Client, new_name: Namer, plan: dict[str, Any]
) -> None:
    key = with_test(admin, new_name, plan)
    outlook = admin.get(f"/v1/tests/{key}/outlook").json()
    body = {**plan, "at": [plan["h0"], plan["h1"]]}
    promise = admin.post("/v1/characteristics", json=body).json()
    for part, point in zip(outlook["expected"], promise["points"], strict=True):
        assert part["probability_of_acceptance"] == pytest.approx(point["probability_of_acceptance"], abs=1e-12)
        further = part["further_exposure"] or part["further_sample_number"]
        assert further["average"] == pytest.approx(
            point["average_exposure"] or point["average_sample_number"], rel=1e-12
        )


@pytest.mark.parametrize(("base", "change", "pointer"), BAD_PLANS)
def test_a_plan_that_cannot_be_right_names_the_field(
    admin: httpx.Client, new_name: Namer, base: dict[str, Any], change: dict[str, Any], pointer: str
) -> None:
    answer = admin.post("/v1/plans", json={"name": new_name("bad"), **base, **change})
    assert answer.status_code == 422, answer.text
    assert pointer in pointers(answer)


@pytest.mark.parametrize(("plan", "body", "pointer"), BAD_OBSERVATIONS)
def test_an_observation_that_cannot_be_right_is_named_and_nothing_is_stored(
    admin: httpx.Client, new_name: Namer, plan: dict[str, Any], body: dict[str, Any], pointer: str
) -> None:
    key = with_test(admin, new_name, plan)
    answer = admin.post(f"/v1/tests/{key}/observations", json=body)
    assert answer.status_code == 422, answer.text
    assert pointer in pointers(answer)
    assert admin.get(f"/v1/tests/{key}").json()["version"] == 1


def test_a_unit_is_watched_in_time_from_the_age_it_had(admin: httpx.Client, new_name: Namer) -> None:
    """
    By hand: no failure accepts at ln 9 / (2**2 - 1) = .732408 expected failures.

    .35**2 + .6**2 = .4825 of them and the .81 - .49 of a unit from 700 to 900 hours are .8025, so it falls inside.
    """
    key = with_test(admin, new_name, {**BEARING, "truncation": {"exposure": 5.0, "failures": 3}})
    way = admin.get(f"/v1/tests/{key}").json()["outlook"]["accept"]
    assert way == "an exposure of 0.732408, as of 1 unit from new to age 855.809, without failure"
    stretches = [{"time": 350.0}, {"time": 600.0, "from": 0}, {"time": 900.0, "from": 700.0}]
    body = {"observations": [{**stretch, "failed": False} for stretch in stretches]}
    state = admin.post(f"/v1/tests/{key}/observations", json=body).json()
    assert state["decision"] == "accept"
    assert state["decided"]["exposure"] == pytest.approx(0.7324081924454064, rel=1e-14)
    logged = admin.get(f"/v1/tests/{key}/observations").json()["items"]
    assert [(row["time"], row["from"], row["failed"]) for row in logged] == [
        (350.0, 0.0, False),
        (600.0, 0.0, False),
        (900.0, 700.0, False),
    ]
    table = admin.get(f"/v1/tests/{key}/observations", headers={"Accept": "text/csv"}).text.splitlines()
    assert table[0].startswith("sequence,time,failed,from,")
    assert table[3].startswith("3,900.0,false,700.0,")
