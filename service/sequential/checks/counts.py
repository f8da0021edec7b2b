"""
Whether counts vary as they must when one rate, or one proportion, stands behind all of them.

Quantity: the dispersion of counts over exposures and of nonconforming units over groups, the difference of the
proportions of two halves, and the centre of the events along the exposure; each with its two-sided p-value given the
total, which frees it from the unknown rate or proportion.
Method: Pearson's statistic, its exact mean and variance given the total, and the gamma distribution with these two,
corrected for continuity; neighbours are pooled until at least one event is expected in each stretch. Fisher's exact
test for two halves. Laplace's test for the centre, by the normal distribution with the exact variance.
Accuracy: mean and variance to rounding; with the 20 events in 5 stretches that it takes at least, the dispersion errs
to the safe side, which the tests show over all outcomes.
Cost: O(n) time.
Source: Fisher (1950), Biometrics 6, 17-24 (dispersion given the total); Haldane (1937), Biometrika 29, 133-143 (mean
and variance of chi-squared in a multinomial); Haldane (1940), Biometrika 31, 346-355 (the same for groups); Fisher
(1934), Statistical Methods for Research Workers, 5th edition, chapter 4 (exact test); Cox and Lewis (1966), The
Statistical Analysis of Series of Events, section 3.3 (centre).
"""

import math
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtr, chdtrc

from service.sequential.checks.finding import Finding, Lacking, normal_p_value, too_few, two_sided
from service.sequential.double import FloatArray

LEAST_STRETCHES = 5
LEAST_EVENTS = 20
LEAST_EXPECTED = 1.0
LEAST_EVENTS_FOR_CENTRE = 8
LEAST_REPORTS_FOR_CENTRE = 8
LEAST_UNITS_FOR_HALVES = 8
LARGEST_SHARE_FOR_CENTRE = 0.5


def rate_dispersion(counts: FloatArray, exposures: FloatArray, noun: str) -> Finding | Lacking:
    """
    The variance of the counts against that of Poisson counts of one rate; 1 is expected.

    Args:
        counts, exposures: One for each report, arrays of shape (n,); exposures above 0.
        noun: What is counted, in the plural.
    """
    total = float(np.sum(counts))
    if total < LEAST_EVENTS:
        return too_few(LEAST_EVENTS, noun, int(total))
    share = _shares(exposures)
    found, expected = pooled([counts, total * share], total * share)
    if len(found) < LEAST_STRETCHES:
        return _too_few_stretches(len(found), noun)
    statistic = float(np.sum((found - expected) ** 2 / expected))
    variance = multinomial_variance(expected / total, total)
    return _dispersion(statistic, len(found) - 1.0, variance, half_step=len(found) / total)


def proportion_dispersion(nonconforming: FloatArray, sizes: FloatArray, noun: str) -> Finding | Lacking:
    """
    The variance of the groups' proportions against that of binomial ones; 1 is expected.

    Args:
        nonconforming, sizes: One for each group, arrays of shape (n,); not all sizes 1.
        noun: What is counted, in the plural.
    """
    total, units = float(np.sum(nonconforming)), float(np.sum(sizes))
    fewer = min(total, units - total)
    if fewer < LEAST_EVENTS:
        return Lacking(
            f"needs at least {LEAST_EVENTS} {noun} and as many others, and the fewer of the two are {fewer:.0f}"
        )
    found, among = pooled([nonconforming, sizes], sizes * (fewer / units))
    if len(found) < LEAST_STRETCHES:
        return _too_few_stretches(len(found), noun)
    p = total / units
    statistic = float(np.sum((found - among * p) ** 2 / among)) / (p * (1.0 - p))
    mean = units / (units - 1.0) * (len(found) - 1.0)
    half_step = len(found) / (units * p * (1.0 - p))
    return _dispersion(statistic, mean, hypergeometric_variance(among, int(total)), half_step)


def rate_residuals(counts: FloatArray, exposures: FloatArray) -> FloatArray:
    """
    Each count less what its exposure leads to expect, in standard deviations; zeros where nothing was counted.

    Where exposures differ, neighbours are pooled until one is expected: a count where hardly one may be would weigh
    more than all others.
    """
    total = float(np.sum(counts))
    if total == 0.0:
        return np.zeros(len(counts))
    expected = total * _shares(exposures)
    if np.any(exposures != exposures[0]):
        counts, expected = pooled([counts, expected], expected)
    return np.asarray((counts - expected) / np.sqrt(expected))


def proportion_residuals(nonconforming: FloatArray, sizes: FloatArray) -> FloatArray:
    """Each group's count less what its size leads to expect, likewise; zeros where nothing varies."""
    total, units = float(np.sum(nonconforming)), float(np.sum(sizes))
    if total in {0.0, units}:
        return np.zeros(len(sizes))
    p = total / units
    if np.any(sizes != sizes[0]):
        nonconforming, sizes = pooled([nonconforming, sizes], sizes * min(p, 1.0 - p))
    return np.asarray((nonconforming - sizes * p) / np.sqrt(sizes * p * (1.0 - p)))


def multinomial_variance(shares: FloatArray, total: float) -> float:
    """The variance of Pearson's statistic in a multinomial of `total` events. Source: Haldane (1937)."""
    k = len(shares)
    return 2.0 * (k - 1.0) + (float(np.sum(1.0 / shares)) - float(k) * k - 2.0 * k + 2.0) / total


def hypergeometric_variance(sizes: FloatArray, total: int) -> float:
    """
    The variance of Pearson's statistic over groups of these sizes when `total` units of all are nonconforming.

    From the factorial moments of the multivariate hypergeometric distribution, E[(d_i)_a (d_j)_b] = (n_i)_a (n_j)_b
    (D)_(a+b) / (N)_(a+b), summed in fractions because the terms nearly cancel. Source: as Haldane (1940).
    """
    k, units = len(sizes), int(np.sum(sizes))
    squares = sum(int(size) ** 2 for size in sizes)
    inverses = Fraction(float(np.sum(1.0 / sizes)))
    r1, r2, r3, r4 = (Fraction(math.perm(total, a), math.perm(units, a)) for a in (1, 2, 3, 4))
    fourth = r4 * (squares - 6 * units + 11 * k - 6 * inverses) + 6 * r3 * (units - 3 * k + 2 * inverses)
    fourth += 7 * r2 * (k - inverses) + r1 * inverses
    less_one, less_one_squared = units - k, squares - 2 * units + k
    pairs = r4 * (less_one**2 - less_one_squared) + 2 * r3 * (k - 1) * less_one + r2 * k * (k - 1)
    mean = r2 * less_one + r1 * k
    p = Fraction(total, units)
    return float((fourth + pairs - mean**2) / (p * (1 - p)) ** 2)


def halves(first: tuple[int, int], second: tuple[int, int], noun: str) -> Finding | Lacking:
    """
    The proportion of the second half less that of the first; Fisher's exact test.

    Args:
        first, second: Nonconforming units and all units of each half.
        noun: What is counted, in the plural.
    """
    from scipy import stats  # noqa: PLC0415 - takes a second to load, and few processes are asked

    units, total = first[1] + second[1], first[0] + second[0]
    if units < LEAST_UNITS_FOR_HALVES:
        return too_few(LEAST_UNITS_FOR_HALVES, "units", units)
    if total in {0, units}:
        return Lacking(f"{'no' if total == 0 else 'all'} units are {noun}, so that nothing can drift")
    if 0 in {first[1], second[1]}:
        return Lacking("needs at least 2 groups")
    table = np.array([[first[0], first[1] - first[0]], [second[0], second[1] - second[0]]])
    p_value = float(stats.fisher_exact(table).pvalue)
    return Finding(second[0] / second[1] - first[0] / first[1], 0.0, min(1.0, p_value))


def centre(counts: FloatArray, exposures: FloatArray, noun: str) -> Finding | Lacking:
    """
    The mean place of the events along the exposure, 0 its beginning and 1 its end; 1/2 is expected.

    An event is placed in the middle of the report that counted it.

    Args:
        counts, exposures: One for each report, arrays of shape (n,); exposures above 0.
        noun: What is counted, in the plural.
    """
    total = float(np.sum(counts))
    if len(counts) < LEAST_REPORTS_FOR_CENTRE:
        return too_few(LEAST_REPORTS_FOR_CENTRE, "reports", len(counts))
    if total < LEAST_EVENTS_FOR_CENTRE:
        return too_few(LEAST_EVENTS_FOR_CENTRE, noun, int(total))
    share = _shares(exposures)
    if float(np.max(share)) > LARGEST_SHARE_FOR_CENTRE:
        return Lacking("needs exposure that is spread out, and one report holds more than half of it")
    place = np.cumsum(share) - share / 2.0
    mean = float(np.dot(counts, place)) / total
    variance = float(np.dot(share, (place - 0.5) ** 2)) / total
    return Finding(mean, 0.5, normal_p_value((mean - 0.5) / math.sqrt(variance)))


def pooled(columns: list[FloatArray], expected: FloatArray) -> list[FloatArray]:
    """Sums of neighbours, so that at least one event is expected in each sum; what is left over joins the last."""
    if len(expected) == 0 or float(np.min(expected)) >= LEAST_EXPECTED:
        return columns
    starts = _starts(expected)
    return [np.add.reduceat(column, starts) for column in columns]


def _shares(exposures: FloatArray) -> FloatArray:
    """Of the whole exposure, whatever the magnitudes."""
    scaled = exposures / np.max(exposures)
    return np.asarray(scaled / np.sum(scaled))


def _starts(expected: FloatArray) -> NDArray[np.int64]:
    starts, gathered = [0], 0.0
    for i, more in enumerate(expected.tolist()):
        gathered += more
        if gathered >= LEAST_EXPECTED:
            starts.append(i + 1)
            gathered = 0.0
    # The last start begins what is left over, or lies past the end.
    return np.array(starts[:-1] or [0], np.int64)


def _dispersion(statistic: float, mean: float, variance: float, half_step: float) -> Finding:
    """
    The gamma distribution with this mean and variance, a scaled chi-squared one, corrected for continuity.

    Between stretches of one size the statistic moves in steps, the least when one event changes place.
    """
    scale = 2.0 * mean / variance
    freedom = scale * mean
    lower = float(chdtr(freedom, scale * (statistic + half_step)))
    upper = float(chdtrc(freedom, scale * max(0.0, statistic - half_step)))
    return Finding(statistic / mean, 1.0, two_sided(lower, upper))


def _too_few_stretches(stretches: int, noun: str) -> Lacking:
    return Lacking(
        f"needs at least {LEAST_STRETCHES} stretches with one expected among the {noun}: there are {stretches}"
    )
