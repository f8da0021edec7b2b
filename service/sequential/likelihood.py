"""
The log-likelihood ratio of two simple hypotheses in a one-parameter exponential family.

Quantity: ln L(H1) - ln L(H0) = gain * (total - slope * progress), in nats, where `total` is the sufficient
statistic and `progress` the number of units or the exposure. `gain` is the difference of the natural parameters,
`slope` the difference of the cumulants divided by it: the mean of one unit at which the evidence stands still.
Accuracy: a relative rounding error of about 1e-16 in `gain` and `slope`; for `normal` the slope is exact.
Cost: a few operations.
Source: Wald (1945), Annals of Mathematical Statistics 16, 117-186; the exponential-family form is in Lehmann and
Romano, Testing Statistical Hypotheses, section 3.4.

No outcome is impossible under either hypothesis in these families (the hypotheses lie strictly inside the range of
the parameter), so the ratio is always finite.
"""

import math
from dataclasses import dataclass

from service.sequential.double import Double, FloatArray, two_product, two_sum
from service.sequential.errors import OutOfRange

# exp() of more overflows.
LARGEST_EXPONENT = 700.0


@dataclass(frozen=True)
class LikelihoodRatio:
    """
    Evidence for H1 against H0 as a function of progress and total.

    Attributes:
        gain: Nats for one more unit of the total; negative where large totals speak for H0.
        slope: Mean of one unit of progress at which the evidence does not move.
        slope_low: What the double `slope` leaves out, where it is known.
    """

    gain: float
    slope: float
    slope_low: float = 0.0

    @property
    def is_upward(self) -> bool:
        """True where large totals speak for H1."""
        return self.gain > 0.0

    @property
    def is_test_martingale(self) -> bool:
        """See `Evidence`."""
        return True

    def deviation(self, progress: Double, total: Double) -> FloatArray:
        """The total minus slope * progress, without the cancellation of the plain difference; same shape as given."""
        line = two_product(progress.high, Double.of(self.slope).high)
        difference = two_sum(total.high, -line.high)
        small = total.low - line.low - self.slope * progress.low - self.slope_low * progress.high
        return difference.high + (difference.low + small)

    def log(self, progress: Double, total: Double) -> FloatArray:
        """The log-likelihood ratio in nats; same shape as given."""
        return self.gain * self.deviation(progress, total)


def bernoulli(p0: float, p1: float) -> LikelihoodRatio:
    """
    Proportions p0 and p1, both strictly between 0 and 1; total = units with the attribute, progress = units.

    Raises:
        OutOfRange: The proportions are too close to tell apart in floating point.

    Source: Wald (1945), section 5.2: ln(p1/p0) for a nonconforming unit, ln((1 - p1)/(1 - p0)) for another.
    """
    is_close = 0.5 <= (1.0 - p0) / (1.0 - p1) <= 2.0
    cumulant = math.log1p((p1 - p0) / (1.0 - p1)) if is_close else math.log1p(-p0) - math.log1p(-p1)
    return _ratio(_log_quotient(p1, p0) + cumulant, cumulant)


def odds(odds0: float, odds1: float) -> LikelihoodRatio:
    """
    Odds u0 and u1 of one outcome against the other, both above 0; total = units with the outcome, progress = units.

    Raises:
        OutOfRange: The odds are too close to tell apart in floating point.

    Source: Wald (1947), Sequential Analysis, chapter 6: ln(u1/u0) for an outcome, and
    ln((1 + u0)/(1 + u1)) for every unit.
    """
    is_close = 0.5 <= (1.0 + odds1) / (1.0 + odds0) <= 2.0
    cumulant = math.log1p((odds1 - odds0) / (1.0 + odds0)) if is_close else math.log1p(odds1) - math.log1p(odds0)
    return _ratio(_log_quotient(odds1, odds0), cumulant)


def poisson(rate0: float, rate1: float) -> LikelihoodRatio:
    """
    Rates per unit of exposure, both above 0; total = count, progress = exposure.

    Raises:
        OutOfRange: The rates are too close to tell apart in floating point.

    Source: the Poisson density, rate**count * exp(-rate * exposure), at both rates.
    """
    return _ratio(_log_quotient(rate1, rate0), rate1 - rate0)


def negative_binomial(mean0: float, mean1: float, dispersion: float) -> LikelihoodRatio:
    """
    Mean counts per unit, both above 0, with variance mean + mean**2 / dispersion; total = count, progress = units.

    Raises:
        OutOfRange: The means are too close to tell apart in floating point.

    Source: Johnson, Kemp and Kotz, Univariate Discrete Distributions, section 5.1: the probability of x is proportional
    to (mean / (mean + dispersion))**x * (dispersion / (mean + dispersion))**dispersion.
    """
    # ln of the quotient of mean / (mean + dispersion), and of its complement, whose difference of means is exact.
    growth = (mean1 - mean0) / mean0 * (dispersion / (mean1 + dispersion))
    complement = math.log1p((mean1 - mean0) / (mean0 + dispersion))
    # Far below zero the growth may round to -1; the two logarithms then lie far apart and lose nothing.
    natural = math.log1p(growth) if growth > -0.5 else math.log(mean1 / mean0) - complement
    return _ratio(natural, dispersion * complement)


def exponential(mean0: float, mean1: float) -> LikelihoodRatio:
    """
    Mean lives, both above 0; total = failures, progress = unit-time.

    Raises:
        OutOfRange: The means are too close to tell apart in floating point.

    Source: Epstein and Sobel (1955), Annals of Mathematical Statistics 26, 82-93: failures * ln(mean0/mean1)
    - (1/mean1 - 1/mean0) * time.
    """
    return _ratio(_log_quotient(mean0, mean1), (mean0 - mean1) / mean0 / mean1)


def weibull(life0: float, life1: float, shape: float) -> LikelihoodRatio:
    """
    Characteristic lives above 0 of a known shape; total = failures, progress = the failures that life0 expects.

    The latter is the sum of (age/life0)**shape over the units, or of its growth where a unit was not watched from new.

    Raises:
        OutOfRange: The lives are too close, or too far apart, for floating point.

    Source: that of `exponential`: the power age**shape of a life is exponential with mean life**shape, here in units of
    life0**shape. Epstein and Sobel (1955); Johnson, Kotz and Balakrishnan, Continuous Univariate Distributions, vol. 1,
    section 21.2.
    """
    natural = shape * _log_quotient(life0, life1)
    return _ratio(natural, math.expm1(natural) if natural < LARGEST_EXPONENT else math.nan)


def normal(mean0: float, mean1: float, sigma: float) -> LikelihoodRatio:
    """
    Means with a known standard deviation sigma above 0; total = sum of the measurements, progress = units.

    Raises:
        OutOfRange: The means are too close, or too far apart, for floating point.

    Source: Wald (1945), section 5.4: ((mean1 - mean0)/sigma**2) * (sum - units * (mean0 + mean1)/2).
    """
    middle = two_sum(Double.of(mean0 / 2.0).high, Double.of(mean1 / 2.0).high)
    gain = (mean1 - mean0) / sigma / sigma
    return _checked(LikelihoodRatio(gain, float(middle.high), float(middle.low)))


def summed() -> LikelihoodRatio:
    """The evidence where the total is itself the sum of log-likelihood ratios, worked out elsewhere."""
    return LikelihoodRatio(gain=1.0, slope=0.0)


def lognormal(median0: float, median1: float, sigma: float) -> LikelihoodRatio:
    """
    Medians above 0 with a known standard deviation sigma of the natural logarithm; total = sum of the logarithms.

    Raises:
        OutOfRange: The medians are too close, or too far apart, for floating point.

    Source: that of `normal`, with the logarithms of the medians as means; their difference is ln(median1/median0).
    """
    distance = _log_quotient(median1, median0)
    middle = two_sum(Double.of(math.log(median0)).high, Double.of(distance / 2.0).high)
    return _checked(LikelihoodRatio(distance / sigma / sigma, float(middle.high), float(middle.low)))


def normal_variance(sigma0: float, sigma1: float) -> LikelihoodRatio:
    """
    Standard deviations above 0; total = sum of squared deviations from the mean, progress = degrees of freedom.

    One degree for each measurement where the mean is known. Where it is not, the deviations are from the mean of the
    measurements and there is one less: by Helmert's transformation the sum of squares is that of n - 1 independent
    deviations, each known as soon as its measurement comes, and its density is free of the unknown mean.

    Raises:
        OutOfRange: The standard deviations are too close, or too far apart, for floating point.

    Source: Wald (1947), Sequential Analysis, chapter 8: (1/sigma0**2 - 1/sigma1**2)/2 times the sum of squares, less
    ln(sigma1/sigma0) for each degree of freedom.
    """
    natural = 0.5 * ((sigma1 - sigma0) / sigma0) * ((sigma1 + sigma0) / sigma1) / sigma0 / sigma1
    return _ratio(natural, _log_quotient(sigma1, sigma0))


def _log_quotient(a: float, b: float) -> float:
    """ln(a/b) of positive numbers; near one the difference a - b is exact, where the quotient has lost digits."""
    quotient = a / b
    if not 0.0 < quotient < math.inf:
        return math.nan
    return math.log1p((a - b) / b) if 0.5 <= quotient <= 2.0 else math.log(quotient)


def _ratio(natural: float, cumulant: float) -> LikelihoodRatio:
    """From the differences of the natural parameters and of the cumulants."""
    return _checked(LikelihoodRatio(natural, cumulant / natural if natural else math.nan))


def _checked(ratio: LikelihoodRatio) -> LikelihoodRatio:
    """Refuse hypotheses whose likelihoods floating point cannot separate."""
    usable = math.isfinite(ratio.gain) and math.isfinite(ratio.slope) and abs(ratio.gain) > 1e-150
    if not usable:
        raise OutOfRange("h1", "must differ from h0 by an amount that double precision can tell", ratio.gain)
    return ratio
