"""
The smallest fixed-sample plan with the same hypotheses and risks, for comparison.

Quantity: size and acceptance limit of the Neyman-Pearson test that keeps both risks.
Method: for each acceptance limit the smallest size that keeps the consumer's risk; the first that also keeps the
producer's is the smallest of all, for sizes grow with the limit.
Accuracy: that of the incomplete beta and gamma functions.
Cost: a root or a bisection for each acceptance limit up to the answer.
Source: Neyman and Pearson (1933), Phil. Trans. R. Soc. A 231, 289-337; Hald (1981), Statistical Theory of Sampling
Inspection by Attributes, chapter 2.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass

from scipy.special import bdtr, betainc, gammainc, gammaincc, gammainccinv, ndtr, ndtri

MOST_FAILURES = 20_000
LARGEST_SIZE = 2_000_000_000


@dataclass(frozen=True)
class FixedSample:
    """
    Inspect `size`, then decide: the lower hypothesis stands when the total is at or below `limit`.

    Attributes:
        size: Units, or exposure.
        limit: The largest total for which the lower of the two hypotheses stands.
        lower_risk: P(total > limit) under the lower hypothesis.
        upper_risk: P(total <= limit) under the upper one.
    """

    size: float
    limit: float
    lower_risk: float
    upper_risk: float


def binomial(p_lower: float, p_upper: float, lower_risk: float, upper_risk: float) -> FixedSample | None:
    """The smallest n, with proportions p_lower < p_upper; None beyond 20,000 nonconforming units."""
    for limit in range(MOST_FAILURES):
        n = _smallest_n(limit, p_upper, upper_risk)
        if n is None:
            return None
        rejected = 1.0 - float(bdtr(limit, n, p_lower))
        if rejected <= lower_risk:
            return FixedSample(n, limit, rejected, float(bdtr(limit, n, p_upper)))
    return None


def poisson(rate_lower: float, rate_upper: float, lower_risk: float, upper_risk: float) -> FixedSample | None:
    """The smallest exposure, with rates rate_lower < rate_upper; None beyond 20,000 events."""
    for limit in range(MOST_FAILURES):
        exposure = float(gammainccinv(limit + 1.0, upper_risk)) / rate_upper
        rejected = float(gammainc(limit + 1.0, rate_lower * exposure))
        if rejected <= lower_risk:
            return FixedSample(exposure, limit, rejected, float(gammaincc(limit + 1.0, rate_upper * exposure)))
    return None


def negative_binomial(
    m_lower: float, m_upper: float, dispersion: float, lower_risk: float, upper_risk: float
) -> FixedSample | None:
    """
    The smallest n, with mean counts m_lower < m_upper per unit; None beyond 20,000 counts.

    Source: P(count of n units > limit) is an incomplete beta function, Johnson, Kemp and Kotz, Univariate Discrete
    Distributions, section 5.6.
    """

    def above(limit: int, n: int, mean: float) -> float:
        return float(betainc(limit + 1.0, n * dispersion, mean / (mean + dispersion)))

    def below(limit: int, n: int, mean: float) -> float:
        return float(betainc(n * dispersion, limit + 1.0, dispersion / (mean + dispersion)))

    n = 1
    for limit in range(MOST_FAILURES):
        found = _first_n(lambda size, limit=limit: below(limit, size, m_upper) <= upper_risk, n)  # type: ignore[misc]
        if found is None:
            return None
        n = found
        if (rejected := above(limit, n, m_lower)) <= lower_risk:
            return FixedSample(n, limit, rejected, below(limit, n, m_upper))
    return None


def normal(m_lower: float, m_upper: float, sigma: float, lower_risk: float, upper_risk: float) -> FixedSample:
    """The smallest n; the limit of the total is set so that the lower hypothesis has exactly its risk."""
    z_lower, z_upper = -float(ndtri(lower_risk)), -float(ndtri(upper_risk))
    n = max(1, math.ceil(((z_lower + z_upper) * sigma / (m_upper - m_lower)) ** 2 * (1.0 - 1e-12)))
    limit = n * m_lower + z_lower * sigma * math.sqrt(n)
    return FixedSample(n, limit, lower_risk, float(ndtr((limit - n * m_upper) / (sigma * math.sqrt(n)))))


def normal_variance(sigma_lower: float, sigma_upper: float, lower_risk: float, upper_risk: float) -> FixedSample | None:
    """
    The fewest degrees of freedom; the limit of the sum of squares gives the lower hypothesis exactly its risk.

    None beyond 2 * 10**9.

    Source: the distribution of a sum of squares over its variance is chi-square.
    """
    quotient = (sigma_lower / sigma_upper) ** 2

    def half_limit(n: int) -> float:
        return float(gammainccinv(0.5 * n, lower_risk))

    def below(n: int) -> float:
        return float(gammainc(0.5 * n, quotient * half_limit(n)))

    n = _first_n(lambda size: below(size) <= upper_risk, 1)
    return None if n is None else FixedSample(n, 2.0 * sigma_lower**2 * half_limit(n), lower_risk, below(n))


def _smallest_n(limit: int, p_upper: float, upper_risk: float) -> int | None:
    """The smallest n for which at most `limit` are found with probability at most `upper_risk`."""
    return _first_n(lambda n: float(bdtr(limit, n, p_upper)) <= upper_risk, limit + 1)


def _first_n(holds: Callable[[int], bool], begin: int) -> int | None:
    """The first n from `begin` on for which something holds that then goes on to hold; None beyond 2 * 10**9."""
    low, high = begin - 1, begin
    while not holds(high):
        low, high = high, 2 * high
        if high > LARGEST_SIZE:
            return None
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if holds(middle) else (middle, high)
    return high
