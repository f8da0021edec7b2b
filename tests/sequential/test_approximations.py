"""The approximations against what their authors printed."""

import math

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
