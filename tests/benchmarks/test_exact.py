"""Exact figures against the simulation that would give them to a standard error of 1e-3, and what a question costs."""

import statistics
import time
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from service.domain.calibrating import calibrated, exact_figures
from service.domain.characteristics import common_grid, promise_of
from service.domain.checking import checked_content
from service.domain.observing import observe
from service.domain.outlook import _outlook, outlook_of
from service.domain.procedure import procedure_of_document
from service.domain.state import State
from service.sequential.exact.modes import modes_of
from service.sequential.region import StraightRegion
from tests.domain.test_observing import NOW

NORMAL = {"family": "normal", "h0": 0.0, "h1": 0.25, "alpha": 0.01, "beta": 0.05, "known": {"sigma": 1.0}}
BERNOULLI = {"family": "bernoulli", "h0": 0.005, "h1": 0.02, "alpha": 0.05, "beta": 0.10}
GENERALISED = {
    "family": "bernoulli",
    "statistic": "generalised",
    "h0": 0.01,
    "h1": 0.05,
    "alpha": 0.05,
    "beta": 0.10,
    "boundaries": "calibrated",
}
TWO_SIDED = {
    "family": "normal",
    "statistic": "generalised",
    "sides": 2,
    "h0": 0.0,
    "alpha": 0.05,
    "known": {"sigma": 1.0},
    "boundaries": "calibrated",
}
STANDARD_ERROR = 1e-3
ROUNDS = 5

Draw = Callable[[np.random.Generator, float, int], NDArray[Any]]


def simulated(
    region: StraightRegion, parameter: float, accepts: float, source: np.random.Generator, draw: Draw
) -> float:
    """P(ending below) from as many walks as its standard error asks for, all at once, the finished ones dropped."""
    walks = max(1000, int(accepts * (1 - accepts) / STANDARD_ERROR**2))
    totals, below, step = np.zeros(walks), 0, 0
    while totals.size:
        step += 1
        totals = totals + draw(source, parameter, totals.size)
        line = region.ratio.slope * step
        ends_below, ends_above = totals <= line - region.lower_intercept, totals >= line + region.upper_intercept
        below += int(ends_below.sum())
        totals = totals[~(ends_below | ends_above)]
    return below / walks


def against_simulation(content: dict[str, Any], draw: Draw) -> list[float]:
    """How many times faster the exact grid of 51 points is, for each round."""
    document = checked_content(content)
    procedure = procedure_of_document(document)
    region = procedure.region
    assert isinstance(region, StraightRegion)
    grid = common_grid([document])
    assert len(grid) == 51
    source = np.random.default_rng(41)
    points = promise_of(document, grid).points
    start = time.perf_counter()
    for point in points:
        accepts = point.probability_of_acceptance
        found = simulated(region, point.parameter, accepts, source, draw)
        assert abs(found - accepts) < 5 * STANDARD_ERROR
    slow = time.perf_counter() - start
    ratios = []
    for round_ in range(ROUNDS):
        modes_of.cache_clear()
        moved = [parameter * (1 + 1e-13 * (round_ + 1)) for parameter in grid]
        start = time.perf_counter()
        exact_figures(procedure, moved)
        ratios.append(slow / (time.perf_counter() - start))
    print(f"\n{content['family']}: simulation {slow:.1f} s, exact {1000 * slow / statistics.median(ratios):.1f} ms")
    return ratios


@pytest.mark.benchmark
def test_measurements_are_a_thousand_times_faster_than_simulation() -> None:
    ratios = against_simulation(NORMAL, lambda source, mean, size: source.normal(mean, 1.0, size))
    print(f"ratio {statistics.median(ratios):.0f} ({min(ratios):.0f} to {max(ratios):.0f}), asked for 1000")
    assert statistics.median(ratios) >= 1000


@pytest.mark.benchmark
def test_units_are_three_hundred_times_faster_than_simulation() -> None:
    ratios = against_simulation(BERNOULLI, lambda source, p, size: source.random(size) < p)
    print(f"ratio {statistics.median(ratios):.0f} ({min(ratios):.0f} to {max(ratios):.0f}), asked for 300")
    assert statistics.median(ratios) >= 300


USUAL: list[tuple[dict[str, Any], dict[str, Any]]] = [
    ({"family": "bernoulli", "h0": 0.01, "h1": 0.05, "alpha": 0.05, "beta": 0.10}, {"values": [0] * 30 + [1]}),
    (BERNOULLI, {"values": [0] * 60 + [1]}),
    ({**BERNOULLI, "truncation": {"sample_number": 600}}, {"values": [0] * 60 + [1]}),
    ({"family": "poisson", "h0": 0.5, "h1": 1.0, "alpha": 0.10, "beta": 0.10}, {"values": [0, 1, 0]}),
    ({"family": "exponential", "h0": 200.0, "h1": 100.0, "alpha": 0.10, "beta": 0.10}, {"values": [80.0, 70.0]}),
    ({"standard": "MIL-HDBK-781A/III-D", "scale": 100.0}, {"values": [130.0, 170.0]}),
    (NORMAL, {"values": [0.1, 0.2, -0.1]}),
    ({**NORMAL, "h1": 1.0, "truncation": {"sample_number": 30}}, {"values": [0.1, 0.8]}),
    ({**GENERALISED, "truncation": {"sample_number": 500}}, {"values": [0] * 30 + [1]}),
    ({**GENERALISED, "h1": None, "beta": None, "truncation": {"sample_number": 500}}, {"values": [0] * 30 + [1]}),
    ({**TWO_SIDED, "truncation": {"sample_number": 100}}, {"values": [0.1, 0.8]}),
]


@pytest.mark.benchmark
@pytest.mark.parametrize(("content", "submission"), USUAL)
def test_an_outlook_costs_a_few_milliseconds(content: dict[str, Any], submission: dict[str, Any]) -> None:
    """For states that were not asked about before; asked again, it is a look-up."""
    document = checked_content(content)
    procedure = procedure_of_document(document)
    spent = []
    for i in range(2 * ROUNDS):
        more = {"values": submission["values"] + submission["values"][: i % 2]}
        state = observe(procedure, State(), more, NOW)
        _outlook.cache_clear()
        start = time.perf_counter()
        outlook_of(document, state)
        spent.append(1000 * (time.perf_counter() - start))
    print(f"\noutlook of {content}: {statistics.median(spent):.2f} ms")


@pytest.mark.benchmark
@pytest.mark.parametrize(("content", "submission"), [row for row in USUAL if "standard" not in row[0]])
def test_a_calibration_takes_under_two_seconds(content: dict[str, Any], submission: dict[str, Any]) -> None:
    assert submission
    start = time.perf_counter()
    stated = {name: value for name, value in content.items() if value is not None}
    calibrated({"statistic": "simple", **stated, "boundaries": "calibrated"})
    print(f"\ncalibration of {content}: {time.perf_counter() - start:.2f} s")
