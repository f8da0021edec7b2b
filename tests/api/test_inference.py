"""What may be said after the decision, over HTTP: each family, each kind of plan, and what is refused."""

import math
from typing import Any

import httpx
import pytest
from scipy.stats import chi2, norm, poisson

from tests.api.examples import PUMP, SEAL, SHAFT, WELD, Namer, pointers, with_test

SIMON = {
    "family": "bernoulli",
    "h0": 0.1,
    "h1": 0.3,
    "alpha": 0.05,
    "beta": 0.2,
    "boundaries": "table",
    "table": [{"sample_number": 10, "accept": 1}, {"sample_number": 29, "accept": 5, "reject": 6}],
}
TIMED = {
    "family": "exponential",
    "h0": 3.0,
    "h1": 1.0,
    "alpha": 0.2,
    "beta": 0.2,
    "boundaries": "table",
    "table": [{"failures": 0, "accept_at": 3.0}, {"failures": 2, "accept_at": 6.0}, {"failures": 3, "reject_at": 6.0}],
}


SCRATCH = {
    "family": "negative_binomial",
    "h0": 0.5,
    "h1": 1.5,
    "alpha": 0.05,
    "beta": 0.10,
    "known": {"dispersion": 2.0},
}
# A torque that may be off on either side, watched for as long as the line runs.
RATCHET = {
    "family": "normal",
    "statistic": "mixture",
    "sides": 2,
    "h0": 10.5,
    "h1": None,
    "alpha": 0.2,
    "beta": None,
    "known": {"sigma": 0.5, "prior": {"tau": 0.5}},
}
# Evidence for better than stated, and none of acceptance.
BELOW = {
    "statistic": "generalised",
    "h1": None,
    "beta": None,
    "alpha": 0.1,
    "boundaries": "given",
    "thresholds": {"accept": None, "reject": 1.0},
    "direction": "below",
}


def inferred(client: httpx.Client, new_name: Namer, plan: dict[str, Any], body: dict[str, Any], **query: Any) -> Any:
    key = with_test(client, new_name, {name: value for name, value in plan.items() if value is not None})
    client.post(f"/v1/tests/{key}/observations", json=body).raise_for_status()
    answer = client.get(f"/v1/tests/{key}/inference", params=query)
    assert answer.status_code == 200, answer.text
    return answer.json()


def test_two_leaks_at_once(admin: httpx.Client, new_name: Namer) -> None:
    """The furthest that a lot can go towards H1: everything by hand."""
    found = inferred(admin, new_name, SEAL, {"values": [1, 1, 0]})
    assert (found["decision"], found["ordering"], found["overrun"]) == ("reject", "stage-wise", 1)
    assert found["p_value"] == pytest.approx(0.01**2, rel=1e-12)
    assert found["estimates"] == {"maximum_likelihood": 1.0, "median_unbiased": 1.0, "unbiased": 1.0}
    assert found["interval"]["level"] == 0.95
    assert found["interval"]["lower"] == pytest.approx(math.sqrt(0.025), rel=1e-11)
    assert found["interval"]["upper"] == 1.0
    assert "towards H1" in found["reasons"]["upper"]
    assert found["meanings"].keys() >= {"p_value", "unbiased", "interval", "overrun", "bias_of_maximum_likelihood"}


def test_no_leak_at_all(admin: httpx.Client, new_name: Namer) -> None:
    found = inferred(admin, new_name, SEAL, {"values": [0] * 25}, level=0.9)
    assert (found["decision"], found["p_value"], found["overrun"]) == ("accept", 1.0, 1)
    assert found["interval"] == {"level": 0.9, "lower": 0.0, "upper": pytest.approx(1 - 0.05 ** (1 / 24), rel=1e-11)}
    assert found["estimates"] == {"maximum_likelihood": 0.0, "median_unbiased": 0.0, "unbiased": 0.0}
    assert found["reasons"].keys() == {"lower", "median_unbiased"}


@pytest.mark.parametrize("size", [1, 19])
def test_a_two_stage_table_however_its_units_are_grouped(admin: httpx.Client, new_name: Namer, size: int) -> None:
    """Girshick, Mosteller and Savage (1946) in Simon's design: 3 of 29 are estimated as .212308 (computed)."""
    first = [{"value": 1, "size": 5}, {"value": 1, "size": 5}]
    rest = [{"value": 1, "size": 19}] if size == 19 else [{"value": 1}, *({"value": 0} for _ in range(18))]
    found = inferred(admin, new_name, SIMON, {"observations": [*first, *rest]})
    assert found["estimates"]["unbiased"] == pytest.approx(0.212308, abs=6e-7)
    assert found["estimates"]["maximum_likelihood"] == pytest.approx(3 / 29)
    assert found["bias_of_maximum_likelihood"] < 0
    assert "rows of the table" in found["looks"]
    # Further towards H1 than 3 in all lie the outcomes with more in all: the rest is early acceptance or 2 in all.
    early = sum(math.comb(10, k) * 0.1**k * 0.9 ** (10 - k) for k in (0, 1))
    two = math.comb(10, 2) * 0.1**2 * 0.9**27
    assert found["p_value"] == pytest.approx(1 - early - two, abs=1e-12)


def test_groups_that_differ_are_taken_as_they_came(admin: httpx.Client, new_name: Namer) -> None:
    groups = [{"value": 0, "size": 10}, {"value": 1, "size": 7}, {"value": 2, "size": 10}]
    found = inferred(admin, new_name, SEAL, {"observations": groups})
    assert found["decision"] == "reject"
    assert "as they were reported" in found["looks"]
    assert found["bias_of_maximum_likelihood"] is None
    assert "not alike" in found["reasons"]["bias_of_maximum_likelihood"]
    # Rejecting at or before look 3 with at least 3: by hand from the limits of 10, 17 and 27 units.
    limits = {10: 2, 17: 2, 27: 3}  # a reject number counts only where it was looked at
    p, alive, up, before = 0.01, {0: 1.0}, 0.0, 0
    for n, reject in limits.items():
        moved: dict[int, float] = {}
        for total, chance in alive.items():
            for more in range(n - before + 1):
                weight = math.comb(n - before, more) * p**more * (1 - p) ** (n - before - more)
                moved[total + more] = moved.get(total + more, 0.0) + chance * weight
        up += sum(chance for total, chance in moved.items() if total >= reject)
        # At 27 units none is enough to accept, but that is what the outcome is compared with, not what it needs.
        alive, before = {total: chance for total, chance in moved.items() if total < reject}, n
    assert found["p_value"] == pytest.approx(up, rel=1e-11)


def test_counts_in_the_first_report(admin: httpx.Client, new_name: Namer) -> None:
    found = inferred(admin, new_name, WELD, {"observations": [{"value": 6, "exposure": 0.8}]})
    assert found["p_value"] == pytest.approx(poisson.sf(5, 0.4), rel=1e-11)
    assert found["estimates"]["maximum_likelihood"] == pytest.approx(7.5)
    assert found["estimates"]["unbiased"] == pytest.approx(7.5)
    assert found["interval"]["lower"] == pytest.approx(chi2.ppf(0.025, 12) / 1.6, rel=1e-10)
    assert found["interval"]["upper"] == pytest.approx(chi2.ppf(0.975, 14) / 1.6, rel=1e-10)
    assert found["bias_of_maximum_likelihood"] > 0


def test_a_failure_free_time(admin: httpx.Client, new_name: Namer) -> None:
    """No upper limit of the mean life, no estimate, and the reasons beside them; reports do not matter."""
    quiet = [{"time": 1500.0, "failed": False}, {"time": 900.0, "failed": False}]
    found = inferred(admin, new_name, PUMP, {"observations": quiet})
    time = 2 * math.log(9) * 500.0
    assert found["decision"] == "accept"
    assert found["interval"]["lower"] == pytest.approx(2 * time / chi2.ppf(0.975, 2), rel=1e-10)
    assert found["interval"]["upper"] is None
    assert found["estimates"] == {"maximum_likelihood": None, "median_unbiased": None, "unbiased": None}
    assert found["bias_of_maximum_likelihood"] is None
    assert found["reasons"].keys() == {
        "upper",
        "maximum_likelihood",
        "median_unbiased",
        "unbiased",
        "bias_of_maximum_likelihood",
    }


def test_failures_before_a_time(admin: httpx.Client, new_name: Namer) -> None:
    """Failure 2 before 800 rejects, by the limit on failures alone: the p-value is that of the Poisson process."""
    plan = {
        **PUMP,
        "boundaries": "given",
        "thresholds": {"accept": -50.0, "reject": 50.0},
        "truncation": {"exposure": 800.0, "failures": 2},
    }
    found = inferred(admin, new_name, plan, {"values": [120.0, 130.0]})
    assert found["decision"] == "reject"
    assert found["p_value"] == pytest.approx(1 - math.exp(-0.25) * 1.25, rel=1e-11)
    assert found["estimates"]["maximum_likelihood"] == 125.0
    assert found["estimates"]["median_unbiased"] == pytest.approx(2 * 250.0 / chi2.ppf(0.5, 4), rel=1e-10)


def test_a_table_of_failures_and_times(admin: httpx.Client, new_name: Namer) -> None:
    found = inferred(
        admin, new_name, TIMED, {"observations": [{"time": 2.0, "failed": True}, {"time": 9.0, "failed": False}]}
    )
    assert found["decision"] == "accept"
    # One failure by 6, or two: all but none by 3 and three by 6; less extreme are none by 3 and fewer by 6.
    assert found["p_value"] == pytest.approx(1 - math.exp(-1.0), rel=1e-11)
    assert found["interval"]["lower"] < found["estimates"]["median_unbiased"] < found["interval"]["upper"]


def test_one_measurement(admin: httpx.Client, new_name: Namer) -> None:
    found = inferred(admin, new_name, SHAFT, {"values": [12.0]})
    assert found["p_value"] == pytest.approx(norm.sf(4.0), rel=1e-10)
    half = 0.5 * norm.ppf(0.975)
    assert found["interval"]["lower"] == pytest.approx(12.0 - half, abs=1e-10)
    assert found["interval"]["upper"] == pytest.approx(12.0 + half, abs=1e-10)
    assert found["estimates"]["unbiased"] == pytest.approx(12.0, abs=1e-12)
    assert found["reasons"] == {}


@pytest.mark.parametrize(
    ("plan", "body"),
    [
        ({**SEAL, "truncation": {"sample_number": 30}}, {"values": [0] * 10 + [1] + [0] * 19}),
        ({**WELD, "truncation": {"exposure": 4.0}}, {"values": [1, 1, 1, 1]}),
        ({**WELD, "h0": 1.5, "h1": 0.5}, {"values": [1, 0, 0, 0]}),
        ({**PUMP, "truncation": {"exposure": 1500.0}}, {"values": [600.0, 500.0, 600.0]}),
        ({**SHAFT, "truncation": {"sample_number": 3}}, {"values": [10.2, 10.3, 10.3]}),
        ({**SHAFT, "h0": 10.5, "h1": 10.0, "boundaries": "calibrated"}, {"values": [9.5, 9.8, 9.9, 10.0, 9.9]}),
        ({"standard": "MIL-HDBK-781A/III-D", "scale": 100.0}, {"values": [30.0, 30.0, 40.0, 40.0, 30.0]}),
        (SCRATCH, {"values": [0, 3, 2, 4]}),
        (RATCHET, {"values": [10.3, 9.6, 10.4, 9.2, 9.4, 9.9, 10.4, 9.8]}),
        ({**WELD, **BELOW, "truncation": {"exposure": 6.0}}, {"values": [0, 1, 0, 0, 0, 0]}),
        ({**PUMP, **BELOW, "direction": "above", "truncation": {"exposure": 5000.0}}, {"values": [900.0, 2500.0]}),
        ({"standard": "40-CFR-1068/A-2-AA"}, {"values": [0, 1, 0, 0, 1, 0, 0]}),
    ],
)
def test_every_kind_of_plan_has_its_figures_in_order(
    admin: httpx.Client, new_name: Namer, plan: dict[str, Any], body: dict[str, Any]
) -> None:
    found = inferred(admin, new_name, plan, body)
    wide = inferred(admin, new_name, plan, body, level=0.999)
    narrow, middle = found["interval"], found["estimates"]["median_unbiased"]
    assert wide["interval"]["lower"] < narrow["lower"] < middle < narrow["upper"] < wide["interval"]["upper"]
    assert 0.0 < found["p_value"] < 1.0
    assert abs(found["bias_of_maximum_likelihood"]) < narrow["upper"] - narrow["lower"]


def test_a_plan_of_two_sides_says_how_its_p_value_is_made(admin: httpx.Client, new_name: Namer) -> None:
    """Reject from |z| = 2 on: one measurement 3 deviations below has twice the lower tail."""
    plan = {**SHAFT, **BELOW, "direction": None, "sides": 2, "thresholds": {"accept": None, "reject": 2.0}}
    found = inferred(admin, new_name, {**plan, "truncation": {"sample_number": 5}}, {"values": [8.5, 10.0]})
    assert (found["decision"], found["overrun"]) == ("reject", 1)
    assert found["p_value"] == pytest.approx(2.0 * norm.sf(3.0), rel=1e-10)
    assert found["meanings"]["p_value"].startswith("Twice the smaller of two probabilities")
    assert "rejections below, the latest first" in found["meanings"]["ordering"]
    endless = inferred(admin, new_name, {**RATCHET, "h0": 10.0}, {"values": [20.0]})
    assert "for ever" in endless["meanings"]["unbiased"]
    assert "at most 5 %" in endless["meanings"]["interval"]


@pytest.mark.parametrize(
    ("plan", "body", "words"),
    [
        (
            {"family": "paired", "h0": 1.0, "h1": 3.0, "alpha": 0.05, "beta": 0.1},
            {"observations": [{"a": 0, "b": 1}] * 8},
            ["odds ratio of success", "share of b", "no bound"],
        ),
        (
            {**SHAFT, "family": "lognormal", "h0": 10.0, "h1": 15.0},
            {"values": [40.0, 30.0, 50.0]},
            ["The median", "median's logarithm"],
        ),
        (
            {**PUMP, "family": "weibull", "known": {"shape": 2.0}},
            {"values": [100.0] * 9},
            ["characteristic life", "root"],
        ),
        (
            {**SHAFT, "family": "normal_difference", "h0": 0.0, "h1": 1.0, "known": {"sigma_a": 0.6, "sigma_b": 0.8}},
            {"observations": [{"a": 1.0, "b": 6.0}]},
            ["difference of the means"],
        ),
        (
            {**SHAFT, "family": "normal_two_sample", "h0": 0.0, "h1": 1.0, "known": {"sigma_a": 0.6, "sigma_b": 0.8}},
            {"observations": [{"arm": "a", "value": 1.0}, {"arm": "b", "value": 9.0}]},
            ["in which arms they came", "difference of the means"],
        ),
        (
            {**SHAFT, "family": "normal_variance", "h0": 1.0, "h1": 2.0, "known": {"mean": 10.0}},
            {"values": [12.0, 7.0, 14.0]},
            ["The standard deviation", "after each observation"],
        ),
        (
            {**SHAFT, "family": "normal_variance", "h0": 1.0, "h1": 2.0, "known": {}},
            {"values": [12.0, 5.0, 14.0]},
            ["The standard deviation", "after each observation"],
        ),
    ],
)
def test_every_family_speaks_of_its_own_parameter(
    admin: httpx.Client, new_name: Namer, plan: dict[str, Any], body: dict[str, Any], words: list[str]
) -> None:
    found = inferred(admin, new_name, plan, body)
    assert found["decision"] == "reject"
    text = str(found)
    assert [word for word in words if word not in text] == []
    for name, figure in {
        **found["estimates"],
        "bias_of_maximum_likelihood": found["bias_of_maximum_likelihood"],
    }.items():
        assert (figure is None) <= (name in found["reasons"]), name


T_TEST = {"statistic": "invariant", "h0": 0.0, "h1": 1.0, "alpha": 0.05, "beta": 0.1}
GAUGE = [9.0, 9.6, 8.4, 9.1, 9.9, 8.8, 10.2, 9.3]


@pytest.mark.parametrize(
    ("plan", "body"),
    [
        ({**T_TEST, "family": "normal", "known": {"reference": 8.0}}, {"values": GAUGE * 4}),
        ({**T_TEST, "family": "normal_difference"}, {"observations": [{"a": 8.0, "b": value} for value in GAUGE * 4]}),
        (
            {**T_TEST, "family": "normal_two_sample"},
            {"observations": [{"arm": "ab"[i % 3 > 0], "value": v - (i % 3 == 0)} for i, v in enumerate(GAUGE * 4)]},
        ),
        ({**T_TEST, "family": "normal", "sides": 2, "known": {"reference": 10.5}}, {"values": GAUGE * 4}),
    ],
)
def test_a_sequential_t_test_has_simulated_figures(
    admin: httpx.Client, new_name: Namer, plan: dict[str, Any], body: dict[str, Any]
) -> None:
    found = inferred(admin, new_name, plan, body)
    assert (found["decision"], found["p_value_kind"], found["ordering"]) == ("reject", "simulated", "stage-wise")
    simulation, interval = found["simulation"], found["interval"]
    assert (simulation["seed"], simulation["courses"] >= 1000) == (1, True)
    assert simulation["standard_errors"].keys() == {"p_value", "median_unbiased", "lower", "upper"}
    assert all(error > 0.0 for error in simulation["standard_errors"].values())
    assert interval["lower"] < found["estimates"]["median_unbiased"] < interval["upper"]
    assert found["p_value"] < 0.05 + 4.0 * simulation["standard_errors"]["p_value"]
    assert found["reasons"].keys() == {"unbiased", "bias_of_maximum_likelihood"}
    assert inferred(admin, new_name, plan, body) == found


def test_evidence_of_ones_own_has_a_bound_and_no_estimate(admin: httpx.Client, new_name: Namer) -> None:
    plan = {"family": "score", "boundaries": "strict", "alpha": 0.05, "beta": 0.1}
    found = inferred(admin, new_name, plan, {"values": [2.0, 2.0, 0.5]})
    assert (found["decision"], found["p_value_kind"], found["overrun"]) == ("reject", "bound", 1)
    assert found["p_value"] == pytest.approx(math.exp(-4.0), rel=1e-14)
    assert found["estimates"] == {"maximum_likelihood": None, "median_unbiased": None, "unbiased": None}
    assert found["interval"] == {"level": 0.95, "lower": None, "upper": None}
    assert (found["ordering"], found["simulation"], found["bias_of_maximum_likelihood"]) == (None, None, None)
    assert found["reasons"].keys() == {
        "maximum_likelihood",
        "median_unbiased",
        "unbiased",
        "lower",
        "upper",
        "bias_of_maximum_likelihood",
    }
    assert all("no model" in reason for reason in found["reasons"].values())
    assert "likelihood ratio" in found["meanings"]["p_value"]
    accepted = inferred(admin, new_name, plan, {"values": [-3.0]})
    assert (accepted["decision"], accepted["p_value"]) == ("accept", 1.0)


def test_a_long_log_of_uneven_exposures_is_read_to_its_end(admin: httpx.Client, new_name: Namer) -> None:
    """In many submissions or in one: the same answer, and what came after the decision changes nothing."""
    reports = [{"value": i % 2, "exposure": 1.0 + 0.01 * (i % 7)} for i in range(60)]
    plan = {**WELD, "h0": 0.45, "h1": 0.55}
    reports += [{"value": 40, "exposure": 1.5}]
    whole = inferred(admin, new_name, plan, {"observations": reports})
    key = with_test(admin, new_name, plan)
    for report in [*reports, {"value": 3, "exposure": 9.0}]:
        admin.post(f"/v1/tests/{key}/observations", json={"observations": [report]}).raise_for_status()
    pieces = admin.get(f"/v1/tests/{key}/inference").json()
    assert pieces.pop("overrun") == whole.pop("overrun") + 1 == 1
    assert pieces == whole


def test_before_the_decision_there_is_only_an_outlook(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    tag = admin.post(f"/v1/tests/{key}/observations", json={"values": [0, 0]}).headers["ETag"]
    answer = admin.get(f"/v1/tests/{key}/inference", headers={"If-None-Match": '"0"'})
    assert answer.status_code == 409
    assert answer.json()["type"].endswith(":not-decided")
    assert "outlook" in answer.json()["detail"]
    # Who has this version of the test knows that already; all addresses of a test answer alike.
    for address in ("", "/outlook", "/assumptions", "/inference"):
        assert admin.get(f"/v1/tests/{key}{address}", headers={"If-None-Match": tag}).status_code == 304


@pytest.mark.parametrize(
    "query", ["level=0", "level=1", "level=1.5", "level=-0.9", "level=nan", "level=high", "at=0.1"]
)
def test_a_level_that_is_none_is_refused(admin: httpx.Client, new_name: Namer, query: str) -> None:
    key = with_test(admin, new_name, SEAL)
    admin.post(f"/v1/tests/{key}/observations", json={"values": [1, 1]}).raise_for_status()
    answer = admin.get(f"/v1/tests/{key}/inference?{query}")
    assert answer.status_code == 422, answer.text
    assert pointers(answer) == ["/" + query.partition("=")[0]]


def test_an_unknown_test_is_404(admin: httpx.Client) -> None:
    assert admin.get("/v1/tests/nowhere/inference").status_code == 404


def test_what_has_not_changed_is_not_sent_again(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    admin.post(f"/v1/tests/{key}/observations", json={"values": [1, 1]}).raise_for_status()
    tag = admin.get(f"/v1/tests/{key}/inference").headers["ETag"]
    assert admin.get(f"/v1/tests/{key}/inference", headers={"If-None-Match": tag}).status_code == 304
    admin.post(f"/v1/tests/{key}/observations", json={"values": [0]}).raise_for_status()
    assert admin.get(f"/v1/tests/{key}/inference", headers={"If-None-Match": tag}).json()["overrun"] == 1
