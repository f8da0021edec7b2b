"""
Where a walk of totals first leaves the region.

Quantity: the first observation that decides, and the progress and total at that moment.
Method: all totals of a submission against the limits at once; two ways of watching. Looked at after each report, the
walk is judged at its points only. Watched in continuous time, the total stands still between failures while the
exposure runs, so the lower limit may come up to it inside a report.
Accuracy: that of the region.
Cost: linear in the observations given; nothing depends on how many came before.
Source: Wald (1945); for continuous time Epstein and Sobel (1955) and Dvoretzky, Kiefer and Wolfowitz (1953), Annals of
Mathematical Statistics 24, 254-264.
"""

from dataclasses import dataclass

import numpy as np

from service.sequential.decision import Cause, Decision
from service.sequential.double import BoolArray, Double, FloatArray
from service.sequential.region import ABOVE, BELOW, INSIDE, TIE, Region, SideArray


@dataclass(frozen=True)
class Exit:
    """The end of a walk: the observation (0-based) that decided, and where the walk stood then."""

    index: int
    progress: Double
    total: Double
    decision: Decision
    cause: Cause


def first_exit_at_reports(region: Region, progress: Double, total: Double) -> Exit | None:
    """
    The first point at or beyond a limit; None while all lie inside.

    Args:
        region: The continuation region.
        progress, total: Arrays of shape (observations,): progress and total after each observation.
    """
    sides = region.sides(progress, total)
    leaves = sides != INSIDE
    if region.wall is not None:
        leaves = leaves | region.wall.is_reached(progress.value)
        if region.wall.cap is not None:
            leaves = leaves | (total.value >= region.wall.cap)
    index = _first(leaves)
    if index is None:
        return None
    where, height = progress.at(index), total.at(index)
    return _exit(region, index, where, height, sides[index])


def first_exit_in_time(region: Region, progress: Double, total: Double, steps: FloatArray) -> Exit | None:
    """
    The first moment at or beyond a limit, for a total that jumps at the ends of reports; None while inside.

    Between jumps only the lower limit and the wall can be reached. At one and the same instant time is taken before
    the jump: a limit reached exactly when a failure comes has been reached.

    Args:
        region: The continuation region.
        progress, total: Arrays of shape (reports,): exposure and total after each report.
        steps: Array of shape (reports,): what the total gained at the end of each report.
    """
    before = total.value - steps
    lower_at = region.lower_reached_at(before)
    until = lower_at if region.wall is None else np.minimum(lower_at, region.wall.progress)
    runs_out = progress.value >= until * (1.0 - TIE)
    sides = region.sides(progress, total)
    jumps_out = sides == ABOVE
    if region.wall is not None and region.wall.cap is not None:
        jumps_out = jumps_out | (total.value >= region.wall.cap)
    index = _first(runs_out | jumps_out)
    if index is None:
        return None
    if runs_out[index]:
        where, height = Double.of(until[index]), Double.of(before[index])
        side = BELOW if lower_at[index] <= until[index] else INSIDE
        return _exit(region, index, where, height, side)
    return _exit(region, index, progress.at(index), total.at(index), sides[index])


def _exit(region: Region, index: int, progress: Double, total: Double, side: int | np.int8) -> Exit:
    """Name the decision; what no boundary decided, the wall did."""
    cause = Cause.TRUNCATION if side == INSIDE else Cause.BOUNDARY
    if side == INSIDE:
        side = _single(region.sides_at_wall(_as_array(progress), _as_array(total)))
    decisions = {BELOW: region.below, INSIDE: region.between, ABOVE: region.above}
    return Exit(index, progress, total, decisions[int(side)], cause)


def _first(leaves: BoolArray) -> int | None:
    """The index of the first true element."""
    index = int(np.argmax(leaves))
    return index if leaves[index] else None


def _as_array(number: Double) -> Double:
    return Double(np.atleast_1d(number.high), np.atleast_1d(number.low))


def _single(sides: SideArray) -> int:
    return int(sides[0])
