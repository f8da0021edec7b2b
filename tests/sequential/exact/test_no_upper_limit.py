"""Exact figures of whole totals that nothing ends above before the wall: all of them are followed."""

import math

import numpy as np
import pytest

from service.sequential import deviance, generalised
from service.sequential.boundaries import Thresholds
from service.sequential.curved import CurvedRegion
from service.sequential.exact.counting import counting_characteristics
from service.sequential.exact.processes import Failures, Reports
from service.sequential.region import COUNTS, Wall
from tests.sequential.reference import paths

DOWNWARD = CurvedRegion(
    generalised.OneSided(deviance.Poisson(), 1.0, 1.0, None, is_upward=False),
    Thresholds(-math.inf, 2.0),
    COUNTS,
    Wall(20.0),
)


@pytest.mark.parametrize("rate", [0.4, 1.0, 1.6])
def test_reports_against_a_dictionary_of_totals(rate: float) -> None:
    """Totals beyond 150 have no probability that a double holds."""
    alive, below, mean = {0: 1.0}, 0.0, 0.0
    for look in range(1, 21):
        mean += math.fsum(alive.values())
        limits = DOWNWARD.limits(np.array([float(look)]))
        moved: dict[int, float] = {}
        for total, chance in alive.items():
            for increase in range(min(60, 150 - total)):
                weight = math.exp(-rate) * rate**increase / math.factorial(increase)
                moved[total + increase] = moved.get(total + increase, 0.0) + chance * weight
        below += math.fsum(chance for total, chance in moved.items() if total <= limits.lower[0])
        alive = {total: chance for total, chance in moved.items() if total > limits.lower[0]}
    found = counting_characteristics(DOWNWARD, Reports(np.array([rate]), 1.0))
    assert found.below[0] == pytest.approx(below, abs=1e-13)
    assert found.above[0] == pytest.approx(1.0 - below, abs=1e-13)
    assert found.mean[0] == pytest.approx(mean, rel=1e-12)


@pytest.mark.parametrize("rate", [0.4, 1.0, 1.6])
def test_failures_in_time_against_the_generator(rate: float) -> None:
    totals = np.arange(76.0)
    lower, upper = DOWNWARD.lower_reached_at(totals), DOWNWARD.upper_left_at(totals)
    last = float(DOWNWARD.limits(np.array([20.0])).lower[0])
    below, above, mean = paths.in_time(lower.__getitem__, upper.__getitem__, 20.0, last.__ge__, 75, rate)
    found = counting_characteristics(DOWNWARD, Failures(np.array([rate])))
    assert found.below[0] == pytest.approx(below, abs=1e-11)
    assert found.above[0] == pytest.approx(above, abs=1e-11)
    assert found.mean[0] == pytest.approx(mean, rel=1e-10)
