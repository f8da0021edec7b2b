"""Zeros of rising functions, against closed forms."""

import numpy as np
import pytest

from service.sequential.double import FloatArray
from service.sequential.roots import SMALLEST, rising_root


@pytest.mark.parametrize("power", [0.5, 1.0, 3.0, 9.0])
def test_roots_of_powers_are_found_to_the_last_digits(power: float) -> None:
    """Zeros over two hundred orders of magnitude, each in a bracket of its own."""
    zeros = np.array([1e-100, 3e-5, 1.0, 7.5, 1e100])
    found = rising_root(lambda x: (x / zeros) ** power - 1.0, zeros * 1e-3, zeros * 50.0)
    assert found == pytest.approx(zeros, rel=1e-12)


def test_a_zero_outside_the_bracket_is_said() -> None:
    def rise(x: FloatArray) -> FloatArray:
        return x - 2.0

    found = rising_root(rise, np.array([3.0, SMALLEST]), np.array([4.0, 1.0]))
    assert found[0] == 3.0
    assert np.isnan(found[1])


def test_few_evaluations_are_enough() -> None:
    asked = 0

    def rise(x: FloatArray) -> FloatArray:
        nonlocal asked
        asked += 1
        return np.log(x) + x - 5.0

    found = rising_root(rise, np.full(3, 0.1), np.full(3, 20.0))
    assert rise(found) == pytest.approx(0.0, abs=1e-13)
    assert asked < 20
