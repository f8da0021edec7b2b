"""
The mixture likelihood ratio: the likelihood of H1 averaged over a conjugate prior, against a single H0.

Quantity: ln of (integral of L(parameter) over the prior / L(edge)), in nats. Two-sided: the whole prior. One-sided: the
prior cut off at the edge; then the ratio is a supermartingale under every parameter on the far side of it as well, so
that it serves H0 = {parameter <= edge} too (mirrored for the other direction).
Method: closed forms; the share of the prior, and of the posterior, beyond the edge by incomplete beta and gamma
functions, in logarithms also where these underflow.
Accuracy: about 1e-15 of the largest logarithm in the sum: 1e-9 nats or better up to a million units.
Cost: a few special functions for each point.
Source: Ville (1939) and Wald (1947), Sequential Analysis, section 4.1.4 (weight functions); Robbins (1970), Annals of
Mathematical Statistics 41, 1397-1409 (normal mixtures, power-one tests).
"""

from abc import ABC, abstractmethod
from dataclasses import dataclass, replace

import numpy as np
from scipy.special import betainc, betaincc, betaln, gammainc, gammaincc, gammaln, log_ndtr, xlogy

from service.sequential.deviance import Bernoulli, Deviance, Normal, Poisson
from service.sequential.double import Double, FloatArray, two_product, two_sum

# Shares smaller than this are computed in logarithms.
TINY = 1e-280
# Terms of a series or of a continued fraction whose last one no longer counts.
MOST_TERMS, SETTLED = 100_000, 1e-16


@dataclass(frozen=True)
class Mixture(ABC):
    """
    What the mixtures share. See `Evidence`.

    Attributes:
        edge: H0's value, in terms of the mean of one unit of progress.
        direction: 0 for both sides, 1 where H1 lies above the edge, -1 where it lies below.
    """

    edge: float
    direction: int

    @property
    def is_test_martingale(self) -> bool:
        """See `Evidence`."""
        return True

    @property
    def is_two_sided(self) -> bool:
        """See `Evidence`."""
        return self.direction == 0

    @property
    def is_upward(self) -> bool:
        """See `Evidence`."""
        return self.direction >= 0

    def expected(self, progress: FloatArray) -> FloatArray:
        """See `Evidence`."""
        return self.edge * progress

    @abstractmethod
    def log(self, progress: Double, total: Double) -> FloatArray:
        """See `Evidence`."""

    def confidence(self, progress: Double, total: Double, alpha: float) -> tuple[FloatArray, FloatArray]:
        """
        The means that the two-sided mixture does not speak against: those under which it is below 1/alpha.

        By Ville's inequality the true one is among them at all moments together with probability 1 - alpha at least.

        Args:
            progress, total: Arrays of shape (points,).
            alpha: In (0, 1).

        Source: Robbins (1970).
        """
        deviance = self._deviance
        at_edge = deviance.against(progress, total, self.edge) - replace(self, direction=0).log(progress, total)
        return deviance.at_distance(progress, total, np.maximum(at_edge - np.log(alpha), 0.0))

    @property
    @abstractmethod
    def _deviance(self) -> Deviance:
        """How far observations lie from a mean."""


@dataclass(frozen=True)
class NormalMixture(Mixture):
    """Total = sum of measurements with standard deviation `sigma`; the mean has the prior N(edge, tau**2)."""

    sigma: float
    tau: float

    @property
    def _deviance(self) -> Deviance:
        return Normal(self.sigma)

    def confidence(self, progress: Double, total: Double, alpha: float) -> tuple[FloatArray, FloatArray]:
        """See `Mixture`; the prior lies around each mean in turn, so that the width depends on progress alone."""
        n = progress.value
        unit = np.where(n > 0.0, n, 1.0)
        share = (self.tau / self.sigma) ** 2
        half = np.sqrt((1.0 + n * share) / share * (np.log1p(n * share) - 2.0 * np.log(alpha))) * self.sigma / unit
        mean = total.value / unit
        return np.where(n > 0.0, mean - half, -np.inf), np.where(n > 0.0, mean + half, np.inf)

    def log(self, progress: Double, total: Double) -> FloatArray:
        """See `Evidence`. Source: Robbins (1970)."""
        n = progress.value
        line = two_product(progress.high, np.float64(self.edge))  # type: ignore[arg-type]
        apart = two_sum(total.high, -line.high)
        away = (apart.high + (apart.low + (total.low - line.low - self.edge * progress.low))) / self.sigma
        share = (self.tau / self.sigma) ** 2
        spread = 1.0 + n * share
        ratio: FloatArray = 0.5 * (share * away * away / spread - np.log1p(n * share))
        if self.is_two_sided:
            return ratio
        # Half of the prior lies beyond the edge.
        beyond: FloatArray = ratio + np.log(2.0) + log_ndtr(self.direction * away * np.sqrt(share / spread))
        return beyond

    def deviation(self, progress: FloatArray) -> FloatArray:
        """See `Evidence`."""
        return self.sigma * np.sqrt(np.maximum(progress, 1e-300))


@dataclass(frozen=True)
class BetaMixture(Mixture):
    """Total = units with the attribute among `progress` units; the proportion has the prior Beta(a, b)."""

    a: float
    b: float

    @property
    def _deviance(self) -> Deviance:
        return Bernoulli()

    def log(self, progress: Double, total: Double) -> FloatArray:
        """See `Evidence`."""
        n, count = progress.value, total.value
        a, b = self.a + count, self.b + n - count
        ratio: FloatArray = (
            betaln(a, b) - betaln(self.a, self.b) - xlogy(count, self.edge) - (n - count) * np.log1p(-self.edge)
        )
        if self.is_two_sided:
            return ratio
        return ratio + self._log_share(a, b) - self._log_share(np.array(self.a), np.array(self.b))

    def deviation(self, progress: FloatArray) -> FloatArray:
        """See `Evidence`."""
        spread: FloatArray = np.sqrt(self.edge * (1.0 - self.edge) * np.maximum(progress, 1e-300))
        return spread

    def _log_share(self, a: FloatArray, b: FloatArray) -> FloatArray:
        """The logarithm of the share of Beta(a, b) on the side of H1."""
        if self.direction > 0:
            return log_beta_share(b, a, 1.0 - self.edge, np.asarray(betaincc(a, b, self.edge), np.float64))
        return log_beta_share(a, b, self.edge, np.asarray(betainc(a, b, self.edge), np.float64))


@dataclass(frozen=True)
class GammaMixture(Mixture):
    """Total = count over the exposure `progress`; the rate has the prior Gamma(shape, rate)."""

    shape: float
    rate: float

    @property
    def _deviance(self) -> Deviance:
        return Poisson()

    def log(self, progress: Double, total: Double) -> FloatArray:
        """See `Evidence`."""
        exposure, count = progress.value, total.value
        shape, rate = self.shape + count, self.rate + exposure
        # The powers of the edge are put where they cancel least.
        ratio = gammaln(shape) - gammaln(self.shape) + self.edge * exposure
        ratio = ratio - count * np.log(self.edge * rate) - self.shape * np.log1p(exposure / self.rate)
        if self.is_two_sided:
            return ratio
        return ratio + self._log_share(shape, rate) - self._log_share(np.array(self.shape), np.array(self.rate))

    def deviation(self, progress: FloatArray) -> FloatArray:
        """See `Evidence`."""
        return np.sqrt(self.edge * np.maximum(progress, 1e-300))

    def _log_share(self, shape: FloatArray, rate: FloatArray) -> FloatArray:
        """The logarithm of the share of Gamma(shape, rate) on the side of H1."""
        at = rate * self.edge
        return log_upper_gamma(shape, at) if self.direction > 0 else log_lower_gamma(shape, at)


def log_beta_share(a: FloatArray, b: FloatArray, y: float, share: FloatArray) -> FloatArray:
    """
    The logarithm of the regularised incomplete beta function I_y(a, b), also where it underflows.

    Args:
        a, b: Arrays of one shape, above 0.
        y: Strictly between 0 and 1.
        share: I_y(a, b) as far as it can be held.

    Source: NIST Digital Library of Mathematical Functions, 8.17.8 (the hypergeometric form, all terms positive).
    """
    is_tiny = share < TINY
    logs = np.log(np.where(is_tiny, 1.0, share))
    if not np.any(is_tiny):
        return logs
    p, q = np.broadcast_to(a, share.shape)[is_tiny], np.broadcast_to(b, share.shape)[is_tiny]
    series, term = np.ones_like(p), np.ones_like(p)
    for k in range(MOST_TERMS):
        term = term * (p + q + k) / (p + 1.0 + k) * y
        series = series + term
        if np.all(term <= SETTLED * series):
            break
    tail = p * np.log(y) + q * np.log1p(-y) - np.log(p) - betaln(p, q) + np.log(series)
    logs = np.array(logs)
    logs[is_tiny] = tail
    return logs


def log_lower_gamma(shape: FloatArray, at: FloatArray) -> FloatArray:
    """
    The logarithm of the regularised lower incomplete gamma function, also where it underflows; arrays of one shape.

    Source: NIST Digital Library of Mathematical Functions, 8.11.4 (all terms positive).
    """
    share = gammainc(shape, at)
    is_tiny = share < TINY
    logs = np.array(np.log(np.where(is_tiny, 1.0, share)))
    if np.any(is_tiny):
        s, x = np.broadcast_to(shape, share.shape)[is_tiny], np.broadcast_to(at, share.shape)[is_tiny]
        series, term = np.ones_like(s), np.ones_like(s)
        for k in range(1, MOST_TERMS):
            term = term * x / (s + k)
            series = series + term
            if np.all(term <= SETTLED * series):
                break
        logs[is_tiny] = xlogy(s, x) - x - gammaln(s + 1.0) + np.log(series)
    return logs


def log_upper_gamma(shape: FloatArray, at: FloatArray) -> FloatArray:
    """
    The logarithm of the regularised upper incomplete gamma function, also where it underflows; arrays of one shape.

    Source: NIST Digital Library of Mathematical Functions, 8.9.2 (continued fraction), by the modified Lentz method.
    """
    share = gammaincc(shape, at)
    is_tiny = share < TINY
    logs = np.array(np.log(np.where(is_tiny, 1.0, share)))
    if np.any(is_tiny):
        s, x = np.broadcast_to(shape, share.shape)[is_tiny], np.broadcast_to(at, share.shape)[is_tiny]
        term = x + 1.0 - s
        c, d = np.full_like(x, 1.0 / 1e-300), 1.0 / term
        fraction = d.copy()
        for k in range(1, MOST_TERMS):
            numerator, term = -k * (k - s), term + 2.0
            d, c = 1.0 / (numerator * d + term), term + numerator / c
            fraction = fraction * (c * d)
            if np.all(np.abs(c * d - 1.0) <= 4.0 * SETTLED):
                break
        logs[is_tiny] = xlogy(s, x) - x - gammaln(s) + np.log(fraction)
    return logs
