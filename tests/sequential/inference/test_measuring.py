"""Inference after tests of measurements against dense quadrature, and the laws that it obeys."""

import math
from dataclasses import dataclass

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.integrate import simpson
from scipy.stats import norm

from service.sequential import likelihood
from service.sequential.boundaries import Thresholds, wald
from service.sequential.decision import Decision
from service.sequential.double import Double, FloatArray
from service.sequential.inference.bias import bias_of_measurements
from service.sequential.inference.measuring import MeasuredOutcome, frame_of, height_of
from service.sequential.inference.ordering import lower_limit, median_unbiased, upper_limit
from service.sequential.region import REALS, Limits, Region, SideArray, StraightRegion, Wall, straight_region

Grid = NDArray[np.float64]
FINE = 1501


@dataclass(frozen=True)
class Curved:
    """Limits that move from look to look, as numbers; only what the recursion asks of a region."""

    lower: tuple[float, ...]
    upper: tuple[float, ...]
    wall: Wall | None = None
    below = Decision.ACCEPT
    above = Decision.REJECT

    def limits(self, progress: FloatArray) -> Limits:
        at = progress.astype(int) - 1
        return Limits(np.array(self.lower)[at], np.array(self.upper)[at])

    def sides(self, progress: Double, total: Double) -> SideArray:
        raise NotImplementedError

    def sides_at_wall(self, progress: Double, total: Double) -> SideArray:
        raise NotImplementedError

    def lower_reached_at(self, total: FloatArray) -> FloatArray:
        raise NotImplementedError

    def upper_left_at(self, total: FloatArray) -> FloatArray:
        raise NotImplementedError

    def open_horizon(self, reached: float) -> float:
        raise NotImplementedError


def onward(before: Grid, density: Grid, after: Grid, mean: float, sigma: float) -> Grid:
    """The density one measurement later."""
    steps = (after[:, np.newaxis] - before - mean) / sigma
    kernel = np.exp(-0.5 * steps * steps) / (sigma * math.sqrt(2 * math.pi))
    return np.asarray(simpson(density * kernel, x=before, axis=1))


def dense(region: Region, looks: int, mean: float, sigma: float) -> list[tuple[Grid, Grid]]:
    """Totals and their density after each look that went on, by Simpson's rule on thousands of points."""
    rows: list[tuple[Grid, Grid]] = []
    for n in range(1, looks + 1):
        limits = region.limits(np.array([float(n)]))
        low = max(limits.lower[0], n * mean - 12 * sigma * math.sqrt(n))
        high = min(limits.upper[0], n * mean + 12 * sigma * math.sqrt(n))
        x = np.linspace(low, high, FINE)
        if not rows:
            rows.append((x, norm.pdf(x, mean, sigma)))
            continue
        before, f = rows[-1]
        rows.append((x, onward(before, f, x, mean, sigma)))
    return rows


def passes(region: Region, units: int, total: float, mean: float, sigma: float, sign: int) -> float:
    """P(ending above before this look, or reaching the total at it); with sign -1 the same downward."""
    rows = dense(region, units - 1, mean, sigma)
    found = 0.0
    for n in range(1, units + 1):
        limits = region.limits(np.array([float(n)]))
        goal = total if n == units else float((limits.upper if sign > 0 else limits.lower)[0])
        if n == 1:
            found += float(norm.cdf(sign * (mean - goal) / sigma))
            continue
        x, f = rows[n - 2]
        found += float(simpson(f * norm.cdf(sign * (x + mean - goal) / sigma), x=x))
    return found


STRAIGHT = straight_region(likelihood.normal(10.0, 10.5, 0.5), wald(0.05, 0.1), REALS)
TRUNCATED = straight_region(likelihood.normal(1.0, 0.0, 0.8), Thresholds(-1.6, 2.1), REALS, Wall(4.0))
CURVED = Curved((-2.0, -1.5, -0.4, 0.6), (2.5, 2.3, 2.6, 2.9))
MOVING = Curved((-2.0, -1.5, -0.4, 0.6), (2.5, 2.3, 2.6, 0.6), Wall(4.0))
OPEN_BELOW = Curved((-math.inf, -math.inf, 0.2, 0.6), (2.5, 2.3, 2.6, 2.9))


def outcome(region: Region, sigma: float, units: int, total: float, *, is_above: bool) -> MeasuredOutcome:
    frame, looks = frame_of(region, sigma), np.arange(1.0, units + 1.0)
    return MeasuredOutcome(region, frame, looks, height_of(region, frame, units, Double.of(total)), is_above)


@pytest.mark.parametrize(
    ("region", "sigma", "units", "total", "is_above", "means"),
    [
        (STRAIGHT, 0.5, 1, 12.1, True, [9.8, 10.0, 12.0]),
        (STRAIGHT, 0.5, 2, 19.2, False, [9.5, 10.5]),
        (STRAIGHT, 0.5, 4, 42.6, True, [9.0, 10.6]),
        (TRUNCATED, 0.8, 3, 4.4, True, [0.0, 1.5]),
        (TRUNCATED, 0.8, 4, 2.2, True, [0.0, 1.0]),
        (TRUNCATED, 0.8, 4, 1.9, False, [0.5]),
        (CURVED, 1.0, 3, 2.8, True, [0.0]),
        (CURVED, 1.0, 4, 0.3, False, [-1.0, 1.2]),
        (OPEN_BELOW, 1.0, 4, 3.1, True, [-0.5, 1.2]),
    ],
)
def test_tails_against_dense_quadrature(
    region: Region, sigma: float, units: int, total: float, *, is_above: bool, means: list[float]
) -> None:
    found = outcome(region, sigma, units, total, is_above=is_above)
    sign = 1 if is_above else -1
    for mean in means:
        tails = found.tails(found.frame.natural(mean))
        exact = passes(region, units, total, mean, sigma, sign)
        direct = tails.up if is_above else tails.down
        assert direct == pytest.approx(exact, rel=1e-9, abs=1e-14), mean
        assert tails.up + tails.down == pytest.approx(1.0, abs=1e-15)


@pytest.mark.parametrize("region", [STRAIGHT, TRUNCATED])
def test_the_mean_of_the_first_measurement_given_the_end(region: StraightRegion) -> None:
    """By dense quadrature after three looks, at a mean of its own: it depends on the outcome alone."""
    units, total, sigma = (4, 42.6, 0.5) if region is STRAIGHT else (4, 2.2, 0.8)
    mean = 1.1 * total / units
    x, first = dense(region, 1, mean, sigma)[0]
    weighed = x * first
    for n in range(2, units):
        limits = region.limits(np.array([float(n)]))
        y = np.linspace(
            max(limits.lower[0], n * mean - 12 * sigma * math.sqrt(n)),
            min(limits.upper[0], n * mean + 12 * sigma * math.sqrt(n)),
            FINE,
        )
        first, weighed = onward(x, first, y, mean, sigma), onward(x, weighed, y, mean, sigma)
        x = y
    last = norm.pdf(total - x, mean, sigma)
    exact = simpson(weighed * last, x=x) / simpson(first * last, x=x)
    assert outcome(region, sigma, units, total, is_above=True).first_step_mean() == pytest.approx(exact, rel=1e-9)


@pytest.mark.parametrize(("region", "mean"), [(TRUNCATED, 0.1), (TRUNCATED, 1.3), (MOVING, 0.4)])
def test_the_unbiased_estimate_and_the_bias_have_the_right_means(region: Region, mean: float) -> None:
    """Over all ends of a test of at most four measurements, by quadrature over where it ends."""
    sigma, unbiased, average = 0.8, 0.0, 0.0
    nodes, weights = np.polynomial.legendre.leggauss(30)
    rows = dense(region, 3, mean, sigma)
    for units in range(1, 5):
        limits = region.limits(np.array([float(units)]))
        for is_above in (True, False):
            edge = float((limits.upper if is_above else limits.lower)[0])
            far = edge + (9 if is_above else -9) * sigma
            low, high = min(edge, far), max(edge, far)
            at, share = low + (high - low) * (nodes + 1) / 2, (high - low) / 2 * weights
            for total, weight in zip(at, share, strict=True):
                if units == 1:
                    density = float(norm.pdf(total, mean, sigma))
                else:
                    x, f = rows[units - 2]
                    density = float(simpson(f * norm.pdf(total - x, mean, sigma), x=x))
                end = outcome(region, sigma, units, total, is_above=is_above)
                unbiased += weight * density * end.first_step_mean()
                average += weight * density * total / units
    assert unbiased == pytest.approx(mean, abs=1e-9)
    frame = frame_of(region, sigma)
    assert bias_of_measurements(region, frame, frame.natural(mean)) == pytest.approx(average - mean, abs=1e-9)


def test_one_measurement_has_the_usual_limits() -> None:
    found = outcome(STRAIGHT, 0.5, 1, 12.1, is_above=True)
    half = 0.5 * norm.ppf(0.975)
    assert found.frame.mean(lower_limit(found, 0.025)) == pytest.approx(12.1 - half, abs=1e-11)
    assert found.frame.mean(upper_limit(found, 0.025)) == pytest.approx(12.1 + half, abs=1e-11)
    assert found.frame.mean(median_unbiased(found)) == pytest.approx(12.1, abs=1e-11)
    assert found.first_step_mean() == pytest.approx(12.1, abs=1e-13)


def test_limits_hold_as_often_as_they_say() -> None:
    """A thousand tests of 0.3 sigma against 0, simulated: each limit misses in 5 % (within 4 standard errors)."""
    region = straight_region(likelihood.normal(0.0, 1.0, 1.0), wald(0.1, 0.1), REALS)
    source, mean, misses, medians = np.random.default_rng(7), 0.3, np.zeros(2), 0
    count = 1000
    for _ in range(count):
        deviation, units = 0.0, 0
        while -region.lower_intercept < deviation < region.upper_intercept:
            deviation, units = deviation + source.normal(mean - 0.5), units + 1
        frame = frame_of(region, 1.0)
        found = MeasuredOutcome(region, frame, np.arange(1.0, units + 1.0), deviation, deviation > 0)
        tails = found.tails(frame.natural(mean))
        misses += [tails.up < 0.05, tails.down < 0.05]
        medians += tails.up < 0.5
    assert np.all(np.abs(misses / count - 0.05) < 4 * math.sqrt(0.05 * 0.95 / count))
    assert abs(medians / count - 0.5) < 4 * math.sqrt(0.25 / count)


def test_a_large_mean_with_a_small_spread_loses_nothing() -> None:
    """The same measurements shifted by 1e9: the same answers, to the digits that the shift leaves of the data."""
    plain = straight_region(likelihood.normal(0.0, 0.5, 1.0), wald(0.05, 0.05), REALS)
    shifted = straight_region(likelihood.normal(1e9, 1e9 + 0.5, 1.0), wald(0.05, 0.05), REALS)
    a, b = outcome(plain, 1.0, 8, 8.5, is_above=True), outcome(shifted, 1.0, 8, 8e9 + 8.5, is_above=True)
    for at in (-0.5, 0.0, 0.7):
        assert b.tails(at).up == pytest.approx(a.tails(at).up, rel=1e-12)
