"""
Figures of a normal walk between two constant limits as sums over the modes of its kernel.

Quantity: probabilities of both ends, two moments and quantiles of the number of steps.
Method: the density of a walk with a drift is that of the walk without one times exp(drift * height - n * drift**2 / 2),
so one kernel serves every drift, and it is symmetric: discretised at Gauss-Legendre points, where quadrature of an
analytic function converges geometrically (Nystroem), its eigenvectors turn all sums over the steps into geometric ones.
Accuracy: rounding times exp(|drift| * reach), the factor between the ends of the strip.
Cost: points cubed once for each strip, points squared for each drift.
Source: Page (1954), Biometrika 41, 100-115 (integral equations); Atkinson, The Numerical Solution of Integral Equations
of the Second Kind, chapter 4; for the change of drift Siegmund (1985), Sequential Analysis, section 2.3.
"""

from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.linalg import eigh
from scipy.special import ndtr

from service.sequential.double import FloatArray
from service.sequential.exact.characteristics import LEVELS, QUANTILES
from service.sequential.exact.strip import Figures, Strip, density, nodes_between

MOST_STEPS = 1_000_000_000
# What a mode adds less than is left out.
NEGLIGIBLE_MODE = 1e-19


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


@lru_cache(maxsize=16)
def modes_of(strip: Strip, nodes: int) -> _Modes:
    """The modes of a strip at so many nodes; the last few strips asked for are kept."""
    x, weights = nodes_between(strip, nodes)
    roots = np.sqrt(weights)
    kernel = density(x[:, np.newaxis] - x[np.newaxis, :]) * roots[:, np.newaxis] * roots[np.newaxis, :]
    values, vectors = eigh(kernel, check_finite=False, overwrite_a=True, driver="evd")
    matter = values > 1e-16
    return _Modes(x, roots, values[matter], vectors[:, matter])


def by_modes(strip: Strip, nodes: int, drifts: FloatArray, start: float, last: int | None) -> Figures:
    """
    All sums over the sample number as geometric sums, for every drift at once; rows are drifts.

    Args:
        strip: The limits.
        nodes: Gauss-Legendre points.
        drifts: Array of shape (points,): mean step in standard deviations.
        start: The height to start from, inside the strip.
        last: Steps to the wall, which parts the heights at 0; None without one.
    """
    modes, drift = modes_of(strip, nodes), drifts[:, np.newaxis]
    first = density(modes.x - start)
    amplitudes = (modes.roots * first) @ modes.vectors
    tilt = np.exp(drift * (modes.x - start)) * modes.roots
    fade = np.exp(-0.5 * drifts**2)[:, np.newaxis]

    def alive_sums(weigh: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Of a function of the height among walks alive: its sum after step 1, and its amplitudes from then on."""
        tilted = tilt * weigh
        return fade[:, 0] * ((modes.roots * first) * tilted).sum(axis=1), amplitudes * (tilted @ modes.vectors)

    ratios = fade * modes.values
    logarithms = np.log(ratios)
    one, staying = alive_sums(np.ones_like(modes.x))
    down_one, down = alive_sums(ndtr(strip.low - modes.x - drift))
    up_one, up = alive_sums(ndtr(modes.x + drift - strip.high))
    down_now, up_now = ndtr(strip.low - start - drifts), ndtr(start + drifts - strip.high)

    def survival(n: FloatArray) -> FloatArray:
        """P(still sampling after n steps), n of shape (points, quantiles)."""
        later = n[n > 1.0]
        if not later.size:
            return np.where(n < 1.0, 1.0, one[:, np.newaxis])
        lasting = modes.values ** (np.min(later) - 1.0) > NEGLIGIBLE_MODE
        powers = np.exp((n[:, :, np.newaxis] - 1.0) * logarithms[:, np.newaxis, lasting])
        alive = fade * np.einsum("pm,pqm->pq", staying[:, lasting], powers)
        return np.where(n < 1.0, 1.0, np.where(n < 2.0, one[:, np.newaxis], alive))

    if last is None:
        below = down_now + down_one + (down * fade * ratios / (1.0 - ratios)).sum(axis=1)
        above = up_now + up_one + (up * fade * ratios / (1.0 - ratios)).sum(axis=1)
        mean = 1.0 + one + (staying * fade * ratios / (1.0 - ratios)).sum(axis=1)
        # E[N^2] is the sum of (2 n + 1) P(N > n).
        weights = ratios * (5.0 - 3.0 * ratios) / (1.0 - ratios) ** 2
        second = 1.0 + 3.0 * one + (staying * fade * weights).sum(axis=1)
        return Figures(below, above, mean, second, lambda: _quantiles(survival, MOST_STEPS, mean))
    forced_now = ndtr(-start - drifts)
    if last == 1:
        certain = np.ones_like(drifts)
        return Figures(forced_now, 1.0 - forced_now, certain, certain, lambda: np.ones((len(drifts), len(QUANTILES))))
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
    return Figures(below, above, mean, second, lambda: _quantiles(survival, last, mean))


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


def _quantiles(survival: Callable[[FloatArray], FloatArray], last: int, mean: FloatArray) -> FloatArray:
    """The first n with P(still sampling) <= 1 - q, by doubling the mean and bisection; array of shape (points, 4)."""
    high = np.repeat(np.minimum(np.ceil(mean), last)[:, np.newaxis], len(QUANTILES), axis=1)
    low = np.zeros_like(high)
    while np.any(is_open := (survival(high) > LEVELS) & (high < last)):
        low, high = np.where(is_open, high, low), np.where(is_open, np.minimum(2.0 * high, last), high)
    while np.any(high - low > 1.0):
        middle = np.floor(0.5 * (low + high))
        is_early = survival(middle) > LEVELS
        low, high = np.where(is_early, middle, low), np.where(is_early, high, middle)
    return high
