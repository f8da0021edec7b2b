"""Measurements that come one at a time in two arms, against the likelihood of all of them."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from service.sequential import likelihood
from service.sequential.double import Double, FloatArray, running_sum
from service.sequential.two_samples import Arm, pairs_worth, reaching, variance_share
from tests.sequential.reference import arms

SIGMAS = st.sampled_from([(1.0, 1.0), (0.5, 2.0), (3.0, 0.01), (1e90, 3e90), (1e-90, 1e-90)])
ORDERS = st.lists(st.booleans(), min_size=1, max_size=30)


def arm(values: FloatArray, is_here: FloatArray) -> Arm:
    """The running count and sum of the measurements that fell into one arm."""
    zero = Double.of(0.0)
    return Arm(np.cumsum(is_here), running_sum(zero, values * is_here))


def moments(values: FloatArray, is_b: FloatArray, sigmas: tuple[float, float]) -> tuple[FloatArray, FloatArray]:
    return pairs_worth(arm(values, 1.0 - is_b), arm(values, is_b), *sigmas)


@settings(max_examples=80, deadline=None)
@given(ORDERS, SIGMAS, st.integers(0, 2**32 - 1), st.sampled_from([0.0, 1e6]))
def test_the_evidence_is_that_of_all_measurements(
    order: list[bool], sigmas: tuple[float, float], seed: int, level: float
) -> None:
    source = np.random.default_rng(seed)
    scale = np.hypot(*sigmas)
    values = scale * (level + source.normal(0.0, 1.0, len(order)))
    means = (0.0, 0.7 * scale)
    progress, total = moments(values, np.array(order, float), sigmas)
    ratio = likelihood.normal(*means, float(scale))
    zero = np.zeros(len(order))
    found = ratio.log(Double(progress, zero), Double(total, zero))
    slow = arms.evidence_of_measurements(list(zip(order, values.tolist(), strict=True)), means, sigmas)
    size = abs(ratio.gain) * (abs(total[-1]) + abs(ratio.slope) * progress[-1])
    assert abs(found[-1] - float(slow)) <= 1e-12 * max(1.0, size)


@settings(max_examples=60, deadline=None)
@given(ORDERS, SIGMAS)
def test_the_steps_of_the_total_are_independent(order: list[bool], sigmas: tuple[float, float]) -> None:
    """Cov(total then, total later) = Var(total then) = progress * (sa**2 + sb**2), from each measurement's weight."""
    is_b, count = np.array(order, float), len(order)
    columns = [moments(np.eye(count)[i], is_b, sigmas) for i in range(count)]
    weights = np.array([total for _, total in columns])
    scale = max(sigmas)
    relative = np.where(is_b == 1.0, sigmas[1], sigmas[0]) / scale
    covariance = (weights * relative[:, np.newaxis] ** 2).T @ weights
    variance = columns[0][0] * ((sigmas[0] / scale) ** 2 + (sigmas[1] / scale) ** 2)
    expected = np.minimum(variance[:, np.newaxis], variance)
    assert np.all(np.diff(columns[0][0]) >= 0.0)
    assert covariance == pytest.approx(expected, rel=1e-12, abs=1e-12)


def test_complete_pairs_are_pairs() -> None:
    source = np.random.default_rng(2)
    a, b = source.normal(1000.0, 1.0, (2, 50))
    values, is_b = np.column_stack([a, b]).ravel(), np.tile([0.0, 1.0], 50)
    progress, total = moments(values, is_b, (0.3, 1.7))
    assert np.array_equal(progress[1::2], np.arange(1.0, 51.0))
    assert total[1::2] == pytest.approx(np.cumsum(b - a), abs=1e-10)


def test_with_an_empty_arm_nothing_is_known() -> None:
    values = np.array([5.0, 7.0, -3.0])
    progress, total = moments(values, np.ones(3), (1.0, 2.0))
    assert not np.any(progress)
    assert not np.any(total)


@settings(max_examples=60, deadline=None)
@given(
    count_a=st.integers(1, 30),
    count_b=st.integers(1, 30),
    in_b=st.booleans(),
    sigmas=SIGMAS,
    wanted=st.floats(-50.0, 50.0),
)
def test_a_measurement_brings_the_total_where_it_is_wanted(
    *, count_a: int, count_b: int, in_b: bool, sigmas: tuple[float, float], wanted: float
) -> None:
    without = (12.5 * (count_a - (not in_b)), 11.75 * (count_b - in_b))
    value = reaching(wanted, (count_a, count_b), without, variance_share(*sigmas), in_b=in_b)
    sums = (without[0] + (not in_b) * value, without[1] + in_b * value)
    a, b = (
        Arm(np.array([float(count)]), Double(np.array([total]), np.zeros(1)))
        for count, total in zip((count_a, count_b), sums, strict=True)
    )
    assert pairs_worth(a, b, *sigmas)[1][0] == pytest.approx(wanted, abs=1e-8)
