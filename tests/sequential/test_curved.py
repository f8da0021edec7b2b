"""The region of any evidence: its limits, decisions and moments, against asking the evidence point by point."""

import math

import numpy as np
import pytest

from service.sequential import deviance, generalised, likelihood
from service.sequential.boundaries import Thresholds
from service.sequential.curved import CurvedRegion
from service.sequential.decision import Decision
from service.sequential.double import Double
from service.sequential.evidence import Evidence
from service.sequential.mixture import BetaMixture, GammaMixture, NormalMixture
from service.sequential.region import ABOVE, BELOW, COUNTS, INSIDE, PASS_FAIL, REALS, Span, Wall

PROPORTIONS: dict[str, Evidence] = {
    "up": generalised.OneSided(deviance.Bernoulli(), 0.1, 0.3, likelihood.bernoulli(0.1, 0.3), is_upward=True),
    "down": generalised.OneSided(deviance.Bernoulli(), 0.3, 0.1, likelihood.bernoulli(0.3, 0.1), is_upward=False),
    "both": generalised.TwoSided(deviance.Bernoulli(), 0.2),
    "mixed": BetaMixture(0.2, 0, 1.0, 4.0),
    "mixed up": BetaMixture(0.2, 1, 1.0, 4.0),
    "mixed down": BetaMixture(0.2, -1, 1.0, 4.0),
}
RATES: dict[str, Evidence] = {
    "up": generalised.OneSided(deviance.Poisson(), 1.0, 2.0, likelihood.poisson(1.0, 2.0), is_upward=True),
    "down": generalised.OneSided(deviance.Poisson(), 2.0, 1.0, likelihood.poisson(2.0, 1.0), is_upward=False),
    "both": generalised.TwoSided(deviance.Poisson(), 1.0),
    "mixed": GammaMixture(1.0, 0, 2.0, 2.0),
    "mixed up": GammaMixture(1.0, 1, 2.0, 2.0),
}


def thresholds_of(evidence: Evidence) -> Thresholds:
    has_accept = isinstance(evidence, generalised.OneSided)
    return Thresholds(-2.0 if has_accept else -math.inf, 2.4)


def one(value: float) -> Double:
    return Double(np.array([value]), np.zeros(1))


def sides_by_hand(region: CurvedRegion, progress: float, total: float) -> int:
    """From the thresholds and on which side of H0's expectation the total lies."""
    value = float(region.evidence.log(one(progress), one(total))[0])
    rejects, accepts = value >= region.thresholds.reject, value <= region.thresholds.accept
    if region.evidence.is_two_sided:
        side = ABOVE if total > float(region.evidence.expected(np.array([progress]))[0]) else BELOW
        return side if rejects else INSIDE
    up = 1 if region.evidence.is_upward else -1
    return up if rejects else -up if accepts else INSIDE


@pytest.mark.parametrize("name", PROPORTIONS)
@pytest.mark.parametrize("looks", [60, 5000])
def test_whole_limits_are_those_found_by_asking_every_total(name: str, looks: int) -> None:
    """With more looks than a table holds the search finds the same."""
    evidence = PROPORTIONS[name]
    region = CurvedRegion(evidence, thresholds_of(evidence), PASS_FAIL)
    limits = region.limits(np.arange(1.0, looks + 1.0))
    for n in range(1, 61):
        sides = [sides_by_hand(region, float(n), float(total)) for total in range(n + 1)]
        below = [total for total, side in enumerate(sides) if side == BELOW]
        above = [total for total, side in enumerate(sides) if side == ABOVE]
        assert limits.lower[n - 1] == max(below, default=-math.inf)
        assert limits.upper[n - 1] == min(above, default=math.inf)


@pytest.mark.parametrize("name", RATES)
def test_moments_of_counts_are_where_the_evidence_comes_to_a_threshold(name: str) -> None:
    evidence = RATES[name]
    region = CurvedRegion(evidence, thresholds_of(evidence), COUNTS)
    totals = np.arange(0.0, 40.0)
    for moments, side, later in (
        (region.lower_reached_at(totals), BELOW, 1.0),
        (region.upper_left_at(totals), ABOVE, -1.0),
    ):
        for total, moment in zip(totals, moments, strict=True):
            if not math.isfinite(moment):
                far = 1e9 if side == BELOW else 1e-9
                assert sides_by_hand(region, far, float(total)) != side
                continue
            near = moment * 1e-9
            assert sides_by_hand(region, moment + later * near, float(total)) == side
            assert sides_by_hand(region, moment - later * near, float(total)) != side


@pytest.mark.parametrize("mean", [0.0, 1e6])
def test_real_limits_and_decisions_agree(mean: float) -> None:
    """A hair on either side of a limit, also where the mean is large against the spread."""
    for evidence in (
        NormalMixture(mean, 0, 0.5, 0.2),
        generalised.OneSided(deviance.Normal(0.5), mean, mean + 0.3, likelihood.normal(mean, mean + 0.3, 0.5), True),  # noqa: FBT003
    ):
        region = CurvedRegion(evidence, thresholds_of(evidence), REALS, Wall(50.0))
        progress = np.arange(1.0, 50.0)
        limits = region.limits(progress)
        for limit, side in ((limits.lower, BELOW), (limits.upper, ABOVE)):
            hair = 1e-9 * np.maximum(1.0, np.abs(limit))
            zero = np.zeros_like(progress)
            at = Double(progress, zero)
            assert np.all(region.sides(at, Double(limit + side * hair, zero)) == side)
            assert np.all(region.sides(at, Double(limit - side * hair, zero)) == INSIDE)


@pytest.mark.parametrize(
    ("evidence", "span", "total", "decision"),
    [
        (PROPORTIONS["both"], PASS_FAIL, 6.0, Decision.ACCEPT),  # between the limits
        (PROPORTIONS["mixed up"], PASS_FAIL, 6.0, Decision.ACCEPT),
        (PROPORTIONS["mixed up"], PASS_FAIL, 30.0, Decision.REJECT),
        (PROPORTIONS["mixed down"], PASS_FAIL, 0.0, Decision.REJECT),
        (PROPORTIONS["up"], PASS_FAIL, 6.0, Decision.REJECT),  # at .1 and .3 the evidence turns at .186 of 30
        (PROPORTIONS["up"], PASS_FAIL, 5.0, Decision.ACCEPT),
    ],
)
def test_the_wall_decides_what_is_left(evidence: Evidence, span: Span, total: float, decision: Decision) -> None:
    region = CurvedRegion(evidence, thresholds_of(evidence), span, Wall(30.0))
    side = int(region.sides_at_wall(one(30.0), one(total))[0])
    assert {BELOW: region.below, INSIDE: region.between, ABOVE: region.above}[side] is decision
    limits = region.limits(np.array([30.0]))
    expected = BELOW if total <= limits.lower[0] else ABOVE if total >= limits.upper[0] else INSIDE
    assert side == expected
