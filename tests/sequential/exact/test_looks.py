"""Normal measurements between limits of any shape, look by look: published constants and two other computations."""

import math
from dataclasses import dataclass
from typing import ClassVar

import numpy as np
import pytest
from scipy.stats import multivariate_normal

from service.sequential import deviance, generalised, likelihood
from service.sequential.boundaries import Thresholds
from service.sequential.curved import CurvedRegion
from service.sequential.decision import Decision
from service.sequential.double import Double, FloatArray
from service.sequential.exact.characteristics import Characteristics
from service.sequential.exact.gaussian import gaussian_characteristics
from service.sequential.exact.looks import characteristics_by_looks
from service.sequential.region import REALS, Limits, SideArray, Wall, side_of, straight_region


@dataclass(frozen=True)
class Strip:
    """Rejects where the sum leaves a strip of constant width, accepts at the wall."""

    half: float
    wall: Wall

    below = above = Decision.REJECT
    between = Decision.ACCEPT

    def limits(self, progress: FloatArray) -> Limits:
        return Limits(np.full_like(progress, -self.half), np.full_like(progress, self.half))

    def sides(self, progress: Double, total: Double) -> SideArray:  # noqa: ARG002
        return side_of(total.value, -self.half, self.half)

    sides_at_wall = sides

    def lower_reached_at(self, total: FloatArray) -> FloatArray:
        raise NotImplementedError

    upper_left_at = lower_reached_at

    def open_horizon(self, reached: float) -> float:
        raise NotImplementedError


def repeated(critical: float, looks: int) -> CurvedRegion:
    """The two-sided test repeated at each look: half the squared standardised sum is the generalised ratio."""
    evidence = generalised.TwoSided(deviance.Normal(1.0), 0.0)
    return CurvedRegion(evidence, Thresholds(-math.inf, critical**2 / 2.0), REALS, Wall(float(looks)))


def level(region: CurvedRegion | Strip) -> float:
    found = characteristics_by_looks(region, np.zeros(1), 1.0)
    assert found.error_bound < 1e-10
    assert found.below[0] + found.between[0] + found.above[0] == pytest.approx(1.0, abs=1e-12)
    return float(found.below[0] + found.above[0])


@pytest.mark.parametrize(
    ("looks", "risk"),
    [(2, 0.08312), (3, 0.10726), (4, 0.12617), (5, 0.14169), (10, 0.19336), (20, 0.24791), (50, 0.32045)],
)
def test_repeated_tests_at_five_per_cent(looks: int, risk: float) -> None:
    """Armitage, McPherson and Rowe (1969), JRSS A 132, 235-244 [recalled]: the overall risk."""
    assert level(repeated(1.959963984540054, looks)) == pytest.approx(risk, abs=5.1e-6)


@pytest.mark.parametrize(("looks", "constant"), [(2, 2.178), (3, 2.289), (4, 2.361), (5, 2.413), (6, 2.453)])
def test_pococks_constants(looks: int, constant: float) -> None:
    """Pocock (1977), Biometrika 64, 191-199 [recalled]: the level .05 lies between constants a digit apart."""
    assert level(repeated(constant + 5e-4, looks)) < 0.05 < level(repeated(constant - 5e-4, looks))


@pytest.mark.parametrize(("looks", "constant"), [(2, 1.977), (3, 2.004), (4, 2.024), (5, 2.040), (6, 2.053)])
def test_constants_of_obrien_and_fleming(looks: int, constant: float) -> None:
    """O'Brien and Fleming (1979), Biometrics 35, 549-556 [recalled]: sums against a constant."""
    near, far = (level(Strip(c * math.sqrt(looks), Wall(float(looks)))) for c in (constant + 5e-4, constant - 5e-4))
    assert near < 0.05 < far


@pytest.mark.parametrize("wall", [None, Wall(9.0)])
def test_straight_lines_look_by_look_and_by_modes(wall: Wall | None) -> None:
    region = straight_region(likelihood.normal(0.0, 1.0, 1.3), Thresholds(-2.2, 2.9), REALS, wall)
    means = np.array([-0.7, 0.0, 0.45, 1.0, 1.9])
    looks, modes = (f(region, means, 1.3, 2.0, 1.1) for f in (characteristics_by_looks, gaussian_characteristics))
    assert looks.below == pytest.approx(modes.below, abs=1e-11)
    assert looks.above == pytest.approx(modes.above, abs=1e-11)
    assert looks.mean == pytest.approx(modes.mean, rel=1e-10)
    assert looks.standard_deviation == pytest.approx(modes.standard_deviation, rel=1e-9)
    assert np.array_equal(looks.quantiles, modes.quantiles)


def test_three_looks_against_integrals_over_a_box() -> None:
    """The probability of still sampling is that of three correlated sums between their limits, in one integral."""
    region = repeated(1.8, 4)
    looks, mean = np.arange(1.0, 4.0), 0.4
    limits = region.limits(looks)
    covariance = np.minimum.outer(looks, looks)
    box = multivariate_normal(mean * looks, covariance).cdf(limits.upper, lower_limit=limits.lower)
    found = characteristics_by_looks(region, np.array([mean]), 1.0)
    ends = np.arange(1.0, 5.0)
    wall = region.limits(ends)
    between = multivariate_normal(mean * ends, np.minimum.outer(ends, ends)).cdf(wall.upper, lower_limit=wall.lower)
    assert found.between[0] == pytest.approx(between, abs=2e-5)
    assert found.mean[0] == pytest.approx(
        1.0
        + sum(
            multivariate_normal(mean * looks[:k], covariance[:k, :k]).cdf(
                limits.upper[:k], lower_limit=limits.lower[:k]
            )
            for k in (1, 2)
        )
        + box,
        abs=2e-5,
    )


@pytest.mark.parametrize("wall", [None, Wall(12.0)])
def test_a_large_mean_with_a_small_spread_loses_nothing(wall: Wall | None) -> None:
    """Means about 2**20 with a spread of 2**-10, and the same about zero: both, and their distances, are doubles."""
    origin, sigma = 2.0**20, 2.0**-10
    apart, thresholds = np.array([-0.25, 0.0, 0.25, 1.0, 1.75]) * sigma, Thresholds(-2.2, 2.9)

    def found(at: float, start: tuple[float, float]) -> Characteristics:
        spread = deviance.Normal(sigma)
        evidence = generalised.OneSided(
            spread, at, at + sigma, likelihood.normal(at, at + sigma, sigma), is_upward=True
        )
        region = CurvedRegion(evidence, thresholds, REALS, wall)
        return characteristics_by_looks(region, at + apart, sigma, start[0], start[1] + at * start[0])

    for start in ((0.0, 0.0), (2.0, sigma)):
        far, near = found(origin, start), found(0.0, start)
        assert far.below == pytest.approx(near.below, abs=1e-13)
        assert far.above == pytest.approx(near.above, abs=1e-13)
        assert far.mean == pytest.approx(near.mean, rel=1e-13)


class _Counted(Strip):
    """Says for how many looks its limits were asked."""

    asked: ClassVar[int] = 0

    def limits(self, progress: FloatArray) -> Limits:
        type(self).asked += len(progress)
        return super().limits(progress)


def test_limits_are_asked_for_once_for_all_means() -> None:
    """Means so far apart that they are followed in several groups, each with two numbers of points."""
    characteristics_by_looks(_Counted(3.0, Wall(300.0)), np.array([-2.0, 0.0, 0.1, 2.0]), 1.0)
    assert _Counted.asked == 300
