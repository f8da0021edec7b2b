"""Calibrated thresholds attain the stated risks, or are the smallest that do not exceed them."""

import itertools
from fractions import Fraction

import numpy as np
import pytest

from service.sequential import likelihood
from service.sequential.boundaries import Thresholds, strict
from service.sequential.calibration import RESOLUTIONS, Risks, RisksAt, RisksNotMet, matching, smallest
from service.sequential.exact.counting import counting_characteristics
from service.sequential.exact.gaussian import gaussian_characteristics
from service.sequential.exact.processes import Failures, Units
from service.sequential.region import COUNTS, PASS_FAIL, REALS, Wall, straight_region
from tests.sequential.reference import paths


def measurements(shift: float, wall: Wall | None) -> RisksAt:
    def risks_at(thresholds: Thresholds) -> Risks:
        region = straight_region(likelihood.normal(0.0, shift, 1.0), thresholds, REALS, wall)
        found = gaussian_characteristics(region, np.array([0.0, shift]), 1.0)
        return Risks(float(found.above[0]), float(found.below[1]))

    return risks_at


def lives(mean0: float, mean1: float, wall: Wall | None) -> RisksAt:
    def risks_at(thresholds: Thresholds) -> Risks:
        region = straight_region(likelihood.exponential(mean0, mean1), thresholds, COUNTS, wall)
        found = counting_characteristics(region, Failures(1 / np.array([mean0, mean1])))
        rejects, accepts = (found.above, found.below) if mean1 < mean0 else (found.below, found.above)
        return Risks(float(rejects[0]), float(accepts[1]))

    return risks_at


@pytest.mark.parametrize(
    ("risks_at", "alpha", "beta"),
    [
        (measurements(1.0, None), 0.05, 0.05),
        (measurements(0.25, None), 0.01, 0.05),
        (measurements(1.0, Wall(12.0)), 0.05, 0.10),
        (measurements(0.5, Wall(60.0)), 0.05, 0.05),
        (lives(200.0, 100.0, None), 0.10, 0.10),
        (lives(200.0, 100.0, Wall(2060.0)), 0.10, 0.10),
        (lives(100.0, 200.0, Wall(4000.0)), 0.05, 0.20),
    ],
)
def test_continuous_risks_are_met_to_eight_digits(risks_at: RisksAt, alpha: float, beta: float) -> None:
    attained = risks_at(matching(risks_at, Risks(alpha, beta)))
    assert attained.alpha == pytest.approx(alpha, abs=1e-8)
    assert attained.beta == pytest.approx(beta, abs=1e-8)


def test_both_ways_of_finding_continuous_thresholds_agree() -> None:
    risks_at, stated = measurements(1.0, None), Risks(0.05, 0.10)
    first, second, limits = matching(risks_at, stated), smallest(risks_at, stated), strict(0.05, 0.10)
    assert first.accept == pytest.approx(second.accept, abs=RESOLUTIONS[-1] * -limits.accept)
    assert first.reject == pytest.approx(second.reject, abs=RESOLUTIONS[-1] * limits.reject)


@pytest.mark.parametrize(
    ("risks_at", "alpha", "beta"),
    [(measurements(1.0, Wall(9.0)), 0.05, 0.10), (lives(200.0, 100.0, Wall(1000.0)), 0.10, 0.10)],
)
def test_a_wall_that_is_too_near_is_said_to_be(risks_at: RisksAt, alpha: float, beta: float) -> None:
    """The least risks of any test of 9 measurements: Neyman-Pearson needs 8.56 at these risks, a wall at zero more."""
    with pytest.raises(RisksNotMet) as caught:
        matching(risks_at, Risks(alpha, beta))
    assert caught.value.least.alpha > alpha or caught.value.least.beta > beta


@pytest.mark.parametrize(
    ("p0", "p1", "wall", "alpha", "beta"),
    [(0.125, 0.5, 9, 0.15, 0.20), (0.5, 0.125, 9, 0.20, 0.15), (0.25, 0.625, 10, 0.20, 0.20), (0.3, 0.7, 8, 0.2, 0.2)],
)
def test_the_smallest_region_lies_within_every_other_that_keeps_the_risks(
    p0: float, p1: float, wall: int, alpha: float, beta: float
) -> None:
    """
    All regions between two lines of this slope up to the wall, each tried, against the one that is found.

    The regions are tried with exact fractions; two limits differ where they part the points of the lattice differently.
    """
    ratio = likelihood.bernoulli(p0, p1)
    lattice = sorted({abs(ratio.gain * (k - ratio.slope * n)) for n in range(1, wall) for k in range(n + 1)})
    cuts = [(a + b) / 2 for a, b in itertools.pairwise([0.0, *lattice, lattice[-1] + 1.0]) if b - a > 1e-9]

    def numbers(thresholds: Thresholds) -> tuple[tuple[float, ...], tuple[float, ...]]:
        region = straight_region(ratio, thresholds, PASS_FAIL, Wall(float(wall)))
        found = region.limits(np.arange(0.0, wall + 1.0))
        return tuple(found.lower), tuple(found.upper)

    def slow_risks(thresholds: Thresholds) -> tuple[float, float]:
        lower, upper = numbers(thresholds)
        ends = []
        for p in (Fraction(p0), Fraction(p1)):
            found = paths.looks(lambda n: (lower[n], upper[n]), {0: 1 - p, 1: p}, wall)
            ends.append((found.above, found.below) if p1 > p0 else (found.below, found.above))
        return ends[0][0], ends[1][1]

    keeps = {}
    for accept, reject in itertools.product(cuts, cuts):
        thresholds = Thresholds(-accept, reject)
        key = numbers(thresholds)
        if key not in keeps:
            found_alpha, found_beta = slow_risks(thresholds)
            keeps[key] = found_alpha <= alpha * (1 + 1e-12) and found_beta <= beta * (1 + 1e-12)

    def risks_at(thresholds: Thresholds) -> Risks:
        region = straight_region(ratio, thresholds, PASS_FAIL, Wall(float(wall)))
        found = counting_characteristics(region, Units(np.array([p0, p1])))
        rejects, accepts = (found.above, found.below) if p1 > p0 else (found.below, found.above)
        return Risks(float(rejects[0]), float(accepts[1]))

    assert any(keeps.values())
    lower, upper = numbers(smallest(risks_at, Risks(alpha, beta)))
    assert keeps[lower, upper]
    for (other_lower, other_upper), does in keeps.items():
        if does:
            assert all(low >= other for low, other in zip(lower, other_lower, strict=True))
            assert all(high <= other for high, other in zip(upper, other_upper, strict=True))
