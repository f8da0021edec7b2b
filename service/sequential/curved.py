"""
The region of any evidence between constant thresholds: limits that need not be straight.

Quantity: the limits of the total at each progress, as for straight lines.
Method: whether a point lies at or beyond the lower or the upper limit is asked of the evidence itself; both answers
change once as the total moves, and once as the progress does. Near what H0 leads to expect the evidence of whole totals
is tabulated once for all thresholds; other whole limits are found by halving, real ones and moments by a bracketed
secant.
Accuracy: whole-number limits are exact, ties resolved at 1e-12; real ones to the last few digits. Deciding does not use
them: it compares the evidence with the thresholds.
Cost: a comparison for each tabulated total; some tens of evaluations of the evidence for each limit beyond.
Source: the construction of acceptance and rejection numbers is Wald's (1945), section 5.2, for any monotone evidence.
"""

from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from service.sequential.boundaries import Thresholds
from service.sequential.decision import Decision
from service.sequential.double import BoolArray, Double, FloatArray
from service.sequential.evidence import Evidence
from service.sequential.region import ABOVE, BELOW, FEW_UNITS, INSIDE, TIE, Limits, SideArray, Span, Wall
from service.sequential.roots import SMALLEST, Rise, real_root, rising_root

# No total and no progress is looked for beyond.
FURTHEST = 2.0**53
# More halvings than the largest distance of two totals takes.
HALVINGS = 60
# A table has totals as far as so many standard deviations and so many units from what H0 leads to expect; so many
# numbers at most, for so many progress values.
REACH, UNITS = 12.0, 30.0
LARGEST_TABLE, FEWEST_PROGRESS, MOST_PROGRESS, MOST_TABLES = 400_000, 8, 4_096, 24

Holds = Callable[[FloatArray], BoolArray]
# From progress, total and evidence to whether the point lies on one side.
Judgement = Callable[[FloatArray, FloatArray, FloatArray], BoolArray]


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
        lower, upper = self._limits(progress, at_wall=False)
        if self.wall is not None:
            ended = self.wall.is_reached(progress)
            if np.any(ended):
                lower[ended], upper[ended] = self._limits(progress[ended], at_wall=True)
            if self.wall.cap is not None:
                upper = np.minimum(upper, self.wall.cap)
        return Limits(lower, upper)

    def sides(self, progress: Double, total: Double) -> SideArray:
        """See `Region`."""
        return self._sides(progress, total, self._is_below, self._is_above)

    def sides_at_wall(self, progress: Double, total: Double) -> SideArray:
        """See `Region`."""
        return self._sides(progress, total, self._ends_below, self._ends_above)

    def lower_reached_at(self, total: FloatArray) -> FloatArray:
        """See `Region`."""
        threshold = self.thresholds.reject if self.below is Decision.REJECT else self.thresholds.accept
        if np.isinf(threshold):
            return np.full_like(total, np.inf)
        sign = 1.0 if self.below is Decision.REJECT else -1.0
        start = total / self._mean if self.evidence.is_two_sided else np.zeros_like(total)
        moment = self._moments(lambda at: sign * (self._log(at, total) - threshold), start)
        return np.where(np.isnan(moment), np.inf, moment)

    def upper_left_at(self, total: FloatArray) -> FloatArray:
        """See `Region`."""
        threshold = self.thresholds.reject if self.above is Decision.REJECT else self.thresholds.accept
        if np.isinf(threshold):
            return np.full_like(total, -np.inf)
        sign = 1.0 if self.above is Decision.REJECT else -1.0
        end = total / self._mean if self.evidence.is_two_sided else np.full_like(total, np.inf)
        moment = self._moments(lambda at: sign * (threshold - self._log(at, total)), np.zeros_like(total), end)
        never = np.isnan(moment) | (moment <= SMALLEST)
        return np.where(never, -np.inf, moment)

    def open_horizon(self, reached: float) -> float:
        """See `Region`."""
        first = float(self.lower_reached_at(np.zeros(1))[0]) if self.span.is_integer else FEW_UNITS
        start = first if 0.0 < first < FURTHEST else FEW_UNITS
        return max(1.25 * reached, 3.0 * start)

    @property
    def _has_accept(self) -> bool:
        return bool(np.isfinite(self.thresholds.accept))

    @property
    def _mean(self) -> float:
        """What one unit of progress adds to the total at the edge of H0."""
        return float(self.evidence.expected(np.ones(1))[0])

    def _log(self, progress: FloatArray, total: FloatArray) -> FloatArray:
        return self.evidence.log(_plain(progress), _plain(total))

    def _sides(self, progress: Double, total: Double, is_below: Judgement, is_above: Judgement) -> SideArray:
        point = progress.value, total.value, self.evidence.log(progress, total)
        return np.where(is_below(*point), BELOW, np.where(is_above(*point), ABOVE, INSIDE)).astype(np.int8)

    def _is_below(self, progress: FloatArray, total: FloatArray, evidence: FloatArray) -> BoolArray:
        """At or under the lower limit, the wall left out."""
        if self.evidence.is_two_sided:
            return (total < self.evidence.expected(progress)) & self._rejects(evidence)
        return self._accepts(evidence) if self.evidence.is_upward else self._rejects(evidence)

    def _is_above(self, progress: FloatArray, total: FloatArray, evidence: FloatArray) -> BoolArray:
        """At or over the upper limit, the wall left out."""
        if self.evidence.is_two_sided:
            return (total > self.evidence.expected(progress)) & self._rejects(evidence)
        return self._rejects(evidence) if self.evidence.is_upward else self._accepts(evidence)

    def _ends_below(self, progress: FloatArray, total: FloatArray, evidence: FloatArray) -> BoolArray:
        """What the wall ends on the lower side."""
        if self.wall is not None and self.wall.cap is not None:
            return total < float(self.wall.cap)
        if self.evidence.is_two_sided:
            return self._is_below(progress, total, evidence)
        accepted = self._ends_accepted(evidence)
        return accepted if self.evidence.is_upward else ~accepted

    def _ends_above(self, progress: FloatArray, total: FloatArray, evidence: FloatArray) -> BoolArray:
        """What the wall ends on the upper side."""
        if self.evidence.is_two_sided:
            return self._is_above(progress, total, evidence)
        return ~self._ends_below(progress, total, evidence)

    def _ends_accepted(self, evidence: FloatArray) -> BoolArray:
        if not self._has_accept:
            return ~self._rejects(evidence)
        return evidence <= (TIE if self.span.is_integer else 0.0)

    def _accepts(self, evidence: FloatArray) -> BoolArray:
        return evidence <= self.thresholds.accept + self._tie(self.thresholds.accept)

    def _rejects(self, evidence: FloatArray) -> BoolArray:
        return evidence >= self.thresholds.reject - self._tie(self.thresholds.reject)

    def _tie(self, threshold: float) -> float:
        return TIE * max(1.0, abs(threshold)) if self.span.is_integer and np.isfinite(threshold) else 0.0

    def _limits(self, progress: FloatArray, *, at_wall: bool) -> tuple[FloatArray, FloatArray]:
        """The largest total below and the smallest above at each progress, infinite where there is none."""
        lower, upper = np.full_like(progress, -np.inf), np.full_like(progress, np.inf)
        begun = np.flatnonzero(progress > 0.0)
        if not begun.size:
            return lower, upper
        at = progress[begun]
        if not self.span.is_integer:
            lower[begun], upper[begun] = (self._crossing(at, side, at_wall=at_wall) for side in (BELOW, ABOVE))
            return lower, upper
        # For single points the search is quicker than a table.
        is_tabulated = FEWEST_PROGRESS <= len(at) <= MOST_PROGRESS
        table = _table(self.evidence, self.span, at.tobytes()) if is_tabulated else None
        is_below, is_above = (self._ends_below, self._ends_above) if at_wall else (self._is_below, self._is_above)
        if at_wall or self.below is Decision.REJECT or self._has_accept:
            lower[begun], _ = self._change(at, table, is_below, turned=True)
        if at_wall or self.above is Decision.REJECT or self._has_accept:
            _, upper[begun] = self._change(at, table, is_above, turned=False)
        return lower, upper

    def _crossing(self, progress: FloatArray, side: int, *, at_wall: bool) -> FloatArray:
        """The real total at which the evidence comes to the threshold of a side, infinite where it has none."""
        decision = self.below if side == BELOW else self.above
        threshold = self.thresholds.reject if decision is Decision.REJECT else self.thresholds.accept
        if at_wall and not self.evidence.is_two_sided:
            threshold = 0.0 if self._has_accept else self.thresholds.reject
        if np.isinf(threshold):
            return np.full_like(progress, side * np.inf)
        falls = side == BELOW if self.evidence.is_two_sided else not self.evidence.is_upward
        sign = -1.0 if falls else 1.0

        def rise(total: FloatArray) -> FloatArray:
            return sign * (self._log(progress, total) - threshold)

        low = high = self.evidence.expected(progress)
        width = self.evidence.deviation(progress)
        while np.any(short := (rise(high) < 0.0) & np.isfinite(width)):
            high, width = np.where(short, high + width, high), np.where(short, 2.0 * width, width)
        width = self.evidence.deviation(progress)
        while np.any(long := (rise(low) >= 0.0) & np.isfinite(width)):
            low, width = np.where(long, low - width, low), np.where(long, 2.0 * width, width)
        return real_root(rise, low, high)

    def _change(
        self, progress: FloatArray, table: "_Table | None", judge: Judgement, *, turned: bool
    ) -> tuple[FloatArray, FloatArray]:
        """The last total before and the first after the change of a judgement; `turned` where small totals have it."""
        last, first = np.full_like(progress, np.nan), np.full_like(progress, np.nan)
        if table is not None:
            holds = judge(progress[:, np.newaxis], table.totals, table.evidence)
            last, first = table.change(~holds if turned else holds)
        open_ = np.flatnonzero(np.isnan(last))
        if open_.size:
            rest = progress[open_]

            def holds_at(total: FloatArray) -> BoolArray:
                answer = judge(rest, total, self._log(rest, total))
                return ~answer if turned else answer

            last[open_], first[open_] = _Search(self.span, self.evidence, rest).change(holds_at)
        return last, first

    def _moments(self, rise: Rise, start: FloatArray, end: FloatArray | None = None) -> FloatArray:
        """Where a rising function of the progress passes zero between `start` and `end`; NaN where it does not."""
        low = np.maximum(start, SMALLEST)
        high = np.full_like(start, 1.0 / abs(self._mean) if self._mean else 1.0) + low
        far = np.inf if end is None else end
        high = np.minimum(np.maximum(high, 2.0 * low), far)
        while np.any(short := (rise(high) < 0.0) & (high < np.minimum(far, FURTHEST))):
            low, high = np.where(short, high, low), np.where(short, np.minimum(4.0 * high, far), high)
        return rising_root(rise, low, high)


@dataclass(frozen=True)
class _Table:
    """
    The evidence of whole totals around what H0 leads to expect; arrays of shape (progress, totals).

    Attributes:
        is_possible: The family has such a total.
        begins, ends: Whether the row starts at the smallest, and ends at the largest total of the family.
    """

    totals: FloatArray
    evidence: FloatArray
    is_possible: BoolArray
    begins: BoolArray
    ends: BoolArray

    def change(self, holds: BoolArray) -> tuple[FloatArray, FloatArray]:
        """The last total that does not hold and the first that does; NaN where the table is too narrow to tell."""
        rows = np.arange(len(holds))
        holds = holds & self.is_possible
        first = holds.argmax(axis=1)
        found = holds[rows, first]
        first_total = self.totals[rows, first]
        after = np.where(found, first_total, np.where(self.ends, np.inf, np.nan))
        largest = np.where(self.is_possible, self.totals, -np.inf).max(axis=1)
        before = np.where(
            found, np.where(first > 0, first_total - 1.0, np.where(self.begins, -np.inf, np.nan)), largest
        )
        unknown = np.isnan(before) | np.isnan(after)
        return np.where(unknown, np.nan, before), np.where(unknown, np.nan, after)


@lru_cache(maxsize=MOST_TABLES)
def _table(evidence: Evidence, span: Span, packed: bytes) -> _Table | None:
    """The table at these progress values; None where it would be too large."""
    progress = np.frombuffer(packed)
    expected, away = evidence.expected(progress), REACH * evidence.deviation(progress) + UNITS
    first = np.maximum(np.floor(expected - away), span.floor)
    width = int(np.max(np.floor(expected + away) - first)) + 1
    if len(progress) * width > LARGEST_TABLE:
        return None
    totals = first[:, np.newaxis] + np.arange(width, dtype=np.float64)
    largest = np.floor(span.per_progress * progress)[:, np.newaxis]
    is_possible = totals <= largest
    where = np.broadcast_to(progress[:, np.newaxis], totals.shape)
    values = evidence.log(_plain(where), _plain(np.minimum(totals, largest)))
    ends = (totals[:, -1:] >= largest)[:, 0]
    return _Table(totals, values, is_possible, first <= span.floor, ends)


class _Search:
    """Looks for whole totals at some progress values, from what H0 leads to expect outwards."""

    def __init__(self, span: Span, evidence: Evidence, progress: FloatArray) -> None:
        self._floor, self._largest = span.floor, np.minimum(np.floor(span.per_progress * progress), FURTHEST)
        self._step = np.maximum(1.0, np.ceil(evidence.deviation(progress)))
        self._begin = np.clip(np.floor(evidence.expected(progress)), self._floor, self._largest)

    def change(self, holds: Holds) -> tuple[FloatArray, FloatArray]:
        """
        The largest total at which something does not hold that holds for all larger ones, and the smallest at which it
        does; infinite where the family has no such total.
        """
        low, high = self._around(holds)
        none_fails, none_holds = holds(low), ~holds(high)
        for _ in range(HALVINGS):
            middle = np.floor(0.5 * (low + high))
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
