"""What the end of an invariant test says, against plain simulation, quadrature and the noncentral t."""

import math
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.stats import chi2, nct, norm

from service.sequential.boundaries import Thresholds, wald
from service.sequential.exact.characteristics import TooMuchWork
from service.sequential.inference.studying import Studied, StudiedEnd, studied
from service.sequential.invariant import Looks, alignment_of, invariant_ratio

# Of some sixty comparisons with fixed seeds none is beyond by chance.
SIGMAS = 4.0
Array = NDArray[np.float64]
TAIL = 0.025
USUAL = wald(0.05, 0.1)


def ended(
    deltas: tuple[float, float],
    looks: int,
    t: float,
    decision: str = "reject",
    *,
    thresholds: Thresholds = USUAL,
    arms: str = "",
    sides: int = 1,
    last: int | None = None,
) -> StudiedEnd:
    freedom = looks - 2 if arms else looks - 1
    in_b = tuple(float(arm == "b") for arm in arms) or None
    ratio = invariant_ratio(*deltas, sides)
    return StudiedEnd(ratio, thresholds, in_b, looks, t / math.sqrt(freedom), decision == "accept", last)


def arm_of(end: StudiedEnd, look: int) -> bool:
    """Whether that measurement is in b; beyond those taken they fill both arms evenly, b first."""
    assert end.in_b is not None
    arms = list(end.in_b)
    while len(arms) < look:
        arms.append(1.0 if sum(arms) <= len(arms) / 2 else 0.0)
    return bool(arms[look - 1])


def plainly(end: StudiedEnd, delta: float, courses: int, seed: int) -> float:
    """The share of courses that end at least as far up: each t from means and variances as the textbooks have it."""
    source = np.random.default_rng(seed)
    a, b = np.zeros((courses, 0)), np.zeros((courses, 0))
    freedom = end.looks - (2 if end.in_b else 1)
    observed, up, look = end.place * math.sqrt(freedom), 0, 0
    while len(b):
        look += 1
        drawn = source.normal(0.0, 1.0, (len(b), 1))
        if end.in_b is None or arm_of(end, look):
            b = np.column_stack([b, drawn + delta])
        else:
            a = np.column_stack([a, drawn])
        n, m = b.shape[1], a.shape[1]
        if end.in_b is None:
            if n < 2:
                continue
            t, freedom, size = b.mean(axis=1) / b.std(axis=1, ddof=1) * math.sqrt(n), n - 1, float(n)
        else:
            if min(n, m) == 0 or n + m < 3:
                continue
            freedom, size = n + m - 2, n * m / (n + m)
            pooled = np.sqrt((n * b.var(axis=1) + m * a.var(axis=1)) / freedom)
            t = (b.mean(axis=1) - a.mean(axis=1)) / pooled * math.sqrt(size)
        at = Looks(np.array([float(freedom)]), np.array([size]))
        ratio = end.ratio.log(at, alignment_of(at, t))
        is_wall = look == end.last
        rejects = ratio > 0.0 if is_wall else ratio >= end.thresholds.reject
        accepts = ratio <= 0.0 if is_wall else ratio <= end.thresholds.accept
        is_out = rejects | accepts | (look == end.looks and not is_between(end))
        up += int(np.sum(is_out & further(end, look, t, accepts, observed)))
        a, b = a[~is_out], b[~is_out]
    return up / courses


def is_between(end: StudiedEnd) -> bool:
    return end.ratio.sides == 2 and end.is_accepted and end.looks != end.last


def further(end: StudiedEnd, look: int, t: Array, accepts: NDArray[np.bool_], observed: float) -> NDArray[np.bool_]:
    """Whether these ends lie at least as far up as the observed one."""
    if end.ratio.sides == 1:
        is_upper = accepts if end.ratio.delta1 < end.ratio.delta0 else ~accepts
        return t >= observed if look == end.looks else is_upper
    if not is_between(end):
        if look == end.looks:
            return t >= observed
        # Earlier acceptances lie between the forced decisions with positive and with negative t.
        return np.where(accepts, observed < 0.0, t > 0.0)
    if look > end.looks:
        return t > 0.0
    here = t >= observed if look == end.looks else np.full(len(t), observed < 0.0)
    same_side = (t > 0.0) == (observed > 0.0)
    return np.where(accepts & same_side, here, t > 0.0)


ENDS = [
    ended((0.0, 0.8), 8, 3.6),
    ended((0.0, 0.8), 12, 0.3, "accept"),
    ended((0.0, 0.8), 9, 1.4, "reject", last=9),
    ended((0.5, -0.4), 10, -1.0),
    ended((0.0, 1.2), 12, 2.9, arms="aaabbabbabbb"),
    ended((0.0, 1.0), 11, 0.1, "accept", sides=2),
    ended((0.0, 1.0), 11, -0.4, "accept", sides=2, last=14),
    ended((0.0, 1.0), 9, -3.9, sides=2),
    ended((0.0, 1.0), 10, -2.0, sides=2, last=10),
    ended((0.0, 1.4), 13, -0.1, "accept", sides=2, arms="abbbababbabab"),
]


@pytest.mark.parametrize("end", ENDS)
def test_probabilities_and_limits_agree_with_plain_simulation(end: StudiedEnd, request: pytest.FixtureRequest) -> None:
    courses = 20_000 if request.config.getoption("--long") else 600
    found = studied(end, 0.0, TAIL, 1)
    assert found.up.value + found.down.value == pytest.approx(1.0, abs=1e-12)
    assert found.lower.value < found.median.value < found.upper.value
    # By how much a share falls with the mean, were the limits normal; the errors of limits are small beside the plain.
    unit = (found.upper.value - found.lower.value) / 3.92
    checks = [(0.0, found.up.value, found.up.standard_error)]
    for limit, share in ((found.lower, TAIL), (found.median, 0.5), (found.upper, 1.0 - TAIL)):
        checks.append((limit.value, share, norm.pdf(norm.ppf(share)) / unit * limit.standard_error))
    for number, (delta, share, error) in enumerate(checks):
        plain = math.sqrt(max(share * (1.0 - share), 1.0 / courses) / courses)
        assert abs(plainly(end, delta, courses, 70 + number) - share) < SIGMAS * math.hypot(plain, error)


def test_standard_errors_are_those_of_other_seeds(request: pytest.FixtureRequest) -> None:
    """The spread of a figure over seeds is its standard error, within what so few seeds tell (chi-square, 1e-4)."""
    ends, seeds = (ENDS, 20) if request.config.getoption("--long") else (ENDS[:1], 5)
    low, high = (math.sqrt(chi2.ppf(level, seeds - 1) / (seeds - 1)) for level in (1e-4, 1.0 - 1e-4))
    for end in ends:
        runs = [studied(end, 0.0, TAIL, seed) for seed in range(seeds)]
        for figures in zip(*((run.up, run.lower, run.median, run.upper) for run in runs), strict=True):
            stated = math.sqrt(np.mean([figure.standard_error**2 for figure in figures]))
            assert low < np.std([figure.value for figure in figures], ddof=1) / stated < high


def third_given_two(t: float, mean: Array, squares: Array, delta: float) -> Array:
    """P(t of three >= t > 1), given mean and squares about it of two: an interval of the third by a quadratic."""
    # y = x - mean: sqrt(3) (mean + y/3) >= t/sqrt(2) sqrt(squares + 2 y**2/3), squared.
    a, b, c = (1.0 - t * t) / 3.0, 2.0 * mean, 3.0 * mean * mean - 0.5 * t * t * squares
    under = np.sqrt(np.maximum(b * b - 4.0 * a * c, 0.0))
    low, high = (
        np.minimum((-b - under) / (2 * a), (-b + under) / (2 * a)),
        np.maximum((-b - under) / (2 * a), (-b + under) / (2 * a)),
    )
    low, high = np.maximum(low, -3.0 * mean), np.maximum(high, -3.0 * mean)
    found: Array = np.where(b * b > 4.0 * a * c, norm.cdf(high + mean - delta) - norm.cdf(low + mean - delta), 0.0)
    return found


@pytest.mark.parametrize("delta", [-0.5, 0.0, 1.2])
def test_three_looks_agree_with_quadrature(delta: float) -> None:
    """Mean and spread of the first two are independent, so both are integrated over where the test goes on."""
    end = ended((0.0, 1.5), 3, 3.0, thresholds=Thresholds(-0.8, 0.55))
    two = Looks(np.array([1.0]), np.array([2.0]))
    limits = end.ratio.t_limits(two, end.thresholds)
    low, high = float(limits.accept[0]), float(limits.reject[0])
    assert -20.0 < low < high < 20.0
    x, weights = np.polynomial.legendre.leggauss(120)
    spread, of_spread = 4.5 * (x + 1.0), 4.5 * weights
    exact = nct.sf(high, 1, delta * math.sqrt(2.0))
    for s, w in zip(spread, of_spread, strict=True):
        ends = np.clip(np.array([low, high]) * s / math.sqrt(2.0), delta - 6.5, delta + 6.5)
        mean = ends[0] + 0.5 * (ends[1] - ends[0]) * (x + 1.0)
        inside = 0.5 * (ends[1] - ends[0]) * weights * norm.pdf(mean, delta, math.sqrt(0.5))
        inside = inside * third_given_two(3.0, mean, np.full_like(mean, s * s), delta)
        exact += w * 2.0 * norm.pdf(s) * float(np.sum(inside))
    found = studied(end, delta, TAIL, 3).up
    assert 0.0 < found.standard_error < 0.01
    assert abs(found.value - exact) < SIGMAS * found.standard_error


def test_where_only_the_wall_decides_the_noncentral_t_is_all() -> None:
    """No ratio of fewer than ten comes to 50 nats."""
    for arms, size in (("", 10.0), ("aaabbbbbbb", 2.1)):
        end = ended((0.0, 0.5), 10, 1.3, thresholds=Thresholds(-50.0, 50.0), last=10, arms=arms)
        freedom = 8 if arms else 9
        found = studied(end, 0.2, TAIL, 1)
        assert found.courses == 0
        assert found.up.value == pytest.approx(nct.sf(1.3, freedom, 0.2 * math.sqrt(size)), rel=1e-10)
        assert found.up.standard_error == 0.0
        for limit, share in ((found.lower, TAIL), (found.median, 0.5), (found.upper, 1.0 - TAIL)):
            assert nct.sf(1.3, freedom, limit.value * math.sqrt(size)) == pytest.approx(share, rel=1e-9)
            assert limit.standard_error == 0.0


def test_a_course_that_could_have_ended_before_is_weighed_to_the_same() -> None:
    """Limits that are reached by one in a million leave the noncentral t as it is, but are simulated."""
    end = ended((0.0, 0.5), 30, 2.0, thresholds=Thresholds(-9.0, 12.0), last=30)
    found = studied(end, 0.0, TAIL, 2)
    assert found.courses > 0
    assert abs(found.up.value - nct.sf(2.0, 29, 0.0)) < SIGMAS * found.up.standard_error
    for limit, share in ((found.lower, TAIL), (found.median, 0.5), (found.upper, 1.0 - TAIL)):
        low, high = (nct.sf(2.0, 29, (limit.value + k * limit.standard_error) * math.sqrt(30.0)) for k in (-4, 4))
        assert low < share < high


def test_small_probabilities_keep_their_relative_error() -> None:
    """Under H0 the earliest rejections of a plan with tiny risks are seldom; their error is a share of them."""
    found = studied(ended((0.0, 0.5), 60, 6.3, thresholds=wald(1e-6, 1e-6)), 0.0, 5e-7, 1)
    assert 0.0 < found.up.value < 1e-6
    assert found.up.standard_error < 0.05 * found.up.value
    assert found.lower.standard_error < 0.03 * (found.median.value - found.lower.value)


def test_it_does_not_matter_which_way_is_up() -> None:
    up = studied(ended((0.0, 0.8), 8, 3.6), 0.0, TAIL, 4)
    down = studied(ended((0.0, -0.8), 8, -3.6), 0.0, TAIL, 5)
    for one, other in ((up.up, down.down), (up.down, down.up)):
        assert abs(one.value - other.value) < SIGMAS * math.hypot(one.standard_error, other.standard_error)
    for one, other in ((up.lower, down.upper), (up.median, down.median), (up.upper, down.lower)):
        assert abs(one.value + other.value) < SIGMAS * math.hypot(one.standard_error, other.standard_error)


def test_later_is_less_and_larger_is_more() -> None:
    """Rejections: the earlier the further up; at one look the larger t. The last of these lies furthest down."""
    found = [studied(ended((0.0, 0.8), looks, t), 0.0, TAIL, 1) for looks, t in ((6, 5.0), (6, 4.6), (9, 3.5))]
    for further_up, other in pairwise(found):
        assert further_up.up.value < other.up.value
        assert further_up.median.value > other.median.value
        assert further_up.lower.value > other.lower.value


def test_the_same_seed_gives_the_same_figures() -> None:
    end = ended((0.0, 0.8), 9, 3.4)
    found = studied(end, 0.0, TAIL, 1)
    assert studied(end, 0.0, TAIL, 1) == found
    assert studied(end, 0.0, TAIL, 2).up != found.up


def test_nearly_equal_measurements_have_figures() -> None:
    """A t that only a misread field explains, at the first look that decides and at a later one."""
    first: Studied = studied(ended((0.0, 0.5), 2, 1e7), 0.0, TAIL, 1)
    assert first.up.value == pytest.approx(1e-7 / math.pi, rel=1e-9, abs=0.0)
    assert first.lower.value < first.median.value < first.upper.value
    later = studied(ended((0.0, 0.5), 9, 1e7), 0.0, TAIL, 1)
    assert later.lower.value < later.median.value < later.upper.value < 10.0


def test_what_would_take_too_long_is_refused() -> None:
    end = ended((0.0, 0.001), 20_001, 3.0)
    with pytest.raises(TooMuchWork):
        studied(end, 0.0, TAIL, 1)
    near = ended((0.0, 0.0005), 19_990, 0.01, "accept", sides=2)
    with pytest.raises(TooMuchWork):
        studied(near, 0.0, TAIL, 1)


def test_a_mirrored_end_is_the_mirror() -> None:
    end = ended((0.0, 1.0), 9, 3.9, sides=2)
    above, below = studied(end, 0.0, TAIL, 1), studied(replace(end, place=-end.place), 0.0, TAIL, 1)
    assert (above.up, above.down) == (below.down, below.up)
    assert (above.lower.value, above.upper.value) == (-below.upper.value, -below.lower.value)
