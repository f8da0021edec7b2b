"""Inference in families that rest on another: their figures are those of the twin plan, carried over."""

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import pytest
from scipy.stats import norm

from service.domain.errors import ComputationTooLarge
from service.domain.inference import Inference
from service.sequential.double import FloatArray
from tests.domain.test_inference import after

Change = Callable[[float], float]

RISKS = {"alpha": 0.05, "beta": 0.1}


def pairs(results: str) -> dict[str, Any]:
    """`b` and `a` for the arm that succeeded alone, `=` for pairs that agree."""
    return {"observations": [{"a": int(c in "a="), "b": int(c in "b=")} for c in results]}


def arms(measurements: list[tuple[str, float]]) -> dict[str, Any]:
    return {"observations": [{"arm": arm, "value": value} for arm, value in measurements]}


def is_carried_over(found: Inference, twin: Inference, change: Change) -> None:
    assert found.p_value == pytest.approx(twin.p_value, rel=1e-9)
    for name in ("maximum_likelihood", "median_unbiased", "lower", "upper"):
        there, here = getattr(twin, name), getattr(found, name)
        if there is None:
            assert here is None
        else:
            assert here == pytest.approx(change(there), rel=1e-9, abs=1e-12), name
    for name, reason in twin.reasons.items():
        assert found.reasons[name] == reason or name in ("unbiased", "bias_of_maximum_likelihood")


def odds(share: float) -> float:
    return share / (1.0 - share)


@pytest.mark.parametrize("results", ["b=bab===bbbbbb", "aabaaa==aaa", "abbabbabbabbb"])
def test_an_odds_ratio_is_the_odds_of_the_share_of_b(results: str) -> None:
    plan = {"family": "paired", "h0": 1.0, "h1": 3.0, **RISKS, "truncation": {"sample_number": 9}}
    twin = {"family": "bernoulli", "h0": 0.5, "h1": 0.75, **RISKS, "truncation": {"sample_number": 9}}
    found = after(plan, pairs(results))
    is_carried_over(found, after(twin, {"values": [int(c == "b") for c in results if c != "="]}), odds)
    assert (found.unbiased, found.bias) == (None, None)
    assert found.reasons.keys() == {"unbiased", "bias_of_maximum_likelihood"}
    assert "share of b" in found.reasons["unbiased"]
    assert found.looks.startswith("The test was looked at after each observation")


@pytest.mark.parametrize("statistic", ["simple", "generalised"])
def test_a_ratio_of_rates_is_the_odds_of_b_over_those_of_the_exposures(statistic: str) -> None:
    """Reports of several events are groups, and a report without any is no look."""
    if statistic == "simple":
        plan: dict[str, Any] = {"h1": 3.0, **RISKS, "truncation": {"sample_number": 40}}
        twin = {**plan, "h1": 0.6}
    else:
        thresholds = {"accept": None, "reject": 3.0}
        plan = twin = {
            "statistic": "generalised",
            "sides": 2,
            "alpha": 0.05,
            "boundaries": "given",
            "thresholds": thresholds,
            "truncation": {"sample_number": 40},
        }
    plan = {**plan, "family": "poisson_ratio", "h0": 1.0, "known": {"exposure_ratio": 0.5}}
    reports = [(2, 1), (0, 0), (3, 4), (1, 3), (4, 7), (9, 9)]
    body = {"observations": [{"a": a, "b": b} for a, b in reports]}
    groups = {"observations": [{"value": b, "size": a + b} for a, b in reports if a + b]}
    found = after(plan, body)
    carried = after({**twin, "family": "bernoulli", "h0": 1 / 3}, groups)
    is_carried_over(found, carried, lambda share: 2.0 * odds(share))
    assert "as they were reported" in found.looks


def test_an_odds_ratio_without_bound_is_null() -> None:
    found = after({"family": "paired", "h0": 1.0, "h1": 3.0, **RISKS}, pairs("b" * 12))
    assert (found.maximum_likelihood, found.upper) == (None, None)
    assert "no bound" in found.reasons["upper"]
    assert found.p_value == pytest.approx(2.0**-8)  # 1.5**7 < .9/.05 <= 1.5**8


@pytest.mark.parametrize("logs", [[2.9, 3.4, 3.8], [2.0, 2.4, 2.1, 2.3, 2.2, 2.2], [2.5, 2.6, 2.4, 2.6]])
def test_a_median_is_carried_over_by_the_logarithm(logs: list[float]) -> None:
    wall = {"truncation": {"sample_number": 4}}
    plan = {"family": "lognormal", "h0": 10.0, "h1": 15.0, **RISKS, "known": {"sigma": 0.5}, **wall}
    twin = {**plan, "family": "normal", "h0": math.log(10.0), "h1": math.log(15.0)}
    found = after(plan, {"values": [math.exp(value) for value in logs]})
    is_carried_over(found, after(twin, {"values": logs}), math.exp)
    assert found.reasons.keys() == {"unbiased", "bias_of_maximum_likelihood"}


@pytest.mark.parametrize("ages", [[300.0, 400.0, 350.0, 500.0], [900.0, 1200.0, 800.0], [700.0, 600.0, 800.0, 300.0]])
def test_a_characteristic_life_is_carried_over_by_the_power(ages: list[float]) -> None:
    risks = {"alpha": 0.1, "beta": 0.1, "truncation": {"exposure": 1.2}}
    plan = {"family": "weibull", "h0": 1000.0, "h1": 500.0, "known": {"shape": 2.0}, **risks}
    twin = {"family": "exponential", "h0": 1.0, "h1": 0.25, **risks}
    found = after(plan, {"values": ages})
    carried = after(twin, {"values": [(age / 1000.0) ** 2 for age in ages]})
    is_carried_over(found, carried, lambda mean: 1000.0 * math.sqrt(mean))
    assert found.reasons.keys() == carried.reasons.keys() | {"unbiased", "bias_of_maximum_likelihood"}


@pytest.mark.parametrize("differences", [[1.9, 2.4], [0.1, -0.4, -0.3, 0.2, -0.9], [0.5, 0.6, 0.4]])
def test_a_difference_of_means_is_a_mean_of_differences(differences: list[float]) -> None:
    wall = {"truncation": {"sample_number": 3}}
    plan = {"family": "normal_difference", "h0": 0.0, "h1": 1.0, **RISKS, "known": {"sigma_a": 0.6, "sigma_b": 0.8}}
    twin = {"family": "normal", "h0": 0.0, "h1": 1.0, **RISKS, "known": {"sigma": 1.0}}
    body = {"observations": [{"a": 4.0, "b": 4.0 + value} for value in differences]}
    found, carried = after({**plan, **wall}, body), after({**twin, **wall}, {"values": differences})
    is_carried_over(found, carried, lambda mean: mean)
    assert found.unbiased == pytest.approx(carried.unbiased, rel=1e-9)
    assert found.bias == pytest.approx(carried.bias, rel=1e-9)


ARMS = {"family": "normal_two_sample", "h0": 0.0, "h1": 1.0, **RISKS, "known": {"sigma_a": 0.6, "sigma_b": 0.8}}


def test_two_arms_that_decide_at_their_first_comparison() -> None:
    """Two measurements in a and one in b: the difference of averages has the variance .36/2 + .64 = .82."""
    found = after(ARMS, arms([("a", 0.0), ("a", 1.0), ("b", 5.0)]))
    deviation = math.sqrt(0.82)
    assert found.maximum_likelihood == pytest.approx(4.5)
    assert found.unbiased == pytest.approx(4.5)
    assert found.median_unbiased == pytest.approx(4.5)
    assert found.p_value == pytest.approx(norm.sf(4.5 / deviation), rel=1e-10)
    assert found.lower == pytest.approx(4.5 + norm.ppf(0.025) * deviation, rel=1e-10)
    assert found.upper == pytest.approx(4.5 + norm.ppf(0.975) * deviation, rel=1e-10)
    assert found.reasons.keys() == {"bias_of_maximum_likelihood"}
    assert "arms" in found.reasons["bias_of_maximum_likelihood"]
    assert "in which arms they came" in found.looks


@dataclass(frozen=True)
class Twice:
    """
    Two comparisons by their joint normal law: one integral over the first, between its limits.

    Attributes:
        informations: 1/variance of the difference of averages at each.
        total: The second difference times its information.
        sign: 1 where it ends above, -1 below.
    """

    informations: tuple[float, float]
    total: float
    sign: int

    @property
    def limits(self) -> tuple[float, float]:
        middle = 0.5 * self.informations[0]
        return middle + math.log(0.1 / 0.95), middle + math.log(0.9 / 0.05)

    @property
    def gained(self) -> float:
        return self.informations[1] - self.informations[0]

    def points(self) -> tuple[FloatArray, FloatArray]:
        low, high = self.limits
        nodes, weights = np.polynomial.legendre.leggauss(80)
        return low + (high - low) * (nodes + 1) / 2, weights * (high - low) / 2

    def tail(self, mean: float) -> float:
        """The outcomes at least as far on this side."""
        x, weights = self.points()
        first = norm.cdf(self.sign * (mean - self.limits[max(0, self.sign)]))
        onward = norm.cdf(self.sign * (x + mean * self.gained - self.total) / math.sqrt(self.gained))
        return float(first + np.sum(weights * norm.pdf(x - mean) * onward))

    def first(self) -> float:
        """The first difference, given where the second stands."""
        x, weights = self.points()
        share = weights * norm.pdf(x) * norm.pdf((self.total - x) / math.sqrt(self.gained))
        return float(np.sum(share * x) / np.sum(share))


@pytest.mark.parametrize(("last", "sign"), [(6.9, 1), (-4.0, -1)])
@pytest.mark.parametrize("split", [1, 2])
def test_two_arms_that_decide_at_their_second_comparison(last: float, sign: int, split: int) -> None:
    """Variances of one pair, .36 + .64, and of one against two, .36 + .64/2."""
    measurements = [("a", 0.2), ("b", 0.5), ("b", last)]
    found = after(ARMS, arms(measurements[:split]), arms(measurements[split:]))
    twice = Twice((1.0, 1.0 / 0.68), ((0.5 + last) / 2 - 0.2) / 0.68, sign)
    assert twice.limits[0] < 0.3 < twice.limits[1]
    near = twice.tail(0.0)
    assert found.p_value == pytest.approx(near if sign > 0 else 1.0 - near, rel=1e-9)
    for limit, chance in ((found.lower, 0.025), (found.upper, 0.975), (found.median_unbiased, 0.5)):
        assert limit is not None
        assert twice.tail(limit) == pytest.approx(chance if sign > 0 else 1.0 - chance, rel=1e-8)
    assert found.unbiased == pytest.approx(twice.first(), rel=1e-9)


def test_two_arms_in_turn_and_at_the_wall() -> None:
    """Half of the information comes with each measurement, about; the figures are near those of pairs alone."""
    differences = [0.4, 0.6, 0.3, 0.8, 0.5, 0.4, 0.6, 0.5]
    turns = [step for value in differences for step in (("a", 0.0), ("b", value))]
    wall = {"thresholds": {"accept": -9.0, "reject": 9.0}, "boundaries": "given"}
    found = after({**ARMS, **wall, "truncation": {"exposure": 8.0}}, arms(turns))
    pair = {**ARMS, **wall, "family": "normal_difference", "truncation": {"sample_number": 8}}
    twin = after(pair, {"observations": [{"a": 0.0, "b": value} for value in differences]})
    # So far from both limits, when it was looked at hardly matters.
    for name in ("p_value", "maximum_likelihood", "median_unbiased", "lower", "upper"):
        assert getattr(found, name) == pytest.approx(getattr(twin, name), abs=1e-3), name


def test_looks_that_bring_next_to_nothing_are_too_much() -> None:
    stream = [("b", 0.4), *(("a", 0.0) for _ in range(900)), ("b", 50.0)]
    with pytest.raises(ComputationTooLarge):
        after(ARMS, arms(stream))
