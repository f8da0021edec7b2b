"""
The shortest ways out of the region from where sampling stands.

Quantity: the fewest further looks, least time or smallest jump after which the test is decided one way or the other.
Method: rays through the region: no increase at all towards the lower limit, the largest increase at each look towards
the upper one.
Accuracy: that of the region.
Cost: a few operations for each look passed over.
Source: the construction is that of the acceptance and rejection numbers in Wald (1945), section 5.2.
"""

import math

import numpy as np

from service.sequential.double import Double
from service.sequential.region import ABOVE, BELOW, Region

FURTHEST = 10_000_000
SMALLEST_BLOCK, LARGEST_BLOCK = 64, 65_536


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


def jump_to_upper(region: Region, progress: float, total: float) -> tuple[int, float]:
    """
    The fewest increases of one that end above if they come now, and how much progress the last of them has at most.

    Source: as `Region.upper_left_at`; a cap ends above whenever it is reached before the wall.
    """
    wall = math.inf if region.wall is None else region.wall.progress
    cap = math.inf if region.wall is None or region.wall.cap is None else region.wall.cap
    increase, block = 1, 64
    while True:
        totals = total + np.arange(increase, increase + block, dtype=np.float64)
        until = np.where(totals >= cap, wall, np.minimum(region.upper_left_at(totals), wall))
        later = np.flatnonzero(until > progress)
        if later.size:
            first = int(later[0])
            return increase + first, float(until[first]) - progress
        increase, block = increase + block, min(2 * block, LARGEST_BLOCK)


def _looks(region: Region, progress: float, total: float, step: float, rise: float) -> tuple[int, float] | None:
    last = FURTHEST if region.wall is None else math.ceil((region.wall.progress - progress) / step * (1.0 - 1e-12))
    begin, block = 1, SMALLEST_BLOCK
    wanted = BELOW if rise == 0.0 else ABOVE
    while begin <= last:
        looks = np.arange(begin, min(begin + block, last + 1), dtype=np.float64)
        limits = region.limits(progress + step * looks)
        totals = total + rise * looks
        below, above = totals <= limits.lower, totals >= limits.upper
        ends = np.flatnonzero(below | above)
        if ends.size:
            first = int(ends[0])
            if not (below if wanted == BELOW else above)[first]:
                return None
            return begin + first, float((limits.lower if wanted == BELOW else limits.upper)[first])
        begin, block = begin + len(looks), min(2 * block, LARGEST_BLOCK)
    return None
