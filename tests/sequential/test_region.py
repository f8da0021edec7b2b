"""Acceptance and rejection numbers against published plans and against brute force."""

import math

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from service.sequential import boundaries, likelihood
from service.sequential.boundaries import Thresholds
from service.sequential.decision import Decision
from service.sequential.double import Double, running_sum
from service.sequential.region import COUNTS, PASS_FAIL, REALS, StraightRegion, Wall, straight_region
from service.sequential.walk import first_exit_at_reports, first_exit_in_time


def pass_fail(p0: float, p1: float, alpha: float, beta: float, wall: Wall | None = None) -> StraightRegion:
    return straight_region(likelihood.bernoulli(p0, p1), boundaries.wald(alpha, beta), PASS_FAIL, wall)


def numbers(region: StraightRegion, n: int) -> tuple[float, float]:
    limits = region.limits(np.array([float(n)]))
    return float(limits.lower[0]), float(limits.upper[0])


def first_with_lower(region: StraightRegion, number: int) -> int:
    return next(n for n in range(1, 2000) if numbers(region, n)[0] >= number)


def test_nist_acceptance_and_rejection_numbers() -> None:
    """NIST/SEMATECH e-Handbook of Statistical Methods, section 6.2.6."""
    region = pass_fail(0.01, 0.10, 0.05, 0.10)
    assert numbers(region, 24) == (0, 3)
    assert first_with_lower(region, 0) == 24
    assert numbers(region, 1) == (-math.inf, math.inf)
    assert region.ratio.slope == pytest.approx(0.0397, abs=5e-5)
    assert region.lower_intercept == pytest.approx(0.939, abs=5e-4)
    assert region.upper_intercept == pytest.approx(1.205, abs=5e-4)


def test_walds_acceptance_numbers() -> None:
    """Wald (1945), the plan p0 = .1, p1 = .3, alpha = .02, beta = .03 (quoted from memory, recomputed)."""
    region = pass_fail(0.1, 0.3, 0.02, 0.03)
    assert [first_with_lower(region, number) for number in range(7)] == [14, 20, 25, 30, 36, 41, 47]
    assert region.lower_intercept == pytest.approx(2.582626, abs=5e-7)
    assert region.upper_intercept == pytest.approx(2.875389, abs=5e-7)
    assert region.ratio.slope == pytest.approx(0.186169, abs=5e-7)


def test_walds_two_stopping_times_by_hand() -> None:
    """All conforming: 14 ln(.9/.7) first passes ln(.98/.03); all nonconforming: 4 ln 3 first passes ln(.97/.02)."""
    assert 13 * math.log(0.9 / 0.7) < math.log(0.98 / 0.03) <= 14 * math.log(0.9 / 0.7)
    assert 3 * math.log(3) < math.log(0.97 / 0.02) <= 4 * math.log(3)
    region = pass_fail(0.1, 0.3, 0.02, 0.03)
    assert first_with_lower(region, 0) == 14
    assert next(n for n in range(1, 50) if numbers(region, n)[1] <= n) == 4


def test_montgomerys_plan() -> None:
    """Montgomery, Introduction to Statistical Quality Control, ch. 15 (quoted from memory, recomputed)."""
    region = pass_fail(0.01, 0.06, 0.05, 0.10)
    assert region.lower_intercept == pytest.approx(1.22, abs=5e-3)
    assert region.upper_intercept == pytest.approx(1.57, abs=5e-3)
    assert region.ratio.slope == pytest.approx(0.028, abs=5e-4)
    assert first_with_lower(region, 0) == 44
    assert {numbers(region, n)[1] for n in range(2, 16)} == {2}
    assert {numbers(region, n)[1] for n in range(16, 44)} == {3}


@pytest.mark.parametrize("d", [1.5, 2.0, 3.0])
def test_the_exponential_line_rises_by_ln_d_over_one_minus_one_over_d(d: float) -> None:
    """Unit-time for each failure, in units of the lower mean: MIL-HDBK-781A's slope, ln d / (1 - 1/d)."""
    ratio = likelihood.exponential(d * 100.0, 100.0)
    assert 1 / ratio.slope / 100.0 == pytest.approx(math.log(d) / (1 - 1 / d), rel=1e-14)


proportions = st.floats(0.001, 0.999)


@given(proportions, proportions, st.floats(0.001, 0.4), st.floats(0.001, 0.4), st.integers(1, 400))
def test_numbers_are_the_extreme_totals_that_decide(p0: float, p1: float, a: float, b: float, n: int) -> None:
    """Against brute force over every total, away from ties."""
    assume(abs(p1 - p0) > 0.01)
    ratio, limits = likelihood.bernoulli(p0, p1), boundaries.wald(a, b)
    region = straight_region(ratio, limits, PASS_FAIL)
    totals = np.arange(n + 1.0)
    evidence = ratio.gain * totals - ratio.gain * ratio.slope * n
    assume(min(np.min(np.abs(evidence - limits.accept)), np.min(np.abs(evidence - limits.reject))) > 1e-9)
    accepts, rejects = totals[evidence <= limits.accept], totals[evidence >= limits.reject]
    lower, upper = numbers(region, n)
    below, above = (accepts, rejects) if p1 > p0 else (rejects, accepts)
    assert lower == (below.max() if below.size else -math.inf)
    assert upper == (above.min() if above.size else math.inf)


@given(proportions, proportions, st.floats(0.01, 0.3), st.floats(0.01, 0.3), st.integers(1, 300))
def test_counting_conforming_units_instead_is_the_mirror_image(
    p0: float, p1: float, a: float, b: float, n: int
) -> None:
    assume(abs(p1 - p0) > 0.01)
    plain, mirror = pass_fail(p0, p1, a, b), pass_fail(1 - p0, 1 - p1, a, b)
    (lower, upper), (mirror_lower, mirror_upper) = numbers(plain, n), numbers(mirror, n)
    assert (n - lower, n - upper) == (mirror_upper, mirror_lower)
    assert (plain.below, plain.above) == (mirror.above, mirror.below)


def test_a_line_through_a_whole_number_decides_there() -> None:
    """p0 = 1/3, p1 = 2/3: each unit moves the evidence by ln 2, so thresholds of k ln 2 are met exactly."""
    limits = Thresholds(-7 * math.log(2), 5 * math.log(2))
    region = straight_region(likelihood.bernoulli(1 / 3, 2 / 3), limits, PASS_FAIL)
    for n in range(7, 400):
        lower, upper = numbers(region, n)
        # The evidence is (2 total - n) ln 2.
        assert lower == (n - 7) // 2
        assert upper == (math.ceil((n + 5) / 2) if math.ceil((n + 5) / 2) <= n else math.inf)


def test_first_possible_decision_is_found() -> None:
    for p0, p1, a, b in [(0.01, 0.1, 0.05, 0.1), (0.1, 0.01, 0.05, 0.1), (0.3, 0.5, 0.01, 0.01), (0.9, 0.95, 0.1, 0.1)]:
        region = pass_fail(p0, p1, a, b)
        first = next(n for n in range(1, 5000) if numbers(region, n) != (-math.inf, math.inf))
        assert region.first_possible_decision() == first


def test_the_wall_rejects_above_zero_evidence_and_accepts_otherwise() -> None:
    """Wald (1947), section 3.8. At p0 = 1/3, p1 = 2/3 and n = 10 the evidence is zero at a total of 5."""
    region = pass_fail(1 / 3, 2 / 3, 0.001, 0.001, Wall(10.0))
    assert numbers(region, 10) == (5, 6)
    mirrored = pass_fail(2 / 3, 1 / 3, 0.001, 0.001, Wall(10.0))
    assert numbers(mirrored, 10) == (4, 5)
    assert (mirrored.below, mirrored.above) == (Decision.REJECT, Decision.ACCEPT)


def test_zero_evidence_at_the_wall_accepts_for_real_totals() -> None:
    for h1, side in ((1.0, -1), (-1.0, 1)):
        region = straight_region(likelihood.normal(0.0, h1, 1.0), Thresholds(-9, 9), REALS, Wall(4.0))
        at = region.sides_at_wall(Double(np.array([4.0]), np.zeros(1)), Double(np.array([4.0 * h1 / 2]), np.zeros(1)))
        assert at.tolist() == [side]
        assert (region.below if side < 0 else region.above) == Decision.ACCEPT


def test_a_cap_ends_sampling_at_that_failure() -> None:
    ratio = likelihood.exponential(200.0, 100.0)
    region = straight_region(ratio, Thresholds(-20, 20), COUNTS, Wall(500.0, cap=3))
    limits = region.limits(np.array([0.0, 250.0, 500.0]))
    assert limits.upper.tolist() == [3, 3, 3]
    assert limits.lower[2] == 2


@pytest.mark.parametrize(("exposure", "reports", "wall"), [(0.57, 100, 57.0), (0.29, 100, 29.0), (0.58, 50, 29.0)])
def test_decimal_exposures_come_to_the_wall_that_they_add_up_to(exposure: float, reports: int, wall: float) -> None:
    """In floating point these sums fall a little short of the wall."""
    region = straight_region(likelihood.poisson(0.5, 0.6), Thresholds(-1e3, 1e3), COUNTS, Wall(wall))
    progress = running_sum(Double.of(0.0), np.full(reports, exposure))
    assert progress.value[-1] < wall
    exit_ = first_exit_at_reports(region, progress, Double(np.zeros(reports), np.zeros(reports)))
    assert exit_ is not None
    assert exit_.index == reports - 1


def test_a_time_within_rounding_of_the_accept_line_has_reached_it() -> None:
    region = straight_region(likelihood.exponential(200.0, 100.0), Thresholds(-2.0, 2.0), COUNTS)
    line = float(region.lower_reached_at(np.zeros(1))[0])
    just_under = Double(np.array([np.nextafter(line, 0.0)]), np.zeros(1))
    exit_ = first_exit_in_time(region, just_under, Double(np.zeros(1), np.zeros(1)), np.zeros(1))
    assert exit_ is not None
    assert exit_.decision is Decision.ACCEPT
