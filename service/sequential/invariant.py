"""
The likelihood ratio of the maximal invariant: hypotheses about a standardised mean, the standard deviation unknown.

Quantity: ln f(t; delta1) - ln f(t; delta0) in nats, f the density of the noncentral t with noncentrality delta *
sqrt(size). A standardised mean is (mean - reference)/sigma; for two samples (mean of b - mean of a)/sigma. With two
sides, H0 is delta = 0 and H1 |delta| = delta1, and f is the density of t**2: that of delta and -delta, averaged.
Method: f(t; delta)/f(t; 0) = exp(-m**2/2) times the integral of x**freedom exp(-x**2/2 + x*y) over the same at y = 0,
with m = delta sqrt(size), y = m * alignment, alignment = t/sqrt(freedom + t**2). With k = freedom + 1 the integrand
over ln x peaks at x = sqrt(k) exp(tilt), sinh(tilt) = y/(2 sqrt(k)), where it is exp(k (tilt + (exp(2 tilt) - 1)/2))
times its peak at y = 0. At a distance u from there it has fallen by exp(-k (exp(2 tilt) (e**u - 1)**2/2 + e**u - 1 -
u)): no term is negative, whatever the sign of t. The trapezoidal rule integrates it, and converges exponentially.
Accuracy: absolute error below 1e-12 + 1e-15 * (|ratio| + (freedom + 1) * (delta0**2 + delta1**2)), for degrees of
freedom from 1 to a million, |t| up to 1000 and |delta| up to 5; below 1e-13 wherever the ratio is within 30 nats
(measured).
Cost: about 60 exponentials for each hypothesis and point; 500 below 32 degrees of freedom.
Source: Rushton (1950), Biometrika 37, 326-333; Cox (1952), Proceedings of the Cambridge Philosophical Society 48,
290-299 (the ratio for the whole sequence of t is that for the last one); Trefethen and Weideman (2014), SIAM Review
56, 385-458.

A general density of the noncentral t does not serve: with 99 degrees of freedom scipy's (1.17, `nct.logpdf`) agrees
to 1e-9, with a thousand and more it raises OverflowError or underflows to -inf wherever t contradicts delta.
"""

import math
from dataclasses import dataclass

import numpy as np
from scipy.special import gammaln

from service.sequential.boundaries import Thresholds
from service.sequential.double import FloatArray, IndexArray
from service.sequential.errors import OutOfRange
from service.sequential.studentised import Studentised

# Standardised means beyond this are errors of the unit, not hypotheses.
LARGEST_DELTA = 100.0
# How the integral is cut, for degrees of freedom plus one below the first figure of each row: the step in widths of the
# peak, the nodes to its left and to its right. Where there are few, the integrand falls slowly to the left.
GRIDS = ((32.0, 0.5, 215, 32), (128.0, 0.5, 28, 18), (np.inf, 0.7, 17, 13))
# The step in ln x at the most: the terms turn around at an imaginary part of pi/4.
LARGEST_STEP = 0.1
# From here on Stirling's series replaces the logarithm of the gamma function, which has lost digits in its size.
STIRLING = 16.0
# Points taken at once, so that the work stays in the cache.
CHUNK = 512
# Steps of a limit's search; most take five.
MOST_STEPS = 100
# A limit is found when its ratio is this near its threshold, or its alignment known to the last digits.
CLOSE, LAST_DIGITS = 1e-12, 4e-16


@dataclass(frozen=True)
class Looks:
    """
    What decides the distribution of t at some looks; arrays of one shape. Built by `one_sample` or `two_samples`.

    Attributes:
        freedom: Degrees of freedom of t; 0 where t is not defined.
        size: The noncentrality of t is delta * sqrt(size).
    """

    freedom: FloatArray
    size: FloatArray


@dataclass(frozen=True)
class Limits:
    """
    Where the ratio equals each threshold; arrays of the shape of the looks.

    One side, delta1 > delta0: accept at or below `accept`, reject at or above `reject`; with delta1 < delta0 the
    other way round. With two sides: limits of the magnitude. A limit that is never reached is infinite, of that sign
    which no value passes, so that the comparisons need no exception.
    """

    accept: FloatArray
    reject: FloatArray


def one_sample(count: FloatArray) -> Looks:
    """Looks after `count` >= 1 measurements, or differences within pairs."""
    size = np.asarray(count, dtype=float)
    return Looks(size - 1.0, size)


def two_samples(count_a: FloatArray, count_b: FloatArray) -> Looks:
    """Looks at two samples of equal variance; counts >= 0, t being defined from 1 and 2 on."""
    a, b = np.asarray(count_a, dtype=float), np.asarray(count_b, dtype=float)
    size = a * b / np.maximum(a + b, 1.0)
    return Looks(np.where(size > 0.0, a + b - 2.0, 0.0), size)


def alignment_of(looks: Looks, t: FloatArray) -> FloatArray:
    """
    The bounded form of t: t/sqrt(freedom + t**2), from -1 to 1.

    It is the cosine of the angle between the data and a pure shift, comes from the sums without any difference, and the
    ratio is smooth in it; people know t, so t is what is drawn.
    """
    return t / np.hypot(np.sqrt(looks.freedom), t)


def t_of(looks: Looks, alignment: FloatArray) -> FloatArray:
    """The t of an alignment; infinite where all data are equal, at -1 and 1, and beyond."""
    with np.errstate(divide="ignore", invalid="ignore"):
        t = alignment * np.sqrt(looks.freedom / ((1.0 - alignment) * (1.0 + alignment)))
    return np.where(np.abs(alignment) < 1.0, t, np.copysign(np.inf, alignment))


@dataclass(frozen=True)
class InvariantRatio:
    """
    Evidence for H1 against H0, as a function of t. Build it with `invariant_ratio`.

    Attributes:
        delta0, delta1: The standardised means.
        sides: 1, or 2 for delta = 0 against |delta| = delta1.
    """

    delta0: float
    delta1: float
    sides: int = 1

    @property
    def is_upward(self) -> bool:
        """True where large t (with two sides, large |t|) speak for H1."""
        return self.sides == 2 or self.delta1 > self.delta0

    def log(self, looks: Looks, alignment: FloatArray) -> FloatArray:
        """
        The log-likelihood ratio in nats; looks and alignments of one shape, or broadcast against each other.

        Zero where t is not defined for want of degrees of freedom.
        """
        return log_density(looks, alignment, self.delta1, self.sides) - log_density(
            looks, alignment, self.delta0, self.sides
        )

    def log_of_t(self, looks: Looks, t: FloatArray) -> FloatArray:
        """The same, from a finite t; all looks with at least one degree of freedom."""
        return self.log(looks, alignment_of(looks, t))

    def log_of(self, looks: Looks, found: Studentised) -> FloatArray:
        """The same, from what the sums gave; zero while t is not defined."""
        return np.where(found.is_defined, self.log(looks, found.alignment), 0.0)

    def alignment_limits(self, looks: Looks, thresholds: Thresholds) -> Limits:
        """
        The alignments at which the ratio equals the thresholds, accept < 0 < reject, for looks of shape (points,).

        Accuracy: the ratio there is the threshold to 1e-12 and its own rounding.
        """
        return Limits(
            self._limit(looks, thresholds.accept, is_upper=not self.is_upward),
            self._limit(looks, thresholds.reject, is_upper=self.is_upward),
        )

    def t_limits(self, looks: Looks, thresholds: Thresholds) -> Limits:
        """The t (with two sides, |t|) at which the ratio equals the thresholds; looks of shape (points,)."""
        found = self.alignment_limits(looks, thresholds)
        return Limits(t_of(looks, found.accept), t_of(looks, found.reject))

    def _limit(self, looks: Looks, threshold: float, *, is_upper: bool) -> FloatArray:
        """One limit; `is_upper` where values at or above it decide."""
        low = np.full(looks.size.shape, 0.0 if self.sides == 2 else -1.0)
        high = np.ones_like(low)
        sign = 1.0 if self.is_upward else -1.0
        at_low, at_high = sign * (self.log(looks, low) - threshold), sign * (self.log(looks, high) - threshold)
        found = np.full(low.shape, np.inf if is_upper else -np.inf)
        inside = np.flatnonzero((at_low <= 0.0) & (at_high >= 0.0) & (looks.freedom >= 1.0))
        found[inside] = self._root(Looks(looks.freedom[inside], looks.size[inside]), threshold, low[inside])
        return found

    def _root(self, looks: Looks, threshold: float, low: FloatArray) -> FloatArray:
        """Newton's method within a bracket from `low` to 1 that every step narrows."""
        sign = 1.0 if self.is_upward else -1.0
        high = np.ones_like(low)
        at = 0.5 * (low + high)
        going = np.arange(len(at))
        for _ in range(MOST_STEPS):
            part = Looks(looks.freedom[going], looks.size[going])
            excess, slope = self._excess(part, at[going], threshold)
            is_high = sign * excess > 0.0
            high[going[is_high]], low[going[~is_high]] = at[going[is_high]], at[going[~is_high]]
            with np.errstate(divide="ignore", invalid="ignore"):
                proposed = at[going] - excess / slope
            middle = 0.5 * (low[going] + high[going])
            is_good = (proposed > low[going]) & (proposed < high[going])
            is_done = (np.abs(excess) <= CLOSE) | (high[going] - low[going] <= LAST_DIGITS)
            at[going] = np.where(is_done, at[going], np.where(is_good, proposed, middle))
            going = going[~is_done]
            if not going.size:
                break
        return at

    def _excess(self, looks: Looks, alignment: FloatArray, threshold: float) -> tuple[FloatArray, FloatArray]:
        """The ratio less the threshold, and its derivative by the alignment."""
        value1, slope1 = _log_density_and_slope(looks, alignment, self.delta1, self.sides)
        value0, slope0 = _log_density_and_slope(looks, alignment, self.delta0, self.sides)
        return value1 - value0 - threshold, slope1 - slope0


def invariant_ratio(delta0: float, delta1: float, sides: int = 1) -> InvariantRatio:
    """
    Args:
        delta0, delta1: Finite, different, at most 100 in magnitude; with two sides delta0 = 0 < delta1.
        sides: 1 or 2.

    Raises:
        OutOfRange: One of them is not so.
    """
    for name, value in (("delta0", delta0), ("delta1", delta1)):
        if not abs(value) <= LARGEST_DELTA:
            raise OutOfRange(name, f"must be at most {LARGEST_DELTA:g} in magnitude", value)
    if sides not in {1, 2}:
        raise OutOfRange("sides", "must be 1 or 2", sides)
    if delta0 == delta1:
        raise OutOfRange("delta1", "must differ from delta0", delta1)
    if sides == 2 and delta0 != 0.0:
        raise OutOfRange("delta0", "must be 0 with two sides", delta0)
    if sides == 2 and delta1 < 0.0:
        raise OutOfRange("delta1", "must be above 0 with two sides", delta1)
    return InvariantRatio(delta0, delta1, sides)


def log_density(looks: Looks, alignment: FloatArray, delta: float, sides: int = 1) -> FloatArray:
    """
    Ln of the density of t under delta over that under 0; with two sides, of t**2. Zero where t is not defined.

    Args:
        looks, alignment: Of one shape, or broadcast against each other.
    """
    return _log_density_and_slope(looks, alignment, delta, sides)[0]


def _log_density_and_slope(
    looks: Looks, alignment: FloatArray, delta: float, sides: int
) -> tuple[FloatArray, FloatArray]:
    """`log_density`, and its derivative by the alignment."""
    freedom, size, at = np.broadcast_arrays(looks.freedom, looks.size, alignment)
    if delta == 0.0:
        return np.zeros(at.shape), np.zeros(at.shape)
    is_defined = freedom >= 1.0
    k, scale = np.where(is_defined, freedom + 1.0, 2.0), delta * np.sqrt(size)
    log_integral, mean = _integral(k, scale * at)
    if sides == 2:
        other, other_mean = _integral(k, -scale * at)
        both = np.logaddexp(log_integral, other) - np.log(2.0)
        mean = 0.5 * (np.exp(log_integral - both) * mean - np.exp(other - both) * other_mean)
        log_integral = both
    value = log_integral - 0.5 * scale * scale
    return np.where(is_defined, value, 0.0), np.where(is_defined, scale * mean, 0.0)


def _integral(k: FloatArray, y: FloatArray) -> tuple[FloatArray, FloatArray]:
    """
    The integral over x > 0 of x**(k - 1) exp(-x**2/2 + x*y).

    Returns:
        Ln of it over the same at y = 0, and its logarithmic derivative: the mean of x.
    """
    tilt = np.arcsinh(0.5 * y / np.sqrt(k))
    rest, mean = _around_peak(k.ravel(), tilt.ravel())
    value = k * (tilt + 0.5 * np.expm1(2.0 * tilt)) + (rest.reshape(k.shape) - _rest_at_zero(k))
    return value, np.sqrt(k) * np.exp(tilt) * mean.reshape(k.shape)


def _rest_at_zero(k: FloatArray) -> FloatArray:
    """
    Ln of the integral of the fall around the peak at y = 0: gamma(z) * (e/z)**z/2 with z = k/2.

    Source: DLMF 5.11.1, Stirling's series.
    """
    z = 0.5 * k
    small = np.minimum(z, STIRLING)
    exact = gammaln(small) - small * np.log(small) + small - math.log(2.0)
    r = 1.0 / np.maximum(z, STIRLING)
    series = r / 12.0 - r**3 / 360.0 + r**5 / 1260.0 - r**7 / 1680.0 + r**9 / 1188.0
    return np.where(z < STIRLING, exact, 0.5 * np.log(0.5 * math.pi * r) + series)


def _around_peak(k: FloatArray, tilt: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Ln of the integral of the fall around the peak, and the mean of exp(u) there; arrays of shape (points,)."""
    value, mean = np.empty(k.shape), np.empty(k.shape)
    below = 0.0
    for end, width, left, right in GRIDS:
        chosen = np.flatnonzero((k >= below) & (k < end))
        below = end
        nodes = np.arange(-left, right + 1)
        for start in range(0, len(chosen), CHUNK):
            part = chosen[start : start + CHUNK]
            value[part], mean[part] = _trapezoidal(k[part], tilt[part], width, nodes)
    return value, mean


def _trapezoidal(k: FloatArray, tilt: FloatArray, width: float, nodes: IndexArray) -> tuple[FloatArray, FloatArray]:
    """The rule itself, with steps of so many widths of the peak."""
    square = np.exp(2.0 * tilt)
    step = np.minimum(width / np.sqrt(k * (1.0 + square)), LARGEST_STEP)
    u = step[:, np.newaxis] * nodes
    growth = np.expm1(u)
    fall = 0.5 * square[:, np.newaxis] * growth * growth + (growth - u)
    heights = np.exp(-k[:, np.newaxis] * fall)
    total = heights.sum(axis=1)
    return np.log(step * total), 1.0 + np.einsum("ij,ij->i", heights, growth) / total
