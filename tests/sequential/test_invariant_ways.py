"""The measurements that bring t to a limit, against t itself."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from service.sequential.invariant_ways import (
    Interval,
    Next,
    after_one_sample,
    after_two_samples,
    common,
    mirrored,
    reaching,
)

ENDS = 1e-6


def holds(intervals: tuple[Interval, ...], u: float) -> bool:
    return any(low <= u <= high for low, high in intervals)


def is_near_an_end(intervals: tuple[Interval, ...], u: float) -> bool:
    return any(abs(end - u) <= ENDS * max(1.0, abs(u)) for pair in intervals for end in pair if math.isfinite(end))


def t_of_one(values: np.ndarray) -> float:
    return float(math.sqrt(len(values)) * values.mean() / values.std(ddof=1))


def t_of_two(a: np.ndarray, b: np.ndarray) -> float:
    freedom = len(a) + len(b) - 2
    within = ((a - a.mean()) ** 2).sum() + ((b - b.mean()) ** 2).sum()
    size = len(a) * len(b) / (len(a) + len(b))
    return float(math.sqrt(size) * (b.mean() - a.mean()) / math.sqrt(within / freedom))


@settings(max_examples=60, deadline=None)
@given(
    st.integers(1, 12),
    st.floats(-3.0, 3.0),
    st.sampled_from([-6.0, -1.5, -0.4, 0.0, 0.4, 0.9, 1.0, 1.1, 3.0, 20.0]),
    st.integers(0, 1000),
)
def test_the_intervals_of_one_sample_are_where_t_is_above(count: int, mean: float, limit: float, seed: int) -> None:
    values = np.random.default_rng(seed).normal(mean, 1.0, count)
    next_ = after_one_sample(count, float(values.mean()), float(((values - values.mean()) ** 2).sum()))
    found = reaching(next_, limit)
    for u in (*np.linspace(-40.0, 40.0, 80), -1e4, 1e4):
        if not is_near_an_end(found, u):
            assert holds(found, u) == (t_of_one(np.append(values, values.mean() + u)) >= limit)


@settings(max_examples=40, deadline=None)
@given(st.integers(1, 6), st.integers(0, 6), st.sampled_from([-2.0, 0.0, 0.7, 1.6, 5.0]), st.integers(0, 1000))
def test_the_intervals_of_two_samples_are_where_t_is_above(n: int, m: int, limit: float, seed: int) -> None:
    source = np.random.default_rng(seed)
    a, b = source.normal(0.0, 1.0, n), source.normal(1.0, 1.0, m)
    if n + m < 2:
        return
    average = float(b.mean()) if m else 0.0
    squares = float(((a - a.mean()) ** 2).sum() + (((b - b.mean()) ** 2).sum() if m else 0.0))
    found = reaching(after_two_samples((n, m), average - float(a.mean()), squares), limit)
    for u in np.linspace(-30.0, 30.0, 60):
        if not is_near_an_end(found, u):
            assert holds(found, u) == (t_of_two(a, np.append(b, average + u)) >= limit)


@pytest.mark.parametrize("limit", [math.inf, -math.inf])
def test_what_is_never_reached_has_no_interval_and_what_always_is_has_all(limit: float) -> None:
    found = reaching(Next(1.0, 2.0, 1.0), limit)
    assert found == (() if limit > 0 else ((-math.inf, math.inf),))


def test_intervals_meet_and_turn() -> None:
    assert common(((-math.inf, 2.0), (3.0, 9.0)), ((1.0, 4.0),)) == ((1.0, 2.0), (3.0, 4.0))
    assert mirrored(((1.0, 2.0), (3.0, math.inf))) == ((-math.inf, -3.0), (-2.0, -1.0))
