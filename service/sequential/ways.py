"""
The shortest ways out of the region from where sampling stands.

Quantity: the fewest further looks, least time or smallest jump after which the test is decided one way or the other.
Method: rays through the region: no increase at all towards the lower limit, the largest increase at each look towards
the upper one.
Accuracy: that of the region.
Cost: a few operations for each of the next few looks, and as many for each doubling beyond.
Source: the construction is that of the acceptance and rejection numbers in Wald (1945), section 5.2.
"""

import math
from collections.abc import Callable

import numpy as np

from service.sequential.double import BoolArray, Double, FloatArray
from service.sequential.region import ABOVE, BELOW, INSIDE, Region, SideArray, looks_to_wall
from service.sequential.tables import UnitTable

# No test goes so far; whole numbers up to here are exact in a double.
FURTHEST = 2**53
# Looks that are tried at once before halving, and where a wall is near.
BLOCK, LARGEST_BLOCK = 256, 32_768
# Increases that are tried at once.
FEW = 32


def looks_to_lower(region: Region, progress: float, total: float, step: float) -> tuple[int, float] | None:
    """
    The fewest further looks, `step` apart, after which an unchanged total ends below, and how much it may rise
    meanwhile; None where it never does.
    """
    found = _looks(region, progress, total, step, rise=0.0)
    return None if found is None else (found[0], found[1] - total)


def looks_to_upper(region: Region, progress: float, total: float, rise: float) -> tuple[int, float] | None:
    """
    The fewest further looks, one unit apart, after which a total that rises at each ends above, and by how much it must
    rise at the least until then; None where it never does.
    """
    found = _looks(region, progress, total, 1.0, rise)
    return None if found is None else (found[0], max(0.0, found[1] - total))


def time_to_lower(region: Region, progress: float, total: float) -> float | None:
    """The least further progress after which an unchanged total ends below; None where it never does."""
    moment = float(region.lower_reached_at(np.array([total]))[0])
    wall = math.inf if region.wall is None else region.wall.progress
    if moment <= wall:
        return max(0.0, moment - progress) if math.isfinite(moment) else None
    zero = np.zeros(1)
    side = region.sides_at_wall(Double(np.array([wall]), zero), Double(np.array([total]), zero))
    return wall - progress if side[0] == BELOW else None


def jump_to_upper(region: Region, progress: float, total: float) -> tuple[int, float] | None:
    """
    The fewest increases of one that end above, and how much progress the last of them has at most.

    They end above at once, or, where that takes fewer, by the wall, which parts the totals. None where no number does.
    """
    wall = math.inf if region.wall is None else region.wall.progress
    cap = math.inf if region.wall is None or region.wall.cap is None else region.wall.cap

    def until(increases: FloatArray) -> FloatArray:
        """The progress until which totals so much larger are beyond the upper limit; grows with the increase."""
        moments = np.minimum(region.upper_left_at(total + increases), wall)
        return np.where(total + increases >= cap, wall, moments)

    def is_beyond(increase: int) -> bool:
        return bool(until(np.array([float(increase)]))[0] > progress)

    few = np.flatnonzero(until(np.arange(1.0, FEW + 1.0)) > progress)
    fewest = int(few[0]) + 1 if few.size else _first_true(is_beyond, begin=FEW)
    upper = math.inf if region.wall is None else float(region.limits(np.array([wall])).upper[0])
    if math.isfinite(upper) and (at_wall := max(0, math.ceil(upper - total))) < fewest:
        return at_wall, wall - progress
    if fewest >= FURTHEST:
        return None
    return fewest, float(until(np.array([float(fewest)]))[0]) - progress


def _looks(region: Region, progress: float, total: float, step: float, rise: float) -> tuple[int, float] | None:
    """The first look that ends on the side of the ray, and the limit there; None where another side comes first."""
    last = None if region.wall is None else looks_to_wall(region.wall, step, progress)
    wanted = BELOW if rise == 0.0 else ABOVE

    def sides(looks: FloatArray) -> SideArray:
        where, height = (Double(at, np.zeros_like(at)) for at in (progress + step * looks, total + rise * looks))
        found = region.sides(where, height)
        if region.wall is None:
            return found
        found = np.where(region.wall.is_reached(where.value), region.sides_at_wall(where, height), found)
        return found if region.wall.cap is None else np.where(height.value >= region.wall.cap, ABOVE, found)

    def ends(look: int) -> bool:
        return bool(sides(np.array([float(look)]))[0] != INSIDE)

    first = _first_in_block(lambda looks: sides(looks) != INSIDE, last)
    if first is None and isinstance(region, UnitTable):
        return None
    if first is None:  # outside the limits of a likelihood ratio a ray that has left stays, so halving finds the moment
        first = last if last is not None and not ends(last) else _first_true(ends, begin=BLOCK)
    look = np.array([float(first)])
    if sides(look)[0] != wanted:
        return None
    limits = region.limits(progress + step * look)
    return first, float((limits.lower if wanted == BELOW else limits.upper)[0])


def _first_in_block(ends: Callable[[FloatArray], BoolArray], last: int | None) -> int | None:
    """The first look that ends: among the next few, or, where there is a last one, among all up to a limit."""
    reach = BLOCK if last is None else min(last, LARGEST_BLOCK)
    found = np.flatnonzero(ends(np.arange(1.0, reach + 1.0)))
    return int(found[0]) + 1 if found.size else None


def _first_true(holds: Callable[[int], bool], begin: int = 1) -> int:
    """The first whole number from `begin` on for which something holds that then goes on to hold."""
    low, high = begin - 1, begin
    while not holds(high):
        low, high = high, 2 * high
        if high > FURTHEST:
            return high
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if holds(middle) else (middle, high)
    return high
