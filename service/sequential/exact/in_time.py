"""
Exact figures of a test of failures watched in continuous time.

Quantity: probabilities of both decisions, mean, standard deviation and quantiles of the unit-time.
Method: failures come as a Poisson process. Between the moments at which a limit passes a whole number the set of totals
that go on is constant, and the probabilities move by a convolution with Poisson probabilities, which is exact;
acceptance falls between failures, at those moments.
Accuracy: rounding, and the probability of still sampling at which it stops (1e-13).
Cost: two convolutions of the width of the region for each failure up to the end, for each parameter.
Source: Dvoretzky, Kiefer and Wolfowitz (1953), Annals of Mathematical Statistics 24, 254-264; Epstein and Sobel (1955).
"""

import numpy as np
from scipy.special import gammainc, gammaln, xlogy

from service.sequential.double import Double, FloatArray
from service.sequential.exact.characteristics import NEGLIGIBLE, QUANTILES, Characteristics, TooMuchWork, spread
from service.sequential.region import BELOW, Region

MOST_INTERVALS = 100_000


def characteristics_in_time(region: Region, rates: FloatArray) -> Characteristics:
    """
    Follow the failures from time 0 until everything is decided.

    Args:
        region: The continuation region, of failures against unit-time.
        rates: Array of shape (points,): failures for each unit of time, all above 0.

    Raises:
        TooMuchWork: More than 100,000 moments at which a limit passes a whole number.
    """
    return _Course(region, rates).run()


class _Course:
    """The probabilities of the totals that go on, moved from moment to moment."""

    def __init__(self, region: Region, rates: FloatArray) -> None:
        points = len(rates)
        self._region, self._rates = region, rates
        self._time, self._lowest = 0.0, 0
        self._alive = np.zeros((points, self._first_above()))
        self._alive[:, 0] = 1.0
        self._below, self._above = np.zeros(points), np.zeros(points)
        self._mean, self._second = np.zeros(points), np.zeros(points)
        self._quantiles = np.full((points, len(QUANTILES)), np.nan)

    def run(self) -> Characteristics:
        """To the end."""
        wall = self._region.wall.progress if self._region.wall is not None else np.inf
        for count in range(MOST_INTERVALS):
            passes_below = min(self._lower_at(self._lowest), wall)
            passes_above = self._upper_at(self._lowest + self._alive.shape[1])
            moment = min(passes_below, passes_above)
            self._advance(moment - self._time)
            self._time = moment
            if moment == wall:
                self._force()
            elif moment == passes_below:
                self._below += self._alive[:, 0]
                self._alive = self._alive[:, 1:]
                self._lowest += 1
            if moment == passes_above and moment < wall:
                self._alive = np.pad(self._alive, ((0, 0), (0, 1)))
            rest = self._alive.sum(axis=1)
            self._note_quantiles(rest)
            if self._alive.shape[1] == 0 or np.max(rest) < NEGLIGIBLE:
                return self._summary(float(np.max(rest)) if rest.size else 0.0, count + 1)
        raise TooMuchWork(MOST_INTERVALS)

    def _advance(self, duration: float) -> None:
        """Move by a stretch in which only failures happen; what reaches the upper limit leaves."""
        before = self._alive.sum(axis=1)
        moved = _shifted(self._alive, _poisson(self._rates * duration, self._alive.shape[1]))
        after = moved.sum(axis=1)
        self._find_quantiles_inside(duration, after)
        self._above += before - after
        stay, moment = self._integrals(duration)
        self._mean += stay
        self._second += 2.0 * (self._time * stay + moment)
        self._alive = moved

    def _integrals(self, duration: float) -> tuple[FloatArray, FloatArray]:
        """The integrals of the probability of still sampling, and of it times the time since the stretch began."""
        rates, width = self._rates[:, np.newaxis], self._alive.shape[1]
        j = np.arange(width, dtype=float)
        reach = rates * duration
        # From a total i places below the limit at most i failures may come: sums of the integrals of Poisson terms.
        stay = np.cumsum(gammainc(j + 1.0, reach) / rates, axis=1)[:, ::-1]
        moment = np.cumsum((j + 1.0) * gammainc(j + 2.0, reach) / rates**2, axis=1)[:, ::-1]
        return (self._alive * stay).sum(axis=1), (self._alive * moment).sum(axis=1)

    def _find_quantiles_inside(self, duration: float, after: FloatArray) -> None:
        """Bisect where a quantile falls inside the stretch rather than at its end."""
        for column, q in enumerate(QUANTILES):
            inside = np.isnan(self._quantiles[:, column]) & (after <= 1.0 - q)
            if not np.any(inside):
                continue
            rates, alive = self._rates[inside], self._alive[inside]
            low, high = np.zeros(len(rates)), np.full(len(rates), duration)
            for _ in range(60):
                middle = 0.5 * (low + high)
                still = _shifted(alive, _poisson(rates * middle, alive.shape[1])).sum(axis=1)
                is_early = still > 1.0 - q
                low, high = np.where(is_early, middle, low), np.where(is_early, high, middle)
            self._quantiles[inside, column] = self._time + high

    def _note_quantiles(self, rest: FloatArray) -> None:
        """A quantile at the very moment when a limit passes."""
        for column, q in enumerate(QUANTILES):
            now = np.isnan(self._quantiles[:, column]) & (rest <= 1.0 - q)
            self._quantiles[now, column] = self._time

    def _force(self) -> None:
        """The wall decides for every total that is left."""
        totals = self._lowest + np.arange(self._alive.shape[1], dtype=float)
        at = Double(np.full_like(totals, self._time), np.zeros_like(totals))
        goes_below = self._region.sides_at_wall(at, Double(totals, np.zeros_like(totals))) == BELOW
        self._below += self._alive[:, goes_below].sum(axis=1)
        self._above += self._alive[:, ~goes_below].sum(axis=1)
        self._alive = self._alive[:, :0]

    def _first_above(self) -> int:
        """The smallest total at or beyond the upper limit just after the start."""
        total = 1
        while self._upper_at(total) <= 0.0:
            total += 1
        return total

    def _lower_at(self, total: int) -> float:
        return float(self._region.lower_reached_at(np.array([float(total)]))[0])

    def _upper_at(self, total: int) -> float:
        """The moment until which this total lies at or beyond the upper limit; never where the wall caps it."""
        wall = self._region.wall
        if wall is not None and wall.cap is not None and total >= wall.cap:
            return np.inf
        return float(self._region.upper_left_at(np.array([float(total)]))[0])

    def _summary(self, rest: float, intervals: int) -> Characteristics:
        bound = rest + intervals * 10.0 * float(np.finfo(float).eps)
        deviation = spread(self._mean, self._second)
        return Characteristics(self._below, self._above, self._mean, deviation, self._quantiles, bound)


def _poisson(means: FloatArray, width: int) -> FloatArray:
    """Poisson probabilities of 0, 1, …, width - 1; array of shape (points, width)."""
    k = np.arange(width, dtype=float)
    m = means[:, np.newaxis]
    probabilities: FloatArray = np.exp(xlogy(k, m) - m - gammaln(k + 1.0))
    return probabilities


def _shifted(alive: FloatArray, jumps: FloatArray) -> FloatArray:
    """Convolve row by row and keep the width: what passes it has left."""
    moved = np.zeros_like(alive)
    width = alive.shape[1]
    for jump in range(width):
        moved[:, jump:] += alive[:, : width - jump] * jumps[:, jump : jump + 1]
    return moved
