"""
How whole totals grow, seen as exponential families: what a change of the parameter does to the probability of a path.

Quantity: probabilities of the increases over a duration, and the factor by which a path that has come to some total at
some progress becomes more probable under another parameter.
Method: closed forms. The factor depends on where the path stands and not on how it came there.
Accuracy: that of the incomplete beta and gamma functions, about 1e-14 relative.
Cost: a special function for each probability.
Source: Siegmund (1985), Sequential Analysis, section 2.3 (the identity of likelihood ratios); Johnson, Kemp and Kotz,
Univariate Discrete Distributions, sections 3.4 and 4.4.
"""

import math
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from scipy.special import betainc, betaincc, expit, gammainc, gammaincc

from service.sequential.double import FloatArray
from service.sequential.exact.processes import Failures, Overdispersed, Units, furthest_count

# Far below any ratio of two probabilities.
TINY = 1e-300


class Law(Protocol):
    """Totals with independent increases; `natural` is the natural parameter."""

    @property
    def first_step(self) -> float:
        """
        The progress that is used up when the first increase is taken to be one.

        Where counts vary more than Poisson's it is below 0: once one has come, more are to be expected.
        """
        ...

    def natural(self, mean: float) -> float:
        """The natural parameter of a mean of one unit of progress, infinite at the ends."""
        ...

    def mean(self, natural: float) -> float:
        """The mean of one unit of progress."""
        ...

    def near(self, total: float, progress: float) -> float:
        """A natural parameter near the estimate from this total, inside the range."""
        ...

    def increases(self, natural: float, duration: float, width: int) -> FloatArray:
        """Probabilities of the increases below `width`; array of shape (width,)."""
        ...

    def largest(self, duration: float) -> float:
        """The largest increase over the duration, infinite where there is none."""
        ...

    def falling(self, natural: float, duration: float, most: int, count: int) -> FloatArray:
        """Ln of the probabilities of the increases most, most - 1, …, less that of the first; array of (count,)."""
        ...

    def widest(self, natural: float, duration: float) -> int:
        """Increases at and beyond this one have no probability that matters."""
        ...

    def reaches(self, natural: float, duration: FloatArray | float, increase: FloatArray) -> FloatArray:
        """P(increase over the duration >= this one); shapes are broadcast together."""
        ...

    def stays(self, natural: float, duration: FloatArray | float, increase: FloatArray) -> FloatArray:
        """P(increase over the duration <= this one); shapes are broadcast together."""
        ...

    def log_factor(self, natural: float, other: float, total: FloatArray, progress: FloatArray) -> FloatArray:
        """Ln of how much more probable a path to this total is under `natural` than under `other`."""
        ...


class UnitLaw:
    """Each unit adds one with probability p; the natural parameter is ln(p/(1 - p))."""

    first_step = 1.0

    def natural(self, mean: float) -> float:
        """See `Law`."""
        if mean in (0.0, 1.0):
            return math.copysign(math.inf, mean - 0.5)
        return math.log(mean) - math.log1p(-mean)

    def mean(self, natural: float) -> float:
        """See `Law`."""
        return float(expit(natural))

    def near(self, total: float, progress: float) -> float:
        """See `Law`."""
        return self.natural((total + 0.5) / (progress + 1.0))

    def increases(self, natural: float, duration: float, width: int) -> FloatArray:
        """See `Law`."""
        found: FloatArray = Units(np.array([self.mean(natural)])).increases(duration, width)[0]
        return found

    def largest(self, duration: float) -> float:
        """See `Law`."""
        return duration

    def falling(self, natural: float, duration: float, most: int, count: int) -> FloatArray:
        """See `Law`."""
        increase = most - np.arange(count - 1.0)
        return _summed(increase, (duration - increase + 1.0) * math.exp(natural))

    def widest(self, natural: float, duration: float) -> int:  # noqa: ARG002 - all are possible
        """See `Law`."""
        return round(duration) + 1

    def reaches(self, natural: float, duration: FloatArray | float, increase: FloatArray) -> FloatArray:
        """See `Law`."""
        wanted = np.clip(increase, 1.0, np.maximum(duration, 1.0))
        chance = betainc(wanted, np.maximum(duration - wanted, 0.0) + 1.0, expit(natural))
        found: FloatArray = np.where(increase <= 0.0, 1.0, np.where(increase > duration, 0.0, chance))
        return found

    def stays(self, natural: float, duration: FloatArray | float, increase: FloatArray) -> FloatArray:
        """See `Law`."""
        # At most so many increases are at least so many units without one.
        return self.reaches(-natural, duration, duration - increase)

    def log_factor(self, natural: float, other: float, total: FloatArray, progress: FloatArray) -> FloatArray:
        """See `Law`."""
        with_it, without = (_log_chance(natural) - _log_chance(other), _log_chance(-natural) - _log_chance(-other))
        return total * with_it + (progress - total) * without


class RateLaw:
    """Increases come at a rate, counted or watched; the natural parameter is its logarithm."""

    first_step = 0.0

    def natural(self, mean: float) -> float:
        """See `Law`."""
        return math.log(mean) if mean > 0.0 else -math.inf

    def mean(self, natural: float) -> float:
        """See `Law`."""
        return math.exp(natural) if natural < math.inf else math.inf

    def near(self, total: float, progress: float) -> float:
        """See `Law`."""
        return math.log(total + 0.5) - math.log(progress)

    def increases(self, natural: float, duration: float, width: int) -> FloatArray:
        """See `Law`."""
        found: FloatArray = Failures(np.array([math.exp(natural)])).increases(duration, width)[0]
        return found

    def largest(self, duration: float) -> float:  # noqa: ARG002 - there is none
        """See `Law`."""
        return math.inf

    def falling(self, natural: float, duration: float, most: int, count: int) -> FloatArray:
        """See `Law`."""
        increase = most - np.arange(count - 1.0)
        return _summed(increase, np.full_like(increase, math.exp(natural) * duration))

    def widest(self, natural: float, duration: float) -> int:
        """See `Law`."""
        return furthest_count(math.exp(natural) * duration, 0.0)

    def reaches(self, natural: float, duration: FloatArray | float, increase: FloatArray) -> FloatArray:
        """See `Law`."""
        chance = gammainc(np.maximum(increase, 1.0), math.exp(natural) * duration)
        found: FloatArray = np.where(increase <= 0.0, 1.0, chance)
        return found

    def stays(self, natural: float, duration: FloatArray | float, increase: FloatArray) -> FloatArray:
        """See `Law`."""
        chance = gammaincc(np.maximum(increase, 0.0) + 1.0, math.exp(natural) * duration)
        found: FloatArray = np.where(increase < 0.0, 0.0, chance)
        return found

    def log_factor(self, natural: float, other: float, total: FloatArray, progress: FloatArray) -> FloatArray:
        """See `Law`."""
        return total * (natural - other) - progress * (math.exp(natural) - math.exp(other))


@dataclass(frozen=True)
class OverdispersedLaw:
    """
    Each unit adds a count of variance mean + mean**2 / dispersion; `natural` is the logarithm of the mean.

    With q = mean/(mean + dispersion) the probability of a count over some units is that of a negative binomial,
    proportional to q**count * (1 - q)**(units * dispersion).
    """

    dispersion: float

    @property
    def first_step(self) -> float:
        """See `Law`: k times the probability of k is the mean times that of k - 1 with a dispersion larger by one."""
        return -1.0 / self.dispersion

    def natural(self, mean: float) -> float:
        """See `Law`."""
        return math.log(mean) if mean > 0.0 else -math.inf

    def mean(self, natural: float) -> float:
        """See `Law`."""
        return math.exp(natural) if natural < math.inf else math.inf

    def near(self, total: float, progress: float) -> float:
        """See `Law`."""
        return math.log(total + 0.5) - math.log(progress)

    def increases(self, natural: float, duration: float, width: int) -> FloatArray:
        """See `Law`."""
        process = Overdispersed(np.array([math.exp(natural)]), self.dispersion)
        found: FloatArray = process.increases(duration, width)[0]
        return found

    def largest(self, duration: float) -> float:  # noqa: ARG002 - there is none
        """See `Law`."""
        return math.inf

    def falling(self, natural: float, duration: float, most: int, count: int) -> FloatArray:
        """See `Law`."""
        increase = most - np.arange(count - 1.0)
        further = np.maximum(duration + (increase - 1.0) / self.dispersion, TINY)
        return _summed(increase, further * (math.exp(natural) * self._without(natural)))

    def widest(self, natural: float, duration: float) -> int:
        """See `Law`."""
        mean = math.exp(natural)
        return furthest_count(mean * duration, mean / self.dispersion)

    def reaches(self, natural: float, duration: FloatArray | float, increase: FloatArray) -> FloatArray:
        """See `Law`."""
        chance = self._tail(natural, duration, np.maximum(increase, 1.0), is_upper=True)
        found: FloatArray = np.where(increase <= 0.0, 1.0, chance)
        return found

    def stays(self, natural: float, duration: FloatArray | float, increase: FloatArray) -> FloatArray:
        """See `Law`."""
        chance = self._tail(natural, duration, np.maximum(increase, 0.0) + 1.0, is_upper=False)
        found: FloatArray = np.where(increase < 0.0, 0.0, chance)
        return found

    def log_factor(self, natural: float, other: float, total: FloatArray, progress: FloatArray) -> FloatArray:
        """See `Law`."""
        mean, other_mean, dispersion = math.exp(natural), math.exp(other), self.dispersion
        with_it = math.log1p(dispersion / other_mean) - math.log1p(dispersion / mean)
        without = math.log1p(other_mean / dispersion) - math.log1p(mean / dispersion)
        return total * with_it + progress * (dispersion * without)

    def _tail(
        self, natural: float, duration: FloatArray | float, increase: FloatArray, *, is_upper: bool
    ) -> FloatArray:
        """P(at least so many) or P(fewer), from whichever share is the smaller and so has all its digits."""
        shape = np.asarray(duration) * self.dispersion
        without = self._without(natural)
        found: FloatArray
        if without > 0.5:
            of, share = (betainc if is_upper else betaincc), math.exp(natural) / self.dispersion * without
            found = np.asarray(of(increase, shape, share), dtype=np.float64)
        else:
            of = betaincc if is_upper else betainc
            found = np.asarray(of(shape, increase, without), dtype=np.float64)
        return found

    def _without(self, natural: float) -> float:
        """1 - q."""
        return 1.0 / (1.0 + math.exp(natural) / self.dispersion)


def _summed(increase: FloatArray, divisor: FloatArray) -> FloatArray:
    """Ln of the products of increase/divisor, each the ratio of one probability to the next; none below zero."""
    with np.errstate(divide="ignore"):  # below zero there is nothing
        ratios = np.log(np.maximum(increase, 0.0) / divisor)
    summed: FloatArray = np.concatenate([np.zeros(1), np.cumsum(ratios)])
    return summed


def _log_chance(natural: float) -> float:
    """Ln p, without loss where p is near one."""
    return -math.log1p(math.exp(-natural)) if natural > 0.0 else natural - math.log1p(math.exp(natural))
