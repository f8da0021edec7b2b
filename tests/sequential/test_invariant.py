"""The invariant likelihood ratio against 50 digits, and its limits against itself."""

import itertools
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad
from scipy.stats import nct

from service.sequential.boundaries import Thresholds, wald
from service.sequential.errors import OutOfRange
from service.sequential.invariant import (
    InvariantRatio,
    Looks,
    alignment_of,
    invariant_ratio,
    log_density,
    one_sample,
    t_of,
    two_samples,
)
from tests.sequential.reference import noncentral


def ratio_at(ratio: InvariantRatio, freedom: float, size: float, t: float) -> float:
    looks = Looks(np.array([freedom]), np.array([size]))
    return float(ratio.log_of_t(looks, np.array([t]))[0])


def allowed(freedom: float, exact: float, delta0: float, delta1: float) -> float:
    """The accuracy that the module states."""
    return 1e-12 + 1e-15 * (abs(exact) + (freedom + 1) * (delta0**2 + delta1**2))


@pytest.mark.parametrize(
    ("n", "t", "delta", "expected"),
    [(10, 2.5, 0.5, 8.4608086839), (20, 1.0, 0.3, 1.5643150353), (5, -0.7, 1.0, 0.0192493608)],
)
def test_known_ratios_are_met(n: int, t: float, delta: float, expected: float) -> None:
    """Two independent computations by others agree on these."""
    found = math.exp(ratio_at(invariant_ratio(0.0, delta), n - 1, n, t))
    assert found == pytest.approx(expected, abs=5e-11)
    exact = noncentral.density(n - 1, delta * math.sqrt(n), t) / noncentral.density(n - 1, 0.0, t)
    assert found == pytest.approx(float(exact), rel=1e-12)


FREEDOMS = (1, 2, 3, 5, 8, 15, 30, 31, 32, 60, 100, 126, 127, 128, 1000, 10_000, 1_000_000)
VALUES = (-1000.0, -30.0, -3.0, -0.5, 0.0, 1e-3, 0.7, 3.0, 40.0, 1000.0)
DELTAS = (1e-3, 0.05, 0.5, 1.0, 5.0)
GRID = list(itertools.product(FREEDOMS, VALUES, DELTAS))


def test_the_ratio_is_right_from_two_observations_to_a_million(request: pytest.FixtureRequest) -> None:
    """All of the grid in the long form; a fixed part of it, of every kind, otherwise."""
    is_long = request.config.getoption("--long")
    for freedom, t, delta in GRID if is_long else GRID[::41]:
        exact = float(noncentral.log_ratio(freedom, freedom + 1.0, t, 0.0, delta))
        found = ratio_at(invariant_ratio(0.0, delta), freedom, freedom + 1.0, t)
        assert abs(found - exact) <= allowed(freedom, exact, 0.0, delta), (freedom, t, delta)


@pytest.mark.parametrize(
    ("freedom", "size", "t", "delta0", "delta1", "sides"),
    [
        (9, 10.0, 1.3, 0.2, 0.7, 1),
        (9, 10.0, -4.0, 0.7, 0.2, 1),
        (40, 41.0, 900.0, -0.5, 0.5, 1),
        (18, 5.0, 2.1, 0.0, 0.8, 1),
        (2, 0.75, -8.0, 0.0, -1.5, 1),
        (998, 250.0, 3.0, 0.1, 0.3, 1),
        (1, 2.0, 0.0, 0.0, 1.0, 2),
        (12, 13.0, -2.5, 0.0, 0.6, 2),
        (80, 81.0, 7.0, 0.0, 2.0, 2),
        (2000, 2001.0, -2.0, 0.0, 0.1, 2),
    ],
)
def test_any_hypotheses_samples_and_sides(
    freedom: int, size: float, t: float, delta0: float, delta1: float, sides: int
) -> None:
    exact = float(noncentral.log_ratio(freedom, size, t, delta0, delta1, sides))
    found = ratio_at(invariant_ratio(delta0, delta1, sides), freedom, size, t)
    assert abs(found - exact) <= allowed(freedom, exact, delta0, delta1)


def test_the_ratio_has_mean_one_under_its_own_null_hypothesis() -> None:
    """What Wald's identity rests on, with scipy's density, which serves for five degrees of freedom."""
    ratio, null = invariant_ratio(0.3, 0.9), nct(5, 0.3 * math.sqrt(6))
    pieces = [quad(lambda t: math.exp(ratio_at(ratio, 5, 6.0, t)) * null.pdf(t), *ends)[0] for ends in PIECES]
    assert sum(pieces) == pytest.approx(1.0, abs=1e-8)


PIECES = ((-math.inf, -3.0), (-3.0, 0.0), (0.0, 3.0), (3.0, 10.0), (10.0, 100.0), (100.0, math.inf))

deltas = st.floats(-3.0, 3.0).filter(lambda d: abs(d) > 1e-3)
counts = st.integers(2, 2000)


@given(counts, st.floats(-50, 50), deltas, deltas)
@settings(max_examples=50)
def test_turning_the_axis_around_changes_nothing(n: int, t: float, delta0: float, delta1: float) -> None:
    if delta0 != delta1:
        there = ratio_at(invariant_ratio(delta0, delta1), n - 1, n, t)
        back = ratio_at(invariant_ratio(-delta0, -delta1), n - 1, n, -t)
        assert there == pytest.approx(back, rel=1e-14, abs=1e-14)
        assert ratio_at(invariant_ratio(delta1, delta0), n - 1, n, t) == pytest.approx(-there, rel=1e-13, abs=1e-13)


@given(counts, st.floats(-50, 50), st.floats(1e-3, 3.0), deltas, deltas)
@settings(max_examples=50)
def test_larger_t_speak_more_for_the_larger_mean(n: int, t: float, more: float, delta0: float, delta1: float) -> None:
    if abs(delta1 - delta0) > 1e-3:
        ratio = invariant_ratio(delta0, delta1)
        gain = ratio_at(ratio, n - 1, n, t + more) - ratio_at(ratio, n - 1, n, t)
        assert gain > 0.0 if ratio.is_upward else gain < 0.0


@pytest.mark.parametrize(
    "ratio",
    [
        invariant_ratio(0.0, 0.5),
        invariant_ratio(0.0, -0.5),
        invariant_ratio(0.2, 0.7),
        invariant_ratio(1.0, -1.0),
        invariant_ratio(0.0, 0.5, sides=2),
    ],
)
@pytest.mark.parametrize("thresholds", [wald(0.05, 0.05), Thresholds(-7.0, 0.5)])
def test_at_its_limits_the_ratio_is_the_threshold(ratio: InvariantRatio, thresholds: Thresholds) -> None:
    count = np.concatenate([np.arange(1.0, 60.0), [100.0, 1000.0, 30_000.0, 1_000_000.0]])
    looks = one_sample(count)
    found = ratio.t_limits(looks, thresholds)
    for limit, threshold in ((found.accept, thresholds.accept), (found.reject, thresholds.reject)):
        is_met = np.isfinite(limit)
        assert is_met.any()
        met = Looks(looks.freedom[is_met], looks.size[is_met])
        np.testing.assert_allclose(ratio.log_of_t(met, limit[is_met]), threshold, atol=1e-9)
        # Elsewhere the ratio stays short of the threshold however near to it the data come: all equal, or t = 0.
        never = Looks(looks.freedom[~is_met], looks.size[~is_met])
        nearest = np.sign(limit[~is_met]) if ratio.sides == 1 else np.full(never.size.shape, float(threshold > 0.0))
        assert np.all(np.abs(ratio.log(never, nearest)) <= abs(threshold))


def test_a_limit_that_is_never_reached_decides_nothing() -> None:
    upward, downward = invariant_ratio(0.0, 0.5), invariant_ratio(0.0, -0.5)
    two = invariant_ratio(0.0, 0.5, sides=2)
    first = one_sample(np.array([1.0, 2.0, 3.0]))
    thresholds = Thresholds(-3.0, 3.0)
    assert upward.t_limits(first, thresholds).accept.tolist() == [-math.inf] * 3
    assert upward.t_limits(first, thresholds).reject.tolist() == [math.inf] * 3
    assert downward.t_limits(first, thresholds).accept.tolist() == [math.inf] * 3
    assert downward.t_limits(first, thresholds).reject.tolist() == [-math.inf] * 3
    assert two.t_limits(first, thresholds).accept.tolist() == [-math.inf] * 3
    assert two.t_limits(first, thresholds).reject.tolist() == [math.inf] * 3


def test_before_t_is_defined_the_ratio_is_zero() -> None:
    ratio = invariant_ratio(0.1, 0.9)
    assert ratio.log(one_sample(np.array([1.0])), np.array([1.0])).tolist() == [0.0]
    looks = two_samples(np.array([0.0, 1.0, 1.0, 7.0]), np.array([5.0, 1.0, 2.0, 0.0]))
    assert (looks.freedom >= 1.0).tolist() == [False, False, True, False]
    assert (ratio.log(looks, np.full(4, 0.5)) != 0.0).tolist() == [False, False, True, False]


def test_t_and_its_alignment_are_one_another() -> None:
    looks = one_sample(np.array([2.0, 5.0, 50.0, 1e6]))
    for t in (-1000.0, -2.0, 0.0, 1e-9, 0.3, 800.0):
        there = alignment_of(looks, np.full(4, t))
        assert np.all(np.abs(there) < 1.0)
        np.testing.assert_allclose(t_of(looks, there), t, rtol=1e-9)
    assert t_of(looks, np.array([-1.0, 1.0, -1.0, 1.0])).tolist() == [-math.inf, math.inf, -math.inf, math.inf]


def test_arrays_of_any_shape_are_answered_at_once() -> None:
    ratio = invariant_ratio(0.0, 0.5)
    looks = one_sample(np.arange(2.0, 700.0))
    alignments = np.linspace(-0.9, 0.9, 5)[:, np.newaxis]
    found = ratio.log(looks, alignments)
    assert found.shape == (5, 698)
    for i, j in ((0, 0), (3, 29), (2, 30), (4, 126), (1, 697)):
        alone = Looks(looks.freedom[j : j + 1], looks.size[j : j + 1])
        assert found[i, j] == ratio.log(alone, alignments[i])[0]
    assert log_density(looks, np.zeros(698), 0.0).tolist() == [0.0] * 698


@pytest.mark.parametrize(
    ("delta0", "delta1", "sides", "argument"),
    [
        (0.5, 0.5, 1, "delta1"),
        (0.1, 0.5, 2, "delta0"),
        (0.0, -0.5, 2, "delta1"),
        (0.0, 0.5, 3, "sides"),
        (math.nan, 0.5, 1, "delta0"),
        (0.0, math.inf, 1, "delta1"),
    ],
)
def test_impossible_hypotheses_are_refused(delta0: float, delta1: float, sides: int, argument: str) -> None:
    with pytest.raises(OutOfRange) as caught:
        invariant_ratio(delta0, delta1, sides)
    assert caught.value.argument == argument
