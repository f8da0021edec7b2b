"""
Observations carried over to the scale on which a family is simple.

Quantity: natural logarithms of measurements; powers of ages, as differences.
Method: number by number in the C library, not by array instructions, whose last digit depends on the processor and on
the place in the array: the same observation must add the same wherever and however it is posted.
Accuracy: rounding, about 1e-16 relative for logarithms; a difference of powers keeps its digits however near the ages.
Cost: about 0.1 microseconds a number for logarithms, 0.5 for powers.
Source: elementary.
"""

import math

import numpy as np

from service.sequential.double import FloatArray


def logarithms(values: FloatArray) -> FloatArray:
    """Natural logarithms of positive numbers; same shape as given, (count,)."""
    return np.fromiter(map(math.log, values.tolist()), np.float64, len(values))


def power_spans(begin: FloatArray, end: FloatArray, unit: float, power: float) -> FloatArray:
    """
    (end/unit)**power - (begin/unit)**power for ages 0 <= begin <= end; arrays of shape (count,).

    Infinite, or no number, where that is too large for a double.
    """
    spans = (_power_span(a, b, unit, power) for a, b in zip(begin.tolist(), end.tolist(), strict=True))
    return np.fromiter(spans, np.float64, len(end))


def _power_span(begin: float, end: float, unit: float, power: float) -> float:
    if begin == 0.0:
        return _power(end / unit, power)
    growth = power * math.log1p((end - begin) / begin)
    if growth < 1.0:
        return _power(begin / unit, power) * math.expm1(growth)
    return _power(end / unit, power) - _power(begin / unit, power)


def _power(base: float, exponent: float) -> float:
    try:
        return math.pow(base, exponent)
    except OverflowError:
        return math.inf
