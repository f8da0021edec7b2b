"""
Whether values have the shape, or the spread, that the family supposes.

Quantity: the standard deviation against the known one, or of two arms against each other; Shapiro and Wilk's W for
normal measurements; the cumulative total time on test for lives without ageing; the centre of the failures along the
unit-time.
Method: the chi-squared distribution of the sum of squares, the F distribution of the ratio of two; scipy.stats.shapiro,
of at most 5,000 values evenly spaced through the stream; for the other two the mean of independent uniform numbers
(Bates), in fractions for up to 100 of them and by the normal distribution for more.
Accuracy: spread and uniform means to rounding, beyond 100 numbers to 3e-4; the total time on test is exact while
nothing is suspended and close to it otherwise, which the tests simulate.
Cost: O(n log n) time.
Source: Shapiro and Wilk (1965), Biometrika 52, 591-611, with p-values by Royston (1995), Applied Statistics 44,
547-551; Barlow and Campo (1975), in Reliability and Fault Tree Analysis, 451-481 (total time on test); Gail and
Gastwirth (1978), Journal of the Royal Statistical Society B 40, 350-357 (its exact distribution); Cox and Lewis (1966),
The Statistical Analysis of Series of Events, section 3.3 (Laplace's test).
"""

import math
from fractions import Fraction

import numpy as np
from scipy.special import chdtr, chdtrc, fdtr, fdtrc, ndtr

from service.sequential.checks.finding import Finding, Lacking, too_few, two_sided
from service.sequential.checks.order import standardised
from service.sequential.double import BoolArray, FloatArray

LEAST_FOR_SPREAD = 2
LEAST_FOR_SHAPE = 8
MOST_FOR_SHAPIRO = 5000
LEAST_FAILURES = 5
MOST_FOR_BATES = 100


def spread(values: FloatArray, sigma: float, noun: str, averages: int = 1) -> Finding | Lacking:
    """
    The standard deviation of the values divided by the known one; 1 is expected.

    Args:
        values: Array of shape (n,).
        sigma: Above 0.
        noun: What the values are, in the plural.
        averages: How many averages were taken from them: that of all, or that of each arm.
    """
    n = len(values)
    if n < LEAST_FOR_SPREAD:
        return too_few(LEAST_FOR_SPREAD, noun, n)
    freedom = float(n - averages)
    ratio = standard_deviation(values) / sigma * math.sqrt((n - 1.0) / freedom)
    # math would refuse what overflows; an infinite sum of squares has the p-value 0.
    squares = freedom * float(np.square(np.float64(min(ratio, 1e150))))
    p_value = two_sided(float(chdtr(freedom, squares)), float(chdtrc(freedom, squares)))
    return Finding(ratio, 1.0, p_value)


def equal_spread(a: FloatArray, b: FloatArray) -> Finding | Lacking:
    """
    The standard deviation of b divided by that of a; 1 is expected.

    Args:
        a, b: Arrays of shape (n,), each with a length of its own.
    """
    fewest = min(len(a), len(b))
    if fewest < LEAST_FOR_SPREAD:
        return too_few(LEAST_FOR_SPREAD, "measurements in each arm", fewest)
    of_a, of_b = standard_deviation(a), standard_deviation(b)
    if of_a == 0.0:
        return Lacking("all measurements in a are the same")
    ratio = min(of_b / of_a, 1e150)
    freedom = len(b) - 1.0, len(a) - 1.0
    return Finding(ratio, 1.0, two_sided(float(fdtr(*freedom, ratio**2)), float(fdtrc(*freedom, ratio**2))))


def standard_deviation(values: FloatArray) -> float:
    """With n - 1 below the sum of squares, whatever the magnitudes."""
    half = values / 2.0 - np.mean(values / 2.0)
    largest = float(np.max(np.abs(half)))
    if largest == 0.0:
        return 0.0
    return 2.0 * largest * math.sqrt(float(np.sum((half / largest) ** 2)) / (len(values) - 1.0))


def normality(values: FloatArray, noun: str) -> Finding | Lacking:
    """
    Shapiro and Wilk's W, near 1 for normal values whatever their mean and spread.

    Args:
        values: Array of shape (n,); of more than 5,000 as many are used, evenly spaced.
        noun: What the values are, in the plural.
    """
    from scipy import stats  # noqa: PLC0415 - takes a second to load, and few processes are asked

    if len(values) < LEAST_FOR_SHAPE:
        return too_few(LEAST_FOR_SHAPE, noun, len(values))
    z = standardised(thinned(values, MOST_FOR_SHAPIRO))
    if z is None:
        return Lacking("all values are the same")
    found = stats.shapiro(z)
    return Finding(float(found.statistic), None, min(1.0, float(found.pvalue)))


def thinned(values: FloatArray, most: int) -> FloatArray:
    """At most so many of the values, evenly spaced from the first to the last."""
    if len(values) <= most:
        return values
    return values[np.round(np.linspace(0, len(values) - 1, most)).astype(np.int64)]


def agelessness(times: FloatArray, failed: BoolArray) -> Finding | Lacking:
    """
    The mean share of the total time on test spent when a failure falls, by age; 1/2 is expected without ageing.

    Units that wear out fail late in it (above 1/2), early failures come early (below).

    Args:
        times: Age at failure or suspension, array of shape (n,), all 0 or above.
        failed: False for suspensions, same shape.
    """
    failures = int(np.sum(failed))
    if failures < LEAST_FAILURES:
        return too_few(LEAST_FAILURES, "failures", failures)
    largest = float(np.max(times))
    if largest == 0.0:
        return Lacking("all times are 0")
    # At one age failures come first: what is suspended there was still on test.
    order = np.lexsort((~failed, times))
    ages = times[order] / largest
    at_risk = np.arange(len(ages), 0, -1)
    on_test = np.cumsum(at_risk * np.diff(ages, prepend=0.0))[failed[order]]
    if on_test[-1] == 0.0:
        return Lacking("all failures are at time 0")
    return uniform_mean(on_test[:-1] / on_test[-1])


def even_failures(times: FloatArray, failed: BoolArray) -> Finding | Lacking:
    """
    The mean place of the failures along the unit-time, 0 its beginning and 1 its end; 1/2 is expected.

    A failure that ends the stream is no more than its end, and left out.

    Args:
        times: Unit-time of each report in order, array of shape (n,), all 0 or above.
        failed: Whether it ended in a failure, same shape.
    """
    placed = np.cumsum(times / max(float(np.max(times, initial=0.0)), np.finfo(float).tiny))
    places = placed[failed]
    if len(times) and failed[-1]:
        places = places[:-1]
    if len(places) < LEAST_FAILURES:
        return too_few(LEAST_FAILURES, "failures before the end", len(places))
    if placed[-1] == 0.0:
        return Lacking("all times are 0")
    return uniform_mean(places / placed[-1])


def gaps_between_failures(times: FloatArray, failed: BoolArray) -> FloatArray:
    """Unit-time from one failure to the next, in order; what follows the last failure is left out."""
    largest = float(np.max(times, initial=0.0))
    places = np.cumsum(times / largest if largest > 0.0 else times)[failed]
    return np.asarray(np.diff(places, prepend=0.0))


def uniform_mean(shares: FloatArray) -> Finding:
    """The mean of what would be independent uniform numbers on (0, 1), array of shape (n,), n >= 1."""
    mean = min(1.0, max(0.0, float(np.mean(shares))))
    return Finding(mean, 0.5, min(1.0, 2.0 * bates_lower_tail(min(mean, 1.0 - mean), len(shares))))


def bates_lower_tail(mean: float, n: int) -> float:
    """
    P(the mean of n independent uniform numbers is at most `mean`), for a mean of at most 1/2.

    Source: Johnson, Kotz and Balakrishnan (1995), Continuous Univariate Distributions 2, chapter 26: the sum over
    k <= n * mean of (-1)**k C(n, k) (n * mean - k)**n / n!.
    """
    if n > MOST_FOR_BATES:
        return float(ndtr((mean - 0.5) * math.sqrt(12.0 * n)))
    # In fractions, because the terms alternate and nearly cancel.
    total = n * Fraction(mean)
    terms = ((-1) ** k * math.comb(n, k) * (total - k) ** n for k in range(math.floor(total) + 1))
    return float(sum(terms, Fraction(0)) / math.factorial(n))
