"""Generalised and mixture likelihood ratios, against searching and quadrature in 25 digits."""

import math
from collections.abc import Callable

import numpy as np
import pytest
from mpmath import betainc, gammainc, log, mp

from service.sequential import deviance, generalised, likelihood
from service.sequential.deviance import Deviance
from service.sequential.double import Double
from service.sequential.evidence import Evidence
from service.sequential.likelihood import LikelihoodRatio
from service.sequential.mixture import BetaMixture, GammaMixture, NormalMixture, log_beta_share, log_lower_gamma
from service.sequential.mixture import log_upper_gamma as upper
from tests.sequential.reference import composite

SIGMA = 0.8
DEVIANCES: dict[str, Deviance] = {
    "bernoulli": deviance.Bernoulli(),
    "poisson": deviance.Poisson(),
    "normal": deviance.Normal(SIGMA),
}
RATIOS: dict[str, Callable[[float, float], LikelihoodRatio]] = {
    "bernoulli": likelihood.bernoulli,
    "poisson": likelihood.poisson,
    "normal": lambda a, b: likelihood.normal(a, b, SIGMA),
}
RANGES = {"bernoulli": (1e-30, 1 - 1e-30), "poisson": (1e-30, 50.0), "normal": (-50.0, 50.0)}
# Totals below, between and above the hypotheses, at the ends of the range, and next to an edge.
POINTS = {
    "bernoulli": [(50.0, 0.0), (50.0, 2.0), (50.0, 4.0), (50.0, 9.0), (50.0, 50.0), (1e6, 50_001.0), (1e6, 99_999.0)],
    "poisson": [(20.0, 0.0), (20.0, 7.0), (20.0, 20.0), (20.0, 31.0), (20.0, 90.0), (1e6, 800_001.0)],
    "normal": [(10.0, -3.7), (10.0, 4.0), (10.0, 9.0), (10.0, 40.0), (1e6, 300_000.25)],
}
EDGES = {"bernoulli": (0.05, 0.1), "poisson": (0.8, 1.4), "normal": (0.3, 0.8)}
PRIORS = {"bernoulli": {"a": 0.7, "b": 9.0}, "poisson": {"shape": 2.5, "rate": 1.5}, "normal": {"tau": 0.4}}


def one(value: float) -> Double:
    return Double(np.array([value]), np.zeros(1))


def evidence_at(evidence: Evidence, progress: float, total: float) -> float:
    return float(evidence.log(one(progress), one(total))[0])


@pytest.mark.parametrize("family", DEVIANCES)
@pytest.mark.parametrize("is_upward", [True, False])
def test_the_one_sided_ratio_is_the_difference_of_two_suprema(family: str, *, is_upward: bool) -> None:
    low, high = EDGES[family]
    edge0, edge1 = (low, high) if is_upward else (high, low)
    evidence = generalised.OneSided(DEVIANCES[family], edge0, edge1, RATIOS[family](edge0, edge1), is_upward)
    smallest, largest = RANGES[family]
    for progress, total in POINTS[family]:
        below = composite.supremum(family, smallest, low, progress, total, SIGMA)
        above = composite.supremum(family, high, largest, progress, total, SIGMA)
        expected = float(above - below if is_upward else below - above)
        assert evidence_at(evidence, progress, total) == pytest.approx(expected, rel=1e-12, abs=1e-12)


@pytest.mark.parametrize("family", DEVIANCES)
def test_equal_edges_and_two_sides(family: str) -> None:
    edge = EDGES[family][0]
    smallest, largest = RANGES[family]
    signed = generalised.OneSided(DEVIANCES[family], edge, edge, None, is_upward=True)
    both = generalised.TwoSided(DEVIANCES[family], edge)
    for progress, total in POINTS[family]:
        below = composite.supremum(family, smallest, edge, progress, total, SIGMA)
        above = composite.supremum(family, edge, largest, progress, total, SIGMA)
        at_edge = composite.supremum(family, edge, edge, progress, total, SIGMA)
        assert evidence_at(signed, progress, total) == pytest.approx(float(above - below), rel=1e-12, abs=1e-12)
        expected = float(max(above, below) - at_edge)
        assert evidence_at(both, progress, total) == pytest.approx(expected, rel=1e-12, abs=1e-12)


@pytest.mark.parametrize(
    ("observed", "expected", "statistic"), [(494, 484.2, 0.098), (595, 577.3, 0.267), (708, 677.1, 0.696)]
)
def test_published_rows_of_the_poisson_ratio(observed: int, expected: float, statistic: float) -> None:
    """PMC3644310, table 2a; the expected counts are printed to a tenth, which moves the statistic by 0.003 at most."""
    evidence = generalised.OneSided(deviance.Poisson(), 1.0, 1.0, None, is_upward=True)
    assert evidence_at(evidence, expected, float(observed)) == pytest.approx(statistic, abs=3.5e-3)


def mixture_of(family: str, direction: int) -> Evidence:
    prior, edge = PRIORS[family], EDGES[family][0]
    if family == "bernoulli":
        return BetaMixture(edge, direction, prior["a"], prior["b"])
    if family == "poisson":
        return GammaMixture(edge, direction, prior["shape"], prior["rate"])
    return NormalMixture(edge, direction, SIGMA, prior["tau"])


@pytest.mark.parametrize("family", PRIORS)
@pytest.mark.parametrize("direction", [0, 1, -1])
def test_a_mixture_is_the_average_over_its_prior(family: str, direction: int) -> None:
    evidence, edge = mixture_of(family, direction), EDGES[family][0]
    for progress, total in POINTS[family]:
        if progress > 1e3:  # the quadrature would miss the peak
            continue
        expected = float(composite.averaged(family, PRIORS[family], edge, direction, (progress, total, SIGMA)))
        assert evidence_at(evidence, progress, total) == pytest.approx(expected, rel=1e-12, abs=1e-12)


def test_published_normal_mixture() -> None:
    """
    Robbins (1970), Annals of Mathematical Statistics 41, 1397-1409: the closed form at V = 1, tau**2 = .04, n = 50 and
    mean .4, evaluated twice.
    """
    evidence = NormalMixture(0.0, 0, 1.0, 0.2)
    assert math.exp(evidence_at(evidence, 50.0, 20.0)) == pytest.approx(8.309176631689, rel=1e-12)


@pytest.mark.parametrize(
    ("a", "b", "y"), [(4001.0, 2.0, 0.3), (1.5, 9e5, 0.9), (2000.0, 3000.0, 0.1), (30.0, 4.0, 1e-20)]
)
def test_shares_of_a_beta_prior_that_no_double_holds(a: float, b: float, y: float) -> None:
    arrays = np.array([a]), np.array([b])
    tail = (
        log_beta_share(*arrays, y, np.zeros(1))
        if a != 1.5
        else log_beta_share(arrays[1], arrays[0], 1.0 - y, np.zeros(1))
    )
    with mp.workdps(60):
        p, q, at = (a, b, mp.mpf(y)) if a != 1.5 else (b, a, 1 - mp.mpf(y))
        expected = float(log(betainc(p, q, 0, at, regularized=True)))
    assert float(tail[0]) == pytest.approx(expected, rel=1e-10)


@pytest.mark.parametrize(("shape", "at"), [(2.5, 900.0), (700.0, 5e3), (7e3, 1.2e4)])
def test_upper_shares_of_a_gamma_prior_that_no_double_holds(shape: float, at: float) -> None:
    with mp.workdps(60):
        expected = float(log(gammainc(shape, at, mp.inf, regularized=True)))
    assert float(upper(np.array([shape]), np.array([at]))[0]) == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize(("shape", "at"), [(500.0, 20.0), (9e3, 4e3)])
def test_lower_shares_of_a_gamma_prior_that_no_double_holds(shape: float, at: float) -> None:
    with mp.workdps(60):
        expected = float(log(gammainc(shape, 0, at, regularized=True)))
    assert float(log_lower_gamma(np.array([shape]), np.array([at]))[0]) == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize("family", DEVIANCES)
def test_the_deviance_keeps_its_digits_next_to_the_parameter(family: str) -> None:
    """Totals one part in a million from what the parameter leads to expect."""
    parameter, n = EDGES[family][0], 1e9
    total = round(parameter * n * (1.0 + 1e-6))
    found: Deviance = DEVIANCES[family]
    with mp.workdps(60):
        best = composite.log_likelihood(family, mp.mpf(total) / mp.mpf(n), n, total, SIGMA)
        expected = float(best - composite.log_likelihood(family, mp.mpf(parameter), n, total, SIGMA))
    assert float(found.against(one(n), one(float(total)), parameter)[0]) == pytest.approx(expected, rel=1e-9)
