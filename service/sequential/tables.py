"""
Regions that standards print as tables, row by row.

Quantity: the limits of the total at the sample numbers of the rows, or, for failures watched in time, the moments at
which each number of failures accepts and until which it rejects.
Method: look-up. The last row is the wall: it leaves nothing undecided.
Accuracy: exact; the rows are the plan.
Cost: a binary search for each progress asked for.
Source: the form is that of 40 CFR Part 1068, Appendix A to Subpart E (sample numbers) and of the sequential plans of
MIL-HDBK-781A (failures and times).
"""

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from service.sequential.decision import Decision
from service.sequential.double import Double, FloatArray
from service.sequential.region import ABOVE, BELOW, INSIDE, Limits, SideArray, Wall, side_of


@dataclass(frozen=True)
class UnitTable:
    """
    Limits at some sample numbers; at the others nothing is looked at.

    Attributes:
        sample_numbers: Ascending; the last is the wall.
        lower, upper: The limit of each row, infinite where it has none; the two of the last row are neighbours.
        below, above: The decisions at the lower and at the upper limit.
    """

    sample_numbers: tuple[int, ...]
    lower: tuple[float, ...]
    upper: tuple[float, ...]
    below: Decision
    above: Decision

    between = Decision.ACCEPT  # the last row leaves no room

    @property
    def wall(self) -> Wall:
        """See `Region`."""
        return Wall(float(self.sample_numbers[-1]))

    @cached_property
    def _columns(self) -> tuple[FloatArray, FloatArray, FloatArray]:
        return np.array(self.sample_numbers, float), np.array(self.lower), np.array(self.upper)

    def limits(self, progress: FloatArray) -> Limits:
        """See `Region`."""
        numbers, lower, upper = self._columns
        row = np.searchsorted(numbers, progress, side="right") - 1
        stands = (row >= 0) & ((numbers[row] == progress) | (row == len(numbers) - 1))
        return Limits(np.where(stands, lower[row], -np.inf), np.where(stands, upper[row], np.inf))

    def open_horizon(self, reached: float) -> float:
        """See `Region`."""
        return max(reached, self.wall.progress)

    def sides(self, progress: Double, total: Double) -> SideArray:
        """See `Region`."""
        limits = self.limits(progress.value)
        sides = side_of(total.value, limits.lower, limits.upper)
        return np.where(self.wall.is_reached(progress.value), INSIDE, sides).astype(np.int8)

    def sides_at_wall(self, progress: Double, total: Double) -> SideArray:  # noqa: ARG002 - one row for all
        """See `Region`."""
        return np.where(total.value <= self.lower[-1], BELOW, ABOVE).astype(np.int8)

    def lower_reached_at(self, total: FloatArray) -> FloatArray:
        """See `Region`."""
        numbers, lower, _ = self._columns
        # Limits do not fall from row to row, where there are any.
        known = np.maximum.accumulate(lower)
        row = np.searchsorted(known, total, side="left")
        moments: FloatArray = np.append(numbers, np.inf)[row]
        return moments

    def upper_left_at(self, total: FloatArray) -> FloatArray:
        """See `Region`."""
        numbers, _, upper = self._columns
        known = np.minimum.accumulate(upper[::-1])[::-1]
        row = np.searchsorted(known, total, side="right") - 1
        moments: FloatArray = np.concatenate([[-np.inf], numbers])[row + 1]
        return moments


@dataclass(frozen=True)
class TimeTable:
    """
    Moments for each number of failures 0, 1, 2, …: accept when the time comes to `accept_at` with that many, reject
    when that failure comes at or before `reject_at`.

    Attributes:
        accept_at: Not falling; infinite from the first total that only the wall accepts.
        reject_at: Not falling; minus infinity where so many failures never reject. Its last entry is the cap's.
        wall: The end of the test, with the number of failures that rejects at any time before it.
    """

    accept_at: tuple[float, ...]
    reject_at: tuple[float, ...]
    wall: Wall

    below = Decision.ACCEPT
    between = Decision.ACCEPT  # the wall leaves no room
    above = Decision.REJECT

    @cached_property
    def _columns(self) -> tuple[FloatArray, FloatArray]:
        return np.append(np.array(self.accept_at), np.inf), np.append(np.array(self.reject_at), np.inf)

    def limits(self, progress: FloatArray) -> Limits:
        """See `Region`."""
        lower = np.searchsorted(self._columns[0], progress, side="right").astype(np.float64) - 1.0
        upper = np.searchsorted(self._columns[1], progress, side="left").astype(np.float64)
        cap = float(self.wall.cap or 0)
        ended = self.wall.is_reached(progress)
        lower = np.where(ended, cap - 1.0, np.where(lower < 0.0, -np.inf, lower))
        return Limits(lower, np.where(ended, cap, np.minimum(upper, cap)))

    def open_horizon(self, reached: float) -> float:
        """See `Region`."""
        return max(reached, self.wall.progress)

    def sides(self, progress: Double, total: Double) -> SideArray:
        """See `Region`."""
        time, failures = progress.value, total.value
        is_above = self.upper_left_at(failures) >= time
        is_below = self.lower_reached_at(failures) <= time
        return np.where(is_below, BELOW, np.where(is_above, ABOVE, INSIDE)).astype(np.int8)

    def sides_at_wall(self, progress: Double, total: Double) -> SideArray:  # noqa: ARG002 - one row for all
        """See `Region`."""
        return np.where(total.value < float(self.wall.cap or 0), BELOW, ABOVE).astype(np.int8)

    def lower_reached_at(self, total: FloatArray) -> FloatArray:
        """See `Region`."""
        return self._of_total(self._columns[0], total)

    def upper_left_at(self, total: FloatArray) -> FloatArray:
        """See `Region`."""
        return self._of_total(self._columns[1], total)

    def _of_total(self, moments: FloatArray, total: FloatArray) -> FloatArray:
        """The entry of each total; beyond the last one, the last."""
        entry: FloatArray = moments[np.minimum(total, len(moments) - 1.0).astype(int)]
        return entry
