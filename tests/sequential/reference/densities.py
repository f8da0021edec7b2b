"""
Densities and probabilities of single observations in 50 digits, constants and all, straight from the textbook.

Unclever on purpose: nothing is transformed, nothing cancels; a ratio of two of them is the evidence of one observation.
"""

from mpmath import exp, gamma, log, mp, mpf, pi, sqrt


def lognormal(x: float, median: float, sigma: float) -> mpf:
    """Density of a measurement x whose natural logarithm is normal."""
    with mp.workdps(50):
        t, s = mpf(x), mpf(sigma)
        return exp(-((log(t) - log(mpf(median))) ** 2) / (2 * s**2)) / (t * s * sqrt(2 * pi))


def weibull_hazard(age: mpf, life: float, shape: float) -> mpf:
    """The failure rate at an age."""
    with mp.workdps(50):
        k, theta = mpf(shape), mpf(life)
        return k / theta * (age / theta) ** (k - 1)


def weibull_reliability(age: mpf, life: float, shape: float) -> mpf:
    """P(a unit outlives an age)."""
    with mp.workdps(50):
        return exp(-((age / mpf(life)) ** mpf(shape)))


def negative_binomial(count: int, mean: float, dispersion: float) -> mpf:
    """Probability of a count whose variance is mean + mean**2 / dispersion."""
    with mp.workdps(50):
        k, m = mpf(dispersion), mpf(mean)
        ways = gamma(count + k) / (gamma(k) * gamma(count + 1))
        return ways * (k / (m + k)) ** k * (m / (m + k)) ** count


def normal(x: float, mean: float, sigma: float) -> mpf:
    """Density of a measurement."""
    with mp.workdps(50):
        s = mpf(sigma)
        return exp(-((mpf(x) - mpf(mean)) ** 2) / (2 * s**2)) / (s * sqrt(2 * pi))
