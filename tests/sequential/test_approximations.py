"""The approximations against what their authors printed."""

import math
from statistics import NormalDist

import pytest

from service.sequential import boundaries, likelihood
from service.sequential.approximations import OVERSHOOT, Motion, approximate


def coin(p: float) -> Motion:
    def cumulant(t: float) -> float:
        return math.log1p(p * math.expm1(t)) if t < 700 else math.log(p) + t

    return Motion(cumulant, p, p * (1 - p))


def test_walds_average_sample_numbers() -> None:
    """Wald (1945), p0 = .1, p1 = .3, alpha = .02, beta = .03, at p0, the slope and p1 (quoted from memory)."""
    ratio, limits = likelihood.bernoulli(0.1, 0.3), boundaries.wald(0.02, 0.03)
    lower, upper = -limits.accept / ratio.gain, limits.reject / ratio.gain
    expected = [(0.1, 0.98, 28.7048), (ratio.slope, 0.52682, 49.0136), (0.3, 0.03, 23.8217)]
    for p, accepts, number in expected:
        found = approximate(coin(p), ratio.slope, lower, upper)
        assert found is not None
        assert found.below == pytest.approx(accepts, abs=5e-6)
        assert found.progress == pytest.approx(number, abs=5e-5)


def test_the_normal_test_by_wald_and_by_siegmund() -> None:
    """Wald: 5.29999 and 8.66972; Siegmund's correction: 6.65125 and 12.43998 (computed independently)."""
    limit = math.log(19)

    def normal(mean: float) -> Motion:
        return Motion(lambda t: mean * t + t * t / 2, mean, 1.0)

    for mean, wald, siegmund in ((0.0, 5.29999, 6.65125), (0.5, 8.66972, 12.43998)):
        plain = approximate(normal(mean), 0.5, limit, limit)
        corrected = approximate(normal(mean), 0.5, limit + OVERSHOOT, limit + OVERSHOOT)
        assert plain is not None
        assert corrected is not None
        assert plain.progress == pytest.approx(wald, abs=5e-6)
        assert corrected.progress == pytest.approx(siegmund, abs=5e-5)


def test_a_total_that_never_moves_has_no_approximation() -> None:
    assert approximate(coin(0.0), 0.2, 1.0, 1.0) is None


SAVINGS = {
    0.01: (58, 60, 61, 62, 63),
    0.02: (54, 56, 57, 58, 59),
    0.03: (51, 53, 54, 55, 55),
    0.04: (49, 50, 51, 52, 53),
    0.05: (47, 49, 50, 50, 51),
}


@pytest.mark.parametrize("beta", SAVINGS)
def test_walds_table_of_savings(beta: float) -> None:
    """
    Wald (1945), percentage saving over the fixed sample for a normal mean when H1 is true (quoted from memory).

    Rows beta, columns alpha = .01 … .05. One entry, alpha = .05 and beta = .02, computes to 58.496 and is printed 59.
    """
    shift = 0.01
    motion = Motion(lambda t: shift * t + 0.5 * t * t, shift, 1.0)
    for column, printed in enumerate(SAVINGS[beta]):
        alpha = 0.01 * (column + 1)
        limits = boundaries.wald(alpha, beta)
        found = approximate(motion, shift / 2, -limits.accept / shift, limits.reject / shift)
        assert found is not None
        fixed = ((NormalDist().inv_cdf(1 - alpha) + NormalDist().inv_cdf(1 - beta)) / shift) ** 2
        assert 100 * (1 - found.progress / fixed) == pytest.approx(printed, abs=0.505)


def test_a_slope_past_the_largest_exponential_has_its_root_too() -> None:
    """A Poisson count of rate 1 under a line so steep that its slope times a first guess at the root overflows."""
    motion = Motion(lambda t: math.expm1(t) if t < 700 else math.inf, 1.0, 1.0)
    found = approximate(motion, 1e177, 3.0, 3.0)
    assert found is not None
    assert found.below == pytest.approx(1.0, abs=1e-12)
    assert found.progress == pytest.approx(3e-177, rel=1e-9)
