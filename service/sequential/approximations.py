"""
Wald's and Siegmund's approximations, shown beside the exact figures and named as what they are.

Quantity: probability of ending at the lower line, and mean progress at the end, for a test without a wall.
Method: the conjugate root t of K(t) = slope * t, where K is the cumulant generating function of the total in one unit
of progress; exp(t * deviation) is then a martingale. Overshoot is left out (Wald), or added to both intercepts as 0.583
standard deviations (Siegmund, for normal steps).
Accuracy: unknown; that is why the exact figures exist.
Cost: one bracketed root for each parameter.
Source: Wald (1945), sections 3.4 and 3.5; Siegmund (1985), Sequential Analysis, section 3.6 and chapter X (0.583).
"""

import math
from collections.abc import Callable
from dataclasses import dataclass

# -zeta(1/2) / sqrt(2 pi), the mean overshoot of a normal walk in standard deviations.
OVERSHOOT = 0.5825971579390108

Cumulant = Callable[[float], float]


@dataclass(frozen=True)
class Motion:
    """
    How the total moves in one unit of progress under a true parameter.

    Attributes:
        cumulant: K(t), the logarithm of the moment generating function; may overflow to infinity.
        mean, variance: Of the total in one unit of progress.
    """

    cumulant: Cumulant
    mean: float
    variance: float


@dataclass(frozen=True)
class Approximation:
    """Probability of ending at the lower line, and mean progress at the end."""

    below: float
    progress: float


def approximate(motion: Motion, slope: float, lower: float, upper: float) -> Approximation | None:
    """
    Wald's approximation for lines at slope * progress - lower and slope * progress + upper.

    Returns:
        None where the total never moves, or by more than a double holds, so that no conjugate root is found.
    """
    drift = motion.mean - slope
    if not 0.0 < motion.variance < math.inf:
        return None
    if abs(drift) < 1e-9 * math.sqrt(motion.variance):
        return Approximation(upper / (lower + upper), lower * upper / motion.variance)
    root = _conjugate_root(motion, slope)
    if root is None:
        return None
    # P(above) from the martingale, divided by its larger exponential; expm1 keeps the digits of small probabilities.
    whole = -math.expm1(-abs(root) * (lower + upper))
    near = -math.expm1(-abs(root) * lower) / whole
    above = math.exp(-root * upper) * near if root > 0.0 else near
    progress = (upper * above - lower * (1.0 - above)) / drift
    return Approximation(1.0 - above, progress)


def _conjugate_root(motion: Motion, slope: float) -> float | None:
    """The root of K(t) = slope * t other than zero; it lies on the side away from the drift."""
    from scipy.optimize import brentq  # noqa: PLC0415 - nearly half of a command's start

    sign = 1.0 if motion.mean < slope else -1.0

    def excess(t: float) -> float:
        cumulant = motion.cumulant(sign * t)
        return cumulant if math.isinf(cumulant) else cumulant - slope * sign * t

    # Near zero the excess is about -|drift| t + variance t^2 / 2, so this is short of the root.
    near = abs(motion.mean - slope) / motion.variance
    if not 0.0 < near < math.inf:
        return None
    while excess(near) >= 0.0:
        near /= 2.0
    far = 2.0 * near
    while excess(far) < 0.0:
        far *= 2.0
        if far > 1e6:
            return None
    # Where the cumulant has a pole, come down from beyond it: a bracket with an infinite end converges slowly.
    while math.isinf(excess(far)) and near < (middle := 0.5 * (near + far)) < far:
        near, far = (middle, far) if excess(middle) < 0.0 else (near, middle)
    return sign * float(brentq(excess, near, far, xtol=1e-14, rtol=1e-13))
