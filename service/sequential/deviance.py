"""
How far observations lie from a parameter: ln sup L - ln L(parameter), for one-parameter families.

Quantity: half the deviance, in nats, never below zero; the sufficient statistic and the progress are all it needs.
Method: closed forms; where the estimate is near the parameter the logarithms are written so that nothing cancels.
Accuracy: about 1e-15 relative for counts below 2**53; for `normal` that of the two doubles of the total.
Cost: a few operations for each point.
Source: Loader (2000), Fast and Accurate Computation of Binomial Probabilities (the function here called `_gap`);
McCullagh and Nelder (1989), Generalized Linear Models, section 2.3 (deviances).
"""

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from service.sequential.double import Double, FloatArray, two_product, two_sum
from service.sequential.roots import SMALLEST, rising_root

# Below this relative distance the series is used; so many terms then reach rounding.
NEAR, TERMS = 0.1, 10


class Deviance(Protocol):
    """The evidence of a one-parameter family against single values of its parameter."""

    def against(self, progress: Double, total: Double, parameter: float) -> FloatArray:
        """Ln sup L - ln L(parameter), with the parameter as the mean of one unit of progress; same shape as given."""
        ...

    def variance(self, parameter: float) -> float:
        """The variance of the total in one unit of progress."""
        ...

    def at_distance(self, progress: Double, total: Double, distance: FloatArray) -> tuple[FloatArray, FloatArray]:
        """
        The parameters on either side of the estimate whose half deviance is `distance`, the ends of the range where it
        is nowhere so large; arrays of shape (points,).
        """
        ...


@dataclass(frozen=True)
class Bernoulli:
    """Total = units with the attribute, progress = units, parameter = proportion strictly between 0 and 1."""

    def against(self, progress: Double, total: Double, parameter: float) -> FloatArray:
        """See `Deviance`."""
        n, count = progress.value, total.value
        return _gap(count, n * parameter) + _gap(n - count, n * (1.0 - parameter))

    def variance(self, parameter: float) -> float:
        """See `Deviance`."""
        return parameter * (1.0 - parameter)

    def at_distance(self, progress: Double, total: Double, distance: FloatArray) -> tuple[FloatArray, FloatArray]:
        """See `Deviance`."""
        n, count = progress.value, total.value
        return self._below(n, count, distance), 1.0 - self._below(n, n - count, distance)

    @staticmethod
    def _below(n: FloatArray, count: FloatArray, distance: FloatArray) -> FloatArray:
        """The lower one."""
        share = np.divide(count, n, out=np.zeros_like(count), where=n > 0.0)

        def rise(at: FloatArray) -> FloatArray:
            return distance - _gap(count, n * at) - _gap(n - count, n * (1.0 - at))

        return _positive(share, rising_root(rise, _lowest(share, count, distance), np.maximum(share, SMALLEST)))


@dataclass(frozen=True)
class Poisson:
    """Total = count, progress = exposure, parameter = rate above 0."""

    def against(self, progress: Double, total: Double, parameter: float) -> FloatArray:
        """See `Deviance`."""
        return _gap(total.value, parameter * progress.value)

    def variance(self, parameter: float) -> float:
        """See `Deviance`."""
        return parameter

    def at_distance(self, progress: Double, total: Double, distance: FloatArray) -> tuple[FloatArray, FloatArray]:
        """See `Deviance`."""
        exposure, count = progress.value, total.value
        has_begun = exposure > 0.0
        # In expected counts; a count of c lies further than d from all beyond c + d + sqrt(2 c d) + d.
        furthest = count + 2.0 * distance + np.sqrt(2.0 * count * distance) + 1.0
        lowest = _lowest(count, count, distance)
        found = rising_root(lambda at: distance - _gap(count, at), lowest, np.maximum(count, SMALLEST))
        below = _positive(count, found)
        above = rising_root(lambda at: _gap(count, at) - distance, np.maximum(count, SMALLEST), furthest)
        unit = np.where(has_begun, exposure, 1.0)
        return np.where(has_begun, below / unit, 0.0), np.where(has_begun, above / unit, np.inf)


@dataclass(frozen=True)
class Normal:
    """Total = sum of the measurements, progress = units, parameter = mean; sigma above 0 is known."""

    sigma: float

    def against(self, progress: Double, total: Double, parameter: float) -> FloatArray:
        """See `Deviance`."""
        line = two_product(progress.high, np.float64(parameter))  # type: ignore[arg-type]
        difference = two_sum(total.high, -line.high)
        away = (difference.high + (difference.low + (total.low - line.low - parameter * progress.low))) / self.sigma
        n = progress.value
        return np.where(n > 0.0, 0.5 * away * away / np.where(n > 0.0, n, 1.0), 0.0)

    def variance(self, parameter: float) -> float:  # noqa: ARG002 - the same for every mean
        """See `Deviance`."""
        return self.sigma * self.sigma

    def at_distance(self, progress: Double, total: Double, distance: FloatArray) -> tuple[FloatArray, FloatArray]:
        """See `Deviance`."""
        n = progress.value
        unit = np.where(n > 0.0, n, 1.0)
        mean, half = total.value / unit, self.sigma * np.sqrt(2.0 * distance / unit)
        return np.where(n > 0.0, mean - half, -np.inf), np.where(n > 0.0, mean + half, np.inf)


def _lowest(estimate: FloatArray, count: FloatArray, distance: FloatArray) -> FloatArray:
    """Below this every parameter lies further than `distance`, because count * ln(estimate/parameter) - count does."""
    exponent = -1.0 - distance / np.where(count > 0.0, count, 1.0)
    return np.maximum(estimate * np.exp(exponent), SMALLEST)


def _positive(estimate: FloatArray, found: FloatArray) -> FloatArray:
    """Zero where nothing was counted, or where the parameter is too small to hold."""
    return np.where((estimate > 0.0) & (found > SMALLEST), found, 0.0)


def _gap(count: FloatArray, expected: FloatArray) -> FloatArray:
    """
    Count * ln(count/expected) - (count - expected), never below zero; `expected` above where count is zero.

    Near one another: with v = (count - expected)/(count + expected) it is (count - expected) * v +
    2 * count * (v**3/3 + v**5/5 + ...).
    """
    sum_, difference = count + expected, count - expected
    v = np.divide(difference, sum_, out=np.zeros_like(sum_), where=sum_ > 0.0)
    is_near = np.abs(v) < NEAR
    near = far = np.zeros_like(v)
    if np.any(is_near):
        square, series = v * v, np.zeros_like(v)
        for term in range(TERMS, 0, -1):
            series = (series + 1.0 / (2 * term + 1)) * square
        near = difference * v + 2.0 * count * v * series
    if not np.all(is_near):
        with np.errstate(divide="ignore", invalid="ignore"):
            far = np.where(count > 0.0, count * np.log(np.where(count > 0.0, count, 1.0) / expected), 0.0) - difference
    return np.where(is_near, near, np.where(sum_ > 0.0, far, 0.0))
