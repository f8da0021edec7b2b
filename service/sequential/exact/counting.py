"""
Exact figures of a test whose total is a whole number, looked at after each step.

Quantity: probabilities of both decisions, mean, standard deviation and quantiles of the sample number.
Method: recursion over the totals between the limits, all parameters at once. Without a wall it runs until the
probability of still sampling is below 1e-13; the rest is closed as a geometric tail, which it has become by then.
Accuracy: rounding, about 1e-16 for each step, and the tail that is closed.
Cost: steps times width of the region times longest jump, for each parameter.
Source: Aroian (1968), Technometrics 10, 125-132 (direct method); Wald (1945), section 5.
"""

import math

import numpy as np
from scipy.special import gammaln, xlogy

from service.sequential.double import Double, FloatArray
from service.sequential.exact.characteristics import NEGLIGIBLE, QUANTILES, Characteristics, TooMuchWork, spread
from service.sequential.region import BELOW, Region

MOST_STEPS = 100_000
# Limits are asked for so many steps at a time.
BLOCK = 512


def counting_characteristics(region: Region, jumps: FloatArray, step: float) -> Characteristics:
    """
    Follow the totals from 0 until everything is decided.

    Args:
        region: The continuation region, of whole totals.
        jumps: Array of shape (points, jumps): the probability of each increase 0, 1, 2, … in one step; what a row lacks
            to one is the probability of a jump beyond the last, which must lie beyond every upper limit.
        step: Progress in one step: one unit, or the exposure of one report.

    Raises:
        TooMuchWork: More than 100,000 steps.
    """
    points, longest = jumps.shape
    alive = np.ones((points, 1))
    lowest = 0
    below, above = np.zeros(points), np.zeros(points)
    survival = [np.ones(points)]
    last = _steps_to_wall(region, step)
    for n in range(1, last + 1):
        if n > MOST_STEPS:
            raise TooMuchWork(MOST_STEPS)
        if (n - 1) % BLOCK == 0:
            lower, upper = _limits(region, step * np.arange(n, n + BLOCK, dtype=np.float64))
        at = (n - 1) % BLOCK
        highest = lowest + alive.shape[1] - 1 + longest - 1
        width = int(min(highest, upper[at] - 1)) - lowest + 1
        before = alive.sum(axis=1)
        moved = _moved(alive, jumps, width)
        above += before - moved.sum(axis=1)
        cut = int(max(0, lower[at] - lowest + 1)) if lower[at] >= lowest else 0
        below += moved[:, :cut].sum(axis=1)
        alive, lowest = moved[:, cut:], lowest + cut
        if n == last:
            below, above = _forced(region, n * step, alive, lowest, below, above)
            alive = alive[:, :0]
        running = alive.sum(axis=1)
        survival.append(running)
        if alive.shape[1] == 0 or np.max(running) < NEGLIGIBLE:
            break
    return _summarised(np.array(survival), below, above, step)


def bernoulli_jumps(proportions: FloatArray) -> FloatArray:
    """Jumps of one unit; array of shape (points, 2)."""
    return np.stack([1.0 - proportions, proportions], axis=1)


def poisson_jumps(means: FloatArray, largest: int) -> FloatArray:
    """Jumps of one report with these means, up to `largest`; array of shape (points, largest + 1)."""
    k = np.arange(largest + 1.0)
    m = means[:, np.newaxis]
    return np.exp(xlogy(k, m) - m - gammaln(k + 1.0))


def _moved(alive: FloatArray, jumps: FloatArray, width: int) -> FloatArray:
    """One step on; what passes `width` totals is left out."""
    moved = np.zeros((alive.shape[0], max(0, width)))
    for jump in range(min(jumps.shape[1], width)):
        reach = min(alive.shape[1], width - jump)
        moved[:, jump : jump + reach] += alive[:, :reach] * jumps[:, jump : jump + 1]
    return moved


def _limits(region: Region, progress: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Limits with the wall's cap, but without its forced decision, which comes last."""
    limits = region.limits(progress)
    if region.wall is None:
        return limits.lower, limits.upper
    before = progress < region.wall.progress
    return np.where(before, limits.lower, -np.inf), np.where(before, limits.upper, np.inf)


def _steps_to_wall(region: Region, step: float) -> int:
    if region.wall is None:
        return MOST_STEPS + 1
    return math.ceil(region.wall.progress / step * (1.0 - 1e-12))


def _forced(  # noqa: PLR0913 - the parts of one recursion
    region: Region, progress: float, alive: FloatArray, lowest: int, below: FloatArray, above: FloatArray
) -> tuple[FloatArray, FloatArray]:
    totals = lowest + np.arange(alive.shape[1], dtype=float)
    where = Double(np.full_like(totals, progress), np.zeros_like(totals))
    goes_below = region.sides_at_wall(where, Double(totals, np.zeros_like(totals))) == BELOW
    return below + alive[:, goes_below].sum(axis=1), above + alive[:, ~goes_below].sum(axis=1)


def _summarised(survival: FloatArray, below: FloatArray, above: FloatArray, step: float) -> Characteristics:
    """Moments and quantiles from the probabilities of still sampling; survival of shape (steps + 1, points)."""
    n = np.arange(len(survival), dtype=float)[:, np.newaxis]
    mean = survival.sum(axis=0)
    second = ((2.0 * n + 1.0) * survival).sum(axis=0)
    rest = survival[-1]
    tail = np.zeros_like(rest)
    if len(survival) > 2 and np.any(rest > 0.0):
        ratio = np.divide(rest, survival[-2], out=np.zeros_like(rest), where=survival[-2] > 0.0)
        tail = rest * ratio / np.maximum(1.0 - ratio, 1e-12)
    quantiles = np.array([np.argmax(survival <= 1.0 - q + 1e-15, axis=0) for q in QUANTILES], dtype=float).T
    bound = float(np.max(rest)) + len(survival) * np.finfo(float).eps
    return Characteristics(below, above, step * (mean + tail), step * spread(mean, second), step * quantiles, bound)
