"""
The region of any evidence between constant thresholds: limits that need not be straight.

Quantity: the limits of the total at each progress, as for straight lines.
Method: whether a point lies at or beyond the lower or the upper limit is asked of the evidence itself; both answers
change once as the total moves, and once as the progress does, so halving finds every limit.
Accuracy: whole-number limits are exact, ties resolved at 1e-12; real ones to the last few digits. Deciding does not use
them: it compares the evidence with the thresholds.
Cost: about a hundred evaluations of the evidence for each real limit, fewer for whole ones.
Source: the construction of acceptance and rejection numbers is Wald's (1945), section 5.2, for any monotone evidence.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from service.sequential.boundaries import Thresholds
from service.sequential.decision import Decision
from service.sequential.double import BoolArray, Double, FloatArray
from service.sequential.evidence import Evidence
from service.sequential.region import ABOVE, BELOW, FEW_UNITS, INSIDE, TIE, Limits, SideArray, Span, Wall

# Totals and progress are looked for between these.
SMALLEST, FURTHEST = 1e-300, 2.0**53
# Halvings that bring a real limit to its last digits.
HALVINGS = 110

Holds = Callable[[FloatArray], BoolArray]
Judgement = Callable[[Double, Double], BoolArray]


@dataclass(frozen=True)
class CurvedRegion:
    """
    The points at which the evidence lies between two thresholds. See `Region`.

    Attributes:
        evidence: Where both sides of what H0 leads to expect speak for H1, both limits reject.
        thresholds: accept < 0 < reject; accept is minus infinity where nothing accepts before the wall.
        span: The totals that the family can show.
        wall: Where a decision is forced. With an accept threshold the sign of the evidence decides there; without one
            what has not been rejected is accepted.
    """

    evidence: Evidence
    thresholds: Thresholds
    span: Span
    wall: Wall | None = None

    between = Decision.ACCEPT

    @property
    def below(self) -> Decision:
        """See `Region`."""
        speaks_for_h1 = self.evidence.is_two_sided or not self.evidence.is_upward
        return Decision.REJECT if speaks_for_h1 else Decision.ACCEPT

    @property
    def above(self) -> Decision:
        """See `Region`."""
        speaks_for_h1 = self.evidence.is_two_sided or self.evidence.is_upward
        return Decision.REJECT if speaks_for_h1 else Decision.ACCEPT

    def limits(self, progress: FloatArray) -> Limits:
        """See `Region`."""
        below = self._is_below if self.below is Decision.REJECT or self._has_accept else None
        above = self._is_above if self.above is Decision.REJECT or self._has_accept else None
        lower, upper = self._limits(progress, below, above)
        if self.wall is not None:
            ended = self.wall.is_reached(progress)
            if np.any(ended):
                lower[ended], upper[ended] = self._limits(progress[ended], self._ends_below, self._ends_above)
            if self.wall.cap is not None:
                upper = np.minimum(upper, self.wall.cap)
        return Limits(lower, upper)

    def sides(self, progress: Double, total: Double) -> SideArray:
        """See `Region`."""
        below, above = self._is_below(progress, total), self._is_above(progress, total)
        return np.where(below, BELOW, np.where(above, ABOVE, INSIDE)).astype(np.int8)

    def sides_at_wall(self, progress: Double, total: Double) -> SideArray:
        """See `Region`."""
        below, above = self._ends_below(progress, total), self._ends_above(progress, total)
        return np.where(below, BELOW, np.where(above, ABOVE, INSIDE)).astype(np.int8)

    def lower_reached_at(self, total: FloatArray) -> FloatArray:
        """See `Region`."""
        low, high = self._moments(total, lambda at: self._is_below(_plain(at), _plain(total)))
        return np.where(high > FURTHEST, np.inf, np.where(low <= 0.0, 0.0, high))

    def upper_left_at(self, total: FloatArray) -> FloatArray:
        """See `Region`."""
        low, _ = self._moments(total, lambda at: ~self._is_above(_plain(at), _plain(total)))
        return np.where(low <= 0.0, -np.inf, low)

    def open_horizon(self, reached: float) -> float:
        """See `Region`."""
        first = float(self.lower_reached_at(np.zeros(1))[0]) if self.span.is_integer else FEW_UNITS
        start = first if np.isfinite(first) else FEW_UNITS
        return max(1.25 * reached, 3.0 * start)

    @property
    def _has_accept(self) -> bool:
        return bool(np.isfinite(self.thresholds.accept))

    def _is_below(self, progress: Double, total: Double) -> BoolArray:
        """At or under the lower limit, the wall left out."""
        if self.evidence.is_two_sided:
            return (total.value < self.evidence.expected(progress.value)) & self._rejects(progress, total)
        return self._accepts(progress, total) if self.evidence.is_upward else self._rejects(progress, total)

    def _is_above(self, progress: Double, total: Double) -> BoolArray:
        """At or over the upper limit, the wall left out."""
        if self.evidence.is_two_sided:
            return (total.value > self.evidence.expected(progress.value)) & self._rejects(progress, total)
        return self._rejects(progress, total) if self.evidence.is_upward else self._accepts(progress, total)

    def _ends_below(self, progress: Double, total: Double) -> BoolArray:
        """What the wall ends on the lower side."""
        if self.wall is not None and self.wall.cap is not None:
            return total.value < float(self.wall.cap)
        if self.evidence.is_two_sided:
            return self._is_below(progress, total)
        accepted = self._ends_accepted(progress, total)
        return accepted if self.evidence.is_upward else ~accepted

    def _ends_above(self, progress: Double, total: Double) -> BoolArray:
        """What the wall ends on the upper side."""
        if self.evidence.is_two_sided:
            return self._is_above(progress, total)
        return ~self._ends_below(progress, total)

    def _ends_accepted(self, progress: Double, total: Double) -> BoolArray:
        if not self._has_accept:
            return ~self._rejects(progress, total)
        return self.evidence.log(progress, total) <= (TIE if self.span.is_integer else 0.0)

    def _accepts(self, progress: Double, total: Double) -> BoolArray:
        return self.evidence.log(progress, total) <= self.thresholds.accept + self._tie(self.thresholds.accept)

    def _rejects(self, progress: Double, total: Double) -> BoolArray:
        return self.evidence.log(progress, total) >= self.thresholds.reject - self._tie(self.thresholds.reject)

    def _tie(self, threshold: float) -> float:
        return TIE * max(1.0, abs(threshold)) if self.span.is_integer and np.isfinite(threshold) else 0.0

    def _limits(
        self,
        progress: FloatArray,
        is_below: Judgement | None,
        is_above: Judgement | None,
    ) -> tuple[FloatArray, FloatArray]:
        """The largest total below and the smallest above at each progress, infinite where there is none."""
        lower, upper = np.full_like(progress, -np.inf), np.full_like(progress, np.inf)
        has_begun = progress > 0.0
        where = _plain(progress[has_begun])
        search = _Search(self.span, self.evidence, where.value)
        if is_below is not None:
            lower[has_begun], _ = search.change(lambda total: ~is_below(where, _plain(total)))
        if is_above is not None:
            _, upper[has_begun] = search.change(lambda total: is_above(where, _plain(total)))
        return lower, upper

    def _moments(self, total: FloatArray, holds: Holds) -> tuple[FloatArray, FloatArray]:
        """The progress up to which something does not hold for each total, and from which on it does."""
        low, high = np.zeros_like(total), np.ones_like(total)
        while np.any(far := ~holds(high) & (high <= FURTHEST)):
            low, high = np.where(far, high, low), np.where(far, 2.0 * high, high)
        for _ in range(HALVINGS):
            middle = np.sqrt(np.maximum(low, SMALLEST)) * np.sqrt(high)
            at = holds(middle)
            low, high = np.where(at, low, middle), np.where(at, middle, high)
        return low, high


class _Search:
    """Looks for totals at some progress values, from what H0 leads to expect outwards."""

    def __init__(self, span: Span, evidence: Evidence, progress: FloatArray) -> None:
        step, begin = evidence.deviation(progress), evidence.expected(progress)
        self._is_integer, self._floor = span.is_integer, span.floor
        self._largest = np.minimum(span.per_progress * progress, FURTHEST if span.is_integer else np.inf)
        self._step = np.maximum(1.0, np.ceil(step)) if span.is_integer else step
        self._begin = np.clip(np.floor(begin) if span.is_integer else begin, self._floor, self._largest)

    def change(self, holds: Holds) -> tuple[FloatArray, FloatArray]:
        """
        The largest total at which something does not hold that holds for all larger ones, and the smallest at which it
        does; infinite where the family has no such total.
        """
        low, high = self._around(holds)
        none_fails, none_holds = holds(low), ~holds(high)
        for _ in range(HALVINGS):
            middle = 0.5 * (low + high)
            if self._is_integer:
                middle = np.floor(middle)
            if np.all((middle <= low) | (middle >= high)):
                break
            at = holds(middle)
            low, high = np.where(at, low, middle), np.where(at, middle, high)
        last = np.where(none_fails, -np.inf, np.where(none_holds, high, low))
        return last, np.where(none_holds, np.inf, np.where(none_fails, low, high))

    def _around(self, holds: Holds) -> tuple[FloatArray, FloatArray]:
        """Two totals with the change between them, or at the ends of the family's range."""
        low, high, width = self._begin, self._begin, self._step
        while True:
            up, down = ~holds(high) & (high < self._largest), holds(low) & (low > self._floor)
            if not np.any(up | down):
                return low, high
            high = np.where(up, np.minimum(high + width, self._largest), high)
            low = np.where(down, np.maximum(low - width, self._floor), low)
            width = np.where(up | down, 2.0 * width, width)


def _plain(values: FloatArray) -> Double:
    return Double(values, np.zeros_like(values))
