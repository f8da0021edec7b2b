"""Exact figures of sums of squares against nested quadrature, closed forms, simulation and laws."""

import math
from collections.abc import Callable
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from scipy.special import gammainc

from service.sequential import boundaries, likelihood
from service.sequential.boundaries import Thresholds
from service.sequential.exact.characteristics import TooMuchWork
from service.sequential.exact.squares import squares_characteristics
from service.sequential.region import POSITIVE, StraightRegion, Wall, straight_region


def region_of(sigma0: float, sigma1: float, limits: Thresholds, wall: int | None = None) -> StraightRegion:
    ratio = likelihood.normal_variance(sigma0, sigma1)
    return straight_region(ratio, limits, POSITIVE, None if wall is None else Wall(float(wall)))


X, WEIGHTS = np.polynomial.legendre.leggauss(80)
ANGLES, ANGLE_WEIGHTS = math.pi / 4 * (X + 1), math.pi / 4 * WEIGHTS


def integral(function: Callable[[float], float], ends: list[float]) -> float:
    """Piece by piece with 80 points each; roots of the distance to either end of a piece do no harm."""
    whole = 0.0
    for from_, to in pairwise(ends):
        at = from_ + (to - from_) * np.sin(ANGLES) ** 2
        weights = (to - from_) * np.sin(2 * ANGLES) * ANGLE_WEIGHTS
        whole += sum(weight * function(float(z)) for weight, z in zip(weights, at, strict=True))
    return whole


def within(reach: float) -> float:
    """P(a squared standard normal number is at most `reach`)."""
    return math.erf(math.sqrt(reach / 2)) if reach > 0 else 0.0


def three_steps(low: float, high: float, fall: float, start: float) -> tuple[float, float]:
    """P(ending below) and the mean number of steps at a wall of three, one integral inside the other."""

    def mean_of(function: Callable[[float], float], height: float, corners: list[float]) -> float:
        """Of a function of the height after one step, over the heights between the lines."""
        from_ = max(low, height - fall)
        inner = sorted(corner for corner in corners if from_ < corner < high)
        begin = 0.0 if height - fall >= low else math.sqrt(low - height + fall)
        ends = [begin, *(math.sqrt(at - height + fall) for at in (*inner, high))]
        chance = math.sqrt(2 / math.pi)
        return integral(lambda z: chance * math.exp(-z * z / 2) * function(height - fall + z * z), ends)

    def second(height: float) -> float:
        """P(below) after a height reached by one step."""
        return within(low - height + fall) + mean_of(lambda at: within(fall - at), height, [fall, low + fall])

    corners = [low + fall, low + 2 * fall, fall, 2 * fall]
    below = within(low - start + fall) + mean_of(second, start, corners)
    first = within(high - start + fall) - within(low - start + fall)
    later = mean_of(lambda at: within(high - at + fall) - within(low - at + fall), start, corners)
    return below, 1 + first + later


@pytest.mark.parametrize(
    ("sigmas", "sigma"), [((1.0, 2.0), 0.4), ((1.0, 2.0), 1.0), ((1.0, 2.0), 6.0), ((3.0, 1.0), 1.7), ((1.0, 1.1), 0.8)]
)
def test_three_measurements_by_nested_quadrature(sigmas: tuple[float, float], sigma: float) -> None:
    region = region_of(*sigmas, Thresholds(-0.9, 1.7), wall=3)
    found = squares_characteristics(region, np.array([sigma**2]))
    low, high = -region.lower_intercept / sigma**2, region.upper_intercept / sigma**2
    below, mean = three_steps(low, high, region.ratio.slope / sigma**2, 0.0)
    assert abs(found.below[0] - below) <= found.error_bound < 1e-9
    assert found.below[0] + found.above[0] == pytest.approx(1.0, abs=1e-12)
    assert found.mean[0] == pytest.approx(mean, rel=found.error_bound)


def test_from_within_the_region_by_nested_quadrature() -> None:
    """Two of five measurements are done, and their squares sum to 3."""
    region = region_of(1.0, 1.5, Thresholds(-1.2, 2.0), wall=5)
    found = squares_characteristics(region, np.array([1.3]), progress=2.0, total=3.0)
    low, high = -region.lower_intercept / 1.3, region.upper_intercept / 1.3
    fall = region.ratio.slope / 1.3
    below, mean = three_steps(low, high, fall, 3.0 / 1.3 - 2.0 * fall)
    assert abs(found.below[0] - below) <= found.error_bound < 1e-9
    assert found.mean[0] == pytest.approx(mean, rel=found.error_bound)


@pytest.mark.parametrize("wall", [1, 2, 7, 24])
@pytest.mark.parametrize("sigma", [0.8, 1.2, 2.5])
def test_between_far_lines_the_wall_decides_by_a_chi_square(wall: int, sigma: float) -> None:
    """P(sum of n squares <= n * slope) is an incomplete gamma function."""
    region = region_of(1.0, 1.6, Thresholds(-40.0, 60.0 if sigma < 2.0 else 400.0), wall=wall)
    found = squares_characteristics(region, np.array([sigma**2]))
    expected = gammainc(wall / 2, wall * region.ratio.slope / sigma**2 / 2)
    assert abs(found.below[0] - expected) <= found.error_bound < 1e-8
    assert found.mean[0] == pytest.approx(wall, rel=1e-10)
    assert found.quantiles[0].tolist() == [wall] * 4


@pytest.mark.parametrize(
    ("sigmas", "sigma", "wall"),
    [((1.0, 2.0), 1.4, None), ((2.0, 1.0), 1.9, None), ((1.0, 1.3), 0.9, None), ((1.0, 1.3), 1.2, 25)],
)
def test_measurements_one_by_one_agree(sigmas: tuple[float, float], sigma: float, wall: int | None) -> None:
    """20,000 simulated tests: each figure within 4 standard errors, and Wald's identity E[total] = variance * E[N]."""
    region = region_of(*sigmas, boundaries.wald(0.05, 0.1), wall)
    found = squares_characteristics(region, np.array([sigma**2]))
    source, tests = np.random.default_rng(29), 20_000
    totals, counts, below = np.zeros(tests), np.zeros(tests), np.zeros(tests, bool)
    running = np.arange(tests)
    while running.size:
        totals[running] += source.normal(0.0, sigma, running.size) ** 2
        counts[running] += 1
        deviation = totals[running] - region.ratio.slope * counts[running]
        is_low, is_high = deviation <= -region.lower_intercept, deviation >= region.upper_intercept
        if wall is not None:
            at_wall = counts[running] == wall
            is_low, is_high = is_low | (at_wall & (deviation <= 0)), is_high | (at_wall & (deviation > 0))
        below[running] = is_low
        running = running[~(is_low | is_high)]
    figures = ((found.below[0], below), (found.mean[0], counts), (found.mean[0] * sigma**2, totals))
    for exact, sample in figures:
        assert abs(np.mean(sample) - exact) < 4 * np.std(sample) / math.sqrt(tests)
    assert found.standard_deviation[0] == pytest.approx(np.std(counts), rel=0.03)
    for q, exact in zip((0.5, 0.9, 0.95, 0.99), found.quantiles[0], strict=True):
        assert np.mean(counts <= exact) >= q - 4 * math.sqrt(q * (1 - q) / tests)
        assert np.mean(counts <= exact - 1) <= q + 4 * math.sqrt(q * (1 - q) / tests)


def test_a_far_wall_changes_nothing() -> None:
    at = np.array([0.8, 1.0, 2.0, 4.0])
    whole = squares_characteristics(region_of(1.0, 2.0, boundaries.wald(0.05, 0.1)), at)
    far = squares_characteristics(region_of(1.0, 2.0, boundaries.wald(0.05, 0.1), wall=400), at)
    assert far.below == pytest.approx(whole.below, abs=1e-11)
    assert far.above == pytest.approx(whole.above, abs=1e-11)
    assert far.mean == pytest.approx(whole.mean, rel=1e-10)
    assert far.standard_deviation == pytest.approx(whole.standard_deviation, rel=1e-9)
    assert far.quantiles.tolist() == whole.quantiles.tolist()


@pytest.mark.parametrize("sigma", [0.06, 0.15, 0.2, 0.25])
def test_a_spread_that_is_all_but_none_goes_over_into_one_that_is(sigma: float) -> None:
    """The closed form of a falling walk and the quadrature, just on its two sides: the mean grows smoothly."""
    region = region_of(1.0, 2.0, boundaries.wald(0.05, 0.1))
    at = (sigma * np.array([0.99, 1.0, 1.01])) ** 2
    found = squares_characteristics(region, at)
    assert found.below == pytest.approx(np.ones(3), abs=1e-9)
    first = math.ceil(region.lower_intercept / region.ratio.slope)
    room = (first * region.ratio.slope - region.lower_intercept) / at
    # At the first step that may end it, a walk ends with just this probability; what is left mostly ends at the next.
    at_once = gammainc(first / 2, room / 2)
    assert np.all(found.mean >= first + (1.0 - at_once) - 1e-9)
    assert np.all(np.diff(found.mean) >= -1e-9)


@settings(max_examples=8, deadline=None)
@example((1.0, 8.0), Thresholds(-1.375, 0.6875))  # needs the finest computation
@given(
    st.sampled_from([(1.0, 1.5), (1.0, 2.0), (4.0, 1.0), (1.0, 8.0)]),
    st.builds(Thresholds, st.floats(-4.0, -0.3), st.floats(0.3, 4.0)),
)
def test_no_plan_errs_more_often_than_the_martingale_allows(sigmas: tuple[float, float], limits: Thresholds) -> None:
    """Ville (1939): P0(ratio ever reaches A) <= 1/A, and P1(ratio ever falls to B) <= B."""
    found = squares_characteristics(region_of(*sigmas, limits), np.array(sigmas) ** 2)
    accepts, rejects = (found.below, found.above) if sigmas[1] > sigmas[0] else (found.above, found.below)
    assert rejects[0] <= math.exp(-limits.reject) * (1 + 1e-9)
    assert accepts[1] <= math.exp(limits.accept) * (1 + 1e-9)
    assert found.below + found.above == pytest.approx(np.ones(2), abs=1e-9)
    assert found.error_bound < 1e-8


@pytest.mark.parametrize("sigma", [1e-100, 1e-6, 1e-3, 0.03, 30.0, 1e3, 1e6, 1e100])
@pytest.mark.parametrize("wall", [None, 1, 2, 4, 5, 40])
def test_far_spreads_have_figures(sigma: float, wall: int | None) -> None:
    region = region_of(1.0, 2.0, boundaries.wald(0.05, 0.1), wall)
    found = squares_characteristics(region, np.array([sigma**2]))
    if sigma < 1.0:
        assert found.below[0] == pytest.approx(1.0, abs=1e-12)
        assert found.mean[0] == pytest.approx(min(4, wall or 4), abs=1e-9)
    else:
        # A test goes on after n measurements only if all of them lie within the limit of the first n squares.
        inside = math.erf(math.sqrt((region.upper_intercept + region.ratio.slope) / 2) / sigma) if sigma < 1e90 else 0.0
        assert found.below[0] <= inside + 1e-12
        assert 1.0 <= found.mean[0] <= 1.0 + 2.0 * inside + 1e-12


def test_too_much_is_refused() -> None:
    with pytest.raises(TooMuchWork):
        squares_characteristics(region_of(1.0, 1.0001, boundaries.wald(0.05, 0.1)), np.array([1.0]))
