"""
Whether the order of values says anything, which it does not while they are independent and nothing drifts.

Quantity: the number of runs on either side of the median, the lag-one autocorrelation, Kendall's rank correlation with
the order of observation; each with its two-sided p-value given the values themselves, every order being as likely.
Method: the exact distribution of runs given how many lie on either side; for the autocorrelation its exact mean and
variance over all orders and the normal distribution; Kendall's tau, exact for few values without ties.
Accuracy: runs exact; the autocorrelation holds its level at 5 % and 1 % from the 20 values that it takes at least, and
near 0.001 its p-value may be two to four times too small for very skewed values; tau as scipy.stats.kendalltau.
Cost: O(n log n) time, some arrays of n numbers; a million values take about a second.
Source: Wald and Wolfowitz (1940), Annals of Mathematical Statistics 11, 147-162 (runs); Wald and Wolfowitz (1943),
Annals of Mathematical Statistics 14, 378-388, and Moran (1948), Biometrika 35, 255-260 (serial correlation over all
orders); Mann (1945), Econometrica 13, 245-259 (Kendall's tau against time).
"""

import math

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln

from service.sequential.checks.finding import Finding, Lacking, normal_p_value, too_few, two_sided
from service.sequential.double import BoolArray, FloatArray

LEAST_FOR_RUNS = 8
LEAST_ON_A_SIDE = 2
LEAST_FOR_CORRELATION = 20
LEAST_APART_FROM_THE_COMMONEST = 10
LEAST_FOR_TREND = 8

ALL_ALIKE = Lacking("all values are the same, so that their order says nothing")


def runs(values: FloatArray, noun: str) -> Finding | Lacking:
    """
    Runs of values above the median, or not above it; with 0 and 1 these are the runs of like results.

    Values equal to the median go where the two sides become more even. The split depends on the values and not on
    their order, so the distribution given the two numbers is exact.

    Args:
        values: In order of observation, array of shape (n,).
        noun: What they are, in the plural.
    """
    if len(values) < LEAST_FOR_RUNS:
        return too_few(LEAST_FOR_RUNS, noun, len(values))
    side = _side_of_median(values)
    above = int(np.sum(side))
    smaller = min(above, len(values) - above)
    if smaller == 0:
        return ALL_ALIKE
    if smaller < LEAST_ON_A_SIDE:
        return Lacking(f"needs at least {LEAST_ON_A_SIDE} {noun} on either side, and one side has {smaller}")
    found = 1 + int(np.sum(side[1:] != side[:-1]))
    expected = 1.0 + 2.0 * above * (len(values) - above) / len(values)
    return Finding(float(found), expected, runs_p_value(found, above, len(values) - above))


def runs_p_value(found: int, first: int, second: int) -> float:
    """Two-sided, of `found` runs in a random order of `first` and `second` values of two kinds, both above 0."""
    probabilities = runs_distribution(first, second)
    # Runs number 2 at least; index 0 is 2 runs.
    lower, upper = float(np.sum(probabilities[: found - 1])), float(np.sum(probabilities[found - 2 :]))
    return two_sided(lower, upper)


def runs_distribution(first: int, second: int) -> FloatArray:
    """
    P(R = 2), P(R = 3), ... in a random order of `first` and `second` values of two kinds.

    Source: Wald and Wolfowitz (1940), section 4: with k runs of one kind and j of the other, |k - j| <= 1, there are
    C(first - 1, k - 1) * C(second - 1, j - 1) orders, twice that where k = j.
    """
    most = min(first, second)
    k = np.arange(1, most + 1)
    all_orders = _log_choose(first + second, first)
    even = math.log(2.0) + _log_choose(first - 1, k - 1) + _log_choose(second - 1, k - 1) - all_orders
    one_more = _log_choose(first - 1, k) + _log_choose(second - 1, k - 1)
    one_less = _log_choose(first - 1, k - 1) + _log_choose(second - 1, k)
    odd = np.logaddexp(one_more, one_less) - all_orders
    return np.exp(np.stack([even, odd], axis=1).ravel())


def autocorrelation(values: FloatArray, noun: str) -> Finding | Lacking:
    """
    The lag-one autocorrelation, with its exact mean and variance over all orders of these values.

    Args:
        values: In order of observation, array of shape (n,).
        noun: What they are, in the plural.

    Source: Moran (1948), the moments of the sum of the products of neighbours.
    """
    n = len(values)
    if n < LEAST_FOR_CORRELATION:
        return too_few(LEAST_FOR_CORRELATION, noun, n)
    z = standardised(values)
    if z is None:
        return ALL_ALIKE
    _, counts = np.unique(values, return_counts=True)
    apart = n - int(counts.max())
    if apart < LEAST_APART_FROM_THE_COMMONEST:
        return Lacking(
            f"needs {LEAST_APART_FROM_THE_COMMONEST} {noun} apart from the commonest value: there are {apart}"
        )
    products = float(np.dot(z[1:], z[:-1]))
    mean, variance = products_of_neighbours(n, float(np.sum(z**4)))
    return Finding(products / n, mean / n, normal_p_value((products - mean) / math.sqrt(variance)))


def products_of_neighbours(n: int, fourth_powers: float) -> tuple[float, float]:
    """
    Mean and variance, over all orders, of the sum of z[i] * z[i + 1].

    Args:
        n: At least 4 values with sum 0 and sum of squares n.
        fourth_powers: Their sum of fourth powers.
    """
    square = float(n) * n
    equal = (square - fourth_powers) / n
    sharing_one = 2.0 * (2.0 * fourth_powers - square) / (n * (n - 1.0))
    apart = (3.0 * square - 6.0 * fourth_powers) / (n * (n - 1.0))
    return -1.0, equal + sharing_one + apart - 1.0


def trend(values: FloatArray, noun: str) -> Finding | Lacking:
    """
    Kendall's rank correlation of the values with the order of observation.

    Args:
        values: In order of observation, array of shape (n,).
        noun: What they are, in the plural.
    """
    from scipy import stats  # noqa: PLC0415 - takes a second to load, and few processes are asked

    if len(values) < LEAST_FOR_TREND:
        return too_few(LEAST_FOR_TREND, noun, len(values))
    if np.all(values == values[0]):
        return ALL_ALIKE
    found = stats.kendalltau(np.arange(len(values)), values)
    return Finding(float(found.statistic), 0.0, min(1.0, float(found.pvalue)))


def standardised(values: FloatArray) -> FloatArray | None:
    """The values with mean 0 and mean square 1, whatever their magnitude; None where they are all alike."""
    if np.all(values == values[0]):
        return None
    # Halving first keeps the difference of the largest magnitudes from overflow.
    centred = values / 2.0 - np.mean(values / 2.0)
    scaled = centred / np.max(np.abs(centred))
    scaled -= np.mean(scaled)
    return np.asarray(scaled / math.sqrt(float(np.mean(scaled**2))))


def _side_of_median(values: FloatArray) -> BoolArray:
    middle = float(np.median(values))
    above, not_below = values > middle, values >= middle
    half = len(values) / 2.0
    return above if abs(np.sum(above) - half) <= abs(np.sum(not_below) - half) else not_below


def _log_choose(n: int, k: int | NDArray[np.int64]) -> FloatArray:
    """The logarithm of C(n, k), minus infinity where k exceeds n."""
    inside = np.asarray(k) <= n
    kept = np.where(inside, k, 0)
    return np.where(inside, gammaln(n + 1.0) - gammaln(kept + 1.0) - gammaln(n - kept + 1.0), -np.inf)
