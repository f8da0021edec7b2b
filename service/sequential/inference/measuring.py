"""
An observed outcome of a test of normal measurements, among all that could have come.

Quantity: the probabilities of the outcomes further up and further down, at any mean, and the mean of the first
measurement given the outcome.
Method: the density of walks that go on is carried from look to look at Gauss-Legendre points between the limits, once,
with the drift of the estimate; a change of the drift multiplies it by a factor that depends only on where the walk
stands. All is seen from a middle line, in standard deviations. Looks need not be evenly spaced: between two of them the
walk moves by a normal amount whose variance is the progress made.
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

from service.sequential.curved import CurvedRegion
from service.sequential.double import Double, FloatArray, two_product, two_sum
from service.sequential.exact.characteristics import TooMuchWork
from service.sequential.exact.strip import Strip, density, nodes_between
from service.sequential.inference.ordering import Tails
from service.sequential.region import Region, StraightRegion
from service.sequential.shifted import line_of_h0, seen_from_h0

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


def frame_of(region: Region, sigma: float) -> Frame:
    """Straight regions have a middle line of their own, curved ones are seen from H0's, all others from zero."""
    if isinstance(region, StraightRegion):
        return Frame(region.ratio.slope + region.ratio.slope_low, sigma)
    if isinstance(region, CurvedRegion):
        return Frame(line_of_h0(region), sigma)
    return Frame(0.0, sigma)


@dataclass(frozen=True)
class _Pass:
    """
    Walks that go on after each look before the last.

    Attributes:
        nodes: Array of shape (looks, points), or (1, points) where the limits stand still.
        masses: Array of shape (looks, points), each row scaled by exp(-log_scale).
        upper, lower: Arrays of shape (looks,): the limits at each look.
        weighted: Array of shape (points,): the last row, weighed by the height at the first look.
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
        looks: Array of shape (looks,): the progress at each look taken, the deciding one last.
        height: Where the walk ended, as seen from the middle line, in standard deviations.
        is_above: It ended above, or at the wall on that side; else below.
    """

    region: Region
    frame: Frame
    looks: FloatArray
    height: float
    is_above: bool

    @cached_property
    def reference(self) -> float:
        """See `Outcome`; where the last look brought more than the rest explains, near what came before it."""
        estimate = self.height / float(self.looks[-1])
        if len(self.looks) == 1:
            return estimate
        before = self.looks[-2:-1]
        lower, upper = limits_seen(self.region, self.frame, before, estimate)
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
        units, first = len(self.looks), float(self.looks[0])
        goal = float(limits[0]) if units > 1 else self.height
        beyond = float(ndtr(sign * (natural * first - goal) / math.sqrt(first)))
        if units > 1:
            ends = limits[1:] if len(passed.nodes) > 1 else limits[:1]
            beyond += self._beyond(natural, sign, ends, slice(0, -1)) if units > 2 else 0.0
            beyond += self._beyond(natural, sign, np.array([self.height]), slice(-1, None))
        return Tails.of_up(beyond, beyond) if self.is_above else Tails.of_down(beyond, beyond)

    def _beyond(self, natural: float, sign: float, limits: FloatArray, chosen: slice) -> float:
        """P(passing these limits at the look after the chosen ones), the limits one for all or one for each."""
        passed, drift = self._passed, natural - self.reference
        nodes = passed.nodes if len(passed.nodes) == 1 else passed.nodes[chosen]
        # The height has its factor apart from the looks, so that neither leaves the range of a double.
        rise = drift * nodes
        largest = rise.max(axis=1)
        steps = np.diff(self.looks)[chosen if len(passed.nodes) > 1 else slice(0, 1), np.newaxis]
        missing = (nodes + natural * steps - limits[:, np.newaxis]) / np.sqrt(steps)
        worth = np.exp(rise - largest[:, np.newaxis]) * ndtr(sign * missing)
        masses = passed.masses[chosen]
        sums = masses @ worth[0] if len(worth) == 1 else np.einsum("lp,lp->l", masses, worth)
        looks = self.looks[:-1][chosen]
        factor = passed.log_scale[chosen] + largest - 0.5 * looks * (natural**2 - self.reference**2)
        with np.errstate(divide="ignore"):  # what underflows never comes to anything
            return float(np.sum(np.exp(np.minimum(factor + np.log(sums), 0.0))))

    def first_step_mean(self) -> float:
        """See `Outcome`."""
        first = float(self.looks[0])
        if len(self.looks) == 1:
            return self.frame.mean(self.height / first)
        # The density of the last step, up to a constant.
        nodes, step = self._passed.nodes[-1], float(self.looks[-1] - self.looks[-2])
        exponent = (nodes * (self.height - self.reference * step) - 0.5 * nodes**2) / step
        onward = np.exp(exponent - exponent.max())
        height = float(self._passed.weighted @ onward) / float(self._passed.masses[-1] @ onward)
        return self.frame.mean(height / first)

    @cached_property
    def _passed(self) -> _Pass:
        looks = self.looks[:-1]
        lower, upper = limits_seen(self.region, self.frame, looks, self.reference)
        points = points_between(lower, upper, np.diff(self.looks, prepend=0.0))
        if points * len(looks) > MOST_ENTRIES:
            raise TooMuchWork(MOST_ENTRIES, "points to keep")
        if points * points * len(looks) > MOST_WORK:
            raise TooMuchWork(MOST_WORK, "multiplications")
        return _followed(self.looks, lower, upper, points, self.reference)


def height_of(region: Region, frame: Frame, progress: float, total: Double) -> float:
    """A total as seen from the middle line, in standard deviations."""
    if isinstance(region, StraightRegion):
        return float(region.ratio.deviation(Double.of(progress), total)) / frame.sigma
    line = two_product(np.float64(progress), np.float64(frame.middle))  # type: ignore[arg-type]
    apart = two_sum(total.high, -line.high)
    return float(apart.high + (apart.low + (total.low - line.low))) / frame.sigma


def limits_seen(region: Region, frame: Frame, looks: FloatArray, drift: float) -> tuple[FloatArray, FloatArray]:
    """The limits at these looks as seen from the middle line; where one is missing, a height far enough out."""
    if isinstance(region, StraightRegion):
        ones = np.ones(len(looks))
        return -region.lower_intercept / frame.sigma * ones, region.upper_intercept / frame.sigma * ones
    if isinstance(region, CurvedRegion):
        limits = seen_from_h0(region, frame.sigma).limits(looks)
        lower, upper = limits.lower / frame.sigma, limits.upper / frame.sigma
    else:
        limits, line = region.limits(looks), looks * frame.middle
        lower, upper = (limits.lower - line) / frame.sigma, (limits.upper - line) / frame.sigma
    walk, far = looks * drift, FAR * np.sqrt(looks) + FAR
    lower = np.where(np.isinf(lower), np.minimum(walk, upper) - far, lower)
    return lower, np.where(np.isinf(upper), np.maximum(walk, lower) + far, upper)


def points_between(lower: FloatArray, upper: FloatArray, steps: FloatArray | float = 1.0) -> int:
    """
    Gauss-Legendre points enough for the widest gap between the limits.

    Args:
        lower, upper: Arrays of shape (looks,).
        steps: The progress to each look, and that to the one after the last.
    """
    finest = math.sqrt(float(np.min(steps)))
    points = FEWEST_POINTS + math.ceil(DENSITY * float(np.max(upper - lower, initial=0.0)) / finest)
    if points > MOST_POINTS:
        raise TooMuchWork(MOST_POINTS, "quadrature points")
    return points


class Kernel:
    """The step of a walk from the nodes of one look to those of the next, kept while limits and steps are the same."""

    def __init__(self, drift: float, points: int) -> None:
        self._drift, self._points = drift, points
        self._ends: tuple[float, float, float] | None = None
        self.nodes, self._weights = np.zeros(1), np.ones(1)
        self._matrix, self._is_steady = np.zeros((0, 0)), False

    def with_points(self, points: int) -> "Kernel":
        """The same walk, between other limits from now on."""
        if points == self._points:
            return self
        other = Kernel(self._drift, points)
        other.nodes = self.nodes
        return other

    def step(self, masses: FloatArray, lower: float, upper: float, progress: float = 1.0) -> FloatArray:
        """Masses at the nodes between these limits, from masses at the nodes so far; arrays of shape (…, points)."""
        before, ends = self.nodes, (lower, upper, progress)
        if self._ends != ends:
            self._ends, self._is_steady = ends, False
            self.nodes, self._weights = nodes_between(Strip(lower, upper), self._points)
            self._matrix = self._between(before, progress)
        elif not self._is_steady:
            self._matrix, self._is_steady = self._between(before, progress), True
        moved: FloatArray = masses @ self._matrix
        return moved

    def _between(self, before: FloatArray, progress: float) -> FloatArray:
        spread, rise = math.sqrt(progress), self._drift * progress
        steps = (self.nodes[np.newaxis, :] - before[:, np.newaxis] - rise) / spread
        return density(steps) * (self._weights / spread)


def _followed(at: FloatArray, lower: FloatArray, upper: FloatArray, points: int, drift: float) -> _Pass:
    """From the origin through all looks but the last; a second row is weighed by the height at the first."""
    looks, steps = len(lower), np.diff(at, prepend=0.0)
    nodes, rows, log_scale = np.zeros((looks, points)), np.zeros((looks, points)), np.zeros(looks)
    kernel, scale = Kernel(drift, points), 0.0
    masses = np.ones((1, 1))
    for i in range(looks):
        masses = kernel.step(masses, float(lower[i]), float(upper[i]), float(steps[i]))
        if i == 0:
            masses = np.vstack([masses, masses * kernel.nodes])
        largest = float(masses[0].max())
        if 0.0 < largest < SMALL:
            masses, scale = masses / largest, scale + math.log(largest)
        nodes[i], rows[i], log_scale[i] = kernel.nodes, masses[0], scale
    is_steady = looks > 0 and np.ptp(lower) == np.ptp(upper) == np.ptp(steps) == 0.0
    weighted = masses[1] if looks else np.zeros(points)
    return _Pass(nodes[:1] if is_steady else nodes, rows, log_scale, lower, upper, weighted)
