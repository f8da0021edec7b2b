"""
Exact figures of a test of normal measurements between two parallel lines.

Quantity: probabilities of both decisions, mean, standard deviation and quantiles of the sample number.
Method: seen from the middle line the walk has steps N(mean - slope, sigma**2) between two constant limits. The density
of walks that go on is carried from step to step at Gauss-Legendre points, where quadrature of an analytic function
converges geometrically. Without a wall the moments solve Fredholm equations of the second kind at the same points.
Accuracy: the difference to a computation with half as many points again, reported as the error bound.
Cost: points squared for each step, points cubed for the equations, for each parameter.
Source: Page (1954), Biometrika 41, 100-115 (integral equations); Atkinson, The Numerical Solution of Integral Equations
of the Second Kind, chapter 4 (Nystroem's method).
"""

import math

import numpy as np
from scipy.special import ndtr

from service.sequential.double import FloatArray
from service.sequential.exact.characteristics import QUANTILES, Characteristics, TooMuchWork, spread
from service.sequential.region import StraightRegion

MOST_POINTS = 1500
MOST_STEPS = 100_000


def gaussian_characteristics(region: StraightRegion, means: FloatArray, sigma: float) -> Characteristics:
    """
    Exact figures at these means.

    Args:
        region: Two parallel lines of real totals, with or without a wall.
        means: Array of shape (points,).
        sigma: Standard deviation of one measurement, above 0.

    Raises:
        TooMuchWork: The region is too wide for the spread, or the wall too far.
    """
    width = (region.lower_intercept + region.upper_intercept) / sigma
    nodes = 40 + math.ceil(6.0 * width)
    if 1.5 * nodes > MOST_POINTS:
        raise TooMuchWork(MOST_POINTS)
    coarse = [_at(region, mean, sigma, nodes) for mean in means]
    fine = [_at(region, mean, sigma, math.ceil(1.5 * nodes)) for mean in means]
    columns = [np.array(column) for column in zip(*fine, strict=True)]
    differences = [
        max(abs(c[0] - f[0]), abs(c[1] - f[1]), abs(c[2] / f[2] - 1.0)) for c, f in zip(coarse, fine, strict=True)
    ]
    bound = max(*differences, 0.0) + 1e-14 * nodes
    below, above, mean, second, quantiles = columns
    return Characteristics(below, above, mean, spread(mean, second), quantiles, bound)


def _at(
    region: StraightRegion, mean: float, sigma: float, nodes: int
) -> tuple[float, float, float, float, list[float]]:
    """Both probabilities, two moments and the quantiles at one mean."""
    low, high = -region.lower_intercept / sigma, region.upper_intercept / sigma
    drift = (mean - region.ratio.slope - region.ratio.slope_low) / sigma
    x, weights = np.polynomial.legendre.leggauss(nodes)
    x = low + (high - low) * (x + 1.0) / 2.0
    weights = weights * (high - low) / 2.0
    onward = _density(x[np.newaxis, :] - x[:, np.newaxis] - drift) * weights
    to_below, to_above = ndtr(low - x - drift), ndtr(x + drift - high)
    first = _density(x - drift) * weights
    start = (float(ndtr(low - drift)), float(ndtr(drift - high)))
    if region.wall is None:
        return _open(onward, to_below, to_above, first, start)
    return _walled(region, onward, to_below, to_above, first, start, x, drift)


def _open(
    onward: FloatArray, to_below: FloatArray, to_above: FloatArray, first: FloatArray, start: tuple[float, float]
) -> tuple[float, float, float, float, list[float]]:
    """Without a wall: the equations f(x) = g(x) + integral of f over the next step."""
    system = np.eye(len(first)) - onward
    solved = np.linalg.solve(system, np.stack([to_below, to_above, np.ones_like(first)], axis=1))
    below, above, number = (first @ solved[:, i] for i in range(3))
    second = np.linalg.solve(system, 2.0 * solved[:, 2] - 1.0)
    mean = 1.0 + float(number)
    # E[N^2] from a point is 1 + 2 E[further N] + E[(further N)^2].
    square = 1.0 + 2.0 * float(number) + float(first @ second)
    quantiles = _quantiles(onward, first)
    return start[0] + float(below), start[1] + float(above), mean, square, quantiles


def _quantiles(onward: FloatArray, first: FloatArray) -> list[float]:
    """The first steps after which sampling goes on with at most 1 - q."""
    wanted, found, alive, n = list(QUANTILES), [], first, 1
    while wanted:
        while wanted and alive.sum() <= 1.0 - wanted[0]:
            found.append(float(n))
            wanted.pop(0)
        alive = alive @ onward
        n += 1
        if n > MOST_STEPS:
            raise TooMuchWork(MOST_STEPS)
    return found


def _walled(  # noqa: PLR0913 - the parts of one discretised walk
    region: StraightRegion,
    onward: FloatArray,
    to_below: FloatArray,
    to_above: FloatArray,
    first: FloatArray,
    start: tuple[float, float],
    x: FloatArray,
    drift: float,
) -> tuple[float, float, float, float, list[float]]:
    """With a wall: step by step up to it."""
    last = math.ceil(region.wall.progress) if region.wall is not None else 0
    if last > MOST_STEPS:
        raise TooMuchWork(MOST_STEPS)
    if last == 1:
        negative = float(ndtr(-drift))
        return negative, 1.0 - negative, 1.0, 1.0, [1.0] * len(QUANTILES)
    (below, above), alive, survival = start, first, [1.0]
    for n in range(2, last + 1):
        survival.append(float(alive.sum()))
        if n < last:
            below, above = below + float(alive @ to_below), above + float(alive @ to_above)
            alive = alive @ onward
        else:
            below, above = below + float(alive @ ndtr(-x - drift)), above + float(alive @ ndtr(x + drift))
    steps = np.arange(last)
    running = np.array([*survival, 0.0])
    quantiles = [float(np.argmax(running <= 1.0 - q)) for q in QUANTILES]
    mean, second = float(np.sum(survival)), float(np.sum((2.0 * steps + 1.0) * np.array(survival)))
    return below, above, mean, second, quantiles


def _density(z: FloatArray) -> FloatArray:
    density: FloatArray = np.exp(-0.5 * z * z) / math.sqrt(2.0 * math.pi)
    return density
