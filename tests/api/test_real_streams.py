"""Real data through the whole service."""

import httpx
import pytest
from statsmodels.datasets import cancer, nile, strikes

from tests.api.examples import Namer, with_test


def test_the_fall_of_the_nile_is_found(admin: httpx.Client, new_name: Namer) -> None:
    """
    Yearly flow at Aswan 1871-1970, in 1e8 cubic metres; mean 1097.75 until 1898 and 849.97 after it.

    The sigma of 130 is close to the spread within either period (own computation from the data).
    """
    flows = [float(v) for v in nile.load_pandas().data["volume"]]
    plan = {"family": "normal", "h0": 1100.0, "h1": 850.0, "alpha": 0.01, "beta": 0.01, "known": {"sigma": 130.0}}
    before, after = with_test(admin, new_name, plan), with_test(admin, new_name, plan)
    early = admin.post(f"/v1/tests/{before}/observations", json={"values": flows[:28]}).json()
    late = admin.post(f"/v1/tests/{after}/observations", json={"values": flows[28:]}).json()
    assert (early["decision"], late["decision"]) == ("accept", "reject")
    # By hand: -ln((1 - .01)/.01) is passed when (850 - 1100)/130**2 * sum(x - 975) first falls to it.
    evidence, steps = 0.0, 0
    while evidence > -4.59511985013459:
        evidence += (850.0 - 1100.0) / 130.0**2 * (flows[steps] - 975.0)
        steps += 1
    assert early["sample_number"] == steps
    assert early["log_likelihood_ratio"] == pytest.approx(evidence, rel=1e-12)


def test_county_deaths_by_population_go_through_as_counts_with_exposure(admin: httpx.Client, new_name: Namer) -> None:
    data = cancer.load_pandas().data
    plan = {"family": "poisson", "h0": 0.003, "h1": 0.004, "alpha": 0.001, "beta": 0.001}
    key = with_test(admin, new_name, plan)
    rows = [{"value": int(d), "exposure": float(n)} for d, n in zip(data["cancer"], data["population"], strict=True)]
    answer = admin.post(f"/v1/tests/{key}/observations", json={"observations": rows}).json()
    total, exposure = answer["total"], answer["exposure"]
    assert answer["decision"] != "continue"
    assert total == sum(row["value"] for row in rows[: answer["sample_number"]])
    assert exposure == pytest.approx(sum(row["exposure"] for row in rows[: answer["sample_number"]]), rel=1e-12)


def test_strike_durations_go_through_as_times(admin: httpx.Client, new_name: Namer) -> None:
    durations = [float(v) for v in strikes.load_pandas().data["duration"]]
    plan = {"family": "exponential", "h0": 40.0, "h1": 20.0, "alpha": 0.05, "beta": 0.05}
    key = with_test(admin, new_name, plan)
    answer = admin.post(f"/v1/tests/{key}/observations", json={"values": durations}).json()
    assert answer["decision"] == "accept"
    assert answer["exposure"] <= sum(durations)
