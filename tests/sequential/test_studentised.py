"""Student's t from sums, against exact fractions."""

import math
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from service.sequential import invariant, studentised
from service.sequential.double import Double, FloatArray, running_sum, two_product
from service.sequential.invariant import invariant_ratio
from service.sequential.studentised import Sums

# The tolerance of t: a few roundings.
CLOSE = 1e-14


def sums(differences: FloatArray) -> Sums:
    """The count and the sums of the whole, as arrays of shape (1,)."""
    squares = two_product(differences, differences)
    zero = Double.of(0.0)
    total = running_sum(zero, differences)
    square = running_sum(running_sum(zero, squares.low).at(-1), squares.high)
    last = slice(-1, None)
    return Sums(
        np.array([float(len(differences))]),
        Double(total.high[last], total.low[last]),
        Double(square.high[last], square.low[last]),
    )


def root(x: Fraction) -> float:
    """The square root of a fraction that a double may not hold."""
    return math.isqrt(int(x * 4**200)) / 2**200 if x < 1 else math.sqrt(x)


def exact_t(differences: FloatArray) -> float:
    x = [Fraction(float(d)) for d in differences]
    mean = sum(x, Fraction(0)) / len(x)
    variance = sum(((d - mean) ** 2 for d in x), Fraction(0)) / (len(x) - 1)
    return math.copysign(root(mean**2 * len(x) / variance), mean)


def exact_two(a: FloatArray, b: FloatArray) -> float:
    x, y = [Fraction(float(d)) for d in a], [Fraction(float(d)) for d in b]
    mean_x, mean_y = sum(x, Fraction(0)) / len(x), sum(y, Fraction(0)) / len(y)
    within = sum(((d - mean_x) ** 2 for d in x), Fraction(0)) + sum(((d - mean_y) ** 2 for d in y), Fraction(0))
    variance = within / (len(x) + len(y) - 2) * (Fraction(1, len(x)) + Fraction(1, len(y)))
    return math.copysign(root((mean_y - mean_x) ** 2 / variance), mean_y - mean_x)


moderate = st.lists(st.floats(-1e6, 1e6).map(lambda x: round(x, 3)), min_size=2, max_size=40)


@given(moderate)
@settings(max_examples=60)
def test_t_is_right_to_rounding(values: list[float]) -> None:
    differences = np.array(values)
    found = studentised.one_sample(sums(differences))
    assert found.is_defined[0] == (len(set(values)) > 1)
    if found.is_defined[0]:
        assert found.t[0] == pytest.approx(exact_t(differences), rel=CLOSE, abs=1e-300)


@given(moderate, moderate)
@settings(max_examples=60)
def test_t_of_two_samples_is_right_to_rounding(a: list[float], b: list[float]) -> None:
    x, y = np.array(a), np.array(b)
    found = studentised.two_samples(sums(x), sums(y))
    assert found.is_defined[0] == (len(set(a)) > 1 or len(set(b)) > 1)
    if found.is_defined[0]:
        assert found.t[0] == pytest.approx(exact_two(x, y), rel=CLOSE, abs=1e-300)


@pytest.mark.parametrize(("spread", "close"), [(1e-5, 1e-13), (1e-7, 1e-9)])
def test_a_small_spread_far_from_the_reference_keeps_its_digits(spread: float, close: float) -> None:
    """A plain difference of squares has no digit left where the spread is 1e-8 of the distance."""
    source = np.random.default_rng(5)
    near = 1e3 + spread * source.standard_normal(5000)
    found = studentised.one_sample(sums(near))
    assert found.t[0] == pytest.approx(exact_t(near), rel=close)
    other = 1e3 + spread * (0.05 + source.standard_normal(3000))
    both = studentised.two_samples(sums(near), sums(other))
    assert both.t[0] == pytest.approx(exact_two(near, other), rel=close)


@pytest.mark.parametrize("scale", [1e-100, 1e-3, 1e100])
def test_the_unit_does_not_matter(scale: float) -> None:
    values = np.array([3.0, 1.0, 4.0, 1.0, 5.0])
    found = studentised.one_sample(sums(scale * values))
    assert found.t[0] == pytest.approx(exact_t(values), rel=CLOSE)
    assert studentised.two_samples(sums(scale * values), sums(scale * 2 * values)).t[0] == pytest.approx(
        exact_two(values, 2 * values), rel=CLOSE
    )


@pytest.mark.parametrize("value", [0.0, 0.1, -1e100, 1e-100, 1 / 3])
@pytest.mark.parametrize("count", [1, 2, 7, 10_000])
def test_equal_measurements_speak_for_nothing(value: float, count: int) -> None:
    found = studentised.one_sample(sums(np.full(count, value)))
    assert (found.t[0], found.alignment[0], bool(found.is_defined[0])) == (0.0, 0.0, False)
    looks = invariant.one_sample(np.array([float(count)]))
    assert invariant_ratio(0.0, 0.5).log_of(looks, found).tolist() == [0.0]
    both = studentised.two_samples(sums(np.full(count, value)), sums(np.full(3, 2 * value)))
    assert (both.t[0], bool(both.is_defined[0])) == (0.0, False)


def test_nothing_observed_yet_is_not_defined() -> None:
    zero = Double(np.zeros(1), np.zeros(1))
    none = Sums(np.zeros(1), zero, zero)
    assert not studentised.one_sample(none).is_defined[0]
    assert not studentised.two_samples(none, none).is_defined[0]
    assert not studentised.two_samples(none, sums(np.array([1.0, 2.0]))).is_defined[0]


def test_the_ratio_from_sums_is_the_ratio_from_t() -> None:
    values = np.array([0.3, 1.2, -0.4, 0.9, 2.2])
    found = studentised.one_sample(sums(values))
    looks = invariant.one_sample(np.array([5.0]))
    ratio = invariant_ratio(0.0, 0.8)
    assert ratio.log_of(looks, found)[0] == pytest.approx(ratio.log_of_t(looks, found.t)[0], abs=1e-13)
    assert found.alignment[0] == pytest.approx(invariant.alignment_of(looks, found.t)[0], rel=1e-14)
