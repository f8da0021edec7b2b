"""
Sums and products carried in two doubles, so that a million terms lose nothing.

Quantity: an unevaluated sum `high + low` of two floating-point numbers, |low| far below |high|.
Method: error-free transformations: the rounding error of a sum or product is itself a double and is kept.
Accuracy: as if computed with twice the digits, then rounded once.
Cost: a handful of operations for each term; everything works on arrays.
Source: Knuth, The Art of Computer Programming, vol. 2, section 4.2.2, theorem B (sum); Dekker (1971),
Numerische Mathematik 18, 224-242 (product); Ogita, Rump and Oishi (2005), SIAM J. Sci. Comput. 26, 1955-1988,
algorithm 4.4 (compensated running sum).
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IndexArray = NDArray[np.intp]
BoolArray = NDArray[np.bool_]

# 2**27 + 1 cuts a 53-bit significand into two halves whose products are exact (Dekker 1971).
_SPLITTER = 134217729.0


@dataclass(frozen=True)
class Double:
    """An unevaluated sum `high + low`; the fields are floats, or arrays of one shape."""

    high: FloatArray
    low: FloatArray

    @classmethod
    def of(cls, high: float, low: float = 0.0) -> "Double":
        """Wrap plain numbers."""
        return cls(np.float64(high), np.float64(low))  # type: ignore[arg-type]

    @property
    def value(self) -> FloatArray:
        """The sum, rounded once to a double."""
        return self.high + self.low

    def at(self, index: int) -> "Double":
        """The element at `index` of an array-valued sum."""
        return Double(self.high[index], self.low[index])


def two_sum(a: FloatArray, b: FloatArray) -> Double:
    """A + b without error, any order of magnitudes. Source: Knuth, theorem B."""
    high = a + b
    virtual = high - a
    return Double(high, (a - (high - virtual)) + (b - virtual))


def two_product(a: FloatArray, b: FloatArray) -> Double:
    """A * b without error while nothing overflows (magnitudes below 1e140). Source: Dekker (1971)."""
    high = a * b
    a_head, a_tail = _split(a)
    b_head, b_tail = _split(b)
    low = ((a_head * b_head - high) + a_head * b_tail + a_tail * b_head) + a_tail * b_tail
    return Double(high, low)


def plus(a: Double, b: Double) -> Double:
    """The sum of two such numbers. Source: Dekker (1971), with all of the rounding errors kept."""
    high, low = two_sum(a.high, b.high), two_sum(a.low, b.low)
    first = two_sum(high.high, high.low + low.high)
    return two_sum(first.high, first.low + low.low)


def minus(a: Double, b: Double) -> Double:
    """Their difference."""
    return plus(a, Double(-b.high, -b.low))


def times(a: Double, b: Double) -> Double:
    """Their product. Source: Dekker (1971)."""
    product = two_product(a.high, b.high)
    return two_sum(product.high, product.low + (a.high * b.low + a.low * b.high))


def running_sum(start: Double, terms: FloatArray) -> Double:
    """
    All partial sums of `start` and then `terms`, one after the other.

    The result is a fold: summing in one call or in many, each starting from the last sum of the one before,
    gives the same bits.

    Args:
        start: The sum so far.
        terms: Array of shape (count,), count >= 1.

    Returns:
        A sum with arrays of shape (count,): the partial sum after each term.

    Source: Ogita, Rump and Oishi (2005), algorithm 4.4, kept for every prefix.
    """
    # `cumsum` adds strictly from left to right, so each prefix is the plain floating-point fold.
    plain = np.cumsum(np.concatenate(([start.high], terms)))
    errors = two_sum(plain[:-1], terms).low
    compensation = np.cumsum(np.concatenate(([start.low], errors)))
    return Double(plain[1:], compensation[1:])


def _split(a: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Cut each number into two halves of at most 26 bits that add up to it."""
    scaled = _SPLITTER * a
    head = scaled - (scaled - a)
    return head, a - head
