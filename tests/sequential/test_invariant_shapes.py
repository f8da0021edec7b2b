"""Shapes of courses, against their decisions at every average, one by one."""

import math

import numpy as np
import pytest

from service.sequential.boundaries import Thresholds, wald
from service.sequential.double import FloatArray
from service.sequential.invariant import Looks, alignment_of, invariant_ratio, one_sample, two_samples
from service.sequential.invariant_risks import Effort, simulated
from service.sequential.invariant_shapes import Outline, Shapes
from service.sequential.invariant_walks import BATCH, InvariantTest, Walker, invariant_test

UP = invariant_test(invariant_ratio(0.0, 1.0), Thresholds(-1.2, 1.1), last=7)
DOWN = invariant_test(invariant_ratio(0.6, -0.5), Thresholds(-0.9, 1.4), last=6)


def ends_above(test: InvariantTest, values: FloatArray) -> bool:
    """Look by look, each t from mean and variance."""
    for n in range(2, (test.last or 0) + 1):
        t = values[:n].mean() / values[:n].std(ddof=1) * math.sqrt(n)
        at = Looks(np.array([n - 1.0]), np.array([float(n)]))
        ratio = float(test.ratio.log(at, alignment_of(at, np.array([t])))[0])
        rejects = ratio > 0.0 if n == test.last else ratio >= test.thresholds.reject
        accepts = ratio <= 0.0 if n == test.last else ratio <= test.thresholds.accept
        if rejects or accepts:
            return rejects == test.ratio.is_upward
    raise AssertionError


def shapes_of(test: InvariantTest, values: FloatArray) -> Shapes:
    """Of one course, its looks taken three at a time."""
    last = len(values)
    number = np.arange(1.0, last + 1.0)
    looks = one_sample(number)
    accept, reject = (test.ratio.t_limits(looks, limits) for limits in (test.thresholds, Thresholds(0.0, 0.0)))
    lower, upper = (accept.accept, accept.reject) if test.ratio.is_upward else (accept.reject, accept.accept)
    lower[-1] = upper[-1] = reject.reject[-1]
    root = np.sqrt(np.maximum(looks.freedom, 1.0))
    means = np.cumsum(values) / number
    about = np.array([np.sum((values[:n] - values[:n].mean()) ** 2) for n in range(1, last + 1)])
    outline, course = Outline(1), np.arange(1)
    for begin in range(0, last, 3):
        part = slice(begin, begin + 3)
        rows = means[part, np.newaxis], about[part, np.newaxis]
        outline.extend(course, number[part], *rows, ((lower / root)[part], (upper / root)[part]))
    assert not outline.is_open(course)[0]
    return outline.shapes


@pytest.mark.parametrize("test", [UP, DOWN])
@pytest.mark.parametrize("seed", range(8))
def test_a_shape_is_parted_where_its_decision_turns(test: InvariantTest, seed: int) -> None:
    drawn = np.random.default_rng(seed).normal(0.3, 1.0, test.last or 0)
    found = shapes_of(test, drawn)
    for sign, values in enumerate((drawn, 2.0 * drawn.mean() - drawn)):
        look = int(found.looks[sign, 0])
        first = values[:look]
        # The average that gives the first measurements, up to that look, this t.
        spread = math.sqrt(np.sum((first - first.mean()) ** 2) / look)
        turning = float(found.places[sign, 0]) * spread
        for average in turning + np.concatenate([np.linspace(-3.0, 0.0, 40)[:-1], [-1e-9]]):
            assert not ends_above(test, values - first.mean() + average)
        for average in turning + np.concatenate([[1e-9], np.linspace(0.0, 3.0, 40)[1:]]):
            assert ends_above(test, values - first.mean() + average)


@pytest.mark.parametrize("delta", [0.0, 0.7])
def test_shapes_say_how_probable_it_is_to_end_above(delta: float) -> None:
    """The share of batches that end above, and the mean over the shapes of batches under another mean."""
    above = Walker(UP).batch(delta, 3, 0, 0).is_rejected
    shapes = Walker(UP).batch(0.4, 3, 0, 1).shapes
    assert shapes is not None
    of_shapes = shapes.probability_above(one_sample(np.arange(1.0, 8.0)), delta)
    error = math.hypot(np.std(above), np.std(of_shapes)) / math.sqrt(BATCH)
    assert abs(np.mean(above) - np.mean(of_shapes)) < 4.0 * error
    assert np.var(of_shapes) < 0.1 * np.var(above)


def test_shapes_are_followed_only_to_a_near_wall_of_one_side() -> None:
    ratio, thresholds = invariant_ratio(0.0, 0.5), wald(0.05, 0.05)
    assert invariant_test(ratio, thresholds, last=60).has_near_wall
    assert invariant_test(ratio, thresholds, samples=2, last=60).has_near_wall
    for other in (
        invariant_test(ratio, thresholds),
        invariant_test(ratio, thresholds, last=100),
        invariant_test(invariant_ratio(0.0, 0.5, 2), thresholds, last=60),
    ):
        assert not other.has_near_wall
        assert Walker(other).batch(0.5, 1, 0, 0).shapes is None


def test_many_tails_are_interpolated_to_what_few_are() -> None:
    shapes = Walker(UP).batch(0.4, 5, 0, 0).shapes
    assert shapes is not None
    looks, few = one_sample(np.arange(1.0, 8.0)), slice(0, 500)
    whole = Shapes(np.tile(shapes.looks, 4), np.tile(shapes.places, 4)).probability_above(looks, 0.6)
    part = Shapes(shapes.looks[:, few], shapes.places[:, few]).probability_above(looks, 0.6)
    np.testing.assert_allclose(whole[few], part, atol=2e-6)


def test_where_t_is_too_far_out_courses_speak_for_themselves() -> None:
    for delta in (-60.0, 60.0):
        point = simulated(UP, (delta,), 1, Effort(1e-3, 4 * BATCH)).points[0]
        assert point.rejection.value == pytest.approx(float(delta > 0.0), abs=1e-6)


def test_two_samples_with_a_wall_use_the_degrees_of_freedom_of_both() -> None:
    """Where only the wall decides, it is one t with the freedom of both samples, and no shape varies."""
    test = invariant_test(invariant_ratio(0.0, 1.0), Thresholds(-40.0, 40.0), samples=2, last=5)
    shapes = Walker(test).batch(0.0, 1, 0, 0).shapes
    assert shapes is not None
    at_wall = two_samples(np.array([5.0]), np.array([5.0]))
    turning = float(test.ratio.t_limits(at_wall, Thresholds(0.0, 0.0)).reject[0]) / math.sqrt(8.0)
    np.testing.assert_allclose(shapes.places, turning, rtol=1e-9)
