"""
What no test of standardised means can do better, whatever it computes.

Quantity: a lower bound of the average number of looks of any sequential test with risks alpha and beta, sigma
unknown.
Method: a test that decides between two points decides between the means in them; so the information of one look
against the nearest point of the other hypothesis, over all sigma, times the average number of looks is at least the
information of the decision itself.
Accuracy: rounding.
Cost: a few operations.
Source: Wald (1947), Sequential Analysis, appendix, inequality for the average sample number of any test;
Hoeffding (1953), Annals of Mathematical Statistics 24, 127-130; the smallest information over sigma by setting its
derivative to zero: for a true delta against 0 it is ln(1 + delta**2)/2, for a true 0 against delta it is delta**2/2.
"""

import math

from service.sequential.errors import OutOfRange


def information(true: float, other: float, samples: int = 1) -> float:
    """
    The smallest mean evidence of one look, in nats, for `true` with sigma = 1 against `other` with any sigma.

    Args:
        true, other: Standardised means.
        samples: 1, or 2 where a look takes one measurement of each; the common mean is free as well.
    """
    shift = 1.0 if samples == 1 else math.sqrt(0.5)
    d1, d0, c = shift * true, shift * other, float(samples)
    # With r = 1/sigma: -c ln r + (c (r**2 - 1) + (r d1 - d0)**2)/2, whose derivative vanishes at one positive r.
    r = (d1 * d0 + math.sqrt((d1 * d0) ** 2 + 4.0 * c * (c + d1 * d1))) / (2.0 * (c + d1 * d1))
    return -c * math.log(r) + 0.5 * (c * (r - 1.0) * (r + 1.0) + (r * d1 - d0) ** 2)


def fewest_looks(deltas: tuple[float, float], alpha: float, beta: float, samples: int = 1) -> tuple[float, float]:
    """
    The bounds under delta0 and under delta1 = `deltas`; at least 0.

    Raises:
        OutOfRange: A risk is not in (0, 1), or the hypotheses are equal.
    """
    for name, risk in (("alpha", alpha), ("beta", beta)):
        if not 0.0 < risk < 1.0:
            raise OutOfRange(name, "must be in (0, 1)", risk)
    if deltas[0] == deltas[1]:
        raise OutOfRange("delta1", "must differ from delta0", deltas[1])
    if alpha + beta >= 1.0:
        return 0.0, 0.0
    under0 = _decision(alpha, 1.0 - beta) / information(deltas[0], deltas[1], samples)
    under1 = _decision(beta, 1.0 - alpha) / information(deltas[1], deltas[0], samples)
    return under0, under1


def _decision(p: float, q: float) -> float:
    """The information of an event with probability p against one with probability q."""
    return p * math.log(p / q) + (1.0 - p) * (math.log1p(-p) - math.log1p(-q))
