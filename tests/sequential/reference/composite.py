"""
Composite evidence the slow way: suprema by searching, averages by quadrature, in 25 digits, from the densities.

Unclever on purpose: no closed form of the suprema, of conjugate priors or of their tails is used.
"""

from mpmath import exp, inf, log, mp, mpf, quad

DIGITS = 25
# Points of the search, and how often it is refined around its best one.
POINTS, REFINEMENTS = 9, 45


def log_likelihood(family: str, parameter: mpf, progress: float, total: float, sigma: float) -> mpf:
    """Ln of the likelihood of a total, terms without the parameter left out; the parameter is a mean of the total."""
    theta, n, t = mpf(parameter), mpf(progress), mpf(total)
    if family == "bernoulli":
        return (t * log(theta) if t else mpf(0)) + ((n - t) * log(1 - theta) if n != t else mpf(0))
    if family == "poisson":
        return (t * log(theta) if t else mpf(0)) - theta * n
    return (t * theta - n * theta**2 / 2) / mpf(sigma) ** 2


def supremum(family: str, low: float, high: float, progress: float, total: float, sigma: float) -> mpf:
    """The largest log-likelihood over an interval, by a grid drawn together around its best point."""
    with mp.workdps(DIGITS):
        begin, end = mpf(low), mpf(high)
        for _ in range(REFINEMENTS):
            step = (end - begin) / (POINTS - 1)
            at = [begin + i * step for i in range(POINTS)]
            values = [log_likelihood(family, theta, progress, total, sigma) for theta in at]
            best = max(range(POINTS), key=values.__getitem__)
            begin, end = at[max(0, best - 1)], at[min(POINTS - 1, best + 1)]
        return max(values)


def averaged(
    family: str, prior: dict[str, float], edge: float, direction: int, point: tuple[float, float, float]
) -> mpf:
    """Ln of the likelihood averaged over a prior, or its part on one side of the edge, against that at the edge."""
    progress, total, sigma = point
    with mp.workdps(DIGITS):
        low, high = {"bernoulli": (mpf(0), mpf(1)), "poisson": (mpf(0), inf), "normal": (-inf, inf)}[family]
        low, high = (mpf(edge), high) if direction > 0 else (low, mpf(edge)) if direction < 0 else (low, high)
        at_edge = log_likelihood(family, mpf(edge), progress, total, sigma)

        def weight(theta: mpf) -> mpf:
            if family == "bernoulli":
                return theta ** (mpf(prior["a"]) - 1) * (1 - theta) ** (mpf(prior["b"]) - 1)
            if family == "poisson":
                return theta ** (mpf(prior["shape"]) - 1) * exp(-mpf(prior["rate"]) * theta)
            return exp(-((theta - mpf(edge)) ** 2) / (2 * mpf(prior["tau"]) ** 2))

        def ratio(theta: mpf) -> mpf:
            return weight(theta) * exp(log_likelihood(family, theta, progress, total, sigma) - at_edge)

        inside = sorted({mpf(total) / mpf(progress), mpf(edge)})
        ends = [low, *(theta for theta in inside if low < theta < high), high]
        return log(quad(ratio, ends) / quad(weight, ends))
