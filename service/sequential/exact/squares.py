"""
Exact figures of a test of spread: a sum of squares of normal deviations between two parallel lines.

Quantity: probabilities of both decisions, mean, standard deviation and quantiles of the further progress, for each
variance by itself.
Method: in units of the variance each step of the total is the square of a standard normal number, and seen from the
lines it falls by a constant first. Whatever is asked of the rest of the walk is a function of its height that solves an
integral equation, kept on the panels of `panels.py`. It has corners above the lower line, and above the middle where
there is a wall.
Accuracy: the difference to a computation with fewer points, reported as the error bound.
Cost: points cubed for each variance, and points squared for each step to the quantiles or to the wall.
Source: Page (1954), Biometrika 41, 100-115 (integral equations).
"""

import math
from dataclasses import dataclass

import numpy as np
from scipy.linalg import lu_factor, lu_solve
from scipy.special import erf, erfc, gammainc, gammaincc

from service.sequential.double import FloatArray
from service.sequential.exact.characteristics import QUANTILES, Characteristics, TooMuchWork, spread
from service.sequential.exact.panels import Kernel, Law, Resolution, Room, highest_rise, kernel_of
from service.sequential.region import Region, StraightRegion, looks_to_wall

MOST_WORK = 1_500_000_000
# Variances beyond these multiples of the slope are as these.
SMALLEST, LARGEST = 1e-100, 1e100
NEGLIGIBLE = 1e-15
# The quotient of two successive probabilities of still sampling no longer moves.
SETTLED = 1e-11


@dataclass(frozen=True)
class _Walk:
    """
    A walk in units of the variance, seen from the lines: each step falls by `fall` and rises by a square.

    Attributes:
        low, high: The lines.
        start: Its height, between them.
        last: Steps to the wall, which parts the heights at 0; None without one.
    """

    low: float
    high: float
    fall: float
    start: float
    last: int | None


# Computations from coarse to fine; each is compared with the one before, until two are this close.
RESOLUTIONS = tuple(Resolution(*numbers) for numbers in ((12, 12), (16, 14), (24, 20), (36, 28)))
CLOSE = 1e-9


@dataclass(frozen=True)
class _Row:
    """The figures of one walk."""

    below: float
    above: float
    mean: float
    second: float
    quantiles: list[float]
    work: int = 0


def squares_characteristics(
    region: Region, variances: FloatArray, progress: float = 0.0, total: float = 0.0
) -> Characteristics:
    """
    Exact figures at these variances, from one point of the region on.

    Args:
        region: Two parallel lines of sums of squares, with or without a wall; one unit of progress adds one square.
        variances: Array of shape (points,), all above 0.
        progress, total: Where sampling stands, inside the region.

    Raises:
        TooMuchWork: The region is too wide for a variance, or the wall too far.
        TypeError: The region is bounded by curves.
    """
    if not isinstance(region, StraightRegion):
        raise TypeError("only straight regions of squares are followed exactly")
    rows, bound, work = [], 0.0, 0
    for variance in variances.tolist():
        walk = _walk_of(region, variance, progress, total)
        row, error = _compared(walk)
        bound, work = max(bound, error), work + row.work
        rows.append(row)
        if work > MOST_WORK:
            raise TooMuchWork(MOST_WORK, "multiplications")
    mean, second = np.array([row.mean for row in rows]), np.array([row.second for row in rows])
    return Characteristics(
        below=np.array([row.below for row in rows]),
        between=np.zeros(len(rows)),
        above=np.array([row.above for row in rows]),
        mean=mean,
        standard_deviation=spread(mean, second),
        quantiles=np.array([row.quantiles for row in rows]),
        error_bound=bound,
        work=work,
    )


def _walk_of(region: StraightRegion, variance: float, progress: float, total: float) -> _Walk:
    slope = region.ratio.slope
    variance = min(max(variance, SMALLEST * slope), LARGEST * slope)
    return _Walk(
        low=-region.lower_intercept / variance,
        high=region.upper_intercept / variance,
        fall=slope / variance,
        start=(total - slope * progress) / variance,
        last=None if region.wall is None else looks_to_wall(region.wall, 1.0, progress),
    )


def _compared(walk: _Walk) -> tuple[_Row, float]:
    """The figures, and a bound of their error."""
    if walk.last == 1:
        below = float(_below(np.array([walk.start]), 0.0, walk.fall)[0])
        return _Row(below, 1.0 - below, 1.0, 1.0, [1.0] * len(QUANTILES)), NEGLIGIBLE
    simple = _falling(walk) or _leaping(walk)
    if simple is not None:
        return simple, 4.0 * NEGLIGIBLE
    near = _Walk(walk.low, min(walk.high, walk.start + highest_rise(walk.fall)), walk.fall, walk.start, walk.last)
    fine, error = _figures(near, RESOLUTIONS[0]), math.inf
    for resolution in RESOLUTIONS[1:]:
        if error <= CLOSE:
            break
        coarse, fine = fine, _figures(near, resolution)
        error = abs(fine.below - coarse.below) + abs(fine.above - coarse.above) + abs(fine.mean / coarse.mean - 1.0)
    return fine, error + 1e-13 * max(1.0, 0.01 * fine.mean)


def _falling(walk: _Walk) -> _Row | None:
    """A spread so small that the walk all but falls: it ends at the first step that may end it, or at the next."""
    first = max(1.0, math.ceil((walk.start - walk.low) / walk.fall))
    is_forced = walk.last is not None and walk.last <= first
    if walk.last is not None and is_forced:
        first = walk.last - 1.0
    room = (0.0 if is_forced else walk.low) - walk.start + walk.fall * (first + 1.0)
    ceiling = min(room, walk.high - walk.start + walk.fall)
    if ceiling <= 0.0 or gammaincc((first + 1.0) / 2.0, ceiling / 2.0) > NEGLIGIBLE:
        return None
    at_once = 0.0 if is_forced else float(gammainc(first / 2.0, max(0.0, room - walk.fall) / 2.0))
    mean, second = first + 1.0 - at_once, (first + 1.0) ** 2 - at_once * (2.0 * first + 1.0)
    quantiles = [first if 1.0 - at_once <= 1.0 - q else first + 1.0 for q in QUANTILES]
    return _Row(1.0, 0.0, mean, second, quantiles)


def _leaping(walk: _Walk) -> _Row | None:
    """A spread so large that the first square goes beyond all."""
    first = np.array([walk.start])
    if erf(math.sqrt((walk.high - walk.start + walk.fall) / 2.0)) > NEGLIGIBLE:
        return None
    below, above = float(_below(first, walk.low, walk.fall)[0]), float(_above(first, walk.high, walk.fall)[0])
    return _Row(below, above, 1.0, 1.0, [1.0] * len(QUANTILES))


def _figures(walk: _Walk, resolution: Resolution) -> _Row:
    lines = (walk.low,) if walk.last is None else (walk.low, 0.0)
    kernel = kernel_of(Room(walk.low, walk.high, walk.fall, lines), [Law(walk.start - walk.fall)], resolution)
    onward, begin = kernel.onward, kernel.begin[0]
    here = np.array([walk.start])
    down, up = _below(kernel.heights, walk.low, walk.fall), _above(kernel.heights, walk.high, walk.fall)
    down_now, up_now = (float(f(here, at, walk.fall)[0]) for f, at in ((_below, walk.low), (_above, walk.high)))
    if walk.last is not None:
        forced = _below(kernel.heights, 0.0, walk.fall)
        return _to_the_wall(kernel, (down_now, up_now), np.stack([down, up, forced, 1.0 - forced], axis=1), walk.last)
    lu = lu_factor(np.eye(len(onward)) - onward, check_finite=False)
    solved = lu_solve(lu, np.stack([down, up, np.ones_like(down)], axis=1), check_finite=False)
    lasting = solved[:, 2]
    squared = lu_solve(lu, 1.0 + 2.0 * (onward @ lasting), check_finite=False)
    quantiles, steps = _quantiles(kernel) if resolution is not RESOLUTIONS[0] else ([], 0)
    return _Row(
        below=down_now + float(begin @ solved[:, 0]),
        above=up_now + float(begin @ solved[:, 1]),
        mean=1.0 + float(begin @ lasting),
        second=1.0 + float(begin @ (2.0 * lasting + squared)),
        quantiles=quantiles,
        work=kernel.work + len(onward) ** 3 // 10 + steps * len(onward) ** 2 // 2,
    )


def _below(heights: FloatArray, line: float, fall: float) -> FloatArray:
    """P(the next step comes to a line or under it)."""
    reached: FloatArray = erf(np.sqrt(np.maximum(line - heights + fall, 0.0) / 2.0))
    return reached


def _above(heights: FloatArray, line: float, fall: float) -> FloatArray:
    """P(the next step comes to a line or over it)."""
    reached: FloatArray = erfc(np.sqrt(np.maximum(line - heights + fall, 0.0) / 2.0))
    return reached


def _quantiles(kernel: Kernel) -> tuple[list[float], int]:
    """The first step after which sampling goes on with at most 1 - q, and the steps that it took."""
    levels = [1.0 - q for q in QUANTILES]
    alive, survival, quotient = kernel.begin[0], [1.0, float(kernel.begin[0].sum())], 0.0
    most = max(1, MOST_WORK // len(alive) ** 2)
    while survival[-1] > levels[-1]:
        alive = alive @ kernel.onward
        survival.append(float(alive.sum()))
        before, quotient = quotient, survival[-1] / survival[-2]
        if _is_settled(before, quotient, survival[-1]):
            break
        if len(survival) > most:
            raise TooMuchWork(MOST_WORK, "multiplications")
    reached = np.array(survival)
    found = []
    for level in levels:
        if reached[-1] <= level:
            found.append(float(np.argmax(reached <= level)))
        else:  # from here on the probability falls by the same quotient
            found.append(len(reached) - 1.0 + math.ceil(math.log(level / reached[-1]) / math.log(quotient)))
    return found, len(survival)


def _is_settled(before: float, quotient: float, alive: float) -> bool:
    return alive < 0.5 and quotient < 1.0 and abs(quotient - before) < SETTLED * (1.0 - quotient)


def _to_the_wall(kernel: Kernel, now: tuple[float, float], ends: FloatArray, last: int) -> _Row:
    """
    Step by step to the wall.

    Args:
        kernel: The walk.
        now: P(below) and P(above) in the first step.
        ends: Array of shape (nodes, 4): P(below) and P(above) in a step between the lines, and in the last one.
        last: Steps to the wall, at least 2.
    """
    below, above = now
    alive, survival, step, rest = kernel.begin[0], [1.0], 1, 1.0
    most = max(1, MOST_WORK // len(alive) ** 2)
    while step < last and (rest := float(alive.sum())) > NEGLIGIBLE * 1e-1:
        survival.append(rest)
        step += 1
        chances = alive @ ends
        is_last = step == last
        below, above = below + float(chances[2 * is_last]), above + float(chances[2 * is_last + 1])
        alive = alive @ kernel.onward
        if step > most:
            raise TooMuchWork(MOST_WORK, "multiplications")
    reached = np.array([*survival, 0.0])
    weigh = 2.0 * np.arange(len(survival)) + 1.0
    quantiles = [float(np.argmax(reached <= 1.0 - q)) for q in QUANTILES]
    mean, second = float(np.sum(survival)), float(np.sum(weigh * np.array(survival)))
    return _Row(below, above, mean, second, quantiles, kernel.work + step * len(alive) ** 2 // 2)
