"""
The bias of the maximum-likelihood estimate of a standard deviation, at a standard deviation.

Quantity: E(estimate) - sigma, over all ends of the test, where the estimate is the root of total/looks.
Method: up to the first look that may end the test below, the ends above are added up, and at that look all totals, of
which those below the first upper limit come from squares that no limit has met. From there on each look moves the
estimate on average by a closed form of where the walk stands, and the bias is the sum of that over all looks taken.
The estimate is a root of the total, which by then is above zero; panels are narrow near where it would not be.
Accuracy: 1e-9 of sigma.
Cost: points squared for each look, until the walks that go on no longer change their distribution.
Source: as for `bias.py`; Abramowitz and Stegun, section 9.6 (the mean root of a constant plus a square, in modified
Bessel functions).
"""

import math
from dataclasses import dataclass

import numpy as np
from scipy.special import gammainc, gammaincc, k0e, k1e

from service.sequential.double import FloatArray
from service.sequential.exact.characteristics import TooMuchWork
from service.sequential.exact.panels import Law, Resolution, Room, highest_rise, kernel_of
from service.sequential.region import StraightRegion, looks_to_wall

MOST_WORK = 12_000_000_000
RESOLUTION = Resolution(points=16, sharp=14)
# Sampling is followed until what is still to come moves the bias by less than this share of sigma.
NEGLIGIBLE = 1e-9
UNLIKELY = 1e-12
# Walks whose distribution changes by less than this no longer change.
SETTLED = 1e-10
# Points of the integral over a normal number, and how far it goes.
POINTS, FAR = 40, 9.0
# Work for the closed forms at a point.
POINT_WORK = 500
SIZE = math.sqrt(2.0 / math.pi)


@dataclass(frozen=True)
class _Strip:
    """
    Both lines and the fall of each step, in units of the variance; totals are whole when the walk starts at 0.

    Attributes:
        first: The first look that may end the test below, or at the wall.
        last: The look at the wall, infinite without one.
    """

    low: float
    high: float
    fall: float
    first: int
    last: float


def bias_of_spread(region: StraightRegion, sigma: float) -> float:
    """
    The bias of the root of total/looks.

    Raises:
        TooMuchWork: The test may go on for too long, or between lines too far apart.
    """
    strip = _strip_of(region, sigma * sigma)
    if gammaincc(0.5 * strip.first, 0.5 * (strip.low + strip.fall * strip.first)) < UNLIKELY:
        return sigma * (_root_of_free(strip.first, math.inf) - 1.0)  # all but sure to end as soon as it may
    bottom = max(strip.low, -strip.fall * (strip.last - 1.0))
    # Totals up to the first upper limit, as heights at the first look that ends below.
    free = strip.high - strip.fall * (strip.first - 1.0)
    top = min(strip.high, highest_rise(strip.fall))
    # The total is zero at this height when the walk can first end below.
    root = -math.inf if strip.first == strip.last else -strip.fall * strip.first
    room = Room(bottom, top, strip.fall, (bottom, free), root)
    kernel = kernel_of(room, [Law(-strip.fall)], RESOLUTION)
    heights, row = kernel.heights, kernel.begin[0]
    # All ends at the first look, or only those above.
    mean = SIZE * (1.0 if strip.first == 1 else math.exp(-0.5 * (strip.high + strip.fall)))
    for look in range(2, strip.first + 1):
        line = free if look == strip.first else strip.high
        mean += float(row @ _ended_above(heights, line + strip.fall, strip.fall * (look - 1.0))) / math.sqrt(look)
        row = row @ kernel.onward
    if strip.first > 1:
        mean += _root_of_free(strip.first, strip.high + strip.fall)
    look, work, quotient = strip.first, 0, 0.0
    while look < strip.last and (alive := float(row.sum())) * (top - bottom) >= NEGLIGIBLE * look:
        total = np.maximum(heights + strip.fall * look, 0.0)
        mean += float(row @ (_next_root(total) / math.sqrt(look + 1.0) - np.sqrt(total / look)))
        look, work = look + 1, work + POINT_WORK * len(heights)
        if quotient:
            row = row * quotient
        else:
            after, work = row @ kernel.onward, work + len(heights) ** 2
            share = float(after.sum()) / alive
            # Once its shape no longer changes, a walk goes on with the same probability each time.
            quotient = share if float(np.abs(after - share * row).sum()) < SETTLED * alive else 0.0
            row = after
        if work > MOST_WORK:
            raise TooMuchWork(MOST_WORK, "multiplications")
    return sigma * (mean - 1.0)


def _strip_of(region: StraightRegion, variance: float) -> _Strip:
    low, high = -region.lower_intercept / variance, region.upper_intercept / variance
    fall = region.ratio.slope / variance
    last = math.inf if region.wall is None else looks_to_wall(region.wall, 1.0, 0.0)
    return _Strip(low, high, fall, int(min(last, math.floor(-low / fall) + 1.0)), last)


def _root_of_free(looks: int, most: float) -> float:
    """E(root of the sum of squares over their number; the sum is at most this)."""
    root = math.sqrt(2.0 / looks) * math.exp(math.lgamma(0.5 * looks + 0.5) - math.lgamma(0.5 * looks))
    return root * float(gammainc(0.5 * looks + 0.5, 0.5 * most))


def _next_root(total: FloatArray) -> FloatArray:
    """E(root of the total and a further square); same shape as given."""
    quarter = np.maximum(0.25 * total, 1e-300)
    root: FloatArray = math.sqrt(2.0 / math.pi) * quarter * (k0e(quarter) + k1e(quarter))
    return root


def _ended_above(heights: FloatArray, reach: float, fallen: float) -> FloatArray:
    """E(root of the total and a further square, where the height comes to `reach`); same shape as given."""
    x, weights = np.polynomial.legendre.leggauss(POINTS)
    least = np.sqrt(np.maximum(reach - heights, 0.0))[:, np.newaxis]
    number = least + 0.5 * FAR * (x + 1.0)
    total = np.maximum((heights + fallen)[:, np.newaxis] + number**2, 0.0)
    ended = np.sqrt(total) * np.exp(-0.5 * number**2) @ (SIZE * 0.5 * FAR * weights)
    # Where every square comes so far there is a closed form.
    found: FloatArray = np.where(least[:, 0] > 0.0, ended, _next_root(np.maximum(heights + fallen, 0.0)))
    return found
