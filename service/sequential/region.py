"""
The continuation region: for each progress, the totals between which sampling goes on.

Quantity: a lower and an upper limit of the total for every progress (units or exposure). At or beyond a limit the
test is decided: one side accepts H0, the other rejects it, depending on which of the two large totals speak for.
Method: a protocol for regions of any shape, and the one of the likelihood ratio: two parallel lines, closed by a wall
where the plan is truncated.
Accuracy: integer totals are compared with acceptance and rejection numbers whose ties are resolved at 1e-12
relative; real totals with the deviation from the middle line, carried in two doubles.
Cost: a few operations for each progress asked for.
Source: Wald (1945), section 5.2 (lines and numbers); Wald (1947), Sequential Analysis, section 3.8 (truncation).
"""

import math
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from service.sequential.boundaries import Thresholds
from service.sequential.decision import Decision
from service.sequential.double import BoolArray, Double, FloatArray
from service.sequential.likelihood import LikelihoodRatio

SideArray = NDArray[np.int8]

BELOW, INSIDE, ABOVE = -1, 0, 1

# Two sides of a comparison closer than this, relative to their terms, count as equal for integer totals and for
# exposures that come to a limit or to the wall.
TIE = 1e-12

# A drawing over units shows at least so many.
FEW_UNITS = 10.0


@dataclass(frozen=True)
class Wall:
    """
    The end of sampling.

    Attributes:
        progress: Units or exposure at which a decision is forced.
        cap: With a cap, a total that reaches it before the wall ends sampling above, and reaching the wall ends it
            below. Without one, the wall decides by the sign of the log-likelihood ratio: above zero rejects.
    """

    progress: float
    cap: int | None = None

    def is_reached(self, progress: FloatArray) -> BoolArray:
        """Whether each progress has come to the wall; sums of decimal exposures may fall short of it by rounding."""
        return progress >= self.progress * (1.0 - TIE)


@dataclass(frozen=True)
class Span:
    """
    The totals a family can show.

    Attributes:
        is_integer: Totals are whole numbers.
        floor: The smallest possible total.
        per_progress: The largest possible total for each unit of progress.
    """

    is_integer: bool
    floor: float
    per_progress: float


PASS_FAIL = Span(is_integer=True, floor=0.0, per_progress=1.0)
COUNTS = Span(is_integer=True, floor=0.0, per_progress=math.inf)
# The same for counts whose progress is whole units rather than exposure.
UNIT_COUNTS = Span(is_integer=True, floor=0.0, per_progress=math.inf)
# Sums of squares.
POSITIVE = Span(is_integer=False, floor=0.0, per_progress=math.inf)
REALS = Span(is_integer=False, floor=-math.inf, per_progress=math.inf)


@dataclass(frozen=True)
class Limits:
    """
    The region at some progress values; arrays of shape (points,).

    Sampling goes on while lower < total < upper. A limit that no total can reach is infinite. Where the wall stands,
    the two usually meet, and `lower` includes the total that ends below.
    """

    lower: FloatArray
    upper: FloatArray


class Region(Protocol):
    """What deciding, drawing and every exact computation ask of a region, whatever its shape."""

    @property
    def wall(self) -> Wall | None:
        """Where a decision is forced, if anywhere."""
        ...

    @property
    def below(self) -> Decision:
        """The decision for totals at or under the lower limit."""
        ...

    @property
    def above(self) -> Decision:
        """The decision for totals at or over the upper limit."""
        ...

    @property
    def between(self) -> Decision:
        """The decision for totals between the limits of the wall, where these leave room."""
        ...

    def limits(self, progress: FloatArray) -> Limits:
        """The limits at each progress, the wall included; array of shape (points,)."""
        ...

    def sides(self, progress: Double, total: Double) -> SideArray:
        """Where each point lies with the wall left out: BELOW, INSIDE or ABOVE; array of shape (points,)."""
        ...

    def sides_at_wall(self, progress: Double, total: Double) -> SideArray:
        """The forced end of each point at or past the wall, INSIDE between its limits; array of shape (points,)."""
        ...

    def lower_reached_at(self, total: FloatArray) -> FloatArray:
        """The progress at which the lower limit, wall left out, comes up to each total; array of shape (points,)."""
        ...

    def upper_left_at(self, total: FloatArray) -> FloatArray:
        """The progress until which each total is at or over the upper limit, wall left out; shape (points,)."""
        ...

    def open_horizon(self, reached: float) -> float:
        """A progress far enough to draw to, where no wall ends the region: a good way past where decisions begin."""
        ...


@dataclass(frozen=True)
class StraightRegion:
    """
    Two parallel lines: slope * progress - lower_intercept and slope * progress + upper_intercept.

    Both intercepts are positive. Build it with `straight_region`.
    """

    ratio: LikelihoodRatio
    lower_intercept: float
    upper_intercept: float
    span: Span
    wall: Wall | None = None

    between = Decision.ACCEPT  # the lines' wall leaves no room

    @property
    def below(self) -> Decision:
        """See `Region`."""
        return Decision.ACCEPT if self.ratio.is_upward else Decision.REJECT

    @property
    def above(self) -> Decision:
        """See `Region`."""
        return Decision.REJECT if self.ratio.is_upward else Decision.ACCEPT

    def limits(self, progress: FloatArray) -> Limits:
        """See `Region`."""
        lower, upper = self._lines(progress)
        if self.wall is not None:
            at_wall = self.wall.is_reached(progress)
            cut_lower, cut_upper = self._cut(progress)
            lower = np.where(at_wall, cut_lower, lower)
            upper = np.where(at_wall, cut_upper, upper)
            if self.wall.cap is not None:
                upper = np.minimum(upper, self.wall.cap)
        lower = np.where(lower < self.span.floor, -np.inf, lower)
        upper = np.where(upper > self._largest_total(progress), np.inf, upper)
        return Limits(lower, upper)

    def sides(self, progress: Double, total: Double) -> SideArray:
        """See `Region`."""
        if self.span.is_integer:
            lower, upper = self._lines(progress.value)
            return side_of(total.value, lower, upper)
        deviation = self.ratio.deviation(progress, total)
        return side_of(deviation, -self.lower_intercept, self.upper_intercept)

    def sides_at_wall(self, progress: Double, total: Double) -> SideArray:
        """See `Region`."""
        if self.span.is_integer:
            lower, _ = self._cut(progress.value)
            return np.where(total.value <= lower, BELOW, ABOVE).astype(np.int8)
        deviation = self.ratio.deviation(progress, total)
        # A ratio of exactly one accepts, whichever side acceptance lies on.
        is_below = deviation <= 0.0 if self.ratio.is_upward else deviation < 0.0
        return np.where(is_below, BELOW, ABOVE).astype(np.int8)

    def lower_reached_at(self, total: FloatArray) -> FloatArray:
        """See `Region`."""
        return (total + self.lower_intercept) / self.ratio.slope

    def upper_left_at(self, total: FloatArray) -> FloatArray:
        """See `Region`."""
        return (total - self.upper_intercept) / self.ratio.slope

    def open_horizon(self, reached: float) -> float:
        """See `Region`."""
        start = self.first_possible_decision()
        if start == 0.0 and self.ratio.slope != 0.0:
            start = abs(self.lower_intercept / self.ratio.slope)
        return max(1.25 * reached, 3.0 * start, 0.0 if self.span is COUNTS else FEW_UNITS)

    def first_possible_decision(self) -> float:
        """
        The smallest progress at which some total decides, the wall left out.

        Whole units for pass/fail totals; 0 where the total can outrun the limit at any progress.
        """
        if math.isinf(self.span.per_progress):
            return 0.0
        to_lower = self.lower_intercept / self.ratio.slope
        to_upper = self.upper_intercept / (self.span.per_progress - self.ratio.slope)
        return float(_ceil(np.array([min(to_lower, to_upper)]), np.ones(1))[0])

    def _lines(self, progress: FloatArray) -> tuple[FloatArray, FloatArray]:
        """The two lines at each progress, as numbers a total can take."""
        middle = self.ratio.slope * progress
        lower, upper = middle - self.lower_intercept, middle + self.upper_intercept
        if not self.span.is_integer:
            return lower, upper
        return _floor(lower, middle + self.lower_intercept), _ceil(upper, upper)

    def _cut(self, progress: FloatArray) -> tuple[FloatArray, FloatArray]:
        """The totals that the wall parts: the largest that ends below, the smallest that ends above."""
        middle = self.ratio.slope * progress
        if self.wall is not None and self.wall.cap is not None:
            return np.full_like(middle, self.wall.cap - 1.0), np.full_like(middle, self.wall.cap)
        if not self.span.is_integer:
            return middle, middle
        if self.ratio.is_upward:
            lower = _floor(middle, middle)
            return lower, lower + 1.0
        upper = _ceil(middle, middle)
        return upper - 1.0, upper

    def _largest_total(self, progress: FloatArray) -> FloatArray | float:
        """The largest total that the family can show at each progress."""
        return math.inf if math.isinf(self.span.per_progress) else self.span.per_progress * progress


def looks_to_wall(wall: Wall, step: float, progress: float) -> int:
    """The looks, `step` apart, after which a walk has come to the wall; at least one."""
    return max(1, math.ceil((wall.progress * (1.0 - TIE) - progress) / step))


def straight_region(
    ratio: LikelihoodRatio, thresholds: Thresholds, span: Span, wall: Wall | None = None
) -> StraightRegion:
    """
    The region of a simple likelihood ratio between two constant thresholds.

    Args:
        ratio: The evidence as a function of progress and total.
        thresholds: accept < 0 < reject.
        span: The totals that the family can show.
        wall: Where a decision is forced, if anywhere.

    Source: Wald (1945), section 5.2: the thresholds divided by the gain are the intercepts of the lines.
    """
    to_accept, to_reject = -thresholds.accept / abs(ratio.gain), thresholds.reject / abs(ratio.gain)
    lower, upper = (to_accept, to_reject) if ratio.is_upward else (to_reject, to_accept)
    return StraightRegion(ratio, lower, upper, span, wall)


def side_of(value: FloatArray, lower: FloatArray | float, upper: FloatArray | float) -> SideArray:
    """Equality decides."""
    return np.where(value <= lower, BELOW, np.where(value >= upper, ABOVE, INSIDE)).astype(np.int8)


def _floor(value: FloatArray, scale: FloatArray) -> FloatArray:
    """The largest whole number at or below `value`, one within a tie of it included."""
    return np.floor(value + TIE * np.maximum(1.0, scale))


def _ceil(value: FloatArray, scale: FloatArray) -> FloatArray:
    """The smallest whole number at or above `value`, one within a tie of it included."""
    return np.ceil(value - TIE * np.maximum(1.0, scale))
