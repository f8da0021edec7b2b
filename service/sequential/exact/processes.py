"""
How whole-number totals grow: the processes that the exact computations follow.

Quantity: probabilities of each increase over a stretch, and sums (or integrals) of the probability that the increase
has not passed a reach while the stretch lasts.
Method: closed forms; the sums for units come from the negative binomial waiting time of the first increase beyond the
reach, the integrals in time from the gamma waiting time, the sums for reports are added term by term.
Accuracy: about 1e-15 relative for each unit of the logarithm of the smallest term.
Cost: a few special functions for each reach and parameter; for reports as many again as the stretch has looks.
Source: Johnson, Kemp and Kotz, Univariate Discrete Distributions, sections 3.4 and 5.1 (waiting times); Feller (1966),
An Introduction to Probability Theory, vol. II, section I.3.
"""

import math
from collections.abc import Callable
from typing import Protocol

import numpy as np
from scipy.special import betainc, gammainc, gammaln, xlog1py, xlogy

from service.sequential.double import FloatArray, IndexArray
from service.sequential.exact.characteristics import TooMuchWork

# Terms added for the reports of one computation, and of them at once.
MOST_TERMS = 20_000_000
LARGEST_BLOCK = 500_000
TINY = 1e-100
# A number of increases that no computation follows.
FARTHEST = 1e15


class Process(Protocol):
    """
    Totals under some true parameters, seen over a stretch of `duration`: looks, or time.

    Arrays are of shape (points, width): a row for each parameter, a column for each increase or reach 0, 1, 2, …
    """

    @property
    def points(self) -> int:
        """The number of parameters."""
        ...

    @property
    def step(self) -> float:
        """Progress from one look to the next; 0 where the total is watched in time."""
        ...

    @property
    def largest(self) -> int | None:
        """The largest increase from one look to the next, None where there is none."""
        ...

    def increases(self, duration: float | FloatArray, width: int) -> FloatArray:
        """Probabilities of the increases below `width`; a duration for all, or one for each parameter."""
        ...

    def stays(self, duration: float, width: int) -> tuple[FloatArray, FloatArray]:
        """
        For each reach, the sum over the stretch of P(increase so far <= reach), and of that times the time so far.

        Looks are summed from the beginning of the stretch up to the one before its end; time is integrated.
        """
        ...

    def furthest(self, duration: float) -> int:
        """Increases at and beyond this one have no probability that matters, whichever the parameter."""
        ...

    def only(self, chosen: IndexArray) -> "Process":
        """The same for some of the parameters."""
        ...


class Units:
    """Each look adds one with the given probability: array of shape (points,), from 0 to 1."""

    step = 1.0
    largest: int | None = 1

    def __init__(self, proportions: FloatArray) -> None:
        self._p = proportions[:, np.newaxis]

    @property
    def points(self) -> int:
        """See `Process`."""
        return len(self._p)

    def increases(self, duration: float | FloatArray, width: int) -> FloatArray:
        """See `Process`."""
        units = np.reshape(np.asarray(duration, float), (-1, 1))
        k = np.arange(width, dtype=float)
        # ln C(units, k), built up factor by factor: differences of log-gammas lose digits where units are many.
        factors = np.maximum(units - k[1:] + 1.0, 0.5) / k[1:]
        choose = np.concatenate([np.zeros((len(units), 1)), np.cumsum(np.log(factors), axis=1)], axis=1)
        chance = np.exp(choose + xlogy(k, self._p) + xlog1py(np.maximum(units - k, 0.0), -self._p))
        probabilities: FloatArray = np.where(k <= units, chance, 0.0)
        return probabilities

    def stays(self, duration: float, width: int) -> tuple[FloatArray, FloatArray]:
        """See `Process`."""
        units, shape = float(duration), (self.points, width)
        if units == 1.0:
            return np.ones(shape), np.zeros(shape)
        reach = np.broadcast_to(np.arange(width, dtype=float), shape)
        p = np.broadcast_to(self._p, shape)
        stay, moment = np.full(shape, units), np.full(shape, units * (units - 1.0) / 2.0)
        # The unit T at which the reach is passed is negative binomial; wanted are E[min(T, units)] and its second kin.
        # A chance too small to square never comes to anything.
        passed = (reach < units) & (p > TINY)
        r, q = reach[passed], p[passed]
        never = 1.0 - betainc(r + 1.0, units - r, q)
        first = (r + 1.0) / q * betainc(r + 2.0, units - r, q) + units * never
        second = (r + 1.0) * (r + 2.0) / q**2 * betainc(r + 3.0, units - r, q) + units * (units + 1.0) * never
        stay[passed], moment[passed] = first, 0.5 * second - first
        return stay, moment

    def furthest(self, duration: float) -> int:
        """See `Process`."""
        return round(duration) + 1

    def only(self, chosen: IndexArray) -> "Units":
        """See `Process`."""
        return Units(self._p[chosen, 0])


class Reports:
    """Each look adds a Poisson count with the given mean, array of shape (points,), and `step` of exposure."""

    largest: int | None = None

    def __init__(self, means: FloatArray, step: float) -> None:
        self._means, self.step, self._stays = means[:, np.newaxis], step, _Added()

    @property
    def points(self) -> int:
        """See `Process`."""
        return len(self._means)

    def increases(self, duration: float | FloatArray, width: int) -> FloatArray:
        """See `Process`."""
        return _poisson(self._means * np.reshape(np.asarray(duration, float), (-1, 1)), width)

    def stays(self, duration: float, width: int) -> tuple[FloatArray, FloatArray]:
        """See `Process`."""
        return self._stays.added(lambda look: _poisson(self._means * look, width), duration, (self.points, width))

    def furthest(self, duration: float) -> int:
        """See `Process`."""
        return furthest_count(float(self._means.max()) * duration, 0.0)

    def only(self, chosen: IndexArray) -> "Reports":
        """See `Process`."""
        return Reports(self._means[chosen, 0], self.step)


class Overdispersed:
    """
    Each look adds the count of one unit with the given mean, array of shape (points,), and a common dispersion.

    The variance is mean + mean**2 / dispersion. Over several looks the count is of the same kind, with a dispersion so
    many times larger.
    """

    step = 1.0
    largest: int | None = None

    def __init__(self, means: FloatArray, dispersion: float) -> None:
        self._means, self._dispersion, self._stays = means[:, np.newaxis], dispersion, _Added()

    @property
    def points(self) -> int:
        """See `Process`."""
        return len(self._means)

    def increases(self, duration: float | FloatArray, width: int) -> FloatArray:
        """See `Process`."""
        return self._probabilities(np.reshape(np.asarray(duration, float), (-1, 1)), width)

    def stays(self, duration: float, width: int) -> tuple[FloatArray, FloatArray]:
        """See `Process`."""
        return self._stays.added(lambda look: self._probabilities(look, width), duration, (self.points, width))

    def furthest(self, duration: float) -> int:
        """See `Process`."""
        largest = float(self._means.max())
        return furthest_count(largest * duration, largest / self._dispersion)

    def only(self, chosen: IndexArray) -> "Overdispersed":
        """See `Process`."""
        return Overdispersed(self._means[chosen, 0], self._dispersion)

    def _probabilities(self, looks: FloatArray, width: int) -> FloatArray:
        """Of 0, 1, …, width - 1 after these looks; array of shape (…, points, width)."""
        k = np.arange(1.0, width)
        none = -looks * self._dispersion * np.log1p(self._means / self._dispersion)
        # The quotient of neighbours is (looks * dispersion + k - 1) / k * mean / (mean + dispersion), which tends to
        # Poisson's as the dispersion grows: differences of log-gammas would lose all digits there.
        share = self._dispersion / (self._means + self._dispersion)
        quotients = self._means * (looks + (k - 1.0) / self._dispersion) * share / k
        with np.errstate(divide="ignore"):
            logs = np.log(quotients)
        none = np.broadcast_to(none, (*logs.shape[:-1], 1))
        probabilities: FloatArray = np.exp(np.cumsum(np.concatenate([none, logs], axis=-1), axis=-1))
        return probabilities


class Failures:
    """Failures come at these rates, array of shape (points,), and are watched in continuous time."""

    step = 0.0
    largest: int | None = None

    def __init__(self, rates: FloatArray) -> None:
        self._rates = rates[:, np.newaxis]

    @property
    def points(self) -> int:
        """See `Process`."""
        return len(self._rates)

    def increases(self, duration: float | FloatArray, width: int) -> FloatArray:
        """See `Process`."""
        return _poisson(self._rates * np.reshape(np.asarray(duration, float), (-1, 1)), width)

    def stays(self, duration: float, width: int) -> tuple[FloatArray, FloatArray]:
        """See `Process`."""
        k = np.arange(width, dtype=float)
        expected = self._rates * duration
        # The integral of a Poisson term is an incomplete gamma function; a reach is the sum of its terms.
        stay = np.cumsum(gammainc(k + 1.0, expected) / self._rates, axis=1)
        moment = np.cumsum((k + 1.0) * gammainc(k + 2.0, expected) / self._rates**2, axis=1)
        return stay, moment

    def furthest(self, duration: float) -> int:
        """See `Process`."""
        return furthest_count(float(self._rates.max()) * duration, 0.0)

    def only(self, chosen: IndexArray) -> "Failures":
        """See `Process`."""
        return Failures(self._rates[chosen, 0])


class _Added:
    """The sums over the looks of a stretch, look by look; remembers how many terms it has added."""

    def __init__(self) -> None:
        self._terms = 0

    def added(
        self, probabilities: Callable[[FloatArray], FloatArray], duration: float, shape: tuple[int, int]
    ) -> tuple[FloatArray, FloatArray]:
        """
        The stays of a stretch; `probabilities` are those of the increases after looks of shape (looks, 1, 1).

        Raises:
            TooMuchWork: More than 20 million terms since the beginning.
        """
        looks, terms = int(duration), shape[0] * shape[1]
        self._terms += looks * terms
        if self._terms > MOST_TERMS:
            raise TooMuchWork(MOST_TERMS, "terms")
        stay, moment = np.ones(shape), np.zeros(shape)
        block = max(1, LARGEST_BLOCK // terms)
        for begin in range(1, looks, block):
            look = np.arange(begin, min(begin + block, looks), dtype=float)[:, np.newaxis, np.newaxis]
            within = np.cumsum(probabilities(look), axis=2)
            stay += within.sum(axis=0)
            moment += (look * within).sum(axis=0)
        return stay, moment


def furthest_count(mean: float, excess: float) -> int:
    """Beyond it a count with this mean, and a variance 1 + excess times as large, has no probability that matters."""
    spread = 1.0 + excess
    return math.ceil(min(mean + 12.0 * math.sqrt(mean * spread) + 60.0 * spread, FARTHEST))


def _poisson(means: FloatArray, width: int) -> FloatArray:
    """Poisson probabilities of 0, 1, …, width - 1; array of shape (points, width)."""
    k = np.arange(width, dtype=float)
    probabilities: FloatArray = np.exp(xlogy(k, means) - means - gammaln(k + 1.0))
    return probabilities
