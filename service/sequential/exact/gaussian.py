"""
Exact figures of a test of normal measurements between two parallel lines.

Quantity: probabilities of both decisions, mean, standard deviation and quantiles of the further sample number.
Method: seen from the middle line the walk has steps N(drift, 1), in standard deviations, between two constant limits.
Sums over the modes of its kernel serve all parameters at once; where a large drift would cost them digits, the walk is
followed step by step.
Accuracy: the difference to a computation with fewer points, reported as the error bound.
Cost: that of the two methods.
Source: see `modes` and `steps`.
"""

import math

import numpy as np

from service.sequential.double import FloatArray
from service.sequential.exact.characteristics import Characteristics, TooMuchWork, spread
from service.sequential.exact.modes import by_modes
from service.sequential.exact.steps import by_steps
from service.sequential.exact.strip import Figures, Strip
from service.sequential.region import StraightRegion

MOST_POINTS = 1_200
# A factor of more than exp(10) between the ends of the region would cost digits.
LARGEST_TILT = 10.0
# A larger drift leaves no probability of a second step that floating point could hold.
LARGEST_DRIFT = 30.0
# Rounding of the modes' sums, before it is magnified.
ROUNDING = 4e-15
# Multiplications for each cube of the points, about.
WORK = 20


def gaussian_characteristics(
    region: StraightRegion, means: FloatArray, sigma: float, progress: float = 0.0, total: float = 0.0
) -> Characteristics:
    """
    Exact figures at these means, from one point of the region on.

    Args:
        region: Two parallel lines of real totals, with or without a wall.
        means: Array of shape (points,).
        sigma: Standard deviation of one measurement, above 0.
        progress, total: Where sampling stands, inside the region.

    Raises:
        TooMuchWork: The region is too wide for the spread, or the wall too far.
    """
    strip = Strip(-region.lower_intercept / sigma, region.upper_intercept / sigma)
    drifts = (means - region.ratio.slope - region.ratio.slope_low) / sigma
    start = (total - (region.ratio.slope + region.ratio.slope_low) * progress) / sigma
    last = None if region.wall is None else max(1, math.ceil(region.wall.progress - progress))
    counts = _nodes(strip)
    fine, coarse = (_figures(strip, nodes, drifts, start, last) for nodes in counts)
    bound = float(np.max(np.abs(fine.below - coarse.below))) + float(np.max(np.abs(fine.above - coarse.above)))
    bound += float(np.max(np.abs(fine.mean / coarse.mean - 1.0))) + 1e-13
    # Both share the rounding that the tilt magnifies.
    tilt = _tilt(strip, drifts, start)
    bound += ROUNDING * math.exp(float(np.max(tilt, where=tilt <= LARGEST_TILT, initial=0.0)))
    deviation = spread(fine.mean, fine.second)
    return Characteristics(
        below=fine.below,
        between=np.zeros_like(fine.below),
        above=fine.above,
        mean=fine.mean,
        standard_deviation=deviation,
        quantiles=fine.quantiles(),
        error_bound=bound,
        work=WORK * counts[0] ** 3,
    )


def _nodes(strip: Strip) -> tuple[int, int]:
    """
    Numbers of Gauss-Legendre points: fine and coarse.

    A normal density needs not quite two points for each standard deviation, and some more for the ends.
    """
    coarse = 20 + math.ceil(2.0 * (strip.high - strip.low))
    fine = math.ceil(1.2 * coarse)
    if fine > MOST_POINTS:
        raise TooMuchWork(MOST_POINTS, "quadrature points")
    return fine, coarse


def _tilt(strip: Strip, drifts: FloatArray, start: float) -> FloatArray:
    """The logarithm of the factor by which a drift changes the density at the far end; shape (points,)."""
    tilt: FloatArray = np.abs(drifts) * max(strip.high - start, start - strip.low)
    return tilt


def _figures(strip: Strip, nodes: int, drifts: FloatArray, start: float, last: int | None) -> Figures:
    """Through the modes where the tilt is mild, step by step elsewhere."""
    is_mild = (_tilt(strip, drifts, start) <= LARGEST_TILT) & (np.abs(drifts) <= LARGEST_DRIFT)
    if np.all(is_mild):
        return by_modes(strip, nodes, drifts, start, last)
    if not np.any(is_mild):
        return by_steps(strip, nodes, drifts, start, last)
    parts = by_modes(strip, nodes, drifts[is_mild], start, last), by_steps(strip, nodes, drifts[~is_mild], start, last)

    def joined(mild: FloatArray, strong: FloatArray) -> FloatArray:
        column = np.empty((len(drifts), *mild.shape[1:]))
        column[is_mild], column[~is_mild] = mild, strong
        return column

    return Figures(
        joined(parts[0].below, parts[1].below),
        joined(parts[0].above, parts[1].above),
        joined(parts[0].mean, parts[1].mean),
        joined(parts[0].second, parts[1].second),
        lambda: joined(parts[0].quantiles(), parts[1].quantiles()),
    )
