"""Simulated risks of the invariant test against a chain, plain simulation, identities and lower bounds."""

import math

import numpy as np
import pytest
from scipy.optimize import minimize_scalar

from service.sequential.boundaries import Thresholds, strict, wald
from service.sequential.calibration import Risks, RisksNotMet
from service.sequential.double import FloatArray
from service.sequential.errors import OutOfRange
from service.sequential.exact.characteristics import QUANTILES
from service.sequential.invariant import alignment_of, invariant_ratio, log_density, one_sample, two_samples
from service.sequential.invariant_bounds import fewest_looks, information
from service.sequential.invariant_calibration import Search, calibrated
from service.sequential.invariant_risks import (
    Effort,
    Progress,
    Run,
    Simulated,
    ending_log_density,
    no_report,
    parts_of,
    simulated,
)
from service.sequential.invariant_walks import BATCH, InvariantTest, Walker, invariant_test
from tests.sequential.reference.t_chain import Chain

# Figures may be off by so many standard errors; of some fifty comparisons with fixed seeds none is beyond by chance.
SIGMAS = 4.0


def usual(delta1: float = 0.5, risk: float = 0.05, *, samples: int = 1, last: int | None = None) -> InvariantTest:
    return invariant_test(invariant_ratio(0.0, delta1), wald(risk, risk), samples, last)


@pytest.mark.parametrize(
    ("deltas", "thresholds", "last", "sides"),
    [
        ((0.0, 0.8), (-1.0, 1.0), 3, 1),
        ((0.0, 0.8), (-1.2, 1.0), 6, 1),
        ((0.3, 1.2), (-1.2, 1.0), 5, 1),
        ((0.5, -0.5), (-1.0, 1.5), 4, 1),
        ((0.0, 1.0), (-1.2, 1.1), 6, 2),
    ],
)
def test_short_tests_do_what_their_chain_says(
    deltas: tuple[float, float],
    thresholds: tuple[float, float],
    last: int,
    sides: int,
    request: pytest.FixtureRequest,
) -> None:
    is_long = request.config.getoption("--long")
    chain = Chain(deltas, thresholds, last, sides, 1201 if is_long else 301)
    # What the grid of the chain leaves open.
    grid = 1e-4 if is_long else 3e-4
    test = invariant_test(invariant_ratio(*deltas, sides), Thresholds(*thresholds), 1, last)
    at = (*deltas, 0.4)
    found = simulated(test, at, 5, Effort(3e-4 if is_long else 1.5e-3))
    for delta, point in zip(at, found.points, strict=True):
        allowed = SIGMAS * point.rejection.standard_error + grid
        assert abs(point.rejection.value - chain.rejection(delta)) < allowed
        if is_long:
            allowed = SIGMAS * point.average_sample_number.standard_error + last * grid
            assert abs(point.average_sample_number.value - chain.sample_number(delta)) < allowed


def plainly(test: InvariantTest, delta: float, courses: int, seed: int) -> tuple[float, FloatArray]:
    """The share of rejections and all sample numbers, each t from means and variances as the textbooks have it."""
    source = np.random.default_rng(seed)
    groups = test.samples
    x = [np.zeros((courses, 0)) for _ in range(groups)]
    rejected, numbers = 0, []
    n = 0
    while len(x[0]):
        n += 1
        x = [np.column_stack([g, source.normal(delta * i, 1.0, len(g))]) for i, g in enumerate(x, start=2 - groups)]
        if n == 1:
            continue
        if groups == 1:
            t, looks = x[0].mean(axis=1) / x[0].std(axis=1, ddof=1) * math.sqrt(n), one_sample(np.array([float(n)]))
        else:
            pooled = np.sqrt(0.5 * (x[0].var(axis=1, ddof=1) + x[1].var(axis=1, ddof=1)))
            t = (x[1].mean(axis=1) - x[0].mean(axis=1)) / (pooled * math.sqrt(2.0 / n))
            looks = two_samples(np.array([float(n)]), np.array([float(n)]))
        ratio = test.ratio.log(looks, alignment_of(looks, t))
        is_wall = n == test.last
        above = ratio > 0.0 if is_wall else ratio >= test.thresholds.reject
        below = ratio <= 0.0 if is_wall else ratio <= test.thresholds.accept
        rejected += int(above.sum())
        numbers.append(np.full(int((above | below).sum()), float(groups * n)))
        x = [g[~(above | below)] for g in x]
    return rejected / courses, np.concatenate(numbers)


@pytest.mark.parametrize(
    "test",
    [
        usual(1.0),
        usual(1.0, samples=2),
        usual(1.0, last=8),
        usual(1.0, samples=2, last=9),
        invariant_test(invariant_ratio(0.7, -0.5), wald(0.05, 0.1), last=9),
        invariant_test(invariant_ratio(0.0, 1.0, sides=2), wald(0.1, 0.1)),
        invariant_test(invariant_ratio(1.2, 0.2), wald(0.1, 0.1)),
    ],
)
def test_importance_sampling_agrees_with_plain_simulation(test: InvariantTest, request: pytest.FixtureRequest) -> None:
    courses, at = 8000 if request.config.getoption("--long") else 2000, (test.ratio.delta0, 0.6, test.ratio.delta1)
    found = simulated(test, at, 11, Effort(2e-3))
    for delta, point in zip(at, found.points, strict=True):
        rejected, numbers = plainly(test, delta, courses, 77)
        p = point.rejection
        error = math.hypot(p.standard_error, math.sqrt(p.value * (1.0 - p.value) / courses))
        assert abs(rejected - p.value) < SIGMAS * error
        mean = point.average_sample_number
        assert abs(numbers.mean() - mean.value) < SIGMAS * math.hypot(mean.standard_error, numbers.std() / courses**0.5)
        assert point.standard_deviation == pytest.approx(numbers.std(), rel=0.15)
        for quantile, level in zip(point.quantiles, QUANTILES, strict=True):
            spread = SIGMAS * math.sqrt(level * (1.0 - level) / courses) + 0.002
            assert np.mean(numbers <= quantile) >= level - spread
            assert np.mean(numbers < quantile) <= level + spread


def test_the_risks_keep_what_wald_and_ville_promise() -> None:
    """Wald (1945): P0(reject) <= P1(reject)/A and P1(accept) <= P0(accept) * B; Ville (1939): P0(reject) <= alpha."""
    for test in (usual(0.6, 0.01), usual(0.9, samples=2), invariant_test(invariant_ratio(0.2, 1.0), strict(0.05, 0.1))):
        at = (test.ratio.delta0, test.ratio.delta1)
        found = simulated(test, at, 3)
        alpha, power = (point.rejection for point in found.points)
        assert 0.0 < alpha.value < power.value * math.exp(-test.thresholds.reject)
        assert 0.0 < 1.0 - power.value < (1.0 - alpha.value) * math.exp(test.thresholds.accept)


def test_no_average_is_below_what_any_test_needs() -> None:
    for test in (usual(0.5), usual(1.0, samples=2), invariant_test(invariant_ratio(0.5, 1.2), wald(0.02, 0.1))):
        at = (test.ratio.delta0, test.ratio.delta1)
        points = simulated(test, at, 3).points
        bounds = fewest_looks(at, points[0].rejection.value, 1.0 - points[1].rejection.value, test.samples)
        for bound, point in zip(bounds, points, strict=True):
            assert 0.8 * point.average_sample_number.value < test.samples * bound < point.average_sample_number.value


@pytest.mark.parametrize(("true", "other"), [(0.0, 0.5), (0.5, 0.0), (1.2, 0.4), (-0.3, 0.8), (2.0, 1.9)])
@pytest.mark.parametrize("samples", [1, 2])
def test_the_information_is_the_smallest_over_sigma(true: float, other: float, samples: int) -> None:
    """Against the divergence of two normal densities, minimised by trial; for two samples over the common mean too."""

    def divergence(sigma: float) -> float:
        shifts = [true - other * sigma] if samples == 1 else [(true - other * sigma) / 2] * 2
        return sum(math.log(sigma) + (1.0 + shift**2) / (2.0 * sigma**2) - 0.5 for shift in shifts)

    found = minimize_scalar(divergence, bounds=(0.05, 20.0), method="bounded", options={"xatol": 1e-10})
    assert information(true, other, samples) == pytest.approx(found.fun, rel=1e-9)
    if other == 0.0 and samples == 1:
        assert information(true, other) == pytest.approx(0.5 * math.log1p(true**2), rel=1e-13)
    if true == 0.0 and samples == 1:
        assert information(true, other) == pytest.approx(0.5 * other**2, rel=1e-13)


def test_a_seed_gives_the_same_figures_however_the_batches_are_made() -> None:
    test, at = usual(1.0), (0.0, 1.0)
    at_once, in_parts = Run(test, parts_of(test, at), 9), Run(test, parts_of(test, at), 9)
    at_once.extend(3)
    for goal in (1, 2, 3):
        in_parts.extend(goal)
    assert at_once.figures(at) == in_parts.figures(at)
    assert simulated(test, at, 9) == simulated(test, at, 9)
    assert simulated(test, at, 9) != simulated(test, at, 10)


def test_progress_is_told_and_a_simulation_can_be_ended() -> None:
    told: list[Progress] = []
    found = simulated(usual(1.0), (0.0, 0.5, 1.0), 1, Effort(3e-3), told.append)
    # After each batch, and before each of the three figures.
    batches = list(range(BATCH, found.courses + 1, BATCH))
    assert [progress.courses for progress in told] == [*batches, *[found.courses] * 3]
    assert all(progress.courses <= progress.expected for progress in told)

    def enough(progress: Progress) -> None:
        if progress.courses >= 2 * BATCH:
            raise TimeoutError

    with pytest.raises(TimeoutError):
        simulated(usual(1.0), (0.0, 0.5, 1.0), 1, report=enough)


def test_a_simulation_stops_at_its_most_courses() -> None:
    found: Simulated = simulated(usual(1.0), (0.0, 0.5, 1.0), 1, Effort(1e-6, 7 * BATCH))
    assert found.courses == 6 * BATCH
    assert found.standard_error > 1e-6


def test_a_probability_too_small_to_be_seen_is_not_said_to_be_certain() -> None:
    point = simulated(usual(1.0), (-4.0,), 1).points[0]
    assert point.rejection.value < 1e-4
    assert point.rejection.standard_error > 0.0


def test_many_means_share_a_few_parts() -> None:
    test = usual(0.5)
    assert parts_of(test, (0.0, 0.5)) == (0.0, 0.5)
    parts = parts_of(test, tuple(np.linspace(-1.0, 1.5, 51)))
    assert len(parts) == 7
    assert (min(parts), max(parts)) == (-1.0, 1.5)
    assert parts_of(invariant_test(invariant_ratio(0.0, 0.5, 2), wald(0.1, 0.1)), (-0.2,)) == (0.0, 0.2, 0.5)


@pytest.mark.parametrize("sides", [1, 2])
@pytest.mark.parametrize("delta", [0.4, -1.0, 3.0])
def test_interpolated_densities_are_near_enough_for_weights(sides: int, delta: float) -> None:
    test = invariant_test(invariant_ratio(0.0, 1.0, sides), wald(0.05, 0.05))
    ends = Walker(test).batch(1.0, 2, 0, 0)
    quick = ending_log_density(test, delta, ends.looks, ends.alignment)
    slow = log_density(test.looks(ends.looks.astype(float)), ends.alignment, delta, sides)
    np.testing.assert_allclose(quick, slow, atol=1e-6)


@pytest.mark.parametrize("test", [usual(1.0), invariant_test(invariant_ratio(0.0, 1.0, 2), wald(0.1, 0.1), last=20)])
def test_calibrated_thresholds_attain_the_stated_risks(test: InvariantTest) -> None:
    stated = Risks(0.05, 0.1)
    found = calibrated(test, stated, 4, Search(batches=2))
    # The thresholds carry the error of their own simulation, which has no controls; twice that of plain mixtures.
    assert found.alpha.value == pytest.approx(0.05, abs=4e-3)
    assert found.beta.value == pytest.approx(0.1, abs=8e-3)
    limits = strict(0.05, 0.1)
    if test.last is None:
        assert limits.accept < found.thresholds.accept < 0.0 < found.thresholds.reject < limits.reject
    assert calibrated(test, stated, 4, Search(batches=2)) == found


def test_guarded_thresholds_hold_the_level_with_confidence() -> None:
    found = calibrated(usual(1.0), Risks(0.05, 0.1), 4, Search(is_guarded=True, batches=2))
    assert found.alpha.value < found.alpha_limit < 0.05
    assert found.beta.value < found.beta_limit < 0.1


def test_a_wall_too_near_for_the_risks_is_said_to_be() -> None:
    with pytest.raises(RisksNotMet):
        calibrated(usual(0.5, last=10), Risks(0.05, 0.05), 1, Search(batches=1), no_report)


@pytest.mark.parametrize(
    ("thresholds", "samples", "last", "argument"),
    [
        (Thresholds(0.0, 2.0), 1, None, "accept"),
        (Thresholds(-2.0, math.nan), 1, None, "reject"),
        (Thresholds(-2.0, 2.0), 3, None, "samples"),
        (Thresholds(-2.0, 2.0), 1, 1, "last"),
    ],
)
def test_impossible_tests_are_refused(thresholds: Thresholds, samples: int, last: int | None, argument: str) -> None:
    with pytest.raises(OutOfRange) as caught:
        invariant_test(invariant_ratio(0.0, 0.5), thresholds, samples, last)
    assert caught.value.argument == argument
