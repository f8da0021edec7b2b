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
