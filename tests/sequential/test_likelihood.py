"""The log-likelihood ratio against the densities themselves."""

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from mpmath import exp, log, mp, mpf

from service.sequential import likelihood
from service.sequential.double import Double
from service.sequential.errors import OutOfRange
from service.sequential.likelihood import LikelihoodRatio
from tests.sequential.reference import slow

proportions = st.floats(1e-6, 1 - 1e-6)
rates = st.floats(1e-6, 1e6)


def agrees(ratio: LikelihoodRatio, plan: slow.Plan, weight: float, total: float) -> None:
    """Agreement to 1e-12, relative to the terms whose difference the evidence is."""
    evidence = float(ratio.log(Double.of(weight), Double.of(total)))
    exact = slow.step(plan, total, weight) if plan.family != "normal" else _normal(plan, weight, total)
    size = abs(ratio.gain) * (abs(total) + abs(ratio.slope) * weight)
    assert abs(mpf(evidence) - exact) <= 1e-12 * max(size, abs(exact)) + 1e-300


def _normal(plan: slow.Plan, units: float, total: float) -> mpf:
    """Sum over equal measurements whose mean is total/units: the ratio depends on nothing else."""
    mean = mpf(total) / mpf(units)
    h0, h1 = mpf(plan.h0), mpf(plan.h1)
    return mpf(units) * ((mean - h0) ** 2 - (mean - h1) ** 2) / (2 * mpf(plan.sigma) ** 2)


@given(proportions, proportions, st.integers(1, 10**6), st.data())
def test_bernoulli_agrees_with_its_density(p0: float, p1: float, n: int, data: st.DataObject) -> None:
    assume(abs(p1 - p0) > 1e-9)
    d = data.draw(st.integers(0, n))
    agrees(likelihood.bernoulli(p0, p1), slow.Plan("bernoulli", p0, p1, -1, 1), n, d)


@given(rates, rates, st.floats(1e-3, 1e6), st.integers(0, 10**6))
def test_poisson_agrees_with_its_density(rate0: float, rate1: float, exposure: float, count: int) -> None:
    assume(abs(rate1 / rate0 - 1) > 1e-9)
    agrees(likelihood.poisson(rate0, rate1), slow.Plan("poisson", rate0, rate1, -1, 1), exposure, count)


@given(rates, rates, st.floats(1e-3, 1e6), st.integers(0, 10**6))
def test_exponential_agrees_with_its_density(mean0: float, mean1: float, time: float, failures: int) -> None:
    assume(abs(mean1 / mean0 - 1) > 1e-9)
    agrees(likelihood.exponential(mean0, mean1), slow.Plan("exponential", mean0, mean1, -1, 1), time, failures)


@given(st.floats(-1e6, 1e6), st.floats(-1e3, 1e3), st.floats(1e-3, 1e3), st.integers(1, 10**6), st.floats(-1e3, 1e3))
def test_normal_agrees_with_its_density(m0: float, shift: float, sigma: float, n: int, off: float) -> None:
    assume(abs(shift) > 1e-6)
    plan = slow.Plan("normal", m0, m0 + shift, -1, 1, sigma=sigma)
    agrees(likelihood.normal(m0, m0 + shift, sigma), plan, n, n * (m0 + off))


def test_a_small_shift_on_a_large_mean_loses_nothing() -> None:
    """A million measurements near 1e6 with a shift of 1e-3: plain doubles would keep four digits of the evidence."""
    ratio = likelihood.normal(1e6, 1e6 + 1e-3, 0.01)
    total, n = 1e12 + 437.5, 1e6
    exact = _normal(slow.Plan("normal", 1e6, 1e6 + 1e-3, -1, 1, sigma=0.01), n, total)
    assert float(ratio.log(Double.of(n), Double.of(total))) == pytest.approx(float(exact), rel=1e-13)


def test_hypotheses_that_doubles_cannot_tell_apart_are_refused() -> None:
    with pytest.raises(OutOfRange):
        likelihood.normal(1.0, 1.0, 1.0)
    with pytest.raises(OutOfRange):
        likelihood.bernoulli(5e-324, 0.5)
    with pytest.raises(OutOfRange):
        likelihood.normal(0.0, 1e200, 1e-100)


@given(proportions, proportions, st.permutations([0] * 12 + [1] * 5))
def test_the_order_of_the_units_does_not_matter(p0: float, p1: float, units: list[int]) -> None:
    assume(abs(p1 - p0) > 1e-3)
    ratio = likelihood.bernoulli(p0, p1)
    exact = sum(slow.step(slow.Plan("bernoulli", p0, p1, -1, 1), x, 1) for x in units)
    evidence = ratio.log(Double.of(17.0), Double.of(float(np.sum(units))))
    assert float(evidence) == pytest.approx(float(exact), rel=1e-9, abs=1e-11)


@pytest.mark.parametrize("h0", [3.0, 1e-50, 1e50])
@pytest.mark.parametrize("apart", [1e-9, 1e-4, 0.3, -0.3, 40.0])
@pytest.mark.parametrize("known", [0.02, 1.0, 70.0])
def test_close_and_far_hypotheses_keep_their_digits(h0: float, apart: float, known: float) -> None:
    """Gain and slope of the families with something known, in 60 digits from their natural parameters and cumulants."""
    h1 = h0 * (1.0 + apart)
    a, b, k = mpf(h0), mpf(h1), mpf(known)
    g = k * log(a / b)
    scale = mpf(1) if h0 == 3.0 else a  # dispersion and means of one size
    d = k * scale
    found = {
        likelihood.lognormal(h0, h1, known): (log(b / a) / k**2, log(a * b) / 2),
        likelihood.weibull(h0, h1, known): (g, (exp(g) - 1) / g),
        likelihood.negative_binomial(h0, h1, float(d)): (
            log(b / (b + mpf(float(d)))) - log(a / (a + mpf(float(d)))),
            mpf(float(d))
            * log((b + mpf(float(d))) / (a + mpf(float(d))))
            / (log(b / (b + mpf(float(d)))) - log(a / (a + mpf(float(d))))),
        ),
        likelihood.normal_variance(h0, h1): (
            (1 / a**2 - 1 / b**2) / 2,
            log(b / a) / ((1 / a**2 - 1 / b**2) / 2),
        ),
    }
    for ratio, (gain, slope) in found.items():
        assert ratio.gain == pytest.approx(float(gain), rel=2e-14)
        assert ratio.slope == pytest.approx(float(slope), rel=2e-13)


@pytest.mark.parametrize("mean1", [1e-100, 1e-17, 1e-3, 0.5, 0.9, 1.1])
def test_counts_that_all_but_vanish_under_h1_keep_their_digits(mean1: float) -> None:
    with mp.workdps(60):
        a, b, k = mpf(2), mpf(mean1), mpf(3)
        gain = log(b / (b + k)) - log(a / (a + k))
        slope = k * log((b + k) / (a + k)) / gain
    ratio = likelihood.negative_binomial(2.0, mean1, 3.0)
    assert ratio.gain == pytest.approx(float(gain), rel=2e-14)
    assert ratio.slope == pytest.approx(float(slope), rel=2e-14)
