"""Exact figures against published values, closed forms and laws."""

import math

import numpy as np
import pytest
from numpy.typing import NDArray

from service.sequential import boundaries, likelihood
from service.sequential.boundaries import Thresholds
from service.sequential.decision import Decision
from service.sequential.exact.characteristics import Characteristics
from service.sequential.exact.counting import counting_characteristics
from service.sequential.exact.gaussian import gaussian_characteristics
from service.sequential.exact.processes import Failures, Reports, Units
from service.sequential.region import COUNTS, PASS_FAIL, REALS, StraightRegion, Wall, straight_region

Floats = NDArray[np.float64]


def pass_fail(p0: float, p1: float, alpha: float, beta: float, at: list[float]) -> Characteristics:
    region = straight_region(likelihood.bernoulli(p0, p1), boundaries.wald(alpha, beta), PASS_FAIL)
    return counting_characteristics(region, Units(np.array(at)))


def test_the_nist_plan() -> None:
    """NIST/SEMATECH e-Handbook, section 6.2.6; exact figures by an independent computation."""
    slope = likelihood.bernoulli(0.01, 0.10).slope
    found = pass_fail(0.01, 0.10, 0.05, 0.10, [0.01, slope, 0.10])
    assert found.below == pytest.approx([0.977953, 0.618631, 0.099579], abs=5e-7)
    assert found.mean == pytest.approx([30.21273, 39.04686, 22.36915], abs=5e-6)
    assert found.error_bound < 1e-11


def test_walds_plan() -> None:
    """Wald (1945), p0 = .1, p1 = .3, alpha = .02, beta = .03; exact figures by an independent computation."""
    slope = likelihood.bernoulli(0.1, 0.3).slope
    found = pass_fail(0.1, 0.3, 0.02, 0.03, [0.0, 0.1, slope, 0.3, 1.0])
    assert found.below[1:4] == pytest.approx([0.986308, 0.543460, 0.027424], abs=5e-7)
    assert found.mean == pytest.approx([14.0, 29.90181, 55.81122, 26.60221, 4.0], abs=5e-6)
    assert found.standard_deviation[[0, 4]] == pytest.approx([0.0, 0.0], abs=1e-6)


def test_montgomerys_plan() -> None:
    """Montgomery, Introduction to Statistical Quality Control, ch. 15; exact by an independent computation."""
    found = pass_fail(0.01, 0.06, 0.05, 0.10, [0.01, 0.06])
    assert found.below == pytest.approx([0.971418, 0.098921], abs=5e-7)
    assert found.mean == pytest.approx([63.58349, 50.50808], abs=5e-6)


@pytest.mark.parametrize(("p", "z", "a"), [(0.45, 9, 10), (0.4, 9, 10), (0.55, 3, 10), (0.45, 30, 40)])
def test_gamblers_ruin(p: float, z: int, a: int) -> None:
    """
    Feller, An Introduction to Probability Theory, vol. I, ch. XIV, equations (2.4) and (3.4): closed form.

    With p1 = 1 - p0 each unit moves the evidence by the same step, so the walk is Feller's with a - z and z steps.
    """
    step = math.log(0.6 / 0.4)
    # An accept limit of z steps is ruin where a unit moves up with probability p.
    region = straight_region(likelihood.bernoulli(0.4, 0.6), Thresholds(-z * step, (a - z) * step), PASS_FAIL)
    found = counting_characteristics(region, Units(np.array([p])))
    q, r = 1 - p, (1 - p) / p
    ruin = (r**a - r**z) / (r**a - 1)
    duration = z / (q - p) - a / (q - p) * (1 - r**z) / (1 - r**a)
    assert found.below[0] == pytest.approx(ruin, abs=1e-12)
    assert found.mean[0] == pytest.approx(duration, rel=1e-11)


def test_the_strength_of_repeated_looks_of_a_fair_coin() -> None:
    """
    Lindeman, Stark and Yates (2012): one half against .70, stop at a likelihood ratio of 10, beta = 0.

    Exact quantiles 50, 90 and 99 %, and mean, by an independent computation.
    """
    region = straight_region(likelihood.bernoulli(0.5, 0.7), Thresholds(-1e9, math.log(10)), PASS_FAIL)
    found = counting_characteristics(region, Units(np.array([0.7])))
    assert found.quantiles[0, [0, 1, 3]].tolist() == [22, 60, 131]
    assert found.mean[0] == pytest.approx(29.57, abs=5e-3)


def test_truncated_plans_decide_always_and_tend_to_the_open_one() -> None:
    ratio, limits = likelihood.bernoulli(0.05, 0.2), boundaries.wald(0.05, 0.1)
    at = Units(np.linspace(0.0, 1.0, 11))
    whole = counting_characteristics(straight_region(ratio, limits, PASS_FAIL), at)
    for wall in (30.0, 60.0, 2000.0):
        found = counting_characteristics(straight_region(ratio, limits, PASS_FAIL, Wall(wall)), at)
        assert found.below + found.above == pytest.approx(np.ones(11), abs=1e-12)
        assert np.all(np.diff(found.below) <= 1e-12)
    assert found.below == pytest.approx(whole.below, abs=1e-11)
    assert found.mean == pytest.approx(whole.mean, rel=1e-11)


def test_a_recursion_equals_enumeration() -> None:
    """Every path of 12 units by itself, in exact fractions of binary digits."""
    region = straight_region(likelihood.bernoulli(0.2, 0.5), boundaries.wald(0.1, 0.1), PASS_FAIL, Wall(12.0))
    limits = region.limits(np.arange(1.0, 13.0))
    below, mean = 0.0, 0.0
    p = 0.375
    stack = [(0, 0, 1.0)]
    while stack:
        n, total, probability = stack.pop()
        if n and (total <= limits.lower[n - 1] or total >= limits.upper[n - 1]):
            below += probability * (total <= limits.lower[n - 1])
            mean += probability * n
            continue
        stack += [(n + 1, total, probability * (1 - p)), (n + 1, total + 1, probability * p)]
    found = counting_characteristics(region, Units(np.array([p])))
    assert found.below[0] == pytest.approx(below, abs=1e-14)
    assert found.mean[0] == pytest.approx(mean, rel=1e-14)


def test_counts_obey_walds_identity() -> None:
    """E[total] = E[exposure] * rate: the mean total from a simulation is within 4 standard errors of it."""
    ratio = likelihood.poisson(0.5, 1.5)
    region = straight_region(ratio, boundaries.wald(0.05, 0.1), COUNTS, Wall(40.0))
    rate = 0.9
    found = counting_characteristics(region, Reports(np.array([rate]), 1.0))
    source = np.random.default_rng(3)
    walks = np.cumsum(source.poisson(rate, (20_000, 40)), axis=1)
    n = np.arange(1.0, 41.0)
    limits = region.limits(n)
    out = (walks <= limits.lower) | (walks >= limits.upper)
    stop = np.argmax(out, axis=1)
    totals = walks[np.arange(len(walks)), stop]
    accepted = totals <= limits.lower[stop]
    for exact, sample in ((found.mean[0], stop + 1.0), (found.below[0], accepted), (found.mean[0] * rate, totals)):
        assert abs(np.mean(sample) - exact) < 4 * np.std(sample) / math.sqrt(len(sample))
    assert found.standard_deviation[0] == pytest.approx(np.std(stop + 1.0), rel=0.05)


def test_time_agrees_with_simulation() -> None:
    for means, wall in (((200.0, 100.0), Wall(900.0)), ((100.0, 200.0), None), ((200.0, 100.0), Wall(600.0, cap=4))):
        region = straight_region(likelihood.exponential(*means), boundaries.wald(0.1, 0.1), COUNTS, wall)
        found = counting_characteristics(region, Failures(np.array([1 / 140.0])))
        accepted, times = simulate(region, 140.0)
        below = accepted if region.below is Decision.ACCEPT else ~accepted
        for exact, sample in ((found.below[0], below), (found.mean[0], times)):
            assert abs(np.mean(sample) - exact) < 4 * np.std(sample) / math.sqrt(len(sample))
        assert found.standard_deviation[0] == pytest.approx(np.std(times), rel=0.05)
        assert found.quantiles[0, :3] == pytest.approx(np.quantile(times, [0.5, 0.9, 0.95]), rel=0.05)
        assert found.below[0] + found.above[0] == pytest.approx(1.0, abs=1e-11)


def simulate(region: StraightRegion, mean: float) -> tuple[NDArray[np.bool_], Floats]:
    """One failure after another, 6000 tests."""
    source = np.random.default_rng(5)
    accepted, times = [], []
    wall = region.wall.progress if region.wall else math.inf
    cap = region.wall.cap if region.wall and region.wall.cap else 10**9
    slope, down, up = region.ratio.slope, region.lower_intercept, region.upper_intercept
    for _ in range(6000):
        time, total = 0.0, 0
        while True:
            reaches = min((total + down) / slope, wall)
            time += source.exponential(mean)
            if time >= reaches:
                is_below = reaches < wall or cap < 10**9 or total <= slope * wall
                times.append(reaches)
                break
            total += 1
            if total >= slope * time + up or total >= cap:
                is_below = False
                times.append(time)
                break
        accepted.append((region.below if is_below else region.above) is Decision.ACCEPT)
    return np.array(accepted), np.array(times)


def normal_region(wall: Wall | None = None) -> StraightRegion:
    return straight_region(likelihood.normal(0.0, 1.0, 1.0), boundaries.wald(0.05, 0.05), REALS, wall)


def test_the_exact_normal_test_that_walds_figures_miss() -> None:
    """Two independent computations, agreeing to 12 digits; Wald's approximations say .95 and 5.3 here."""
    found = gaussian_characteristics(normal_region(), np.array([0.0, 0.5]), 1.0)
    assert found.below[0] == pytest.approx(0.97135781, abs=5e-9)
    assert found.mean == pytest.approx([6.92007795, 12.69065621], abs=5e-9)
    assert found.error_bound < 1e-10


@pytest.mark.parametrize(
    ("shift", "run_length"), [(0.0, 167.6838), (0.5, 26.6302), (1.0, 8.3831), (2.0, 3.3428), (3.0, 2.1945)]
)
def test_run_lengths_through_pages_identity(shift: float, run_length: float) -> None:
    """
    Montgomery, Introduction to Statistical Quality Control, Table 9.3 (k = .5, h = 4), two-sided; four decimals by an
    independent computation. Page (1954): the run length is N(0)/(1 - L(0)) of the test with limits 0 and h.
    """

    def one_sided(mean: float) -> float:
        region = straight_region(likelihood.normal(0.0, 1.0, 1.0), Thresholds(-1e-13, 4.0), REALS)
        found = gaussian_characteristics(region, np.array([mean]), 1.0)
        return float(found.mean[0] / found.above[0])

    both = 1 / (1 / one_sided(shift) + 1 / one_sided(-shift))
    assert both == pytest.approx(run_length, abs=6e-5)


def test_a_far_wall_changes_nothing_and_a_near_one_decides() -> None:
    at = np.array([0.0, 0.5, 1.0])
    whole = gaussian_characteristics(normal_region(), at, 1.0)
    far = gaussian_characteristics(normal_region(Wall(400.0)), at, 1.0)
    assert far.below == pytest.approx(whole.below, abs=1e-10)
    assert far.mean == pytest.approx(whole.mean, rel=1e-9)
    assert far.standard_deviation == pytest.approx(whole.standard_deviation, rel=1e-8)
    assert far.quantiles.tolist() == whole.quantiles.tolist()
    near = gaussian_characteristics(normal_region(Wall(3.0)), at, 1.0)
    assert near.below + near.above == pytest.approx(np.ones(3), abs=1e-12)
    assert np.all(near.mean <= 3.0)
    source = np.random.default_rng(9).normal(0.5, 1.0, (40_000, 3)).cumsum(axis=1) - 0.5 * np.arange(1, 4)
    bound = math.log(19)
    stop = np.where(np.abs(source[:, 0]) >= bound, 0, np.where(np.abs(source[:, 1]) >= bound, 1, 2))
    below = source[np.arange(len(source)), stop] <= 0
    assert abs(np.mean(below) - near.below[1]) < 4 * 0.5 / 200
    assert abs(np.mean(stop + 1) - near.mean[1]) < 4 * np.std(stop) / 200
