"""
An observed outcome of a test of spread, among all that could have come.

Quantity: the probabilities of the outcomes further up and further down, at any variance.
Method: the walk is carried from look to look on the panels of `exact/panels.py`, whose corners lie above the lower line
and above the observed height, once, under a variance near the estimate. Another variance multiplies the density of a
path by a factor that depends only on where it stands. Both sides are sums over the looks taken; the smaller one is
added up, the other is its complement. Far below the estimate, where the walk would have to be seen more closely around
the observed height, it is carried anew under a smaller variance.
Accuracy: positive terms are added: about 1e-11 relative.
Cost: points squared for each look once, then points for each look and parameter.
Source: Siegmund (1985), Sequential Analysis, section 2.3 (factor); the natural parameter of a square is -1/2 of the
inverse of its variance, and its density proportional to variance**(-1/2).
"""

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.special import chdtri, erf, erfc, erfcx, gammainc, gammaincc

from service.sequential.double import FloatArray
from service.sequential.exact.characteristics import TooMuchWork
from service.sequential.exact.panels import Resolution, Room, kernel_of
from service.sequential.inference.ordering import Tails
from service.sequential.region import StraightRegion

MOST_WORK = 3_000_000_000
MOST_ENTRIES = 3_000_000
RESOLUTION = Resolution(points=24, sharp=20)
# Totals beyond what a sum of so many squares exceeds with this probability never come back to the observed one.
NEVER = 1e-24
# A normal number beyond this is left out, unless the squares together may not be larger anyway.
FARTHEST = 16.0
# Variances are served down to this share of the one that the walk was carried under.
SHARE = 0.25
# Beyond this the exponential leaves the range of a double.
LARGEST_EXPONENT = 690.0
SMALL = 1e-100


@dataclass(frozen=True)
class SquaresOutcome:
    """
    Where a test of spread ended; the natural parameter is the logarithm of the variance.

    Attributes:
        region: Two parallel lines, looked at after each square.
        looks: How many were taken.
        total: The sum of squares at the end.
        deviation: Of the total from the middle line.
    """

    region: StraightRegion
    looks: int
    total: float
    deviation: float

    @cached_property
    def reference(self) -> float:
        """See `Outcome`; where the last look brought more than the rest explains, near what came before it."""
        if self.total <= 0.0:
            return math.log(self.region.ratio.slope)
        limit = self._limits(float(self.looks))[1]
        return math.log(self.total if self.looks == 1 else min(self.total, limit)) - math.log(self.looks)

    def natural(self, mean: float) -> float:
        """See `Outcome`."""
        return math.log(mean) if mean > 0.0 else -math.inf

    def mean(self, natural: float) -> float:
        """See `Outcome`."""
        return math.exp(natural) if natural < LARGEST_EXPONENT else math.inf

    def tails(self, natural: float) -> Tails:
        """See `Outcome`."""
        if self.total <= 0.0:
            return Tails.of_down(0.0, 0.0)  # squares are above zero, with probability one
        exponent = min(max(self.reference - natural, -LARGEST_EXPONENT), LARGEST_EXPONENT)
        rate = math.exp(exponent)
        if self._is_free:
            return self._of_one_sum(rate)
        if rate < 1.0:
            down = self._passed(0).below(rate)
            return Tails.of_down(down, down)
        # An end above the lines leaves nothing to be seen closely.
        is_above = self.deviation >= self.region.upper_intercept
        steps = 0 if is_above else math.floor(exponent / -math.log(SHARE))
        up = self._passed(steps).above(rate * SHARE**steps)
        return Tails.of_up(up, up)

    def first_step_mean(self) -> float:
        """See `Outcome`."""
        raise NotImplementedError

    @cached_property
    def _is_free(self) -> bool:
        """No limit could have ended a walk to this total earlier: it is below all above it, and none lie below."""
        return self.looks == 1 or (self._limits(self.looks - 1.0)[0] <= 0.0 and self.total <= self._limits(1.0)[1])

    def _of_one_sum(self, rate: float) -> Tails:
        """The total is that of all squares, whatever came between."""
        shape, reach = self.looks / 2.0, 0.5 * rate * self.total / math.exp(self.reference)
        return Tails(
            up=float(gammaincc(shape, reach)),
            further_up=float(gammaincc(shape, reach)),
            down=float(gammainc(shape, reach)),
            further_down=float(gammainc(shape, reach)),
        )

    def _limits(self, look: float) -> tuple[float, float]:
        middle = self.region.ratio.slope * look
        return middle - self.region.lower_intercept, middle + self.region.upper_intercept

    @cached_property
    def _walks(self) -> dict[int, "_Carried"]:
        return {}

    def _passed(self, steps: int) -> "_Carried":
        """The walk under the reference, or under a variance so many times smaller."""
        if steps not in self._walks:
            self._walks[steps] = self._carried(math.exp(self.reference) * SHARE**steps)
        return self._walks[steps]

    def _carried(self, variance: float) -> "_Carried":
        region, looks = self.region, self.looks
        low, high = -region.lower_intercept / variance, region.upper_intercept / variance
        fall, end = region.ratio.slope / variance, self.deviation / variance
        most = max(self.total / variance, float(chdtri(looks, NEVER)))
        most += float(chdtri(looks, NEVER))
        bottom = max(low, -fall * (looks - 1.0))
        lines = (bottom, end) if end < high else (bottom,)
        room = Room(bottom, min(high, most - fall), fall, lines)
        # Under a smaller variance the squares that lead to the total are larger in its units.
        return _carried(room, (low, high, end), looks, FARTHEST * math.sqrt(max(1.0, self.total / variance / looks)))


@dataclass(frozen=True)
class _Carried:
    """
    Walks that go on after each look before the last, in units of the variance that they were carried under.

    Attributes:
        fall: Of each step.
        low, high: The lines.
        end: Where the walk ended.
        heights: Array of shape (nodes,).
        masses: Array of shape (looks, nodes), each row scaled by exp(-log_scale): weights of the values of a function.
        log_scale: Array of shape (looks,).
    """

    fall: float
    low: float
    high: float
    end: float
    heights: FloatArray
    masses: FloatArray
    log_scale: FloatArray

    def above(self, rate: float) -> float:
        """P(further up) under a variance of which this one is `rate` times as large."""
        first = float(erfc(math.sqrt(0.5 * rate * (self.high + self.fall))))
        return (
            first
            + self._leaving(rate, self.high, slice(0, -1), is_up=True)
            + self._leaving(rate, self.end, slice(-1, None), is_up=True)
        )

    def below(self, rate: float) -> float:
        """P(further down), in the same way."""
        first = float(erf(math.sqrt(0.5 * rate * max(0.0, self.low + self.fall))))
        return (
            first
            + self._leaving(rate, self.low, slice(0, -1), is_up=False)
            + self._leaving(rate, self.end, slice(-1, None), is_up=False)
        )

    def _leaving(self, rate: float, line: float, chosen: slice, *, is_up: bool) -> float:
        """P(coming to a line, or beyond, at the look after the chosen ones)."""
        gap = 0.5 * rate * np.maximum(line + self.fall - self.heights, 0.0)
        root, tilt = np.sqrt(gap), -0.5 * (rate - 1.0) * self.heights
        with np.errstate(divide="ignore"):  # what underflows, or cannot be, never comes to anything
            worth = tilt + (np.log(erfcx(root)) - gap if is_up else np.log(erf(root)))
            largest = float(worth.max())
            if math.isinf(largest):
                return 0.0
            sums = self.masses[chosen] @ np.exp(worth - largest)
            looks = np.arange(1.0, len(self.masses) + 1.0)[chosen]
            factor = self.log_scale[chosen] + largest + 0.5 * looks * (math.log(rate) - (rate - 1.0) * self.fall)
            return float(np.sum(np.exp(np.minimum(factor + np.log(np.maximum(sums, 0.0)), 0.0))))


def _carried(room: Room, lines: tuple[float, float, float], looks: int, farthest: float) -> _Carried:
    """From the origin through all looks but the last."""
    kernel = kernel_of(room, [0.0], RESOLUTION, farthest)
    nodes = len(kernel.heights)
    if nodes * (looks - 1) > MOST_ENTRIES:
        raise TooMuchWork(MOST_ENTRIES, "points to keep")
    if nodes * nodes * looks > MOST_WORK:
        raise TooMuchWork(MOST_WORK, "multiplications")
    masses, log_scale, scale = np.zeros((looks - 1, nodes)), np.zeros(looks - 1), 0.0
    row = kernel.begin[0]
    for i in range(looks - 1):
        row = row if i == 0 else row @ kernel.onward
        largest = float(np.abs(row).max())
        if 0.0 < largest < SMALL:
            row, scale = row / largest, scale + math.log(largest)
        masses[i], log_scale[i] = row, scale
    low, high, end = lines
    return _Carried(room.fall, low, high, end, kernel.heights, masses, log_scale)
