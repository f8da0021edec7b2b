"""
An observed outcome of a test of spread, among all that could have come.

Quantity: the probabilities of the outcomes further up and further down, at any variance, and the mean size of the first
deviation given the outcome.
Method: the walk is carried from look to look on the panels of `exact/panels.py`, whose corners lie above the lower line
and above the observed height, once, under a variance near the estimate; the first looks, whose limits no total that
matters can meet, are one chi-square step. Another variance multiplies the density of a path by a factor that depends
only on where it stands. Both sides are sums over the looks taken: the smaller one is added up, the other is its
complement. Far below the estimate, where more would have to be seen around the observed height, the walk is carried
anew under a smaller variance. Given two totals two looks apart, the one between them has an arcsine law.
Accuracy: positive terms are added: about 1e-11 relative.
Cost: points squared for each look once, then points for each look and parameter.
Source: Siegmund (1985), Sequential Analysis, section 2.3 (factor); Rao (1945) and Blackwell (1947) for the first
deviation.
"""

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.special import chdtri, erf, erfc, erfcx, gammainc, gammaincc

from service.sequential.double import FloatArray
from service.sequential.exact.characteristics import TooMuchWork
from service.sequential.exact.panels import Law, Resolution, Room, kernel_of
from service.sequential.inference.ordering import Tails
from service.sequential.region import StraightRegion

MOST_WORK = 12_000_000_000
MOST_ENTRIES = 8_000_000
RESOLUTION = Resolution(points=20, sharp=16)
# Totals further beyond the observed one than a sum of as many squares comes with this probability are left out.
NEVER = 1e-24
# A normal number beyond this is left out, unless the squares together may not be larger anyway.
FARTHEST = 16.0
# Variances are served down to this share of the one that the walk was carried under.
SHARE = 0.25
# A probability below this is none.
NOTHING = 1e-250
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
        most = self.total if self.looks == 1 else min(self.total, self._upper(self.looks))
        return math.log(most) - math.log(self.looks)

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
            reach = 0.5 * rate * self._in_units(self.total)
            up, down = float(gammaincc(0.5 * self.looks, reach)), float(gammainc(0.5 * self.looks, reach))
            return Tails(up, up, down, down)
        if rate < 1.0:
            down = self._walk(0).below(rate)
            return Tails.of_down(down, down)
        # To end further up the squares must sum to the observed total, or to the upper limit of the first look.
        least = self._in_units(min(self.total, self._upper(1)))
        if gammaincc(0.5 * self.looks, 0.5 * rate * least) < NOTHING:
            return Tails.of_up(0.0, 0.0)
        # An end above the lines leaves nothing to be seen closely.
        is_above = self.deviation >= self.region.upper_intercept
        steps = 0 if is_above else math.floor(exponent / -math.log(SHARE))
        up = self._walk(steps).above(rate * SHARE**steps)
        return Tails.of_up(up, up)

    def first_step_mean(self) -> float:
        """See `Outcome`: the size of a normal deviation is on average sqrt(2/pi) of its standard deviation."""
        looks, total = self.looks, self.total
        if self._is_free or total <= 0.0:
            # The deviations point anywhere alike.
            return math.sqrt(0.5 * total) * math.exp(math.lgamma(0.5 * looks) - math.lgamma(0.5 * looks + 0.5))
        if looks > 2:
            return math.exp(0.5 * self.reference) * math.sqrt(0.5 * math.pi) * self._walk(0).first_size()
        low, high = max(0.0, self._lower(1)), min(total, self._upper(1))
        sizes = math.sqrt(total - low) - math.sqrt(total - high)
        chance = math.atan2(math.sqrt(high), math.sqrt(total - high)) - math.atan2(
            math.sqrt(low), math.sqrt(total - low)
        )
        return math.sqrt(0.5 * math.pi) * sizes / chance

    @cached_property
    def _is_free(self) -> bool:
        """No limit could have ended a walk to this total earlier: none lie below it, and all above are above it."""
        return self.looks == 1 or (self._lower(self.looks - 1) <= 0.0 and self.total <= self._upper(1))

    def _lower(self, look: int) -> float:
        return self.region.ratio.slope * look - self.region.lower_intercept

    def _upper(self, look: int) -> float:
        return self.region.ratio.slope * look + self.region.upper_intercept

    def _in_units(self, total: float) -> float:
        return math.exp(math.log(total) - self.reference)

    @cached_property
    def _walks(self) -> "dict[int, _Walk]":
        return {}

    def _walk(self, steps: int) -> "_Walk":
        """Under the reference, or under a variance as many times smaller."""
        if steps not in self._walks:
            self._walks[steps] = self._carried(math.exp(self.reference) * SHARE**steps)
        return self._walks[steps]

    def _carried(self, variance: float) -> "_Walk":
        region, looks = self.region, self.looks
        low, high = -region.lower_intercept / variance, region.upper_intercept / variance
        fall, total = region.ratio.slope / variance, self.total / variance
        most = total + float(chdtri(looks, NEVER))
        free = 1
        if high + fall > most:
            free = min(looks - 1, max(1, math.floor(-low / fall)))
        bottom, top = max(low, -fall * (looks - 1.0)), min(high, most - fall * free)
        end = self.deviation / variance
        # Under a smaller variance the squares that lead to the total are larger in its units.
        farthest = FARTHEST * math.sqrt(max(1.0, total / looks))
        lines = (bottom, end) if end < high else (bottom,)
        return _carried(_Course(fall, low, high, end, free), Room(bottom, top, fall, lines), looks, farthest)


@dataclass(frozen=True)
class _Course:
    """
    What a walk goes by, in units of the variance that it is carried under.

    Attributes:
        fall: Of each step.
        low, high: The lines.
        end: Where the walk ended.
        free: So many first looks can end no walk that matters.
    """

    fall: float
    low: float
    high: float
    end: float
    free: int


@dataclass(frozen=True)
class _Walk:
    """
    Walks that go on after each look before the last, from the last of the free ones on.

    Attributes:
        heights: Array of shape (nodes,).
        masses: Array of shape (looks, nodes), each row scaled by exp(-log_scale): weights of the values of a function.
        log_scale: Array of shape (looks,).
        weighted: Array of shape (nodes,): the masses two looks before the last, each weighed by the mean size of the
            first deviation and scaled as they are.
    """

    course: _Course
    heights: FloatArray
    masses: FloatArray
    log_scale: FloatArray
    weighted: FloatArray

    def above(self, rate: float) -> float:
        """P(further up) under a variance of which this one is `rate` times as large."""
        course = self.course
        first = float(erfc(math.sqrt(0.5 * rate * (course.high + course.fall))))
        before = self._leaving(rate, course.high, slice(0, -1), is_up=True)
        return first + before + self._leaving(rate, course.end, slice(-1, None), is_up=True)

    def below(self, rate: float) -> float:
        """P(further down), in the same way."""
        course = self.course
        first = float(erf(math.sqrt(0.5 * rate * max(0.0, course.low + course.fall))))
        before = self._leaving(rate, course.low, slice(0, -1), is_up=False)
        return first + before + self._leaving(rate, course.end, slice(-1, None), is_up=False)

    def first_size(self) -> float:
        """The mean size of the first deviation, given the end."""
        # The density of the end two looks later: the total between lies within the limits, by an arcsine law.
        course = self.course
        apart = np.maximum(course.end + 2.0 * course.fall - self.heights, 0.0)
        least = np.clip(course.low + course.fall - self.heights, 0.0, apart)
        most = np.clip(course.high + course.fall - self.heights, least, apart)
        angles = _angle(most, apart) - _angle(least, apart)
        onward = np.exp(-0.5 * (apart - float(apart.min()))) * angles
        return float(self.weighted @ onward) / float(self.masses[-2] @ onward)

    def _leaving(self, rate: float, line: float, chosen: slice, *, is_up: bool) -> float:
        """P(coming to a line, or beyond, at the look after the chosen ones)."""
        course = self.course
        gap = 0.5 * rate * np.maximum(line + course.fall - self.heights, 0.0)
        tilt, looks = -0.5 * (rate - 1.0) * self.heights, course.free + np.arange(float(len(self.masses)))[chosen]
        with np.errstate(divide="ignore"):  # what underflows, or cannot be, never comes to anything
            worth = tilt + (np.log(erfcx(np.sqrt(gap))) - gap if is_up else np.log(erf(np.sqrt(gap))))
            largest = float(worth.max())
            if math.isinf(largest):
                return 0.0
            sums = np.maximum(self.masses[chosen] @ np.exp(worth - largest), 0.0)
            factor = self.log_scale[chosen] + largest + 0.5 * looks * (math.log(rate) - (rate - 1.0) * course.fall)
            return float(np.sum(np.exp(np.minimum(factor + np.log(sums), 0.0))))


def _angle(part: FloatArray, whole: FloatArray) -> FloatArray:
    """The arcsine of the root of a share."""
    angle: FloatArray = np.arctan2(np.sqrt(part), np.sqrt(np.maximum(whole - part, 0.0)))
    return angle


def _carried(course: _Course, room: Room, looks: int, farthest: float) -> _Walk:
    """From the origin through all looks but the last."""
    height, free = -course.fall * course.free, course.free
    kernel = kernel_of(room, [Law(height, free), Law(height, free, moment=1)], RESOLUTION, farthest)
    nodes, count = len(kernel.heights), looks - free
    if nodes * count > MOST_ENTRIES:
        raise TooMuchWork(MOST_ENTRIES, "points to keep")
    if nodes * nodes * count > MOST_WORK:
        raise TooMuchWork(MOST_WORK, "multiplications")
    masses, log_scale, scale = np.zeros((count, nodes)), np.zeros(count), 0.0
    # Of deviations that point anywhere alike, the first is on average this share of the root of the sum of squares.
    share = math.exp(math.lgamma(0.5 * free) - math.lgamma(0.5 * free + 0.5)) / math.sqrt(math.pi)
    row, sizes = kernel.begin[0], share * kernel.begin[1]
    weighted = sizes
    for i in range(count):
        # One product after the other: taken together they would be several times as slow.
        row, sizes = (row, sizes) if i == 0 else (row @ kernel.onward, sizes @ kernel.onward)
        largest = float(np.abs(row).max())
        if 0.0 < largest < SMALL:
            row, sizes, scale = row / largest, sizes / largest, scale + math.log(largest)
        masses[i], log_scale[i] = row, scale
        weighted = sizes if i == count - 2 else weighted
    return _Walk(course, kernel.heights, masses, log_scale, weighted)
