"""
Two arms the slow way: every observation's chance from the arms' own distributions, with numbers that do not matter.

The nuisance (the other arm's chance, the rate, the level) is given at will, and the evidence must not depend on it.
"""

from fractions import Fraction

from mpmath import exp, factorial, log, mp, mpf, pi, sqrt

mp.dps = 60


def chance_of_b(odds_ratio: Fraction, chance_in_a: Fraction) -> Fraction:
    """P(b succeeds and a does not | the two differ), from both arms' chances of success."""
    odds_in_b = odds_ratio * chance_in_a / (1 - chance_in_a)
    chance_in_b = odds_in_b / (1 + odds_in_b)
    for_b, for_a = chance_in_b * (1 - chance_in_a), chance_in_a * (1 - chance_in_b)
    return for_b / (for_b + for_a)


def evidence_of_pairs(pairs: list[tuple[int, int]], u0: Fraction, u1: Fraction, chance_in_a: Fraction) -> mpf:
    """Ln of the likelihood ratio, pair by pair; pairs that agree say nothing."""
    evidence = mpf(0)
    for a, b in pairs:
        if a == b:
            continue
        p0, p1 = chance_of_b(u0, chance_in_a), chance_of_b(u1, chance_in_a)
        ratio = p1 / p0 if b == 1 else (1 - p1) / (1 - p0)
        evidence += log(mpf(ratio.numerator) / ratio.denominator)
    return evidence


def evidence_of_counts(counts: list[tuple[int, int]], ratios: tuple[float, float], exposure: float, rate: float) -> mpf:
    """Ln of the ratio of P(counts in a and b | their sum), report by report, from Poisson probabilities."""
    evidence = mpf(0)
    for a, b in counts:
        chances = []
        for ratio in ratios:
            in_a, in_b = mpf(rate), mpf(rate) * mpf(ratio) * mpf(exposure)
            together = _poisson(a + b, in_a + in_b)
            chances.append(_poisson(a, in_a) * _poisson(b, in_b) / together)
        evidence += log(chances[1]) - log(chances[0])
    return evidence


def evidence_of_differences(
    pairs: list[tuple[float, float]], means: tuple[float, float], sigmas: tuple[float, float]
) -> mpf:
    """Ln of the ratio of the densities of b - a, pair by pair."""
    variance = mpf(sigmas[0]) ** 2 + mpf(sigmas[1]) ** 2
    evidence = mpf(0)
    for a, b in pairs:
        d = mpf(b) - mpf(a)
        densities = [exp(-((d - mpf(m)) ** 2) / (2 * variance)) / sqrt(2 * pi * variance) for m in means]
        evidence += log(densities[1]) - log(densities[0])
    return evidence


def evidence_of_measurements(
    rows: list[tuple[bool, float]], means: tuple[float, float], sigmas: tuple[float, float]
) -> mpf:
    """Ln of the ratio of the likelihoods of everything measured, each at the level that suits its hypothesis best."""
    best = []
    for difference in means:
        shifted = [(x - mpf(difference) if is_b else mpf(x), mpf(sigmas[is_b])) for is_b, x in rows]
        level = sum(x / s**2 for x, s in shifted) / sum(1 / s**2 for _, s in shifted)
        best.append(-sum(((x - level) / s) ** 2 for x, s in shifted) / 2)
    return best[1] - best[0]


def _poisson(count: int, mean: mpf) -> mpf:
    return exp(-mean) * mean**count / factorial(count)
