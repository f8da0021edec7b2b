"""Families by transformation or with something known, against their densities, observation by observation."""

import math
from collections.abc import Callable
from fractions import Fraction
from functools import reduce
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from mpmath import findroot, gammainc, log, mp, mpf

from service.domain.characteristics import promise_of
from service.domain.checking import checked_content
from service.domain.families.base import Start
from service.domain.observing import observe
from service.domain.outlook import outlook_of, ways_of
from service.domain.procedure import Procedure, procedure_of_document
from service.domain.state import State
from service.sequential import fixed_sample
from service.sequential.approximations import approximate
from service.sequential.decision import Decision
from service.sequential.likelihood import LikelihoodRatio
from service.sequential.region import StraightRegion
from service.sequential.transforms import power_spans
from tests.domain.test_observing import NOW
from tests.sequential.reference import densities, paths

RISKS = {"alpha": 0.05, "beta": 0.10}

ONE = Fraction(1)

Likelihood = Callable[[Any, float], mpf]


def compiled(**content: Any) -> Procedure:
    return procedure_of_document(checked_content({**RISKS, **content}))


def fraction(probability: mpf) -> Fraction:
    """To 40 digits."""
    return Fraction(int(probability * 10**40), 10**40)


def slow(procedure: Procedure, values: list[Any], density: Likelihood, wall: int | None) -> tuple[str, int, mpf]:
    """Decision, observations used and evidence, by multiplying densities."""
    assert procedure.thresholds is not None
    (h0, h1), limits, evidence = procedure.hypotheses, procedure.thresholds, mpf(0)
    for used, value in enumerate(values, start=1):
        evidence += log(density(value, h1)) - log(density(value, h0))
        if evidence <= limits.accept:
            return "accept", used, evidence
        if evidence >= limits.reject:
            return "reject", used, evidence
        if used == wall:
            return ("reject" if evidence > 0 else "accept"), used, evidence
    return "continue", len(values), evidence


def agrees(procedure: Procedure, values: list[Any], density: Likelihood, cut: int, wall: int | None = None) -> None:
    """The fast answer is the slow one, and the same bits in one submission and in two."""
    whole = observe(procedure, State(), {"values": values}, NOW)
    pieces = [piece for piece in (values[:cut], values[cut:]) if piece]
    split = reduce(lambda state, piece: observe(procedure, state, {"values": piece}, NOW), pieces, State())
    assert split == whole
    decision, used, evidence = slow(procedure, values, density, wall)
    assert (whole.decision, whole.sample_number) == (decision, used)
    ratio = procedure.evidence
    assert isinstance(ratio, LikelihoodRatio)
    size = abs(ratio.gain) * (abs(whole.total.value) + abs(ratio.slope) * used)
    assert abs(whole.log_likelihood_ratio - float(evidence)) <= 1e-12 * max(1.0, size)


@settings(max_examples=60, deadline=None)
@given(
    st.sampled_from([(10.0, 15.0), (15.0, 10.0), (1e-6, 2e-6), (300.0, 310.0)]),
    st.sampled_from([0.3, 1.0, 2.5]),
    st.sampled_from([0.0, 0.5, 1.0]),
    st.integers(0, 2**32 - 1),
    st.integers(1, 90),
    st.sampled_from([None, 20]),
)
def test_lognormal_agrees_with_its_density(
    medians: tuple[float, float], sigma: float, place: float, seed: int, cut: int, wall: int | None
) -> None:
    known = {"sigma": sigma}
    truncation = {"truncation": {"sample_number": wall}} if wall else {}
    procedure = compiled(family="lognormal", h0=medians[0], h1=medians[1], known=known, **truncation)
    median = medians[0] ** (1 - place) * medians[1] ** place
    values = np.random.default_rng(seed).lognormal(np.log(median), sigma, 90).tolist()
    agrees(procedure, values, lambda x, theta: densities.lognormal(x, theta, sigma), cut, wall)


def test_lognormal_has_the_exact_figures_of_its_logarithm() -> None:
    """One sigma apart, alpha = beta = .05: the normal plan's figures, by two independent computations to 12 digits."""
    plan = checked_content(
        {"family": "lognormal", "h0": 20.0, "h1": 20.0 * np.e, "alpha": 0.05, "beta": 0.05, "known": {"sigma": 1.0}}
    )
    promise = promise_of(plan, [20.0, 20.0 * np.e**0.5])
    assert promise.points[0].probability_of_acceptance == pytest.approx(0.97135781, abs=5e-9)
    means = [point.sample_number.mean for point in promise.points if point.sample_number]
    assert means == pytest.approx([6.92007795, 12.69065621], abs=5e-9)
    assert promise.error_bound is not None
    assert promise.error_bound < 1e-10
    assert promise.points[0].siegmund is not None
    assert promise.fixed_sample is not None
    assert promise.fixed_sample.size == 11


def test_the_ways_of_lognormal_are_measurements_that_decide() -> None:
    procedure = compiled(family="lognormal", h0=10.0, h1=15.0, known={"sigma": 0.5})
    begun = observe(procedure, State(), {"values": [11.0, 14.0]}, NOW)
    ways = ways_of(procedure, begun)
    assert ways.accept is not None
    assert ways.reject is not None
    for way, decision, inside in ((ways.accept, "accept", 1.001), (ways.reject, "reject", 0.999)):
        edge = np.exp(way.total)
        assert way.words.endswith(f"{edge:.6g}")
        outside = edge / inside**0.001
        assert observe(procedure, begun, {"values": [outside]}, NOW).decision == decision
        assert observe(procedure, begun, {"values": [edge * inside]}, NOW).decision == "continue"


def test_the_estimate_of_lognormal_is_the_geometric_mean() -> None:
    plan = checked_content({**RISKS, "family": "lognormal", "h0": 10.0, "h1": 15.0, "known": {"sigma": 0.5}})
    state = observe(procedure_of_document(plan), State(), {"values": [9.0, 16.0]}, NOW)
    outlook = outlook_of(plan, state)
    assert outlook.estimate == pytest.approx(12.0, rel=1e-14)
    assert [part.under for part in outlook.expected] == ["h0", "h1", "estimate"]


@settings(max_examples=60, deadline=None)
@given(
    st.sampled_from([(0.5, 1.5), (1.5, 0.5), (4.0, 5.0), (0.02, 0.1)]),
    st.sampled_from([0.3, 2.0, 50.0]),
    st.sampled_from([0.0, 0.5, 1.0]),
    st.integers(0, 2**32 - 1),
    st.integers(1, 90),
    st.sampled_from([None, 20]),
)
def test_negative_binomial_agrees_with_its_probabilities(
    means: tuple[float, float], dispersion: float, place: float, seed: int, cut: int, wall: int | None
) -> None:
    truncation = {"truncation": {"sample_number": wall}} if wall else {}
    known = {"dispersion": dispersion}
    procedure = compiled(family="negative_binomial", h0=means[0], h1=means[1], known=known, **truncation)
    mean = means[0] ** (1 - place) * means[1] ** place
    values = np.random.default_rng(seed).negative_binomial(dispersion, dispersion / (mean + dispersion), 90).tolist()
    agrees(procedure, values, lambda x, theta: densities.negative_binomial(x, theta, dispersion), cut, wall)


@pytest.mark.parametrize("dispersion", [0.4, 3.0, 1e9])
@pytest.mark.parametrize("mean", [0.0, 0.25, 0.9])
def test_negative_binomial_has_exact_figures(dispersion: float, mean: float) -> None:
    """Look by look in fractions of the probabilities, to a wall of 12 units."""
    procedure = compiled(
        family="negative_binomial", h0=0.25, h1=1.0, known={"dispersion": dispersion}, truncation={"sample_number": 12}
    )
    table = procedure.region.limits(np.arange(13.0))
    chances = {k: fraction(densities.negative_binomial(k, mean, dispersion)) for k in range(40)} if mean else {0: ONE}
    expected = paths.looks(lambda n: (float(table.lower[n]), float(table.upper[n])), chances, 12, rest_above=True)
    found = procedure.family.exact(procedure.region, np.array([mean]), procedure.known)
    assert abs(found.below[0] - expected.below) <= found.error_bound < 1e-12
    assert found.mean[0] == pytest.approx(expected.mean, rel=1e-12)
    assert found.standard_deviation[0] ** 2 == pytest.approx(expected.second - expected.mean**2, abs=1e-11)
    assert found.quantiles[0].tolist() == [expected.quantile(q) for q in (0.5, 0.9, 0.95, 0.99)]


def test_a_large_dispersion_is_poisson() -> None:
    counts = promise_of(checked_content({**RISKS, "family": "poisson", "h0": 0.5, "h1": 1.5}), [0.5, 0.9])
    content = {**RISKS, "family": "negative_binomial", "h0": 0.5, "h1": 1.5, "known": {"dispersion": 1e12}}
    found = promise_of(checked_content(content), [0.5, 0.9])
    for point, other in zip(found.points, counts.points, strict=True):
        assert point.probability_of_acceptance == pytest.approx(other.probability_of_acceptance, abs=1e-11)
        assert point.sample_number is not None
        assert other.exposure is not None
        assert point.sample_number.mean == pytest.approx(other.exposure.mean, rel=1e-11)
        assert point.wald is not None
        assert other.wald is not None
        assert point.wald.average == pytest.approx(other.wald.average, rel=1e-9)


def test_walds_approximation_is_right_at_the_hypotheses() -> None:
    """By construction: the conjugate root is the gain itself there, so the approximate risks are the stated ones."""
    for h0, h1, dispersion in ((0.5, 1.5, 0.01), (1.5, 0.5, 0.01), (3.0, 4.0, 1e4)):
        procedure = compiled(family="negative_binomial", h0=h0, h1=h1, known={"dispersion": dispersion})
        walds_risks_are_the_stated_ones(procedure)


def walds_risks_are_the_stated_ones(procedure: Procedure) -> None:
    region = procedure.region
    assert isinstance(region, StraightRegion)
    for parameter, accepts in zip(procedure.hypotheses, (0.95, 0.10), strict=True):
        motion = procedure.family.motion(parameter, procedure.known)
        found = approximate(motion, region.ratio.slope, region.lower_intercept, region.upper_intercept)
        assert found is not None
        below = accepts if region.below is Decision.ACCEPT else 1 - accepts
        assert found.below == pytest.approx(below, abs=1e-9)


def test_no_smaller_sample_of_counts_keeps_both_risks() -> None:
    """Every size and limit below the answer, from sums of the probabilities."""
    found = fixed_sample.negative_binomial(0.5, 1.5, 2.0, 0.05, 0.10)
    assert found is not None

    def accepts(n: int, c: int, mean: float) -> float:
        return float(sum(densities.negative_binomial(k, n * mean, n * 2.0) for k in range(c + 1)))

    assert found.lower_risk == pytest.approx(1 - accepts(int(found.size), int(found.limit), 0.5), abs=1e-13)
    assert found.upper_risk == pytest.approx(accepts(int(found.size), int(found.limit), 1.5), abs=1e-13)
    assert found.lower_risk <= 0.05
    assert found.upper_risk <= 0.10
    for n in range(1, int(found.size)):
        assert not any(1 - accepts(n, c, 0.5) <= 0.05 and accepts(n, c, 1.5) <= 0.10 for c in range(2 * n + 4))


def test_the_ways_of_negative_binomial_decide_and_one_less_does_not() -> None:
    procedure = compiled(family="negative_binomial", h0=0.5, h1=1.5, known={"dispersion": 2.0})
    begun = observe(procedure, State(), {"values": [1, 0, 2]}, NOW)
    ways = ways_of(procedure, begun)
    assert ways.accept is not None
    assert ways.reject is not None
    assert ways.accept.observations is not None
    needed, rise = ways.accept.observations, round(ways.accept.total)
    assert rise == 0
    assert ways.accept.words == f"{needed} units without a count"
    assert observe(procedure, begun, {"values": [0] * needed}, NOW).decision == "accept"
    assert observe(procedure, begun, {"values": [0] * (needed - 1)}, NOW).decision == "continue"
    count = round(ways.reject.total)
    assert ways.reject.words == f"1 unit with at least {count} counts"
    assert observe(procedure, begun, {"values": [count]}, NOW).decision == "reject"
    assert observe(procedure, begun, {"values": [count - 1]}, NOW).decision == "continue"


Stretch = tuple[float, float, bool]


def slow_lives(procedure: Procedure, stretches: list[Stretch], shape: float) -> tuple[str, int, mpf | None]:
    """Decision, stretches used, and the age at which it fell where no failure made it; from hazards and reliability."""
    assert procedure.thresholds is not None
    (h0, h1), limits, evidence = procedure.hypotheses, procedure.thresholds, mpf(0)
    falls_to, jumps_to = ("accept", "reject") if h1 < h0 else ("reject", "accept")
    limit = mpf(limits.accept if falls_to == "accept" else limits.reject)

    def outlived(begin: float, age: mpf) -> mpf:
        """Evidence in outliving an age after having reached another."""
        lived = [
            densities.weibull_reliability(age, life, shape) / densities.weibull_reliability(mpf(begin), life, shape)
            for life in (h0, h1)
        ]
        return log(lived[1]) - log(lived[0])

    def is_over(value: mpf) -> bool:
        return bool(value <= limit if falls_to == "accept" else value >= limit)

    for used, (begin, age, failed) in enumerate(stretches, start=1):
        if is_over(evidence + outlived(begin, mpf(age))):
            low, high = mpf(begin), mpf(age)
            for _ in range(60):
                middle = (low + high) / 2
                low, high = (low, middle) if is_over(evidence + outlived(begin, middle)) else (middle, high)
            return falls_to, used, high
        evidence += outlived(begin, mpf(age))
        if failed:
            hazards = [densities.weibull_hazard(mpf(age), life, shape) for life in (h0, h1)]
            evidence += log(hazards[1]) - log(hazards[0])
        if evidence >= limits.reject if jumps_to == "reject" else evidence <= limits.accept:
            return jumps_to, used, None
    return "continue", len(stretches), None


@settings(max_examples=25, deadline=None)
@given(
    st.sampled_from([(1000.0, 500.0), (500.0, 1000.0), (2.0, 1.9), (1e-3, 5e-4)]),
    st.sampled_from([0.5, 1.0, 2.5, 6.0]),
    st.integers(0, 2**32 - 1),
    st.integers(1, 40),
)
def test_weibull_agrees_with_its_hazard(lives: tuple[float, float], shape: float, seed: int, cut: int) -> None:
    procedure = compiled(family="weibull", h0=lives[0], h1=lives[1], known={"shape": shape})
    source = np.random.default_rng(seed)
    stretches: list[Stretch] = []
    for life in lives[0] * source.weibull(shape, 20):
        first = float(source.uniform(0.2, 1.5)) * lives[0]
        stretches.append((0.0, min(first, float(life)), life <= first))
        if life > first:
            stretches.append((first, float(life), bool(source.integers(2))))
    rows = [{"time": age, "failed": failed, **({"from": a} if a else {})} for a, age, failed in stretches]
    whole = observe(procedure, State(), {"observations": rows}, NOW)
    pieces = [piece for piece in (rows[:cut], rows[cut:]) if piece]
    assert reduce(lambda s, piece: observe(procedure, s, {"observations": piece}, NOW), pieces, State()) == whole
    decision, used, age = slow_lives(procedure, stretches, shape)
    assert (whole.decision, whole.sample_number) == (decision, used)
    if age is not None:
        exposures = [(mpf(b) / lives[0]) ** shape - (mpf(a) / lives[0]) ** shape for a, b, _ in stretches[: used - 1]]
        exposures.append((age / lives[0]) ** shape - (mpf(stretches[used - 1][0]) / lives[0]) ** shape)
        assert whole.exposure.value == pytest.approx(float(sum(exposures)), rel=1e-12)


@pytest.mark.parametrize("life", [1000.0, 700.0])
def test_weibull_figures_are_those_of_a_simulation_in_hours(life: float) -> None:
    """3000 tests unit by unit, in ages and hazards; each figure within 4 standard errors."""
    shape = 2.5
    plan = checked_content({**RISKS, "family": "weibull", "h0": 1000.0, "h1": 600.0, "known": {"shape": shape}})
    procedure = procedure_of_document(plan)
    assert procedure.thresholds is not None
    source, accepted, failures, exposures = np.random.default_rng(23), [], [], []
    gain = shape * np.log(1000.0 / 600.0)
    for _ in range(3000):
        evidence, count, exposure = 0.0, 0, 0.0
        while procedure.thresholds.accept < evidence < procedure.thresholds.reject:
            age = life * source.weibull(shape)
            falls_at = (evidence - procedure.thresholds.accept) / (600.0**-shape - 1000.0**-shape)
            if age**shape >= falls_at:
                exposure, evidence = exposure + falls_at / 1000.0**shape, procedure.thresholds.accept
                break
            exposure += (age / 1000.0) ** shape
            evidence += gain - (600.0**-shape - 1000.0**-shape) * age**shape
            count += 1
        accepted.append(evidence <= procedure.thresholds.accept)
        failures.append(count)
        exposures.append(exposure)
    point = promise_of(plan, [life]).points[0]
    assert point.exposure is not None
    assert point.failures is not None
    found = ((point.probability_of_acceptance, accepted), (point.failures, failures), (point.exposure.mean, exposures))
    for exact, sample in found:
        assert abs(np.mean(sample) - exact) < 4 * np.std(sample) / np.sqrt(3000)


def test_the_fixed_sample_of_weibull_is_told_in_failures_that_h0_expects() -> None:
    """Accept with at most c failures: Poisson means e and e * (h0/h1)**shape have the stated risks."""
    plan = checked_content({**RISKS, "family": "weibull", "h0": 1000.0, "h1": 600.0, "known": {"shape": 2.5}})
    fixed = promise_of(plan, [1000.0]).fixed_sample
    assert fixed is not None

    def accepts(mean: float) -> float:
        return sum(float(np.exp(-mean)) * mean**k / math.factorial(k) for k in range(int(fixed.acceptance_limit) + 1))

    assert fixed.alpha == pytest.approx(1 - accepts(fixed.size), abs=1e-12)
    assert fixed.beta == pytest.approx(accepts(fixed.size * (1000.0 / 600.0) ** 2.5), abs=1e-12)
    assert fixed.alpha <= 0.05
    assert fixed.beta == pytest.approx(0.10, abs=1e-9)


def test_the_estimate_of_weibull_is_in_its_unit_of_time() -> None:
    """The power mean of the ages over the failures: (sum of age**shape / failures)**(1/shape)."""
    procedure = compiled(family="weibull", h0=1000.0, h1=600.0, known={"shape": 2.5})
    state = observe(procedure, State(), {"values": [700.0, 800.0]}, NOW)
    found = procedure.family.estimate(Start(state.exposure.value, state.total.value), procedure.known)
    assert found == pytest.approx(((700.0**2.5 + 800.0**2.5) / 2) ** 0.4, rel=1e-13)
    assert procedure.family.estimate(Start(0.5, 0.0), procedure.known) is None


@pytest.mark.parametrize("begin", [0.0, 1e-9, 1.0, 999.0, 1000.0 - 1e-9])
@pytest.mark.parametrize("power", [0.01, 1.0, 2.5, 100.0])
def test_a_short_stretch_of_a_long_life_keeps_its_digits(begin: float, power: float) -> None:
    with mp.workdps(60):
        exact = (mpf(1000) / 700) ** mpf(power) - (mpf(begin) / 700) ** mpf(power)
    found = power_spans(np.array([begin]), np.array([1000.0]), 700.0, power)[0]
    assert found == pytest.approx(float(exact), rel=1e-13)


@settings(max_examples=60, deadline=None)
@given(
    st.sampled_from([(1.0, 2.0), (2.0, 1.0), (1e-6, 1.3e-6), (30.0, 31.0)]),
    st.sampled_from([0.0, -7.25, 1e3]),
    st.sampled_from([0.0, 0.5, 1.0]),
    st.integers(0, 2**32 - 1),
    st.integers(1, 90),
    st.sampled_from([None, 20]),
)
def test_normal_variance_agrees_with_its_density(
    sigmas: tuple[float, float], mean: float, place: float, seed: int, cut: int, wall: int | None
) -> None:
    truncation = {"truncation": {"sample_number": wall}} if wall else {}
    procedure = compiled(family="normal_variance", h0=sigmas[0], h1=sigmas[1], known={"mean": mean}, **truncation)
    sigma = sigmas[0] ** (1 - place) * sigmas[1] ** place
    values = np.random.default_rng(seed).normal(mean, sigma, 90).tolist()
    agrees(procedure, values, lambda x, theta: densities.normal(x, mean, theta), cut, wall)


def test_the_fixed_sample_of_normal_variance_is_the_smallest() -> None:
    """Chi-square limits from quadrature of its density, for the size and the one below."""
    found = fixed_sample.normal_variance(1.0, 2.0, 0.05, 0.10)
    assert found is not None

    def below(n: int, limit: float) -> mpf:
        return gammainc(mpf(n) / 2, 0, mpf(limit) / 2, regularized=True)

    n = int(found.size)
    assert float(below(n, found.limit)) == pytest.approx(0.95, abs=1e-12)
    assert float(below(n, found.limit / 4)) == pytest.approx(found.upper_risk, abs=1e-12)
    assert found.upper_risk <= 0.10
    with mp.workdps(20):
        smaller = findroot(lambda at: below(n - 1, at) - mpf("0.95"), found.limit)
    assert below(n - 1, smaller / 4) > 0.10


def test_walds_approximation_of_normal_variance_is_right_at_the_hypotheses() -> None:
    for sigmas in ((1.0, 2.0), (2.0, 1.0), (1.0, 1.01), (1.0, 50.0)):
        walds_risks_are_the_stated_ones(
            compiled(family="normal_variance", h0=sigmas[0], h1=sigmas[1], known={"mean": 0.0})
        )


def test_the_ways_of_normal_variance_decide_and_a_little_less_does_not() -> None:
    procedure = compiled(family="normal_variance", h0=1.0, h1=2.0, known={"mean": 5.0})
    begun = observe(procedure, State(), {"values": [5.5, 3.0]}, NOW)
    ways = ways_of(procedure, begun)
    assert ways.accept is not None
    assert ways.reject is not None
    needed, rise = ways.accept.observations, ways.accept.total
    assert needed is not None
    assert needed > 1
    assert ways.accept.words == f"{needed} measurements whose squared deviations from 5 sum to at most {rise:.6g}"
    near = math.sqrt(rise / needed)
    assert observe(procedure, begun, {"values": [5.0 + 0.999 * near] * needed}, NOW).decision == "accept"
    assert observe(procedure, begun, {"values": [5.0 + 1.001 * near] * needed}, NOW).decision == "continue"
    assert observe(procedure, begun, {"values": [5.0] * (needed - 1)}, NOW).decision == "continue"
    far = math.sqrt(ways.reject.total)
    assert ways.reject.words == f"a measurement at least {far:.6g} from 5"
    assert observe(procedure, begun, {"values": [5.0 - 1.001 * far]}, NOW).decision == "reject"
    assert observe(procedure, begun, {"values": [5.0 - 0.999 * far]}, NOW).decision == "continue"


def test_the_estimate_of_normal_variance_is_the_root_of_the_mean_square() -> None:
    procedure = compiled(family="normal_variance", h0=1.0, h1=2.0, known={"mean": 5.0})
    assert procedure.family.estimate(Start(4.0, 9.0), procedure.known) == 1.5
    assert procedure.family.estimate(Start(1.0, 0.0), procedure.known) is None
    assert procedure.family.estimate(Start(0.0, 0.0), procedure.known) is None
    state = observe(procedure, State(), {"values": [5.0, 5.0, 5.0]}, NOW)
    assert state.log_likelihood_ratio == pytest.approx(-3 * math.log(2.0), rel=1e-14)
