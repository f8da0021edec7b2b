"""
Student's t from running sums, for measurements far from their reference or nearly equal.

Quantity: t and its alignment t/sqrt(freedom + t**2), from the number of measurements, the sum of their differences
from the reference and the sum of the squares of these.
Method: the alignment of one sample is the sum over sqrt(count * squares), and nothing cancels in it. What cancels in
t, the squares about the mean, and for two samples the difference of the means, is computed with sums, products and
quotients of two doubles.
Accuracy: of the alignment 1e-15; of t 1e-14 until the spread is below 1e-8 of the size of the differences, two digits
less for each digit further. Data whose spread is below 4e-15 of them times the root of the count are taken for equal.
Cost: some tens of operations for each point.
Source: Student (1908), Biometrika 6, 1-25; Dekker (1971), Numerische Mathematik 18, 224-242 (the operations).
"""

from dataclasses import dataclass

import numpy as np

from service.sequential.double import BoolArray, Double, FloatArray, IndexArray, minus, plus, times

# Squares about the mean below this share of all squares, for each measurement, are rounding of the sums.
ROUNDING = 2.0**-96


@dataclass(frozen=True)
class Sums:
    """
    What is kept of the measurements so far; arrays of one shape.

    Attributes:
        count: How many.
        total: Sum of their differences from the reference.
        squares: Sum of the squares of these.
    """

    count: FloatArray
    total: Double
    squares: Double


@dataclass(frozen=True)
class Studentised:
    """
    Student's t at some looks; arrays of one shape.

    Attributes:
        t: Zero where it is not defined.
        alignment: Likewise; the ratio of the invariant test is then zero, because neither hypothesis is spoken for.
        is_defined: False for too few measurements, and while all of them (of each sample) are equal.
    """

    t: FloatArray
    alignment: FloatArray
    is_defined: BoolArray


def one_sample(sums: Sums) -> Studentised:
    """The t of measurements, or of differences within pairs, against their reference."""
    n, unit = sums.count, _unit(sums.squares.high)
    total, squares = _scaled(sums.total, -unit), _scaled(sums.squares, -2 * unit)
    about_mean = minus(times(squares, _whole(n)), times(total, total))
    is_defined = (n >= 2.0) & (about_mean.value > n * ROUNDING * n * squares.value)
    return _studentised(total.value, about_mean.value, n * squares.value, n - 1.0, is_defined)


def two_samples(sums_a: Sums, sums_b: Sums) -> Studentised:
    """The t of the mean of b less that of a, with the common variance of both; both sums from one reference."""
    a, b = sums_a.count, sums_b.count
    unit = _unit(np.maximum(sums_a.squares.high, sums_b.squares.high))
    total_a, total_b = _scaled(sums_a.total, -unit), _scaled(sums_b.total, -unit)
    squares_a, squares_b = _scaled(sums_a.squares, -2 * unit), _scaled(sums_b.squares, -2 * unit)
    # All multiplied by a * b: the squares about the means, and the difference of the means.
    within = plus(
        times(minus(times(squares_a, _whole(a)), times(total_a, total_a)), _whole(b)),
        times(minus(times(squares_b, _whole(b)), times(total_b, total_b)), _whole(a)),
    )
    difference = minus(times(total_b, _whole(a)), times(total_a, _whole(b))).value
    all_squares = a * b * (squares_a.value + squares_b.value)
    is_defined = (a >= 1.0) & (b >= 1.0) & (a + b >= 3.0) & (within.value > (a + b) * ROUNDING * all_squares)
    # In these units the squares between the samples are difference**2/(a + b).
    between = difference / np.sqrt(np.maximum(a + b, 1.0))
    return _studentised(between, within.value, within.value + between * between, a + b - 2.0, is_defined)


def squares_about_mean(sums: Sums) -> FloatArray:
    """The sum of the squared differences from their own mean; zero for one measurement, and while all are equal."""
    n, unit = sums.count, _unit(sums.squares.high)
    total, squares = _scaled(sums.total, -unit), _scaled(sums.squares, -2 * unit)
    about_mean = minus(times(squares, _whole(n)), times(total, total)).value
    is_defined = (n >= 2.0) & (about_mean > n * ROUNDING * n * squares.value)
    return np.where(is_defined, np.ldexp(about_mean / np.maximum(n, 1.0), 2 * unit), 0.0)


def _studentised(
    shift: FloatArray, about: FloatArray, whole: FloatArray, freedom: FloatArray, is_defined: BoolArray
) -> Studentised:
    """From the shift, the squares about it and those of both together, all in one unit."""
    safe_about, safe_whole = np.where(is_defined, about, 1.0), np.where(is_defined, whole, 1.0)
    t = np.where(is_defined, shift * np.sqrt(np.maximum(freedom, 0.0) / safe_about), 0.0)
    return Studentised(t, np.where(is_defined, shift / np.sqrt(safe_whole), 0.0), is_defined)


def _unit(squares: FloatArray) -> IndexArray:
    """The power of two that brings squares near one, so that no product of sums overflows; t has no unit."""
    return np.frexp(squares)[1].astype(np.intp) // 2


def _scaled(a: Double, power: IndexArray) -> Double:
    return Double(np.ldexp(a.high, power), np.ldexp(a.low, power))


def _whole(number: FloatArray) -> Double:
    return Double(number, np.zeros_like(number))
