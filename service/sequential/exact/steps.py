"""
Figures of a normal walk between two constant limits, followed step by step.

Quantity: probabilities of both ends, two moments and quantiles of the number of steps, for each drift by itself.
Method: the density of walks that go on is carried from step to step at Gauss-Legendre points.
Accuracy: rounding, and the probability that is no longer followed (1e-16).
Cost: points squared for each step and drift.
Source: Page (1954), Biometrika 41, 100-115; Atkinson, The Numerical Solution of Integral Equations of the Second Kind,
chapter 4.
"""

import numpy as np
from scipy.special import ndtr

from service.sequential.double import FloatArray
from service.sequential.exact.characteristics import QUANTILES, TooMuchWork
from service.sequential.exact.strip import Figures, Strip, density, nodes_between

MOST_WORK = 3_000_000_000
NEGLIGIBLE = 1e-16


def by_steps(strip: Strip, nodes: int, drifts: FloatArray, start: float, last: int | None) -> Figures:
    """
    One drift after the other; arguments as for `modes.by_modes`.

    Raises:
        TooMuchWork: More multiplications than are allowed for all drifts together.
    """
    most = MOST_WORK // (nodes * nodes * len(drifts))
    rows = [_at(strip, nodes, float(drift), start, last, most) for drift in drifts]
    below, above, mean, second, quantiles = (np.array(column) for column in zip(*rows, strict=True))
    return Figures(below, above, mean, second, lambda: quantiles)


def _at(  # noqa: PLR0913 - the parts of one walk
    strip: Strip, nodes: int, drift: float, start: float, last: int | None, most: int
) -> tuple[float, float, float, float, list[float]]:
    """Both probabilities, two moments and the quantiles at one drift, step by step."""
    x, weights = nodes_between(strip, nodes)
    onward = density(x[np.newaxis, :] - x[:, np.newaxis] - drift) * weights
    to_below, to_above = ndtr(strip.low - x - drift), ndtr(x + drift - strip.high)
    below, above = float(ndtr(strip.low - start - drift)), float(ndtr(start + drift - strip.high))
    if last == 1:
        forced = float(ndtr(-start - drift))
        return forced, 1.0 - forced, 1.0, 1.0, [1.0] * len(QUANTILES)
    alive, survival, n = density(x - start - drift) * weights, [1.0], 1
    while (rest := float(alive.sum())) > NEGLIGIBLE and n != last:
        survival.append(rest)
        n += 1
        if n > most:
            raise TooMuchWork(MOST_WORK, "multiplications")
        if n == last:
            below, above = below + float(alive @ ndtr(-x - drift)), above + float(alive @ ndtr(x + drift))
        else:
            below, above = below + float(alive @ to_below), above + float(alive @ to_above)
            alive = alive @ onward
    running = np.array([*survival, 0.0])
    weigh = 2.0 * np.arange(len(survival)) + 1.0
    quantiles = [float(np.argmax(running <= 1.0 - q)) for q in QUANTILES]
    return below, above, float(np.sum(survival)), float(np.sum(weigh * np.array(survival))), quantiles
