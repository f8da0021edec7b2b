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
from dataclasses import dataclass

from scipy.special import bdtr, gammainc, gammaincc, gammainccinv, ndtr, ndtri

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


def normal(m_lower: float, m_upper: float, sigma: float, lower_risk: float, upper_risk: float) -> FixedSample:
    """The smallest n; the limit of the total is set so that the lower hypothesis has exactly its risk."""
    z_lower, z_upper = -float(ndtri(lower_risk)), -float(ndtri(upper_risk))
    n = max(1, math.ceil(((z_lower + z_upper) * sigma / (m_upper - m_lower)) ** 2 * (1.0 - 1e-12)))
    limit = n * m_lower + z_lower * sigma * math.sqrt(n)
    return FixedSample(n, limit, lower_risk, float(ndtr((limit - n * m_upper) / (sigma * math.sqrt(n)))))


def _smallest_n(limit: int, p_upper: float, upper_risk: float) -> int | None:
    """The smallest n for which at most `limit` are found with probability at most `upper_risk`."""
    low, high = limit, limit + 1
    while float(bdtr(limit, high, p_upper)) > upper_risk:
        low, high = high, 2 * high
        if high > LARGEST_SIZE:
            return None
    while high - low > 1:
        middle = (low + high) // 2
        if float(bdtr(limit, middle, p_upper)) > upper_risk:
            low = middle
        else:
            high = middle
    return high
