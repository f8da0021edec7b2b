"""Inference after tests of failures watched in time, against the generator's matrix exponential and simulation."""

import math

import numpy as np
import pytest
from scipy.stats import chi2

from service.sequential import likelihood
from service.sequential.boundaries import Thresholds, wald
from service.sequential.inference.bias import bias_of_life
from service.sequential.inference.counting import CountedOutcome
from service.sequential.inference.laws import RateLaw
from service.sequential.inference.ordering import lower_limit, median_unbiased, upper_limit
from service.sequential.inference.schedules import schedule_of_time
from service.sequential.region import COUNTS, Region, StraightRegion, Wall, straight_region
from service.sequential.tables import TimeTable
from tests.sequential.reference import paths

OPEN = straight_region(likelihood.exponential(200.0, 100.0), wald(0.1, 0.1), COUNTS)
WALLED = straight_region(likelihood.exponential(200.0, 100.0), Thresholds(-1.5, 1.8), COUNTS, Wall(700.0))
CAPPED = straight_region(likelihood.exponential(200.0, 100.0), Thresholds(-1.5, 1.8), COUNTS, Wall(700.0, 5))
TABLE = TimeTable((267.0, 432.0, math.inf), (-math.inf, -math.inf, 36.0, 450.0), Wall(450.0, 3))


def outcome(region: Region, time: float, failures: int, *, is_above: bool) -> CountedOutcome:
    return CountedOutcome(RateLaw(), schedule_of_time(region, time), failures, is_above)


def moments(region: Region, cap: int) -> tuple[list[float], list[float]]:
    totals = np.arange(cap + 1.0)
    return region.lower_reached_at(totals).tolist(), region.upper_left_at(totals).tolist()


@pytest.mark.parametrize("region", [OPEN, WALLED, CAPPED, TABLE])
@pytest.mark.parametrize("mean", [60.0, 140.0, 400.0])
def test_failures_that_reject_against_the_generator(region: Region, mean: float) -> None:
    """P(rejecting before a moment): the chain stopped there, with whatever goes on then counted below."""
    cap = 20 if region.wall is None or region.wall.cap is None else region.wall.cap
    lower, upper = moments(region, cap)
    for time in (30.0, 170.0, 333.0, 449.0):
        _, above, _ = paths.in_time(lower.__getitem__, upper.__getitem__, time, lambda _: True, cap, 1 / mean)
        tails = outcome(
            region, time, next(k for k in range(1, cap + 1) if k == cap or upper[k] > time), is_above=True
        ).tails(-math.log(mean))
        assert tails.up == tails.further_up == pytest.approx(above, rel=1e-10, abs=1e-14)


@pytest.mark.parametrize("region", [OPEN, WALLED, CAPPED, TABLE])
@pytest.mark.parametrize("mean", [60.0, 140.0, 400.0])
def test_quiet_times_that_accept_against_the_generator(region: Region, mean: float) -> None:
    """P(accepting with fewer failures, or with as many): the chain stopped when that moment comes."""
    cap = 20 if region.wall is None or region.wall.cap is None else region.wall.cap
    lower, upper = moments(region, cap)
    for failures in range(2 if region is TABLE else 3):
        time = lower[failures]
        found = [
            paths.in_time(lower.__getitem__, upper.__getitem__, time, most.__ge__, cap, 1 / mean)[0]
            for most in (failures, -1)
        ]
        tails = outcome(region, time, failures, is_above=False).tails(-math.log(mean))
        assert tails.down == pytest.approx(found[0], rel=1e-10)
        # In the chain a total whose moment has come is always counted: what lies strictly further down came earlier.
        before = (
            0.0
            if failures == 0
            else outcome(region, lower[failures - 1], failures - 1, is_above=False).tails(-math.log(mean)).down
        )
        assert tails.further_down == pytest.approx(before, rel=1e-10, abs=1e-15)


@pytest.mark.parametrize(
    ("region", "total", "is_above"), [(WALLED, 5, True), (WALLED, 4, False), (CAPPED, 4, False), (TABLE, 2, False)]
)
def test_the_wall_parts_by_totals(region: Region, total: int, *, is_above: bool) -> None:
    assert region.wall is not None
    cap = 20 if region.wall.cap is None else region.wall.cap
    lower, upper = moments(region, cap)
    for mean in (60.0, 140.0, 400.0):
        tails = outcome(region, region.wall.progress, total, is_above=is_above).tails(-math.log(mean))
        at_most, below = (
            paths.in_time(
                lower.__getitem__,
                upper.__getitem__,
                region.wall.progress,
                most.__ge__,
                cap,
                1 / mean,
            )[0]
            for most in (total, total - 1)
        )
        assert tails.down == pytest.approx(at_most, abs=1e-12)
        assert tails.further_down == pytest.approx(below, abs=1e-12)
        assert tails.up == pytest.approx(1 - below, abs=1e-12)


def test_no_failure_has_the_limit_of_the_chi_square() -> None:
    """Accepting without a failure after t: the lower limit of the mean life is 2 t over the chi-square quantile."""
    time = float(OPEN.lower_reached_at(np.zeros(1))[0])
    found = outcome(OPEN, time, 0, is_above=False)
    assert lower_limit(found, 0.05) == -math.inf
    assert math.exp(-upper_limit(found, 0.05)) == pytest.approx(2 * time / chi2.ppf(0.95, 2), rel=1e-12)
    assert median_unbiased(found) == -math.inf


def simulated(region: StraightRegion, mean: float, source: np.random.Generator) -> tuple[float, int, bool]:
    """One test, failure by failure."""
    lower, upper = moments(region, 200)
    wall = math.inf if region.wall is None else region.wall.progress
    time = 0.0
    for failures, gap in enumerate(source.exponential(mean, 200).tolist()):
        if failures and upper[failures] >= time:
            return time, failures, True
        if time + gap >= min(lower[failures], wall):
            is_above = wall < lower[failures] and failures > region.ratio.slope * wall
            return min(lower[failures], wall), failures, is_above
        time += gap
    raise AssertionError("a test of 200 failures was not expected")


@pytest.mark.parametrize(("region", "mean"), [(OPEN, 90.0), (WALLED, 160.0)])
def test_limits_miss_no_more_often_than_they_say_and_the_bias_is_right(region: StraightRegion, mean: float) -> None:
    """Simulated tests, within 4 standard errors: the limits of the first 400, the bias of all."""
    source, count = np.random.default_rng(5), 400
    ends = [simulated(region, mean, source) for _ in range(5000)]
    found = [outcome(region, *end[:2], is_above=end[2]).tails(-math.log(mean)) for end in ends[:count]]
    for misses in (sum(tails.up < 0.05 for tails in found), sum(tails.down < 0.05 for tails in found)):
        assert misses / count < 0.05 + 4 * math.sqrt(0.05 * 0.95 / count)
    estimates = [time / failures for time, failures, _ in ends if failures]
    error = float(np.std(estimates)) / math.sqrt(len(estimates))
    assert abs(np.mean(estimates) - mean - bias_of_life(region, 1 / mean)) < 4 * error


def test_the_bias_after_a_fixed_number_of_failures_or_a_time() -> None:
    """Failure 2 before T rejects, T accepts: E(T/N; …) by hand, from two gamma integrals, given a failure at all."""
    region = straight_region(likelihood.exponential(200.0, 100.0), Thresholds(-50.0, 50.0), COUNTS, Wall(120.0, 2))
    rate, end = 1 / 90.0, 120.0
    one = rate * end * math.exp(-rate * end)
    two = 1 - math.exp(-rate * end) - one
    grid = (np.arange(200_000) + 0.5) * end / 200_000
    second = float(np.sum(grid / 2 * rate**2 * grid * np.exp(-rate * grid)) * end / 200_000)
    assert bias_of_life(region, rate) == pytest.approx((end * one + second) / (one + two) - 90.0, rel=1e-8)
