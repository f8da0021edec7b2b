"""
The ratio of two densities of the noncentral t, in 50 digits, in two ways.

Unclever on purpose. For up to a hundred degrees of freedom through the parabolic cylinder function of mpmath (DLMF
12.5.1: the integral of w**freedom exp(-w**2/2 + w*y) is gamma(freedom + 1) exp(y**2/4) U(freedom + 1/2, -y)); for
more, where its series are slow, from the definition: t is (z + m)/sqrt(v/freedom) with a standard normal z and a
chi-square v, so the density is an integral over the root w of v, here a plain sum of 1,200 terms around its peak.
"""

from mpmath import exp, gamma, inf, log, mpf, pcfu, pi, quad, sqrt, workdps

DIGITS = 50
# Beyond, the parabolic cylinder function takes seconds.
SERIES = 100


def log_ratio(freedom: int, size: float, t: float, delta0: float, delta1: float, sides: int = 1) -> mpf:
    """Ln f(t; delta1) - ln f(t; delta0); with two sides, f of the magnitude of t."""
    with workdps(DIGITS):
        return _log_density(freedom, size, t, delta1, sides) - _log_density(freedom, size, t, delta0, sides)


def density(freedom: int, noncentrality: float, t: float) -> mpf:
    """The density itself, for few degrees of freedom."""
    nu = mpf(freedom)

    def joint(w: mpf) -> mpf:
        normal = exp(-((mpf(t) * w / sqrt(nu) - mpf(noncentrality)) ** 2) / 2) / sqrt(2 * pi)
        return normal * w / sqrt(nu) * w ** (nu - 1) * exp(-(w**2) / 2) / (2 ** (nu / 2 - 1) * gamma(nu / 2))

    return quad(joint, [0, sqrt(nu), 3 * sqrt(nu), inf])


def _log_density(freedom: int, size: float, t: float, delta: float, sides: int) -> mpf:
    """Without the factors that do not depend on delta."""
    way = _by_series if freedom <= SERIES else _by_sum
    one = way(freedom, size, t, delta)
    return one if sides == 1 else log((exp(one) + exp(way(freedom, size, t, -delta))) / 2)


def _by_series(freedom: int, size: float, t: float, delta: float) -> mpf:
    m = mpf(delta) * sqrt(mpf(size))
    y = m * mpf(t) / sqrt(mpf(freedom) + mpf(t) ** 2)
    return log(pcfu(freedom + mpf(1) / 2, -y)) + y**2 / 4 - m**2 / 2


def _by_sum(freedom: int, size: float, t: float, delta: float) -> mpf:
    """Ln of the integral over w of w**freedom exp(-w**2/2 - (t w/sqrt(freedom) - m)**2/2)."""
    nu, slope, m = mpf(freedom), mpf(t) / sqrt(mpf(freedom)), mpf(delta) * sqrt(mpf(size))
    square = 1 + slope**2
    peak = (slope * m + sqrt(slope**2 * m**2 + 4 * square * nu)) / (2 * square)
    width = 1 / sqrt(nu / peak**2 + square)

    def fall(w: mpf) -> mpf:
        return nu * log(w) - w**2 / 2 - (slope * w - m) ** 2 / 2

    # Both integrals of a ratio are over the same w, each with its own step.
    top, step = fall(peak), width / 10
    places = [peak + j * step for j in range(-400, 800)]
    return top + log(step * sum(exp(fall(w) - top) for w in places if w > 0))
