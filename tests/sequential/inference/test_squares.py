"""Inference after tests of spread against integrals one inside the other, closed forms, simulation and laws."""

import math
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.integrate import quad
from scipy.special import erf
from scipy.stats import chi, chi2

from service.sequential import likelihood
from service.sequential.boundaries import Thresholds
from service.sequential.exact.characteristics import TooMuchWork
from service.sequential.exact.squares import squares_characteristics
from service.sequential.inference.ordering import lower_limit, median_unbiased, upper_limit
from service.sequential.inference.spread_bias import bias_of_spread
from service.sequential.inference.squares import SquaresOutcome
from service.sequential.region import POSITIVE, StraightRegion, Wall, straight_region
from tests.sequential.reference.squares import Squares


@dataclass(frozen=True)
class Plan:
    """H0 and H1 as standard deviations, with limits of the log-likelihood ratio."""

    sigmas: tuple[float, float]
    accept: float
    reject: float

    def region(self, wall: int | None = None) -> StraightRegion:
        ratio = likelihood.normal_variance(*self.sigmas)
        limits = Thresholds(self.accept, self.reject)
        return straight_region(ratio, limits, POSITIVE, None if wall is None else Wall(float(wall)))

    def slowly(self, variance: float, points: int = 40) -> Squares:
        region = self.region()
        return Squares(region.ratio.slope, region.lower_intercept, region.upper_intercept, variance, points)


PLANS = {
    "upward": Plan((1.0, 2.0), -0.9, 1.7),
    "downward": Plan((2.0, 1.0), -1.2, 0.9),
    "wide": Plan((1.0, 1.2), -2.2, 2.9),
    "narrow": Plan((1.0, 8.0), -0.4, 0.3),
    "low": Plan((1.0, 2.0), -3.0, 0.4),
}


def ended(region: StraightRegion, looks: int, total: float) -> SquaresOutcome:
    return SquaresOutcome(region, looks, total, total - region.ratio.slope * looks)


def totals_at(plan: Plan, looks: int) -> list[float]:
    """A few ends at a look: beyond both lines, at the very lower one, just above it, and between, as at a wall."""
    slow, slope = plan.slowly(1.0), plan.region().ratio.slope
    before, low, high = slow.lower(looks - 1), slow.lower(looks), slow.upper(looks)
    bottom = max(before, low)
    between = [bottom + share * (high - bottom) for share in (0.001, 0.3, 0.8)]
    below = [before + share * (low - before) for share in (0.02, 0.6, 1.0)] if low > before else []
    return [*below, *between, high, high + 1.5 * slope]


@pytest.mark.parametrize("name", PLANS)
@pytest.mark.parametrize("looks", [2, 3])
def test_tails_against_integrals_one_inside_the_other(name: str, looks: int) -> None:
    """The side that is added up has all its digits; the other is its complement."""
    plan = PLANS[name]
    for total in totals_at(plan, looks):
        found = ended(plan.region(), looks, total)
        for away in (-2.0, -0.1, 0.7, 3.0):
            natural = found.reference + away
            slow, tails = plan.slowly(math.exp(natural), 32), found.tails(natural)
            up, down = slow.reaches(looks, total), slow.stays(looks, total)
            # Of the slow integrals, too, one side may have lost its digits.
            assert up + down == pytest.approx(1.0, abs=1e-9)
            if away < 0.0:
                assert tails.up == pytest.approx(up, rel=1e-9)
            else:
                assert tails.down == pytest.approx(down, rel=1e-9)
            assert tails.up + tails.down == pytest.approx(1.0, abs=1e-15)
            assert (tails.further_up, tails.further_down) == (tails.up, tails.down)


@pytest.mark.parametrize(("name", "share"), [("upward", -0.5), ("upward", 0.4), ("downward", 1.0), ("low", 0.7)])
def test_four_measurements_against_integrals(name: str, share: float) -> None:
    """Below the lower line, between both and above the upper one, as a share of the way."""
    plan = PLANS[name]
    slow = plan.slowly(1.0)
    total = (
        slow.lower(4) + share * (slow.upper(4) - slow.lower(4)) if share > 0.0 else 0.5 * sum(map(slow.lower, (3, 4)))
    )
    found = ended(plan.region(), 4, total)
    for variance in (0.6, 2.0, 9.0):
        slow, tails = plan.slowly(variance, 24), found.tails(math.log(variance))
        assert tails.up == pytest.approx(slow.reaches(4, total), rel=1e-9)
        assert tails.down == pytest.approx(slow.stays(4, total), rel=1e-9)


def test_a_tiny_p_value_keeps_its_digits() -> None:
    """Four measurements some ten standard deviations large, the last beyond the upper line."""
    plan = PLANS["upward"]
    found = ended(plan.region(), 4, plan.slowly(1.0).upper(4))
    for variance, digits in ((0.05, 1e-10), (0.02, 1e-10)):
        exact = plan.slowly(variance, 24).reaches(4, found.total)
        assert found.tails(math.log(variance)).up == pytest.approx(exact, rel=digits)
        assert exact < 1e-28


@pytest.mark.parametrize(
    ("plan", "looks"),
    [
        (Plan((1.0, 2.0), math.log(0.1), math.log(20.0)), 30),
        (Plan((2.0, 1.0), math.log(0.1), math.log(20.0)), 12),
        (Plan((1.0, 1.2), math.log(0.1), math.log(20.0)), 40),
    ],
)
def test_parted_at_the_middle_the_wall_has_the_plans_own_figures(plan: Plan, looks: int) -> None:
    """One pass under one variance against a computation for each: the acceptance probability of a truncated plan."""
    region = plan.region(looks)
    sigmas = np.array([0.8, 1.0, 1.4, 3.0])
    exact = squares_characteristics(region, sigmas**2)
    found = ended(region, looks, region.ratio.slope * looks)
    tails = [found.tails(2.0 * math.log(sigma)) for sigma in sigmas]
    assert [tail.down for tail in tails] == pytest.approx(exact.below, abs=2.0 * exact.error_bound)
    assert [tail.up for tail in tails] == pytest.approx(exact.above, abs=2.0 * exact.error_bound)


@pytest.mark.parametrize("looks", [1, 5, 40])
def test_where_no_limit_came_first_the_total_is_a_chi_square(looks: int) -> None:
    region = Plan((1.0, 1.6), -40.0, 60.0).region()
    found = ended(region, looks, 0.9 * looks)
    for tail in (1e-4, 0.025, 0.4):
        assert math.exp(lower_limit(found, tail)) == pytest.approx(found.total / chi2.isf(tail, looks), rel=1e-10)
        assert math.exp(upper_limit(found, tail)) == pytest.approx(found.total / chi2.ppf(tail, looks), rel=1e-10)
    assert math.exp(median_unbiased(found)) == pytest.approx(found.total / chi2.median(looks), rel=1e-10)
    # The mean of a chi distribution takes the bias out of the root.
    assert found.first_step_mean() == pytest.approx(math.sqrt(found.total) / chi.mean(looks), rel=1e-12)


def test_measurements_that_hardly_move_end_a_test_late() -> None:
    """The first lower limit above zero is missed by a little and the next one comes at once: two looks count."""
    plan = PLANS["wide"]
    region = plan.region()
    first = math.floor(region.lower_intercept / region.ratio.slope) + 1
    limit, total = region.ratio.slope * first - region.lower_intercept, 0.0
    for share in (1.001, 1.2):
        total = share * limit
        found = ended(region, first + 1, total)
        for variance in (0.02 * total, 0.5 * total):
            scaled, end = limit / variance, total / variance
            at_once = chi2.cdf(scaled, first)
            later = quad(
                lambda s, end=end: chi2.pdf(s, first) * erf(math.sqrt(max(0.0, end - s) / 2.0)), scaled, end, epsabs=0.0
            )[0]
            assert found.tails(math.log(variance)).down == pytest.approx(at_once + later, rel=1e-9)


@dataclass(frozen=True)
class Ends:
    """
    Ends of a test, with the probability that each stands for and what is said of it.

    Attributes:
        variance: The true one.
        up: P(further up) under it.
    """

    variance: float
    masses: NDArray[np.float64]
    up: NDArray[np.float64]
    unbiased: NDArray[np.float64]
    roots: NDArray[np.float64]


@lru_cache(maxsize=16)
def all_ends(name: str, wall: int, variance: float, points: int = 14) -> Ends:
    """By quadrature over where a truncated test ends; totals of a probability below 1e-16 are left out."""
    plan, rows = PLANS[name], []
    region, slow = plan.region(wall), plan.slowly(variance, points)
    for look in range(1, wall + 1):
        before, low, high = slow.lower(look - 1) if look > 1 else 0.0, slow.lower(look), slow.upper(look)
        far = [high + share * variance for share in (0.0, 4.0, 20.0, 75.0)]
        above, below = far, [before, max(before, low)]
        for ends in [[below[0], *below[1:], *above]] if look == wall else [below, above]:
            if ends[-1] <= ends[0]:
                continue
            totals, masses = slow.over(look, ends)
            for total, mass in zip(totals.tolist(), masses.tolist(), strict=True):
                found = ended(region, look, total)
                up = found.tails(math.log(variance)).up if mass > 1e-16 else 0.0
                unbiased = found.first_step_mean() if mass > 1e-16 else 0.0
                rows.append((mass, up, unbiased, math.sqrt(total / look)))
    return Ends(variance, *(np.array(column) for column in zip(*rows, strict=True)))


CASES = [("upward", 1.0), ("downward", 2.0), ("narrow", 9.0)]


@pytest.mark.parametrize(("name", "variance"), CASES)
def test_the_probability_of_ends_further_up_is_uniform(name: str, variance: float) -> None:
    """All moments of a number drawn evenly between 0 and 1: so limits hold, and p-values are small, as they say."""
    ends = all_ends(name, 3, variance)
    assert float(ends.masses.sum()) == pytest.approx(1.0, abs=1e-8)
    for power in range(1, 9):
        assert float(ends.masses @ ends.up**power) == pytest.approx(1.0 / (power + 1.0), abs=1e-7)


@pytest.mark.parametrize(("name", "variance"), CASES)
def test_the_first_deviation_given_the_end_is_unbiased(name: str, variance: float) -> None:
    ends = all_ends(name, 3, variance)
    assert float(ends.masses @ ends.unbiased) == pytest.approx(math.sqrt(variance), rel=1e-7)


@pytest.mark.parametrize("name", ["upward", "downward", "wide"])
@pytest.mark.parametrize("share", [-0.5, 0.3, 1.02])
def test_the_size_of_the_first_deviation_given_four(name: str, share: float) -> None:
    """The quotient of two densities, the walks of one weighed by the size of their first measurement."""
    plan = PLANS[name]
    slow = plan.slowly(1.7, 24)
    low, high = max(slow.lower(3), slow.lower(4)), slow.upper(4)
    if share < 0.0 and low == 0.0:
        share = 0.01
    total = low + share * (high - low) if share > 0.0 else 0.5 * (slow.lower(3) + low)
    at = np.array([total])
    exact = replace(slow, sized=True).density(4, at)[0] / slow.density(4, at)[0]
    found = ended(plan.region(), 4, total).first_step_mean()
    assert found == pytest.approx(math.sqrt(math.pi / 2.0) * exact, rel=1e-8)


@pytest.mark.parametrize(("name", "variance"), CASES)
def test_the_bias_of_the_estimate_is_its_mean_error(name: str, variance: float) -> None:
    ends, sigma = all_ends(name, 3, variance), math.sqrt(variance)
    bias = bias_of_spread(PLANS[name].region(3), sigma)
    assert bias == pytest.approx(float(ends.masses @ ends.roots) - sigma, abs=1e-7 * sigma)


@pytest.mark.parametrize("wall", [1, 2, 6])
def test_between_far_lines_the_bias_is_that_of_a_chi_square(wall: int) -> None:
    region = Plan((1.0, 1.6), -40.0, 60.0).region(wall)
    expected = 1.3 * (chi.mean(wall) / math.sqrt(wall) - 1.0)
    assert bias_of_spread(region, 1.3) == pytest.approx(expected, abs=1e-10)


def test_a_lower_line_that_first_shows_just_above_zero_costs_the_bias_no_digits() -> None:
    """The second lower limit goes to zero, and the bias to what it is there."""
    shifts = (1e-12, 1e-9, 1e-6)
    plans = [Plan((1.0, 2.0), 2.0 * math.log(0.5) + shift, 1.0) for shift in shifts]
    hardly, little, more = (bias_of_spread(plan.region(3), 1.0) for plan in plans)
    assert little == pytest.approx(hardly, abs=2e-9)
    assert more == pytest.approx(hardly, abs=2e-6)


def test_an_open_test_is_as_biased_as_it_shows_when_simulated() -> None:
    """20,000 tests each; the mean error within 4 standard errors."""
    for plan, sigma in ((PLANS["upward"], 1.4), (PLANS["downward"], 1.2)):
        estimates, _ = simulated(plan, sigma, 20_000)
        bias = bias_of_spread(plan.region(), sigma)
        assert abs(np.mean(estimates) - sigma - bias) < 4.0 * np.std(estimates) / math.sqrt(len(estimates))


def test_limits_of_open_tests_hold_as_often_as_they_say() -> None:
    """150 simulated tests of 1.5 against 1 and 3: each limit misses in 5 % (within 4 standard errors)."""
    plan, sigma, count = Plan((1.0, 3.0), math.log(1.0 / 9.0), math.log(9.0)), 1.5, 150
    region = plan.region()
    _, ends = simulated(plan, sigma, count)
    tails = [ended(region, looks, total).tails(2.0 * math.log(sigma)) for looks, total in ends]
    for misses in ([tail.up < 0.05 for tail in tails], [tail.down < 0.05 for tail in tails]):
        assert abs(np.mean(misses) - 0.05) < 4.0 * math.sqrt(0.05 * 0.95 / count)
    assert abs(np.mean([tail.up < 0.5 for tail in tails]) - 0.5) < 4.0 * math.sqrt(0.25 / count)


def simulated(plan: Plan, sigma: float, count: int) -> tuple[NDArray[np.float64], list[tuple[int, float]]]:
    """The estimate at the end of each open test, and the looks and the total."""
    region, source = plan.region(), np.random.default_rng(17)
    totals, looks, running = np.zeros(count), np.zeros(count, dtype=int), np.arange(count)
    while running.size:
        totals[running] += source.normal(0.0, sigma, running.size) ** 2
        looks[running] += 1
        deviation = totals[running] - region.ratio.slope * looks[running]
        running = running[(deviation > -region.lower_intercept) & (deviation < region.upper_intercept)]
    return np.sqrt(totals / looks), list(zip(looks.tolist(), totals.tolist(), strict=True))


def test_a_total_of_zero_has_probability_zero_whatever_the_spread() -> None:
    found = ended(PLANS["upward"].region(), 3, 0.0)
    assert (found.tails(0.0).up, found.tails(0.0).down) == (1.0, 0.0)
    assert median_unbiased(found) == lower_limit(found, 0.025) == upper_limit(found, 0.025) == -math.inf
    assert found.first_step_mean() == 0.0


def test_an_enormous_last_measurement_leaves_what_came_before_it() -> None:
    """Nothing but an earlier end lies further up, so the p-value is that of one."""
    plan = PLANS["upward"]
    found = ended(plan.region(), 3, 1e180)
    slow = plan.slowly(1.0)
    assert found.tails(0.0).up == pytest.approx(slow.reaches(2, slow.upper(2)), rel=1e-10)
    assert math.isfinite(upper_limit(found, 0.025))
    assert 0.0 < math.exp(lower_limit(found, 0.025)) < 1e3


def test_too_much_is_refused() -> None:
    region = Plan((1.0, 1.0001), math.log(0.1), math.log(20.0)).region()
    with pytest.raises(TooMuchWork):
        ended(region, 30_000, 30_000.0 * region.ratio.slope).tails(0.0)
    with pytest.raises(TooMuchWork):
        bias_of_spread(region, 1.0)
