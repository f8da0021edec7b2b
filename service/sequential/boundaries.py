"""
The two limits of the log-likelihood ratio.

Quantity: `accept` (ln B) and `reject` (ln A), in nats, accept < 0 < reject.
Method: closed forms from the stated risks.
Accuracy: rounding.
Source: Wald (1945), Annals of Mathematical Statistics 16, section 3; Ville (1939), Etude critique de la notion de
collectif, for the bound behind `strict`.
"""

import math
from dataclasses import dataclass

# A bound that would round to zero is given as this.
SMALLEST = 1e-300


@dataclass(frozen=True)
class Thresholds:
    """Accept when the log-likelihood ratio is at or below `accept`, reject when at or above `reject`."""

    accept: float
    reject: float


def wald(alpha: float, beta: float) -> Thresholds:
    """
    Wald's approximate boundaries: ln A = ln((1 - beta)/alpha), ln B = ln(beta/(1 - alpha)).

    The attained risks are near the stated ones; their sum never exceeds alpha + beta.

    Args:
        alpha, beta: Both in (0, 1), with alpha + beta < 1.

    Source: Wald (1945), section 3.3.
    """
    return Thresholds(math.log(beta) - math.log1p(-alpha), math.log1p(-beta) - math.log(alpha))


def strict(alpha: float, beta: float) -> Thresholds:
    """
    Boundaries that keep each risk however far the last step overshoots: ln A = ln(1/alpha), ln B = ln(beta).

    Under H0 the likelihood ratio is a nonnegative martingale with mean one, so it ever reaches 1/alpha with
    probability at most alpha; under H1 the same holds for its inverse and beta.

    Args:
        alpha, beta: Both in (0, 1).

    Source: Ville (1939).
    """
    return Thresholds(math.log(beta), -math.log(alpha))


def guaranteed(thresholds: Thresholds) -> tuple[float, float]:
    """
    Bounds of P0(reject) and P1(accept) that hold for every model and however the last step overshoots.

    The first needs no more than that the likelihood ratio is a supermartingale under H0, the second the same of its
    inverse under H1. No decision may be forced.

    Source: Ville (1939).
    """
    return max(SMALLEST, math.exp(-thresholds.reject)), max(SMALLEST, math.exp(thresholds.accept))
