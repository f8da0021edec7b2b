"""Exact figures of plans drawn at random against slow second computations, and the laws that they obey."""

import math
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from mpmath import erfc, exp, mp, mpf, pi, quad, sqrt

from service.sequential import boundaries, likelihood
from service.sequential.boundaries import Thresholds
from service.sequential.decision import Decision
from service.sequential.exact.characteristics import QUANTILES
from service.sequential.exact.counting import counting_characteristics
from service.sequential.exact.gaussian import gaussian_characteristics
from service.sequential.exact.processes import Failures, Reports, Units
from service.sequential.exact.steps import by_steps
from service.sequential.exact.strip import Strip
from service.sequential.region import COUNTS, PASS_FAIL, REALS, Region, Wall, straight_region
from service.sequential.tables import UnitTable
from tests.sequential.reference import paths

THRESHOLDS = st.builds(Thresholds, st.floats(-4.0, -0.3), st.floats(0.3, 4.0))
PROPORTIONS = st.sampled_from([0.03, 0.1, 0.25, 0.5, 0.62, 0.9])
TRUE = st.sampled_from([Fraction(0), Fraction(1, 64), Fraction(3, 16), Fraction(1, 2), Fraction(7, 8), Fraction(1)])


def limits_of(region: Region, last: int, step: float = 1.0) -> paths.Limits:
    """As a table of plain numbers, looked up one look at a time."""
    found = region.limits(step * np.arange(last + 1.0))
    return lambda n: (float(found.lower[n]), float(found.upper[n]))


def agrees(found: object, slow: paths.Figures) -> None:
    below, above = found.below[0], found.above[0]  # type: ignore[attr-defined]
    mean, deviation = found.mean[0], found.standard_deviation[0]  # type: ignore[attr-defined]
    bound = found.error_bound  # type: ignore[attr-defined]
    assert abs(below - slow.below) <= bound
    assert abs(above - slow.above) <= bound
    assert mean == pytest.approx(slow.mean, rel=1e-12)
    assert deviation == pytest.approx(math.sqrt(max(0.0, slow.second - slow.mean**2)), abs=1e-6)
    # A quantile may fall the other way only where the probability of still sampling is the level itself.
    for q, quantile in zip(QUANTILES, found.quantiles[0], strict=True):  # type: ignore[attr-defined]
        near = any(abs(alive - (1 - q)) < 1e-13 for alive in slow.survival)
        assert near or quantile == slow.quantile(q)


@settings(max_examples=60, deadline=None)
@given(PROPORTIONS, PROPORTIONS, THRESHOLDS, st.integers(1, 40), TRUE, st.data())
def test_units_between_lines_from_anywhere(
    p0: float, p1: float, limits: Thresholds, wall: int, p: Fraction, data: st.DataObject
) -> None:
    if p0 == p1:
        return
    region = straight_region(likelihood.bernoulli(p0, p1), limits, PASS_FAIL, Wall(float(wall)))
    table = limits_of(region, wall)
    inside = [(0, 0)] + [
        (n, k) for n in range(1, wall) for k in range(n + 1) if table(n)[0] < k < table(n)[1] and table(n)[0] < 1e9
    ]
    n, k = data.draw(st.sampled_from(inside))
    slow = paths.looks(table, {0: 1 - p, 1: p}, wall, first=n, total=k)
    agrees(counting_characteristics(region, Units(np.array([float(p)])), float(n), k), slow)


@st.composite
def tables(draw: st.DrawFn) -> UnitTable:
    """Rows at random, some sample numbers left out, numbers that never fall."""
    numbers = sorted(draw(st.sets(st.integers(1, 40), min_size=1, max_size=6)))
    lower, upper, low, high = [], [], -1, 0
    for n in numbers[:-1]:
        low = draw(st.integers(low, n))
        high = draw(st.integers(max(high, low + 1), max(high, low + 1, n)))
        lower.append(float(low) if low >= 0 and draw(st.booleans()) else -math.inf)
        upper.append(float(high) if draw(st.booleans()) else math.inf)
    last = draw(st.integers(max(low, 0), max(low, 0, numbers[-1])))
    return UnitTable(tuple(numbers), (*lower, float(last)), (*upper, float(last + 1)), Decision.ACCEPT, Decision.REJECT)


@settings(max_examples=80, deadline=None)
@given(tables(), TRUE)
def test_tables_with_missing_rows(table: UnitTable, p: Fraction) -> None:
    last = table.sample_numbers[-1]
    slow = paths.looks(limits_of(table, last), {0: 1 - p, 1: p}, last)
    agrees(counting_characteristics(table, Units(np.array([float(p)]))), slow)


@settings(max_examples=25, deadline=None)
@given(st.sampled_from([(0.5, 1.0), (1.0, 0.25), (0.1, 0.4)]), THRESHOLDS, st.integers(1, 12), st.integers(0, 3))
def test_reports_between_lines(rates: tuple[float, float], limits: Thresholds, wall: int, place: int) -> None:
    mean = [0.0, 0.125, 0.5, 1.5][place]
    region = straight_region(likelihood.poisson(*rates), limits, COUNTS, Wall(float(wall)))
    chances = {k: Fraction(math.exp(-mean)) * Fraction(mean) ** k / math.factorial(k) for k in range(60)}
    slow = paths.looks(limits_of(region, wall), chances, wall, rest_above=True)
    agrees(counting_characteristics(region, Reports(np.array([mean]), 1.0)), slow)


@settings(max_examples=40, deadline=None)
@given(
    st.sampled_from([(200.0, 100.0), (100.0, 200.0), (300.0, 100.0)]),
    THRESHOLDS,
    st.sampled_from([150.0, 400.0, 900.0]),
    st.one_of(st.none(), st.integers(1, 5)),
    st.sampled_from([60.0, 140.0, 400.0]),
)
def test_failures_in_time(
    means: tuple[float, float], limits: Thresholds, end: float, cap: int | None, mean: float
) -> None:
    """The matrix exponential of the generator against the convolutions."""
    region = straight_region(likelihood.exponential(*means), limits, COUNTS, Wall(end, cap))
    found = counting_characteristics(region, Failures(np.array([1 / mean])))
    slope, down, up = region.ratio.slope, region.lower_intercept, region.upper_intercept

    def ends_below(total: int) -> bool:
        """A cap leaves acceptance to whoever comes to the wall; else it is the sign of the evidence, zero accepting."""
        if cap is not None:
            return True
        return total <= slope * end if region.ratio.is_upward else total < slope * end

    below, above, time = paths.in_time(
        lambda k: (k + down) / slope, lambda k: (k - up) / slope, end, ends_below, cap or 60, 1 / mean
    )
    assert found.below[0] == pytest.approx(below, abs=1e-11)
    assert found.above[0] == pytest.approx(above, abs=1e-11)
    assert found.mean[0] == pytest.approx(time, rel=1e-10)


def phi(x: mpf) -> mpf:
    return erfc(-x / sqrt(mpf(2))) / 2


def density(x: mpf) -> mpf:
    return exp(-x * x / 2) / sqrt(2 * pi)


@pytest.mark.parametrize("mean", [0.0, 0.7, 4.0])
def test_three_measurements_by_nested_quadrature(mean: float) -> None:
    """The probability of ending below at a wall of three units, integral by integral, in 20 digits."""
    region = straight_region(likelihood.normal(0.0, 1.0, 1.0), Thresholds(-1.2, 1.7), REALS, Wall(3.0))
    with mp.workdps(20):
        drift, low, high = mpf(mean) - mpf(1) / 2, mpf("-1.2"), mpf("1.7")

        def later(x: mpf) -> mpf:
            step = phi(low - x - drift)
            return step + quad(lambda y: density(y - x - drift) * phi(-y - drift), [low, high])

        below = phi(low - drift) + quad(lambda x: density(x - drift) * later(x), [low, high])
        first = quad(lambda x: density(x - drift), [low, high])
        second = quad(lambda x: density(x - drift) * (phi(high - x - drift) - phi(low - x - drift)), [low, high])
    found = gaussian_characteristics(region, np.array([mean]), 1.0)
    assert found.below[0] == pytest.approx(float(below), abs=1e-12)
    assert found.mean[0] == pytest.approx(float(1 + first + second), rel=1e-12)


@settings(max_examples=25, deadline=None)
@given(
    st.sampled_from([0.2, 0.5, 1.0, 3.0]),
    THRESHOLDS,
    st.one_of(st.none(), st.integers(1, 60)),
    st.floats(-1.0, 2.0),
    st.floats(0.05, 0.95),
)
def test_modes_and_steps_agree(shift: float, limits: Thresholds, wall: int | None, place: float, height: float) -> None:
    """Two methods for measurements: sums over the modes of the kernel, and one step after the other."""
    region = straight_region(
        likelihood.normal(0.0, shift, 1.0), limits, REALS, None if wall is None else Wall(wall + 5.0)
    )
    means = np.array([place * shift])
    progress = 0.0 if wall is None else 5.0
    line = region.ratio.slope * progress
    total = line + (1 - height) * -region.lower_intercept + height * region.upper_intercept
    by_modes = gaussian_characteristics(region, means, 1.0, progress, total)
    strip = Strip(-region.lower_intercept, region.upper_intercept)
    nodes = 60 + math.ceil(4 * (strip.high - strip.low))
    slow = by_steps(strip, nodes, means - region.ratio.slope, total - line, wall)
    assert by_modes.below == pytest.approx(slow.below, abs=1e-11)
    assert by_modes.mean == pytest.approx(slow.mean, rel=1e-10)
    assert by_modes.standard_deviation**2 == pytest.approx(slow.second - slow.mean**2, rel=1e-7, abs=1e-9)


@settings(max_examples=40, deadline=None)
@given(PROPORTIONS, PROPORTIONS, THRESHOLDS)
def test_no_plan_rejects_or_accepts_wrongly_more_often_than_the_martingale_allows(
    p0: float, p1: float, limits: Thresholds
) -> None:
    """Ville (1939): P0(ratio ever reaches A) <= 1/A, and P1(ratio ever falls to B) <= B."""
    if p0 == p1:
        return
    region = straight_region(likelihood.bernoulli(p0, p1), limits, PASS_FAIL)
    found = counting_characteristics(region, Units(np.array([p0, p1])))
    accepts, rejects = (found.below, found.above) if p1 > p0 else (found.above, found.below)
    assert rejects[0] <= math.exp(-limits.reject) * (1 + 1e-9)
    assert accepts[1] <= math.exp(limits.accept) * (1 + 1e-9)


@pytest.mark.parametrize("shift", [0.25, 1.0])
def test_walds_identity_for_measurements(shift: float) -> None:
    """E[total] = E[N] mean, the total at the end from a simulation (within 4 standard errors)."""
    region = straight_region(likelihood.normal(0.0, shift, 1.0), boundaries.wald(0.05, 0.1), REALS)
    mean = 0.3 * shift
    found = gaussian_characteristics(region, np.array([mean]), 1.0)
    source = np.random.default_rng(17)
    totals, counts = np.zeros(4000), np.zeros(4000)
    running = np.ones(4000, bool)
    while running.any():
        totals[running] += source.normal(mean, 1.0, running.sum())
        counts[running] += 1
        deviation = totals - counts * region.ratio.slope
        running &= (deviation > -region.lower_intercept) & (deviation < region.upper_intercept)
    assert abs(np.mean(counts) - found.mean[0]) < 4 * np.std(counts) / math.sqrt(4000)
    assert abs(np.mean(totals) - found.mean[0] * mean) < 4 * np.std(totals) / math.sqrt(4000)


@pytest.mark.parametrize("p", [0.02, 0.5])
def test_a_long_stretch_is_its_looks_one_by_one(p: float) -> None:
    """The sums over many units at once against adding them up, to the last digits."""
    units = Units(np.array([p, 0.0, 1.0]))
    stay, moment = units.stays(37.0, 9)
    for reach in range(9):
        terms = [float(np.sum(units.increases(float(look), 60)[0, : reach + 1])) for look in range(37)]
        assert stay[0, reach] == pytest.approx(sum(terms), rel=1e-13)
        assert moment[0, reach] == pytest.approx(sum(look * term for look, term in enumerate(terms)), rel=1e-12)
        assert stay[2, reach] == reach + 1
    assert stay[1, 0] == 37
