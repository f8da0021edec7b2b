"""
Zeros of rising functions, element by element.

Quantity: where a rising function passes zero, for arrays of problems at once.
Method: regula falsi whose kept end is weakened (Illinois), with halvings where it is slow; for positive numbers in
their logarithms.
Accuracy: 2e-15 relative, as far as the function tells the sign.
Cost: about ten evaluations for a smooth function.
Source: Dowell and Jarratt (1971), BIT 11, 168-174.
"""

from collections.abc import Callable

import numpy as np

from service.sequential.double import FloatArray

SMALLEST = 1e-300
STEPS, HALVE_EVERY = 60, 4
CLOSE = 2e-15

Rise = Callable[[FloatArray], FloatArray]


def rising_root(rise: Rise, low: FloatArray, high: FloatArray) -> FloatArray:
    """
    The zero between two arrays of positive numbers; `low` where the function is above zero there already, NaN where it
    is still below at `high`.
    """
    below, above = rise(low), rise(high)
    has_none = (above < 0.0) | ~np.isfinite(high)
    is_at_start = below >= 0.0
    ends = np.log(low), np.log(np.maximum(high, SMALLEST))
    values = np.where(is_at_start, -1.0, below), np.where(has_none, 1.0, above)
    found = np.exp(_narrowed(lambda logs: rise(np.exp(logs)), ends, values))
    return np.where(has_none, np.nan, np.where(is_at_start, low, found))


def real_root(rise: Rise, low: FloatArray, high: FloatArray) -> FloatArray:
    """The zero between two arrays of numbers at which the function is below and not below zero."""
    return _narrowed(rise, (low, high), (rise(low), rise(high)))


def _narrowed(rise: Rise, ends: tuple[FloatArray, FloatArray], values: tuple[FloatArray, FloatArray]) -> FloatArray:
    """The upper end of the interval around each zero, brought as near as doubles go."""
    (left, right), (below, above) = ends, values
    was_above = np.full(left.shape, -1)
    for step in range(1, STEPS + 1):
        close = CLOSE * np.maximum(1.0, np.maximum(np.abs(left), np.abs(right)))
        if np.all(right - left <= close):
            break
        share = np.full_like(left, 0.5) if step % HALVE_EVERY == 0 else below / (below - above)
        # Never nearer to an end than half of that: once an end is at the zero, the next step brings the other there.
        middle = np.clip(left + (right - left) * share, left + 0.5 * close, np.maximum(right - 0.5 * close, left))
        found = rise(middle)
        holds = found >= 0.0
        # An end that is kept a second time counts half.
        kept_above, kept_below = (
            np.where(was_above == 0, 0.5 * above, above),
            np.where(was_above == 1, 0.5 * below, below),
        )
        above, below = np.where(holds, found, kept_above), np.where(holds, kept_below, found)
        left, right = np.where(holds, left, middle), np.where(holds, middle, right)
        was_above = np.where(holds, 1, 0)
    return right
