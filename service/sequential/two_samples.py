"""
Normal measurements of two arms that come one at a time, weighed as if they had come in pairs.

Quantity: the information on the difference of two means, counted in pairs of one measurement each (progress), and that
times the difference of the arms' averages (total).
Method: the information is 1/(sa**2/na + sb**2/nb). The total moves by independent normal steps, one for each
measurement, whose mean and variance are the difference of the means, and the variance sa**2 + sb**2 of one pair's
difference, times the progress gained. So the log-likelihood ratio of `likelihood.normal` with sigma = hypot(sa, sb)
holds at any moment, and a region over pairs serves as it stands. With an arm still empty both are zero.
Accuracy: a few roundings of each result; the sums are taken in two doubles, because products of large ones cancel. As
many in one arm as in the other are exactly so many pairs.
Cost: some tens of operations for each moment.
Source: Jennison and Turnbull (2000), Group Sequential Methods with Applications to Clinical Trials, sections 3.1 and
11.2 (canonical joint distribution).
"""

from dataclasses import dataclass

import numpy as np

from service.sequential.double import Double, FloatArray, two_product, two_sum


@dataclass(frozen=True)
class Arm:
    """One arm at some moments; arrays of shape (moments,): how many measurements, and their sum."""

    count: FloatArray
    total: Double


def pairs_worth(a: Arm, b: Arm, sigma_a: float, sigma_b: float) -> tuple[FloatArray, FloatArray]:
    """
    Progress and total of a region over pairs, whose total is the sum of the differences b - a.

    Args:
        a, b: What has been measured so far in each arm.
        sigma_a, sigma_b: Standard deviations of one measurement, above 0.

    Returns:
        Two arrays of shape (moments,), zero where an arm is empty.
    """
    share = variance_share(sigma_a, sigma_b)
    # na nb (sa**2 + sb**2) / (sa**2 nb + sb**2 na), written so that equal counts give themselves.
    weight = a.count + share * (b.count - a.count)
    is_compared = (a.count > 0.0) & (b.count > 0.0)
    whole = np.where(is_compared, weight, 1.0)
    progress = np.where(is_compared, a.count / whole * b.count, 0.0)
    # progress (sum b/nb - sum a/na) = (na sum b - nb sum a) / weight.
    crossed = _difference(_times(b.total, a.count), _times(a.total, b.count))
    return progress, np.where(is_compared, crossed / whole, 0.0)


def variance_share(sigma_a: float, sigma_b: float) -> float:
    """The share of arm a in the variance of a difference; squares of the deviations themselves may leave the range."""
    larger = max(sigma_a, sigma_b)
    of_a, of_b = (sigma_a / larger) ** 2, (sigma_b / larger) ** 2
    return of_a / (of_a + of_b)


def reaching(
    total: float, counts: tuple[float, float], sums: tuple[float, float], share: float, *, in_b: bool
) -> float:
    """
    The measurement with which the total of `pairs_worth` becomes this.

    Args:
        counts: Of arms a and b with that measurement, both above 0.
        sums: Of arms a and b without it.
        share: See `variance_share`.
        in_b: Whether it is one of arm b.
    """
    (count_a, count_b), (sum_a, sum_b) = counts, sums
    crossed = total * (count_a + share * (count_b - count_a))
    if in_b:
        return (crossed + count_b * sum_a) / count_a - sum_b
    return (count_a * sum_b - crossed) / count_b - sum_a


def _times(number: Double, factor: FloatArray) -> Double:
    product = two_product(number.high, factor)
    return Double(product.high, product.low + number.low * factor)


def _difference(left: Double, right: Double) -> FloatArray:
    difference = two_sum(left.high, -right.high)
    return difference.high + (difference.low + (left.low - right.low))
