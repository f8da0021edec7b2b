"""
Exact figures of a test of normal measurements between two parallel lines.

Quantity: probabilities of both decisions, mean, standard deviation and quantiles of the further sample number.
Method: seen from the middle line the walk has steps N(drift, 1), in standard deviations, between two constant limits.
The density of a walk with a drift is that of the walk without one times exp(drift * height - n * drift**2 / 2), so one
kernel serves every parameter, and it is symmetric: discretised at Gauss-Legendre points, where quadrature of an
analytic function converges geometrically (Nystroem), its eigenvectors turn all sums over the sample number into
geometric ones. Where the factor would lose digits the equations are solved directly instead.
Accuracy: the difference to a computation with fewer points, reported as the error bound.
Cost: points cubed once for each region, points squared for each parameter.
Source: Page (1954), Biometrika 41, 100-115 (integral equations); Atkinson, The Numerical Solution of Integral Equations
of the Second Kind, chapter 4; for the change of drift Siegmund (1985), Sequential Analysis, section 2.3.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.linalg import eigh
from scipy.special import ndtr

from service.sequential.double import FloatArray
from service.sequential.exact.characteristics import QUANTILES, Characteristics, TooMuchWork, spread
from service.sequential.region import StraightRegion

MOST_POINTS = 1_200
MOST_STEPS = 1_000_000_000
MOST_STEPS_DIRECTLY = 100_000
# A factor of more than exp(12) between the ends of the region would cost digits.
LARGEST_TILT = 12.0


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
    strip = _Strip(-region.lower_intercept / sigma, region.upper_intercept / sigma)
    drifts = (means - region.ratio.slope - region.ratio.slope_low) / sigma
    start = (total - (region.ratio.slope + region.ratio.slope_low) * progress) / sigma
    last = None if region.wall is None else max(1, math.ceil(region.wall.progress - progress))
    counts = _nodes(strip)
    fine, coarse = (_figures(strip, nodes, drifts, start, last) for nodes in counts)
    bound = float(np.max(np.abs(fine.below - coarse.below))) + float(np.max(np.abs(fine.above - coarse.above)))
    bound += float(np.max(np.abs(fine.mean / coarse.mean - 1.0))) + 1e-13
    deviation = spread(fine.mean, fine.second)
    return Characteristics(fine.below, fine.above, fine.mean, deviation, fine.quantiles, bound, 20 * counts[0] ** 3)


@dataclass(frozen=True)
class _Strip:
    """The two limits as seen from the middle line, in standard deviations."""

    low: float
    high: float


@dataclass(frozen=True)
class _Figures:
    """Arrays of shape (points,), quantiles of shape (points, 4)."""

    below: FloatArray
    above: FloatArray
    mean: FloatArray
    second: FloatArray
    quantiles: FloatArray


@dataclass(frozen=True)
class _Modes:
    """
    The kernel of the walk without drift at the nodes, and its eigenvectors.

    Attributes:
        x: Array of shape (nodes,): the nodes.
        roots: Array of shape (nodes,): square roots of the quadrature weights.
        values: Array of shape (modes,): the eigenvalues that matter, all in (0, 1).
        vectors: Array of shape (nodes, modes).
    """

    x: FloatArray
    roots: FloatArray
    values: FloatArray
    vectors: FloatArray


def _nodes(strip: _Strip) -> tuple[int, int]:
    """
    Numbers of Gauss-Legendre points: fine and coarse.

    A normal density needs about two points for each standard deviation, and some more for the ends.
    """
    coarse = 30 + math.ceil(3.5 * (strip.high - strip.low))
    fine = math.ceil(1.2 * coarse)
    if fine > MOST_POINTS:
        raise TooMuchWork(MOST_POINTS, "quadrature points")
    return fine, coarse


def _figures(strip: _Strip, nodes: int, drifts: FloatArray, start: float, last: int | None) -> _Figures:
    """Through the modes where the tilt is mild, directly elsewhere."""
    reach = max(strip.high - start, start - strip.low)
    is_mild = np.abs(drifts) * reach <= LARGEST_TILT
    columns = [
        np.empty(len(drifts)),
        np.empty(len(drifts)),
        np.empty(len(drifts)),
        np.empty(len(drifts)),
        np.empty((len(drifts), len(QUANTILES))),
    ]
    parts = [(is_mild, _by_modes), (~is_mild, _directly)]
    for chosen, method in parts:
        if np.any(chosen):
            found = method(strip, nodes, drifts[chosen], start, last)
            values = (found.below, found.above, found.mean, found.second, found.quantiles)
            for column, value in zip(columns, values, strict=True):
                column[chosen] = value
    return _Figures(*columns)


@lru_cache(maxsize=64)
def _modes(strip: _Strip, nodes: int) -> _Modes:
    x, weights = _points(strip, nodes)
    roots = np.sqrt(weights)
    kernel = _density(x[:, np.newaxis] - x[np.newaxis, :]) * roots[:, np.newaxis] * roots[np.newaxis, :]
    values, vectors = eigh(kernel, check_finite=False, overwrite_a=True)
    matter = values > 1e-16
    return _Modes(x, roots, values[matter], vectors[:, matter])


def _by_modes(strip: _Strip, nodes: int, drifts: FloatArray, start: float, last: int | None) -> _Figures:
    """All sums over the sample number as geometric sums, for every drift at once; rows are drifts."""
    modes, drift = _modes(strip, nodes), drifts[:, np.newaxis]
    first = _density(modes.x - start)
    amplitudes = (modes.roots * first) @ modes.vectors
    tilt = np.exp(drift * (modes.x - start)) * modes.roots
    fade = np.exp(-0.5 * drifts**2)[:, np.newaxis]

    def alive_sums(weigh: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Of a function of the height among walks alive: its sum after step 1, and its amplitudes from then on."""
        tilted = tilt * weigh
        return fade[:, 0] * ((modes.roots * first) * tilted).sum(axis=1), amplitudes * (tilted @ modes.vectors)

    ratios = fade * modes.values
    one, staying = alive_sums(np.ones_like(modes.x))
    down_one, down = alive_sums(ndtr(strip.low - modes.x - drift))
    up_one, up = alive_sums(ndtr(modes.x + drift - strip.high))
    down_now, up_now = ndtr(strip.low - start - drifts), ndtr(start + drifts - strip.high)

    def survival(n: FloatArray) -> FloatArray:
        """P(still sampling after n steps), n of shape (points,)."""
        later = (staying * fade * np.exp((n[:, np.newaxis] - 1.0) * np.log(ratios))).sum(axis=1)
        return np.where(n < 1.0, 1.0, np.where(n < 2.0, one, later))

    if last is None:
        below = down_now + down_one + (down * fade * ratios / (1.0 - ratios)).sum(axis=1)
        above = up_now + up_one + (up * fade * ratios / (1.0 - ratios)).sum(axis=1)
        mean = 1.0 + one + (staying * fade * ratios / (1.0 - ratios)).sum(axis=1)
        # E[N^2] is the sum of (2 n + 1) P(N > n).
        weights = ratios * (5.0 - 3.0 * ratios) / (1.0 - ratios) ** 2
        second = 1.0 + 3.0 * one + (staying * fade * weights).sum(axis=1)
        return _Figures(below, above, mean, second, _quantiles(survival, MOST_STEPS, len(drifts)))
    forced_now = ndtr(-start - drifts)
    if last == 1:
        certain = np.ones_like(drifts)
        return _Figures(forced_now, 1.0 - forced_now, certain, certain, np.ones((len(drifts), len(QUANTILES))))
    forced_one, forced = alive_sums(ndtr(-modes.x - drift))
    raised_one, raised = alive_sums(ndtr(modes.x + drift))
    # After steps 1 to last - 2 the next one meets the lines; after step last - 1 it meets the wall.
    lines = _geometric(ratios, last - 3) * fade
    wall = fade * ratios ** (last - 2)
    is_second_last = last == 2
    below = down_now + (0.0 if is_second_last else down_one + (down * lines).sum(axis=1))
    below = below + (forced_one if is_second_last else (forced * wall).sum(axis=1))
    above = up_now + (0.0 if is_second_last else up_one + (up * lines).sum(axis=1))
    above = above + (raised_one if is_second_last else (raised * wall).sum(axis=1))
    mean = 1.0 + one + (staying * fade * _geometric(ratios, last - 2)).sum(axis=1)
    second = 1.0 + 3.0 * one + (staying * fade * _weighted(ratios, last - 2)).sum(axis=1)
    return _Figures(below, above, mean, second, _quantiles(survival, last, len(drifts)))


def _geometric(z: FloatArray, count: int) -> FloatArray:
    """Z + z^2 + … + z^count."""
    return z * (1.0 - z**count) / (1.0 - z) if count > 0 else np.zeros_like(z)


def _weighted(z: FloatArray, count: int) -> FloatArray:
    """5 z + 7 z^2 + … + (2 count + 3) z^count: n steps weigh 2 n + 1, from n = 2 on."""
    if count <= 0:
        return np.zeros_like(z)
    rest = z**count
    first_powers = z * (1.0 - rest) / (1.0 - z)
    numbered = z * (1.0 - (count + 1.0) * rest + count * rest * z) / (1.0 - z) ** 2
    return 2.0 * numbered + 3.0 * first_powers


def _quantiles(survival: Callable[[FloatArray], FloatArray], last: int, points: int) -> FloatArray:
    """The first n with P(still sampling) <= 1 - q, by doubling and bisection; array of shape (points, 4)."""
    columns = []
    for q in QUANTILES:
        low, high = np.zeros(points), np.ones(points)
        while np.any(open_ := (survival(high) > 1.0 - q) & (high < last)):
            low, high = np.where(open_, high, low), np.where(open_, np.minimum(2.0 * high, last), high)
        while np.any(high - low > 1.0):
            middle = np.floor(0.5 * (low + high))
            is_early = survival(middle) > 1.0 - q
            low, high = np.where(is_early, middle, low), np.where(is_early, high, middle)
        columns.append(high)
    return np.stack(columns, axis=1)


def _directly(strip: _Strip, nodes: int, drifts: FloatArray, start: float, last: int | None) -> _Figures:
    """One drift after the other, its own kernel for each."""
    rows = [_directly_at(strip, nodes, float(drift), start, last) for drift in drifts]
    return _Figures(*(np.array(column) for column in zip(*rows, strict=True)))


def _directly_at(
    strip: _Strip, nodes: int, drift: float, start: float, last: int | None
) -> tuple[float, float, float, float, list[float]]:
    """Both probabilities, two moments and the quantiles at one drift, step by step."""
    x, weights = _points(strip, nodes)
    onward = _density(x[np.newaxis, :] - x[:, np.newaxis] - drift) * weights
    to_below, to_above = ndtr(strip.low - x - drift), ndtr(x + drift - strip.high)
    below, above = float(ndtr(strip.low - start - drift)), float(ndtr(start + drift - strip.high))
    if last == 1:
        forced = float(ndtr(-start - drift))
        return forced, 1.0 - forced, 1.0, 1.0, [1.0] * len(QUANTILES)
    alive, survival, n = _density(x - start - drift) * weights, [1.0], 1
    while (rest := float(alive.sum())) > 1e-16 and n != last:
        survival.append(rest)
        n += 1
        if n > MOST_STEPS_DIRECTLY:
            raise TooMuchWork(MOST_STEPS_DIRECTLY, "steps")
        if n == last:
            below, above = below + float(alive @ ndtr(-x - drift)), above + float(alive @ ndtr(x + drift))
        else:
            below, above = below + float(alive @ to_below), above + float(alive @ to_above)
            alive = alive @ onward
    running = np.array([*survival, 0.0])
    weigh = 2.0 * np.arange(len(survival)) + 1.0
    quantiles = [float(np.argmax(running <= 1.0 - q)) for q in QUANTILES]
    return below, above, float(np.sum(survival)), float(np.sum(weigh * np.array(survival))), quantiles


def _points(strip: _Strip, nodes: int) -> tuple[FloatArray, FloatArray]:
    """Gauss-Legendre nodes and weights between the limits."""
    x, weights = _legendre(nodes)
    half = (strip.high - strip.low) / 2.0
    return strip.low + half * (x + 1.0), half * weights


@lru_cache(maxsize=256)
def _legendre(nodes: int) -> tuple[FloatArray, FloatArray]:
    x, weights = np.polynomial.legendre.leggauss(nodes)
    return x, weights


def _density(z: FloatArray) -> FloatArray:
    density: FloatArray = np.exp(-0.5 * z * z) / math.sqrt(2.0 * math.pi)
    return density
