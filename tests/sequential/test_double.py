"""Sums and products in two doubles, against exact fractions."""

import random
from fractions import Fraction

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from service.sequential.double import Double, running_sum, two_product, two_sum

numbers = st.floats(-1e100, 1e100, allow_subnormal=False)
moderate = st.floats(-1e60, 1e60).filter(lambda x: x == 0 or abs(x) > 1e-60)


@given(numbers, numbers)
def test_a_sum_has_no_error(a: float, b: float) -> None:
    result = two_sum(np.float64(a), np.float64(b))  # type: ignore[arg-type]
    assert Fraction(float(result.high)) + Fraction(float(result.low)) == Fraction(a) + Fraction(b)


@given(moderate, moderate)
def test_a_product_has_no_error(a: float, b: float) -> None:
    result = two_product(np.float64(a), np.float64(b))  # type: ignore[arg-type]
    assert Fraction(float(result.high)) + Fraction(float(result.low)) == Fraction(a) * Fraction(b)


@given(st.lists(numbers, min_size=2, max_size=60), st.data())
def test_any_split_of_a_sum_gives_the_same_bits(terms: list[float], data: st.DataObject) -> None:
    whole = running_sum(Double.of(0.0), np.array(terms))
    at = data.draw(st.integers(1, len(terms) - 1))
    first = running_sum(Double.of(0.0), np.array(terms[:at])).at(-1)
    rest = running_sum(first, np.array(terms[at:]))
    assert rest.high.tolist() == whole.high[at:].tolist()
    assert rest.low.tolist() == whole.low[at:].tolist()


def test_many_terms_that_nearly_cancel_lose_nothing() -> None:
    source = random.Random(7)
    terms = [source.uniform(-1e9, 1e9) + 1e-7 * source.random() for _ in range(100_000)]
    terms += [-t * (1 + 1e-15 * source.random()) for t in terms]
    source.shuffle(terms)
    exact = sum(map(Fraction, terms), Fraction(0))
    total = running_sum(Double.of(0.0), np.array(terms)).at(-1)
    assert abs(Fraction(float(total.high)) + Fraction(float(total.low)) - exact) <= abs(exact) * Fraction(1, 10**12)
