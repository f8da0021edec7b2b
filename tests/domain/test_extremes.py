"""Plans at the edge of what can be told apart: quick, finite, and never wrong."""

import math
import time
from typing import Any

import pytest

from service.domain.characteristics import promise_of
from service.domain.checking import checked_content
from service.domain.errors import ComputationTooLarge
from service.domain.observing import observe
from service.domain.outlook import ways_of
from service.domain.procedure import procedure_of_document
from service.domain.state import State, Sum
from tests.domain.test_observing import NOW

RISKS = {"alpha": 0.05, "beta": 0.10}
# Seconds that a shared machine may take for what takes milliseconds; what is guarded against took hours.
PATIENCE = 20.0


def document(**content: Any) -> str:
    return checked_content({**RISKS, **content})


@pytest.mark.parametrize(
    "content",
    [
        {"family": "poisson", "h0": 1.0, "h1": 1.000000000001},
        {"family": "exponential", "h0": 1.000000000001, "h1": 1.0},
        {"family": "bernoulli", "h0": 0.01, "h1": 0.010000000000001},
        {"family": "bernoulli", "h0": 1e-9, "h1": 2e-9},
        {"family": "poisson", "h0": 1e-6, "h1": 1e-5},
        {"family": "normal", "h0": 0.0, "h1": 0.001, "known": {"sigma": 1.0}},
        {"family": "paired", "h0": 1.0, "h1": 1.000000000001},
        {"family": "paired", "h0": 1e-6, "h1": 2e-6},
        {"family": "normal_two_sample", "h0": 0.0, "h1": 1e-3, "known": {"sigma_a": 1e-90, "sigma_b": 1.0}},
        {"family": "normal_difference", "h0": 0.0, "h1": 1e-3, "known": {"sigma_a": 1.0, "sigma_b": 1e-90}},
        {"family": "poisson_ratio", "h0": 1e3, "h1": 2e3, "known": {"exposure_ratio": 1e-9}},
        {"family": "normal_variance", "h0": 1.0, "h1": 1.0001, "known": {"mean": 0.0}},
        {"family": "weibull", "h0": 1.0, "h1": 1.000001, "known": {"shape": 0.01}},
        {"family": "negative_binomial", "h0": 1e6, "h1": 1.1e6, "known": {"dispersion": 3.0}},
        {"family": "negative_binomial", "h0": 1.0, "h1": 2.0, "known": {"dispersion": 1e-6}},
        {"family": "negative_binomial", "h0": 1.0, "h1": 1.000001, "known": {"dispersion": 1e12}},
    ],
)
def test_hypotheses_that_are_hard_to_tell_apart_hold_nobody_up(content: dict[str, Any]) -> None:
    begin = time.monotonic()
    plan = document(**content)
    ways = ways_of(procedure_of_document(plan), State())
    assert ways.accept is not None
    assert ways.reject is not None
    with pytest.raises(ComputationTooLarge):
        promise_of(plan, [content["h0"]])
    assert time.monotonic() - begin < PATIENCE


def test_the_way_to_a_far_decision_is_counted_exactly() -> None:
    """By hand: ln((1 - alpha)/beta) / ln((1 - p0)/(1 - p1)) units without a nonconforming one."""
    plan = document(family="bernoulli", h0=1e-9, h1=2e-9)
    accept = ways_of(procedure_of_document(plan), State()).accept
    assert accept is not None
    by_hand = math.log(0.95 / 0.10) / (math.log1p(-1e-9) - math.log1p(-2e-9))
    assert accept.observations == math.ceil(by_hand)


@pytest.mark.parametrize(
    ("content", "at"),
    [
        ({"family": "bernoulli", "h0": 0.001, "h1": 0.0005}, 0.5),
        ({"family": "bernoulli", "h0": 0.0005, "h1": 0.001}, 0.99),
        ({"family": "bernoulli", "h0": 0.01, "h1": 0.1}, 5e-324),
        ({"family": "poisson", "h0": 1.0, "h1": 2.0}, 1000.0),
        ({"family": "normal", "h0": 0.0, "h1": 1.0, "known": {"sigma": 1.0}}, 200.0),
        ({"family": "exponential", "h0": 2.0, "h1": 1.0}, 0.005),
        ({"family": "paired", "h0": 1.0, "h1": 2.0}, 1e6),
        ({"family": "paired", "h0": 1.0, "h1": 2.0}, 1e-6),
        ({"family": "weibull", "h0": 1000.0, "h1": 500.0, "known": {"shape": 3.0}}, 1e-100),
        ({"family": "normal_variance", "h0": 1.0, "h1": 2.0, "known": {"mean": -1e100}}, 1e-100),
        ({"family": "normal_variance", "h0": 1.0, "h1": 2.0, "known": {"mean": 0.0}}, 1e100),
        ({"family": "normal_variance", "h0": 1e-70, "h1": 1e70, "known": {"mean": 0.0}}, 1e-100),
        ({"family": "weibull", "h0": 1000.0, "h1": 500.0, "known": {"shape": 3.0}}, 1e100),
        ({"family": "negative_binomial", "h0": 1.0, "h1": 2.0, "known": {"dispersion": 2.0}}, 1e90),
        ({"family": "negative_binomial", "h0": 1.0, "h1": 2.0, "known": {"dispersion": 2.0}}, 1e-90),
    ],
)
def test_far_parameters_have_figures_and_approximations(content: dict[str, Any], at: float) -> None:
    point = promise_of(document(**content), [at]).points[0]
    assert point.probability_of_acceptance == pytest.approx(round(point.probability_of_acceptance), abs=1e-9)
    if point.wald is not None:
        assert point.wald.probability_of_acceptance == pytest.approx(point.probability_of_acceptance, abs=1e-9)
        assert math.isfinite(point.wald.average)


@pytest.mark.parametrize(("total", "counts"), [(14.0, 1), (15.0, 0)])
def test_near_the_wall_the_way_up_may_be_the_wall(total: float, counts: int) -> None:
    """Rates 1 against 2, truncated at 10: the sign of the evidence there parts totals at 10/ln 2 = 14.43."""
    procedure = procedure_of_document(document(family="poisson", h0=1.0, h1=2.0, truncation={"exposure": 10.0}))
    standing = State(sequence=1, sample_number=1, exposure=Sum(9.5), total=Sum(total))
    reject = ways_of(procedure, standing).reject
    assert reject is not None
    assert reject.total == counts
    assert reject.exposure == pytest.approx(0.5)
    after = observe(procedure, standing, {"observations": [{"value": counts, "exposure": 0.5}]}, NOW)
    assert after.decision == "reject"


def test_a_risk_that_no_limit_can_raise_stays_below_the_stated_one() -> None:
    """Mean lives so far apart that the first failures decide: the consumer's risk is less than stated."""
    stated = {"alpha": 0.00303, "beta": 0.369}
    plan = checked_content({"family": "exponential", "h0": 0.3106, "h1": 25.87, **stated, "boundaries": "calibrated"})
    promise = promise_of(plan, [0.3106, 25.87])
    assert promise.alpha == pytest.approx(0.00303, abs=1e-8)
    assert promise.beta is not None
    assert promise.beta < 0.369
