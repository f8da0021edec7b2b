"""Shape and spread: against exact fractions, slow sums and printed values."""

import math
from fractions import Fraction

import numpy as np
import pytest
from mpmath import gammainc, mpf

from service.sequential.checks import shapes
from service.sequential.checks.finding import Finding, Lacking


def bates_by_fractions(mean: Fraction, n: int) -> Fraction:
    total = n * mean
    return sum(
        (Fraction((-1) ** k * math.comb(n, k)) * (total - k) ** n for k in range(math.floor(total) + 1)), Fraction(0)
    ) / math.factorial(n)


@pytest.mark.parametrize("n", [1, 2, 3, 7, 20, 100])
def test_the_mean_of_uniform_numbers_is_exact(n: int) -> None:
    for mean in (Fraction(1, 50), Fraction(1, 4), Fraction(2, 5), Fraction(1, 2)):
        exact = float(bates_by_fractions(mean, n))
        assert shapes.bates_lower_tail(float(mean), n) == pytest.approx(exact, rel=1e-12)


def test_two_uniform_numbers_make_a_triangle() -> None:
    assert shapes.bates_lower_tail(0.25, 2) == pytest.approx(0.125)
    assert shapes.uniform_mean(np.array([0.9])).p_value == pytest.approx(0.2)


@pytest.mark.parametrize("n", [101, 150])
def test_beyond_a_hundred_the_normal_distribution_is_close(n: int) -> None:
    for mean in (Fraction(2, 5), Fraction(9, 20), Fraction(1, 2)):
        assert shapes.bates_lower_tail(float(mean), n) == pytest.approx(float(bates_by_fractions(mean, n)), abs=3e-4)


def test_the_total_time_on_test_is_that_of_a_slow_sum() -> None:
    generator = np.random.default_rng(5)
    times = np.round(generator.exponential(100.0, 40), 0)
    failed = generator.random(40) < 0.7
    ages = sorted(times[failed])
    on_test = [sum(min(t, age) for t in times) for age in ages]
    found = shapes.agelessness(times, failed)
    assert isinstance(found, Finding)
    assert found.figure == pytest.approx(np.mean([s / on_test[-1] for s in on_test[:-1]]), rel=1e-12)


def test_without_suspensions_it_is_one_less_ginis_figure() -> None:
    """Gail and Gastwirth (1978): G = sum of |x_i - x_j| over all pairs / (2 n (n - 1) mean)."""
    times = np.random.default_rng(6).exponential(3.0, 15)
    gini = sum(abs(a - b) for a in times for b in times) / (2 * 15 * 14 * np.mean(times))
    found = shapes.agelessness(times, np.ones(15, bool))
    assert isinstance(found, Finding)
    assert found.figure == pytest.approx(1.0 - gini, rel=1e-12)


def test_failures_are_placed_along_the_unit_time() -> None:
    times = np.array([1.0, 2.0, 3.0, 4.0, 1.0, 1.0, 1.0, 7.0])
    failed = np.array([True, True, True, True, False, True, False, True])
    found = shapes.even_failures(times, failed)
    assert isinstance(found, Finding)
    assert found.figure == pytest.approx(np.mean([1, 3, 6, 10, 12]) / 20, rel=1e-12)
    assert found.p_value == pytest.approx(2 * float(bates_by_fractions(Fraction(32, 100), 5)), rel=1e-9)
    assert shapes.gaps_between_failures(times, failed) == pytest.approx(np.array([1, 2, 3, 4, 2, 8]) / 7.0)


def test_the_spread_has_the_chi_squared_p_value() -> None:
    """18.307 is the 95 % point of chi-squared with 10 degrees of freedom (recalled), 3.940 the 5 % one."""
    base = np.arange(11.0)
    for point in (18.307, 3.940):
        sigma = math.sqrt(float(np.var(base, ddof=1)) * 10.0 / point)
        found = shapes.spread(base, sigma, "values")
        assert isinstance(found, Finding)
        assert found.figure == pytest.approx(math.sqrt(point / 10.0))
        assert found.p_value == pytest.approx(0.10, abs=1e-4)
    found = shapes.spread(base, 2.5, "values")
    assert isinstance(found, Finding)
    squares = mpf(110) / mpf("6.25")
    upper = gammainc(5, squares / 2, regularized=True)
    assert found.p_value == pytest.approx(float(2 * min(upper, 1 - upper)), rel=1e-12)


def test_the_spread_survives_every_magnitude() -> None:
    for scale, sigma in ((1e100, 1e-100), (1e-100, 1e100), (1e100, 1e100), (1e-90, 1e-90)):
        found = shapes.spread(scale * np.array([-1.0, 1.0, 1.0, -1.0]), sigma, "values")
        assert isinstance(found, Finding)
        assert math.isfinite(found.figure)
        assert found.figure == pytest.approx(scale / sigma * math.sqrt(4 / 3))
        assert 0.0 <= found.p_value <= 1.0
    same = shapes.spread(np.full(5, 2.0), 1.0, "values")
    assert isinstance(same, Finding)
    assert (same.figure, same.p_value) == (0.0, 0.0)


def test_shapiro_and_wilks_own_example() -> None:
    """Weights of eleven men, Shapiro and Wilk (1965), W = .79 (recalled)."""
    weights = np.array([148.0, 154, 158, 160, 161, 162, 166, 170, 182, 195, 236])
    found = shapes.normality(weights, "weights")
    assert isinstance(found, Finding)
    assert round(found.figure, 2) == 0.79
    assert 0.0 < found.p_value < 0.01


def test_long_streams_are_thinned_evenly() -> None:
    values = np.arange(20_000.0)
    kept = shapes.thinned(values, 5000)
    assert (len(kept), kept[0], kept[-1]) == (5000, 0.0, 19_999.0)
    assert set(np.diff(kept)) <= {3.0, 4.0, 5.0}
    assert len(shapes.thinned(values[:5000], 5000)) == 5000
    half_skewed = np.concatenate([np.zeros(1), np.random.default_rng(1).exponential(size=30_000)])
    found = shapes.normality(half_skewed, "values")
    assert isinstance(found, Finding)
    assert found.p_value < 1e-10


def test_what_is_lacking_is_said() -> None:
    three, yes = np.array([1.0, 2.0, 3.0]), np.ones(3, bool)
    assert shapes.spread(three[:1], 1.0, "values") == Lacking("needs at least 2 values, and there are 1")
    assert shapes.normality(three, "values") == Lacking("needs at least 8 values, and there are 3")
    assert shapes.normality(np.ones(9), "values") == Lacking("all values are the same")
    assert shapes.agelessness(three, yes) == Lacking("needs at least 5 failures, and there are 3")
    assert isinstance(shapes.even_failures(three, yes), Lacking)
    nothing = np.zeros(9)
    assert shapes.agelessness(nothing, np.ones(9, bool)) == Lacking("all times are 0")
    assert shapes.even_failures(nothing, np.ones(9, bool)) == Lacking("all times are 0")
    only_suspended_age = np.array([0.0] * 6 + [5.0])
    failed = np.array([True] * 6 + [False])
    assert shapes.agelessness(only_suspended_age, failed) == Lacking("all failures are at time 0")
    assert len(shapes.gaps_between_failures(np.zeros(0), np.zeros(0, bool))) == 0
