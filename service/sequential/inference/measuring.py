"""
An observed outcome of a test of normal measurements, among all that could have come.

Quantity: the probabilities of the outcomes further up and further down, at any mean, and the mean of the first
measurement given the outcome.
Method: the density of walks that go on is carried from look to look at Gauss-Legendre points between the limits, once,
with the drift of the estimate; a change of the drift multiplies it by a factor that depends only on where the walk
stands. All is seen from a middle line, in standard deviations.
Accuracy: positive terms are added: about 1e-12 relative.
Cost: points squared for each look once, then points for each look and parameter.
Source: Armitage, McPherson and Rowe (1969), Journal of the Royal Statistical Society A 132, 235-244 (recursion);
Siegmund (1985), Sequential Analysis, section 2.3 (factor); Rao (1945) and Blackwell (1947) for the first measurement.
"""

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.special import ndtr

from service.sequential.double import Double, FloatArray
from service.sequential.exact.characteristics import TooMuchWork
from service.sequential.exact.strip import Strip, density, nodes_between
from service.sequential.inference.ordering import Tails
from service.sequential.region import Region, StraightRegion

MOST_POINTS = 1_200
MOST_WORK = 5_000_000_000
MOST_ENTRIES = 4_000_000
# Points between the limits, and for each standard deviation.
FEWEST_POINTS, DENSITY = 30, 3.0
# Where a limit is missing, walks further than so many standard deviations from their mean are left out.
FAR = 14.0
SMALL = 1e-100


@dataclass(frozen=True)
class Frame:
    """
    The middle line that walks are seen from, and the unit.

    Attributes:
        middle: Its rise with each unit.
        sigma: Standard deviation of one measurement.
    """

    middle: float
    sigma: float

    def mean(self, natural: float) -> float:
        """The mean of one measurement."""
        return self.middle + self.sigma * natural

    def natural(self, mean: float) -> float:
        """The drift as seen from the middle line, in standard deviations."""
        return (mean - self.middle) / self.sigma


def frame_of(region: Region, sigma: float, middle: float) -> Frame:
    """Straight regions have a middle line of their own; others are seen from the one given."""
    if isinstance(region, StraightRegion):
        return Frame(region.ratio.slope + region.ratio.slope_low, sigma)
    return Frame(middle, sigma)


@dataclass(frozen=True)
class _Pass:
    """
    Walks that go on after each look before the last.

    Attributes:
        nodes: Array of shape (looks, points), or (1, points) where the limits stand still.
        masses: Array of shape (looks, points), each row scaled by exp(-log_scale).
        upper, lower: Arrays of shape (looks,): the limits at each look.
        weighted: Array of shape (points,): the last row, weighed by the first measurement.
    """

    nodes: FloatArray
    masses: FloatArray
    log_scale: FloatArray
    lower: FloatArray
    upper: FloatArray
    weighted: FloatArray


@dataclass(frozen=True)
class MeasuredOutcome:
    """
    Where a test of measurements ended.

    Attributes:
        region: The continuation region.
        frame: How the walk is seen.
        units: The sample number at the end.
        height: Where the walk ended, as seen from the middle line, in standard deviations.
        is_above: It ended above, or at the wall on that side; else below.
    """

    region: Region
    frame: Frame
    units: int
    height: float
    is_above: bool

    @property
    def reference(self) -> float:
        """See `Outcome`; where the last look brought more than the rest explains, near what came before it."""
        if self.units == 1:
            return self.height
        before = np.array([self.units - 1.0])
        lower, upper = limits_seen(self.region, self.frame, before, self.height / self.units)
        return min(max(self.height, float(lower[0])), float(upper[0])) / float(before[0])

    def natural(self, mean: float) -> float:
        """See `Outcome`."""
        return self.frame.natural(mean)

    def mean(self, natural: float) -> float:
        """See `Outcome`."""
        return self.frame.mean(natural)

    def tails(self, natural: float) -> Tails:
        """See `Outcome`."""
        sign, passed = (1.0 if self.is_above else -1.0), self._passed
        limits = passed.upper if self.is_above else passed.lower
        # The first look is taken from the origin, each later one from the walks that went on before it.
        beyond = float(ndtr(sign * (natural - (limits[0] if self.units > 1 else self.height))))
        if self.units > 1:
            ends = limits[1:] if len(passed.nodes) > 1 else limits[:1]
            beyond += self._beyond(natural, sign, ends, slice(0, -1)) if self.units > 2 else 0.0
            beyond += self._beyond(natural, sign, np.array([self.height]), slice(-1, None))
        return Tails.of_up(beyond, beyond) if self.is_above else Tails.of_down(beyond, beyond)

    def _beyond(self, natural: float, sign: float, limits: FloatArray, chosen: slice) -> float:
        """P(passing these limits at the look after the chosen ones), the limits one for all or one for each."""
        passed, drift = self._passed, natural - self.reference
        nodes = passed.nodes if len(passed.nodes) == 1 else passed.nodes[chosen]
        # The height has its factor apart from the looks, so that neither leaves the range of a double.
        rise = drift * nodes
        largest = rise.max(axis=1)
        worth = np.exp(rise - largest[:, np.newaxis]) * ndtr(sign * (nodes + natural - limits[:, np.newaxis]))
        masses = passed.masses[chosen]
        sums = masses @ worth[0] if len(worth) == 1 else np.einsum("lp,lp->l", masses, worth)
        looks = np.arange(1.0, self.units)[chosen]
        factor = passed.log_scale[chosen] + largest - 0.5 * looks * (natural**2 - self.reference**2)
        with np.errstate(divide="ignore"):  # what underflows never comes to anything
            return float(np.sum(np.exp(np.minimum(factor + np.log(sums), 0.0))))

    def first_step_mean(self) -> float:
        """See `Outcome`."""
        if self.units == 1:
            return self.frame.mean(self.height)
        # The density of the last step, up to a constant.
        nodes = self._passed.nodes[-1]
        exponent = nodes * (self.height - self.reference) - 0.5 * nodes**2
        onward = np.exp(exponent - exponent.max())
        first = float(self._passed.weighted @ onward) / float(self._passed.masses[-1] @ onward)
        return self.frame.mean(first)

    @cached_property
    def _passed(self) -> _Pass:
        looks = np.arange(1.0, self.units)
        lower, upper = limits_seen(self.region, self.frame, looks, self.reference)
        points = points_between(lower, upper)
        if points * len(looks) > MOST_ENTRIES:
            raise TooMuchWork(MOST_ENTRIES, "points to keep")
        if points * points * len(looks) > MOST_WORK:
            raise TooMuchWork(MOST_WORK, "multiplications")
        return _followed(lower, upper, points, self.reference)


def height_of(region: Region, frame: Frame, units: int, total: Double) -> float:
    """A total as seen from the middle line, in standard deviations."""
    if isinstance(region, StraightRegion):
        return float(region.ratio.deviation(Double.of(float(units)), total)) / frame.sigma
    return float(total.value - units * frame.middle) / frame.sigma


def limits_seen(region: Region, frame: Frame, looks: FloatArray, drift: float) -> tuple[FloatArray, FloatArray]:
    """The limits at these looks as seen from the middle line; where one is missing, a height far enough out."""
    if isinstance(region, StraightRegion):
        ones = np.ones(len(looks))
        return -region.lower_intercept / frame.sigma * ones, region.upper_intercept / frame.sigma * ones
    limits, line = region.limits(looks), looks * frame.middle
    lower, upper = (limits.lower - line) / frame.sigma, (limits.upper - line) / frame.sigma
    walk, far = looks * drift, FAR * np.sqrt(looks) + FAR
    lower = np.where(np.isinf(lower), np.minimum(walk, upper) - far, lower)
    return lower, np.where(np.isinf(upper), np.maximum(walk, lower) + far, upper)


def points_between(lower: FloatArray, upper: FloatArray) -> int:
    """Gauss-Legendre points enough for the widest gap between the limits."""
    points = FEWEST_POINTS + math.ceil(DENSITY * float(np.max(upper - lower, initial=0.0)))
    if points > MOST_POINTS:
        raise TooMuchWork(MOST_POINTS, "quadrature points")
    return points


class Kernel:
    """The step of a walk from the nodes of one look to those of the next, kept while the limits stand still."""

    def __init__(self, drift: float, points: int) -> None:
        self._drift, self._points = drift, points
        self._ends: tuple[float, float] | None = None
        self.nodes, self._weights = np.zeros(1), np.ones(1)
        self._matrix, self._is_steady = np.zeros((0, 0)), False

    def with_points(self, points: int) -> "Kernel":
        """The same walk, between other limits from now on."""
        if points == self._points:
            return self
        other = Kernel(self._drift, points)
        other.nodes = self.nodes
        return other

    def step(self, masses: FloatArray, lower: float, upper: float) -> FloatArray:
        """Masses at the nodes between these limits, from masses at the nodes so far; arrays of shape (…, points)."""
        before = self.nodes
        if self._ends != (lower, upper):
            self._ends, self._is_steady = (lower, upper), False
            self.nodes, self._weights = nodes_between(Strip(lower, upper), self._points)
            self._matrix = self._between(before)
        elif not self._is_steady:
            self._matrix, self._is_steady = self._between(before), True
        moved: FloatArray = masses @ self._matrix
        return moved

    def _between(self, before: FloatArray) -> FloatArray:
        return density(self.nodes[np.newaxis, :] - before[:, np.newaxis] - self._drift) * self._weights


def _followed(lower: FloatArray, upper: FloatArray, points: int, drift: float) -> _Pass:
    """From the origin through all looks; a second row is weighed by the first measurement."""
    looks = len(lower)
    nodes, rows, log_scale = np.zeros((looks, points)), np.zeros((looks, points)), np.zeros(looks)
    kernel, scale = Kernel(drift, points), 0.0
    masses = np.ones((1, 1))
    for i in range(looks):
        masses = kernel.step(masses, float(lower[i]), float(upper[i]))
        if i == 0:
            masses = np.vstack([masses, masses * kernel.nodes])
        largest = float(masses[0].max())
        if 0.0 < largest < SMALL:
            masses, scale = masses / largest, scale + math.log(largest)
        nodes[i], rows[i], log_scale[i] = kernel.nodes, masses[0], scale
    is_steady = looks > 0 and np.ptp(lower) == np.ptp(upper) == 0.0
    weighted = masses[1] if looks else np.zeros(points)
    return _Pass(nodes[:1] if is_steady else nodes, rows, log_scale, lower, upper, weighted)
