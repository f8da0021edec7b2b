"""Inference after tests of whole totals against enumerations of all outcomes, and the laws that it obeys."""

import itertools
import math
from collections.abc import Callable
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from service.sequential import likelihood
from service.sequential.boundaries import Thresholds
from service.sequential.decision import Decision
from service.sequential.inference.bias import bias_of_counts
from service.sequential.inference.counting import CountedOutcome
from service.sequential.inference.laws import Law, RateLaw, UnitLaw
from service.sequential.inference.ordering import lower_limit, median_unbiased, upper_limit
from service.sequential.inference.schedules import schedule_of_looks
from service.sequential.region import COUNTS, PASS_FAIL, Region, Wall, straight_region
from service.sequential.tables import UnitTable
from tests.sequential.exact.test_oracles import tables
from tests.sequential.reference import outcomes
from tests.sequential.reference.outcomes import End

THRESHOLDS = st.builds(Thresholds, st.floats(-3.0, -0.4), st.floats(0.4, 3.0))
PROPORTIONS = st.sampled_from([0.05, 0.1, 0.25, 0.5, 0.62, 0.9])
TRUE = [0.01, 0.1, 0.3, 0.5, 0.77, 0.95]
SIMON = UnitTable((10, 29), (1.0, 5.0), (math.inf, 6.0), Decision.ACCEPT, Decision.REJECT)


def limits_of(region: Region) -> Callable[[Fraction], tuple[float, float]]:
    """Without the wall, which the enumeration sees to itself."""

    def limits(progress: Fraction) -> tuple[float, float]:
        if region.wall is not None and progress >= Fraction(region.wall.progress):
            return -math.inf, math.inf
        found = region.limits(np.array([float(progress)]))
        return float(found.lower[0]), float(found.upper[0])

    return limits


def fast(region: Region, law: Law, end: End, looks: list[Fraction]) -> CountedOutcome:
    """The outcome as the service sees it: the looks up to it, and its total."""
    taken = np.array([float(look) for look in looks[: end.look]])
    is_above = end.cause == "above"
    if end.cause == "wall":
        is_above = end.total > region.limits(taken[-1:]).lower[0]
    return CountedOutcome(law, schedule_of_looks(region, taken), end.total, is_above)


def of_units(region: Region, looks: list[Fraction]) -> list[End]:
    assert region.wall is not None
    wall = Fraction(region.wall.progress)
    found = outcomes.ends(limits_of(region), looks, wall, outcomes.units, Fraction(1), int(looks[-1]))
    return outcomes.by_stages(found)


def agrees(
    region: Region,
    law: Law,
    looks: list[Fraction],
    ordered: list[End],
    chance: Callable[[End, float], float],
    at: list[float],
) -> None:
    outcome = [fast(region, law, end, looks) for end in ordered]
    for parameter in at:
        chances = [chance(end, parameter) for end in ordered]
        for i, found in enumerate(outcome):
            tails = found.tails(law.natural(parameter))
            up, further_up = math.fsum(chances[: i + 1]), math.fsum(chances[:i])
            down, further_down = math.fsum(chances[i:]), math.fsum(chances[i + 1 :])
            if found.is_above:
                assert tails.up == pytest.approx(up, rel=1e-11, abs=1e-300)
                assert tails.further_up == pytest.approx(further_up, rel=1e-11, abs=1e-300)
            else:
                assert tails.down == pytest.approx(down, rel=1e-11, abs=1e-300)
                assert tails.further_down == pytest.approx(further_down, rel=1e-11, abs=1e-300)
            assert abs(tails.up - up) < 1e-12
            assert abs(tails.further_down - further_down) < 1e-12


def grouped(wall: int, sizes: list[int]) -> list[Fraction]:
    """Looks after groups of these sizes in turn, the last one at the wall."""
    looks = [Fraction(0)]
    while looks[-1] < wall:
        looks.append(min(Fraction(wall), looks[-1] + sizes[(len(looks) - 1) % len(sizes)]))
    return looks[1:]


@settings(max_examples=25, deadline=None)
@given(PROPORTIONS, PROPORTIONS, THRESHOLDS, st.integers(1, 25), st.lists(st.integers(1, 5), min_size=1, max_size=4))
def test_units_and_groups_against_all_outcomes(
    p0: float, p1: float, limits: Thresholds, wall: int, sizes: list[int]
) -> None:
    if p0 == p1:
        return
    region = straight_region(likelihood.bernoulli(p0, p1), limits, PASS_FAIL, Wall(float(wall)))
    looks = grouped(wall, sizes)
    ordered = of_units(region, looks)
    agrees(region, UnitLaw(), looks, ordered, outcomes.chance_of_units, TRUE)
    for end in ordered:
        estimate = fast(region, UnitLaw(), end, looks).first_step_mean()
        assert estimate == pytest.approx(float(end.from_first / end.paths), rel=1e-12, abs=1e-14)


@settings(max_examples=12, deadline=None)
@given(tables())
def test_tables_with_missing_rows_against_all_outcomes(table: UnitTable) -> None:
    looks = [Fraction(n) for n in range(1, table.sample_numbers[-1] + 1)]
    agrees(table, UnitLaw(), looks, of_units(table, looks), outcomes.chance_of_units, [0.1, 0.6])


def test_limits_between_whole_numbers_are_those_of_the_totals_beyond() -> None:
    whole = UnitTable((4, 9, 20), (0.0, 1.0, 4.0), (3.0, 5.0, 5.0), Decision.ACCEPT, Decision.REJECT)
    between = UnitTable((4, 9, 20), (0.3, 1.9, 4.0), (2.1, 4.5, 5.0), Decision.ACCEPT, Decision.REJECT)
    looks = np.arange(1.0, 21.0)
    found = [
        CountedOutcome(UnitLaw(), schedule_of_looks(table, looks), 4, is_above=False).tails(-0.8)
        for table in (whole, between)
    ]
    assert found[0] == found[1]


@settings(max_examples=8, deadline=None)
@given(
    st.sampled_from([(0.5, 1.0), (1.0, 0.25), (0.1, 0.4)]),
    THRESHOLDS,
    st.lists(st.sampled_from([Fraction(1, 2), Fraction(1), Fraction(3, 4), Fraction(2)]), min_size=1, max_size=4),
)
def test_counts_over_uneven_exposures_against_all_outcomes(
    rates: tuple[float, float], limits: Thresholds, exposures: list[Fraction]
) -> None:
    looks = [sum(exposures[: i + 1], Fraction(0)) for i in range(len(exposures))]
    region = straight_region(likelihood.poisson(*rates), limits, COUNTS, Wall(float(looks[-1])))
    found = outcomes.ends(limits_of(region), looks, looks[-1], outcomes.counts, Fraction(0), 30)
    ordered = [end for end in outcomes.by_stages(found) if end.total < 22]
    # Totals left out lie above, so only what lies further down can be added up to all digits.
    for parameter in (0.05, 0.3, 0.8):
        chances = [outcomes.chance_of_counts(end, parameter) for end in ordered]
        for i, end in enumerate(ordered):
            tails = fast(region, RateLaw(), end, looks).tails(math.log(parameter))
            assert abs(tails.down - math.fsum(chances[i:])) < 1e-12
            assert abs(tails.further_up - math.fsum(chances[:i])) < 1e-12
    for end in ordered:
        estimate = fast(region, RateLaw(), end, looks).first_step_mean()
        assert estimate == pytest.approx(float(end.from_first / end.paths), rel=1e-12, abs=1e-14)


def test_a_count_far_beyond_the_limit_keeps_its_small_probability() -> None:
    """P(at least 60 counts in one report of mean 0.5), the first of all: the Poisson tail itself, in 30 digits."""
    region = straight_region(likelihood.poisson(0.5, 1.5), Thresholds(-2.0, 2.0), COUNTS)
    end = CountedOutcome(RateLaw(), schedule_of_looks(region, np.array([1.0])), 60, is_above=True)
    terms = [Fraction(1, 2) ** k / math.factorial(k) for k in range(60, 120)]
    exact = float(sum(terms) * Fraction(math.exp(-0.5)))
    assert end.tails(math.log(0.5)).up == pytest.approx(exact, rel=1e-12)


PLANS: list[tuple[Region, list[Fraction]]] = [
    (SIMON, [Fraction(10), Fraction(29)]),
    (
        straight_region(likelihood.bernoulli(0.1, 0.3), Thresholds(-1.5, 1.8), PASS_FAIL, Wall(30.0)),
        [Fraction(n) for n in range(1, 31)],
    ),
    (
        straight_region(likelihood.bernoulli(0.3, 0.1), Thresholds(-1.2, 1.5), PASS_FAIL, Wall(25.0)),
        [Fraction(n) for n in range(1, 26)],
    ),
    (
        straight_region(likelihood.bernoulli(0.2, 0.5), Thresholds(-2.0, 2.0), PASS_FAIL, Wall(24.0)),
        [Fraction(n) for n in (3, 5, 9, 12, 18, 24)],
    ),
]


@pytest.mark.parametrize(("region", "looks"), PLANS)
@pytest.mark.parametrize("level", [0.8, 0.95])
def test_an_interval_covers_at_least_as_often_as_it_says(region: Region, looks: list[Fraction], level: float) -> None:
    ordered, law = of_units(region, looks), UnitLaw()
    intervals = []
    for end in ordered:
        outcome = fast(region, law, end, looks)
        low, high = (limit(outcome, (1 - level) / 2) for limit in (lower_limit, upper_limit))
        intervals.append((law.mean(low), law.mean(high)))
    # Further up in the ordering is further up in both limits.
    assert all(a[0] >= b[0] and a[1] >= b[1] for a, b in itertools.pairwise(intervals))
    for p in np.linspace(0.005, 0.995, 41):
        chances = [outcomes.chance_of_units(end, p) for end in ordered]
        covered = [low <= p <= high for low, high in intervals]
        assert math.fsum(c for c, holds in zip(chances, covered, strict=True) if holds) >= level - 1e-9
        for side in (0, 1):
            misses = math.fsum(
                c for c, limits in zip(chances, intervals, strict=True) if (limits[0] > p, limits[1] < p)[side]
            )
            assert misses <= (1 - level) / 2 + 1e-9


@pytest.mark.parametrize(("region", "looks"), PLANS)
def test_a_p_value_is_small_no_more_often_than_it_says(region: Region, looks: list[Fraction]) -> None:
    ordered, law = of_units(region, looks), UnitLaw()
    for p in (0.05, 0.2, 0.5):
        found = [(fast(region, law, end, looks).tails(law.natural(p)), end) for end in ordered]
        for value in {tails.up for tails, _ in found}:
            chance = math.fsum(outcomes.chance_of_units(end, p) for tails, end in found if tails.up <= value)
            assert chance <= value * (1 + 1e-10) + 1e-15


@pytest.mark.parametrize(("region", "looks"), PLANS)
@pytest.mark.parametrize("p", [0.03, 0.1, 0.25, 0.5, 0.9])
def test_the_unbiased_estimate_has_the_parameter_as_its_mean(region: Region, looks: list[Fraction], p: float) -> None:
    ordered = of_units(region, looks)
    terms = [outcomes.chance_of_units(e, p) * fast(region, UnitLaw(), e, looks).first_step_mean() for e in ordered]
    assert abs(math.fsum(terms) - p) < 1e-10


@pytest.mark.parametrize(("region", "looks"), [plan for plan in PLANS if plan[1][:2] == [1, 2]])
@pytest.mark.parametrize("p", [0.03, 0.1, 0.25, 0.5, 0.9])
def test_the_bias_is_the_mean_error_over_all_outcomes(region: Region, looks: list[Fraction], p: float) -> None:
    errors = [
        outcomes.chance_of_units(e, p) * float(e.total / e.progress - Fraction(p)) for e in of_units(region, looks)
    ]
    assert bias_of_counts(region, UnitLaw(), UnitLaw().natural(p), 1.0) == pytest.approx(math.fsum(errors), abs=1e-13)


@pytest.mark.parametrize(("group", "wall"), [(2.0, 24.0), (5.0, 27.0)])
def test_the_bias_with_groups_of_one_size(group: float, wall: float) -> None:
    region = straight_region(likelihood.bernoulli(0.2, 0.5), Thresholds(-2.0, 2.0), PASS_FAIL, Wall(wall))
    looks = [Fraction(group) * n for n in range(1, math.ceil(wall / group) + 1)]
    found = outcomes.ends(limits_of(region), looks, Fraction(wall), outcomes.units, Fraction(1), int(looks[-1]))
    errors = [outcomes.chance_of_units(e, 0.35) * float(e.total / e.progress - Fraction(0.35)) for e in found]
    assert bias_of_counts(region, UnitLaw(), UnitLaw().natural(0.35), group) == pytest.approx(
        math.fsum(errors), abs=1e-13
    )


@pytest.mark.parametrize("p", [0.02, 0.05, 0.2])
def test_the_bias_of_an_open_plan_is_the_mean_error_over_all_its_ends(p: float) -> None:
    """Look by look until next to nothing goes on, each end with its own estimate."""
    region = straight_region(likelihood.bernoulli(0.01, 0.1), Thresholds(-2.2512917986, 2.8903717579), PASS_FAIL)
    limits, alive, error = region.limits(np.arange(2001.0)), {0: 1.0}, 0.0
    for n in range(1, 2001):
        moved: dict[int, float] = {}
        for total, chance in alive.items():
            moved[total] = moved.get(total, 0.0) + chance * (1 - p)
            moved[total + 1] = moved.get(total + 1, 0.0) + chance * p
        ended = {k: chance for k, chance in moved.items() if not limits.lower[n] < k < limits.upper[n]}
        error += math.fsum(chance * (k / n - p) for k, chance in ended.items())
        alive = {k: chance for k, chance in moved.items() if k not in ended}
    assert sum(alive.values()) < 1e-12
    assert bias_of_counts(region, UnitLaw(), UnitLaw().natural(p), 1.0) == pytest.approx(error, abs=1e-9 * p)


def test_girshick_mosteller_and_savages_estimate_in_simons_design() -> None:
    """Simon (1989), 1/10 and 5/29; Girshick, Mosteller and Savage (1946): S = 2, 3, 4, 5 at the end (computed)."""
    schedule = schedule_of_looks(SIMON, np.array([10.0, 29.0]))
    for total, printed in ((2, 0.2), (3, 0.212308), (4, 0.226510), (5, 0.242793)):
        estimate = CountedOutcome(UnitLaw(), schedule, total, is_above=False).first_step_mean()
        assert estimate == pytest.approx(printed, abs=6e-7)


@pytest.mark.parametrize(("c", "n"), [(1, 5), (2, 2), (3, 17), (4, 30)])
def test_inverse_sampling(c: int, n: int) -> None:
    """Haldane's (c - 1)/(n - 1) when the c-th nonconforming unit is the n-th; the p-value is that of the binomial."""
    table = UnitTable(
        tuple(range(1, 61)), (-math.inf,) * 59 + (c - 1.0,), (float(c),) * 60, Decision.ACCEPT, Decision.REJECT
    )
    found = CountedOutcome(UnitLaw(), schedule_of_looks(table, np.arange(1.0, n + 1)), c, is_above=True)
    assert found.first_step_mean() == pytest.approx((c - 1) / (n - 1) if n > c else 1.0, abs=1e-14)
    tails = found.tails(UnitLaw().natural(0.3))
    exact = math.fsum(math.comb(n, k) * 0.3**k * 0.7 ** (n - k) for k in range(c, n + 1))
    assert tails.up == pytest.approx(exact, rel=1e-13)


def test_a_fixed_sample_has_the_limits_of_clopper_and_pearson() -> None:
    """One look after 10 units with 3 nonconforming: 6.674 % to 65.245 %, Clopper and Pearson (1934) (recalled)."""
    table = UnitTable((10,), (3.0,), (4.0,), Decision.ACCEPT, Decision.REJECT)
    law = UnitLaw()
    found = CountedOutcome(law, schedule_of_looks(table, np.array([10.0])), 3, is_above=False)
    low, high = lower_limit(found, 0.025), upper_limit(found, 0.025)
    assert law.mean(low) == pytest.approx(0.06674, abs=6e-6)
    assert law.mean(high) == pytest.approx(0.65245, abs=6e-6)
    p = law.mean(median_unbiased(found))
    terms = [math.comb(10, k) * p**k * (1 - p) ** (10 - k) for k in range(11)]
    assert math.fsum(terms[4:]) + terms[3] / 2 == pytest.approx(0.5, abs=1e-12)


def test_at_the_end_of_the_ordering_there_is_no_limit() -> None:
    """No nonconforming unit at the first look that accepts is the furthest down that a test can end."""
    region = straight_region(likelihood.bernoulli(0.01, 0.1), Thresholds(-2.2512917986, 2.8903717579), PASS_FAIL)
    found = CountedOutcome(UnitLaw(), schedule_of_looks(region, np.arange(1.0, 25.0)), 0, is_above=False)
    assert UnitLaw().mean(lower_limit(found, 0.025)) == 0.0
    assert UnitLaw().mean(median_unbiased(found)) == 0.0
    assert UnitLaw().mean(upper_limit(found, 0.025)) == pytest.approx(1 - 0.025 ** (1 / 24), rel=1e-12)


def test_data_that_no_parameter_explains_still_have_an_answer() -> None:
    """Conforming and nonconforming in strict turn for 6,001 units: the chance of going on so long is no double."""
    region = straight_region(likelihood.bernoulli(0.4, 0.6), Thresholds(-2.0, 2.0), PASS_FAIL)
    found = CountedOutcome(UnitLaw(), schedule_of_looks(region, np.arange(1.0, 6002.0)), 3003, is_above=True)
    assert 0.49 < found.first_step_mean() < 0.75
    assert found.tails(0.0).up == found.tails(0.0).further_up
    assert lower_limit(found, 0.025) < median_unbiased(found) < upper_limit(found, 0.025)
