"""
The invariant test of one sample, cut off after a few looks, as a chain of its statistic on a fine grid.

Unclever on purpose. With delta = 0 the sum over the root of the sum of squares, r, moves to (r + u)/sqrt(1 + u**2),
where u is Student's t with n degrees of freedom over sqrt(n), n the number of measurements before: the squares are
independent of their direction. The figures under delta are means under 0 of what happens times the ratio of the
densities of t at the end, which are those of scipy, good for so few degrees of freedom. No limit, ratio or quadrature
of the service is used.
"""

import math
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray
from scipy.stats import nct
from scipy.stats import t as student

Array = NDArray[np.float64]


class Chain:
    """
    One test: its hypotheses, thresholds, last look and sides.

    `fineness` is the number of angles whose sine is r/sqrt(n), and a third of that of the moves from each. Figures with
    301 and 1201 agree to 3e-4.
    """

    def __init__(
        self, deltas: tuple[float, float], thresholds: tuple[float, float], last: int, sides: int, fineness: int
    ) -> None:
        self._deltas, self._thresholds, self._last, self._sides = deltas, thresholds, last, sides
        self._angles = np.linspace(-math.pi / 2, math.pi / 2, fineness + 2)[1:-1]
        shares = (np.arange(3 * fineness) + 0.5) / (3 * fineness)
        self._moves = [np.zeros(1), *(student.ppf(shares, n) / math.sqrt(n) for n in range(1, last))]

    def rejection(self, delta: float) -> float:
        """The probability of rejection under delta."""
        return self._mean(delta, lambda ratio, _: (ratio > 0.0).astype(float))

    def sample_number(self, delta: float) -> float:
        """The average sample number under delta."""
        return self._mean(delta, lambda ratio, n: np.full(ratio.shape, float(n)))

    def _mean(self, delta: float, outcome: Callable[[Array, int], Array]) -> float:
        ahead = self._ends(delta, self._last, outcome)
        decided = np.ones(len(self._angles), dtype=bool)
        for n in range(self._last - 1, 0, -1):
            values = self._before(n, delta, ahead, decided, outcome)
            ahead, decided = np.where(self._is_decided(n), self._ends(delta, n, outcome), values), self._is_decided(n)
            if n == 1:
                # The first r is 1 or -1.
                first = [float(np.interp(angle, self._angles, values)) for angle in (-math.pi / 2, math.pi / 2)]
                return 0.5 * sum(first)
        raise AssertionError

    def _before(
        self, n: int, delta: float, ahead: Array, decided: NDArray[np.bool_], outcome: Callable[[Array, int], Array]
    ) -> Array:
        """The mean of what is ahead, from each r after n measurements."""
        u = self._moves[n]
        r = math.sqrt(n) * np.sin(self._angles)[:, np.newaxis]
        angle = np.arcsin(np.clip((r + u) / np.sqrt(1.0 + u * u) / math.sqrt(n + 1), -1.0, 1.0))
        ratio = np.interp(angle, self._angles, self._log_ratio(n + 1))
        ends = np.interp(angle, self._angles, np.exp(self._log_density(n + 1, delta))) * outcome(ratio, n + 1)
        is_over = (ratio <= self._thresholds[0]) | (ratio >= self._thresholds[1]) | (n + 1 == self._last)
        # Going on is smooth between the limits only; there alone it is interpolated.
        inside = np.flatnonzero(~decided)
        goes_on = np.interp(angle, self._angles[inside], ahead[inside]) if inside.size else np.zeros(angle.shape)
        mean: Array = np.where(is_over, ends, goes_on).mean(axis=1)
        return mean

    def _ends(self, delta: float, n: int, outcome: Callable[[Array, int], Array]) -> Array:
        return np.exp(self._log_density(n, delta)) * outcome(self._log_ratio(n), n)

    def _is_decided(self, n: int) -> NDArray[np.bool_]:
        ratio = self._log_ratio(n)
        return (ratio <= self._thresholds[0]) | (ratio >= self._thresholds[1])

    def _log_ratio(self, n: int) -> Array:
        return self._log_density(n, self._deltas[1]) - self._log_density(n, self._deltas[0])

    def _log_density(self, n: int, delta: float) -> Array:
        """Of t after n measurements under delta, over that under 0; of its magnitude with two sides."""
        if n == 1:
            return np.zeros(len(self._angles))
        t = math.sqrt(n - 1) * np.tan(self._angles)
        shift = delta * math.sqrt(n)
        found: Array = nct.pdf(t, n - 1, shift) / student.pdf(t, n - 1)
        if self._sides == 2:
            found = 0.5 * (found + nct.pdf(-t, n - 1, shift) / student.pdf(t, n - 1))
        return np.log(found)
