"""Inference after plans with curved limits, against all outcomes of small ones, each weighed by its exact chance."""

import itertools
import math
from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction
from functools import lru_cache
from typing import Any

import numpy as np
import pytest
from scipy.integrate import simpson
from scipy.stats import norm

from service.domain.checking import checked_content
from service.domain.errors import InvalidPlan
from service.domain.families import base
from service.domain.inference import Inference, Looks, inference_at, inference_of, meanings_of
from service.domain.observing import observe
from service.domain.procedure import Procedure, procedure_of_document
from service.domain.state import Decision, State, Sum
from service.sequential.double import Double
from service.sequential.inference.ordering import Outcome
from tests.domain.submissions import numbered
from tests.domain.test_observing import NOW
from tests.sequential.inference.test_counting import limits_of
from tests.sequential.inference.test_measuring import passes
from tests.sequential.reference import outcomes, paths
from tests.sequential.reference.outcomes import End

LEVEL = 0.9
ACCEPT = Decision.ACCEPT
PASS_FAIL = {"family": "bernoulli", "alpha": 0.1, "boundaries": "given"}
UNITS: dict[str, dict[str, Any]] = {
    "upward": {"h0": 0.2, "statistic": "generalised", "thresholds": {"accept": None, "reject": 1.2}},
    "with an accept limit": {
        "h0": 0.15,
        "h1": 0.5,
        "beta": 0.1,
        "statistic": "generalised",
        "thresholds": {"accept": -1.2, "reject": 1.4},
    },
    "downward": {
        "h0": 0.6,
        "direction": "below",
        "statistic": "generalised",
        "thresholds": {"accept": None, "reject": 1.3},
    },
    "two-sided": {"h0": 0.4, "sides": 2, "statistic": "generalised", "thresholds": {"accept": None, "reject": 1.9}},
    "mixture": {
        "h0": 0.35,
        "sides": 2,
        "statistic": "mixture",
        "known": {"prior": {"a": 1.5, "b": 2.0}},
        "thresholds": {"accept": None, "reject": 1.1},
    },
}
WALL = 10
CLOSED = {name: {**PASS_FAIL, **plan, "truncation": {"sample_number": WALL}} for name, plan in UNITS.items()}
OPEN = {
    "open mixture": {**PASS_FAIL, **UNITS["mixture"]},
    "open upward mixture": {
        **PASS_FAIL,
        "h0": 0.3,
        "statistic": "mixture",
        "known": {"prior": {"a": 1.0, "b": 1.0}},
        "thresholds": {"accept": None, "reject": 1.1},
    },
}
PLANS = {**CLOSED, **OPEN}


@dataclass(frozen=True)
class Found:
    """One outcome, what is said of it, and the outcomes up to it and from it on, in the stage-wise ordering."""

    end: End
    inference: Inference
    place: int


@dataclass(frozen=True)
class Everything:
    """
    All outcomes of one plan, furthest up first.

    Attributes:
        above: How many of them lie above what never ended.
    """

    procedure: Procedure
    ordered: tuple[Found, ...]
    above: int
    chance: Callable[[End, float], float]

    def tails(self, parameter: float) -> list[tuple[float, float]]:
        """P(at least as far up) and P(at least as far down) for each outcome; tests that go on lie in the middle."""
        chances = [self.chance(found.end, parameter) for found in self.ordered]
        goes_on = max(0.0, 1.0 - math.fsum(chances))
        found = []
        for i in range(len(chances)):
            is_over = i >= self.above
            up = math.fsum(chances[: i + 1]) + (goes_on if is_over else 0.0)
            found.append((up, math.fsum(chances[i:]) + (0.0 if is_over else goes_on)))
        return found


def decision_at(procedure: Procedure, end: End) -> Decision:
    region = procedure.region
    if end.cause != "wall":
        return region.above if end.cause == "above" else region.below
    limits = region.limits(np.array([float(end.progress)]))
    if end.total <= limits.lower[0]:
        return region.below
    return region.above if end.total >= limits.upper[0] else region.between


def everything(
    content: dict[str, Any],
    looks: list[Fraction],
    ways: Callable[[Fraction, int], Fraction],
    chance: Callable[[End, float], float],
    most: int,
) -> Everything:
    procedure = procedure_of_document(checked_content(content))
    wall = None if procedure.region.wall is None else looks[-1]
    first = Fraction(0) if procedure.family.has_exposure else Fraction(1)
    ends = outcomes.by_stages(outcomes.ends(limits_of(procedure.region), looks, wall, ways, first, most))
    at = np.array([float(look) for look in looks])
    found = []
    for i, end in enumerate(ends):
        taken = Looks(at[: end.look], str(end.look), 1.0, "")
        inference = inference_at(procedure, taken, Sum(float(end.total)), decision_at(procedure, end), LEVEL)
        found.append(Found(end, inference, i))
    return Everything(procedure, tuple(found), sum(end.cause != "below" for end in ends), chance)


@lru_cache(maxsize=20)
def of_units(name: str) -> Everything:
    looks = [Fraction(n) for n in range(1, WALL + 1)]
    return everything(PLANS[name], looks, outcomes.units, outcomes.chance_of_units, WALL)


@pytest.mark.parametrize("name", PLANS)
def test_the_p_value_is_the_sum_over_all_outcomes(name: str) -> None:
    found = of_units(name)
    procedure, null = found.procedure, found.procedure.hypotheses[0]
    for one, (up, down) in zip(found.ordered, found.tails(null), strict=True):
        expected = up if procedure.is_upward else down
        if procedure.is_two_sided:
            expected = min(1.0, 2.0 * min(up, down))
        assert one.inference.p_value == pytest.approx(expected, rel=1e-10, abs=1e-14)


@pytest.mark.parametrize("name", PLANS)
def test_a_p_value_is_small_no_more_often_than_it_says(name: str) -> None:
    """At H0's edge and, one-sided, inside of it."""
    found = of_units(name)
    null = found.procedure.hypotheses[0]
    inside = [] if found.procedure.is_two_sided else [0.7 * null if found.procedure.is_upward else 1.2 * null]
    for parameter in (null, *inside):
        for value in {one.inference.p_value for one in found.ordered}:
            chances = (found.chance(one.end, parameter) for one in found.ordered if one.inference.p_value <= value)
            assert math.fsum(chances) <= value * (1.0 + 1e-10) + 1e-14


@pytest.mark.parametrize("name", PLANS)
def test_limits_are_on_the_wrong_side_no_more_often_than_they_say(name: str) -> None:
    found = of_units(name)
    limits = [(one.inference.lower or 0.0, one.inference.upper or 1.0) for one in found.ordered]
    assert all(a[0] >= b[0] - 1e-12 and a[1] >= b[1] - 1e-12 for a, b in itertools.pairwise(limits))
    for parameter in (0.03, 0.15, 0.2, 0.35, 0.4, 0.5, 0.6, 0.72, 0.9):
        chances = [found.chance(one.end, parameter) for one in found.ordered]
        for misses in ([low > parameter for low, _ in limits], [high < parameter for _, high in limits]):
            assert math.fsum(itertools.compress(chances, misses)) <= (1.0 - LEVEL) / 2.0 + 1e-10
        if found.procedure.region.wall is not None:
            around = [low <= parameter <= high for low, high in limits]
            assert math.fsum(itertools.compress(chances, around)) >= LEVEL - 1e-10


@pytest.mark.parametrize("name", PLANS)
def test_both_limits_and_the_median_solve_their_equations(name: str) -> None:
    found = of_units(name)
    for one in found.ordered:
        said = one.inference
        if "lower" not in said.reasons:
            assert found.tails(said.lower or 0.0)[one.place][0] == pytest.approx((1.0 - LEVEL) / 2.0, rel=1e-9)
        if "upper" not in said.reasons:
            assert found.tails(said.upper or 0.0)[one.place][1] == pytest.approx((1.0 - LEVEL) / 2.0, rel=1e-9)
        if "median_unbiased" not in said.reasons:
            up, down = found.tails(said.median_unbiased or 0.0)[one.place]
            assert up == pytest.approx(down, rel=1e-9)


@pytest.mark.parametrize("name", PLANS)
def test_the_unbiased_estimate_is_the_share_of_paths_that_begin_with_one(name: str) -> None:
    for one in of_units(name).ordered:
        assert one.inference.unbiased == pytest.approx(float(one.end.from_first / one.end.paths), rel=1e-11, abs=1e-14)


@pytest.mark.parametrize("name", CLOSED)
@pytest.mark.parametrize("p", [0.1, 0.45, 0.8])
def test_the_bias_is_the_mean_error_over_all_outcomes(name: str, p: float) -> None:
    found = of_units(name)
    ends = [one.end for one in found.ordered]
    error = math.fsum(found.chance(end, p) * float(end.total / end.progress - Fraction(p)) for end in ends)
    procedure = found.procedure
    assert procedure.family.bias(procedure.region, p, 1.0, procedure.known) == pytest.approx(error, abs=1e-12)


WELD = {"family": "poisson", "alpha": 0.1, "boundaries": "given", "h0": 1.0, "truncation": {"exposure": 3.5}}
COUNTS: dict[str, dict[str, Any]] = {
    "two-sided": {
        **WELD,
        "sides": 2,
        "statistic": "generalised",
        "thresholds": {"accept": None, "reject": 1.4},
    },
    "downward": {
        **WELD,
        "direction": "below",
        "statistic": "generalised",
        "thresholds": {"accept": None, "reject": 1.2},
    },
    "mixture": {
        **WELD,
        "statistic": "mixture",
        "known": {"prior": {"shape": 1.0, "rate": 1.0}},
        "thresholds": {"accept": None, "reject": 1.2},
    },
}


@pytest.mark.parametrize("name", COUNTS)
def test_counts_over_uneven_exposures(name: str) -> None:
    """Totals beyond 26, with a chance below 1e-13 under H0, are left out."""
    looks = [Fraction(1, 2), Fraction(3, 2), Fraction(2), Fraction(5, 2), Fraction(7, 2)]
    found = everything(COUNTS[name], looks, outcomes.counts, outcomes.chance_of_counts, 26)
    procedure = found.procedure
    wanted = [one for one in found.ordered if one.end.total < 18]
    tails = found.tails(1.0)
    for one in wanted:
        up, down = tails[one.place]
        expected = up if procedure.is_upward else down
        if procedure.is_two_sided:
            expected = min(1.0, 2.0 * min(up, down))
        assert one.inference.p_value == pytest.approx(expected, rel=1e-9, abs=1e-12)
        assert one.inference.unbiased == pytest.approx(float(one.end.from_first / one.end.paths), rel=1e-11, abs=1e-14)
    for rate in (0.3, 1.0, 1.5):
        chances = [found.chance(one.end, rate) for one in wanted]
        around = [(one.inference.lower or 0.0) <= rate <= (one.inference.upper or 0.0) for one in wanted]
        assert math.fsum(itertools.compress(chances, around)) >= LEVEL - 1e-9
        assert sum(chances) == pytest.approx(1.0, abs=1e-4)


PUMP = {"family": "exponential", "h0": 100.0, "alpha": 0.1, "boundaries": "given", "truncation": {"exposure": 600.0}}
LIVES: dict[str, dict[str, Any]] = {
    "two-sided": {**PUMP, "statistic": "generalised", "sides": 2, "thresholds": {"accept": None, "reject": 2.2}},
    "longer": {
        **PUMP,
        "statistic": "generalised",
        "direction": "above",
        "thresholds": {"accept": None, "reject": 1.8},
    },
    "shorter": {
        **PUMP,
        "statistic": "mixture",
        "direction": "below",
        "known": {"prior": {"shape": 1.0, "rate": 100.0}},
        "thresholds": {"accept": None, "reject": 1.8},
    },
}
CAP, MOST = 34, 600.0


def followed(procedure: Procedure, until: float, mean: float, ends_below: Callable[[int], bool]) -> tuple[float, float]:
    """P(below) and P(above) up to a moment, at which `ends_below` parts the totals."""
    totals = np.arange(CAP + 1.0)
    lower, upper = procedure.region.lower_reached_at(totals), procedure.region.upper_left_at(totals)
    return paths.in_time(lower.__getitem__, upper.__getitem__, until, ends_below, CAP, 1.0 / mean)[:2]


def seen(procedure: Procedure, time: float, failures: int, *, is_above: bool) -> Outcome:
    end = base.End(np.array([time]), Double.of(float(failures)), is_above)
    found = procedure.family.outcome(procedure.region, end, procedure.known)
    assert found is not None
    return found


@pytest.mark.parametrize("name", LIVES)
@pytest.mark.parametrize("mean", [80.0, 250.0])
def test_failures_in_time_against_the_generator(name: str, mean: float) -> None:
    """At the wall, and decided before it on either side: the chain stopped at that moment, its totals parted."""
    procedure = procedure_of_document(checked_content(LIVES[name]))
    region, natural = procedure.region, -math.log(mean)
    totals = np.arange(CAP + 1.0)
    lower, upper = region.lower_reached_at(totals), region.upper_left_at(totals)
    for failures in (2, 8):
        at_most, fewer = (followed(procedure, MOST, mean, most.__ge__)[0] for most in (failures, failures - 1))
        for is_above in (True, False):
            tails = seen(procedure, MOST, failures, is_above=is_above).tails(natural)
            assert tails.down == pytest.approx(at_most, abs=1e-11)
            assert tails.further_up == pytest.approx(1.0 - at_most, abs=1e-11)
            assert tails.up == pytest.approx(1.0 - fewer, abs=1e-11)
    for failures in np.flatnonzero(lower < MOST).tolist():
        below = followed(procedure, float(lower[failures]), mean, failures.__ge__)[0]
        tails = seen(procedure, float(lower[failures]), failures, is_above=False).tails(natural)
        assert tails.down == pytest.approx(below, rel=1e-9)
    for failures in np.flatnonzero(upper > 0.0)[1:3].tolist():
        time = 0.5 * float(upper[failures - 1] + upper[failures])
        above = followed(procedure, time, mean, lambda _: True)[1]
        tails = seen(procedure, time, failures, is_above=True).tails(natural)
        assert tails.up == tails.further_up == pytest.approx(above, rel=1e-9)


def test_the_p_value_of_failures_in_time_is_that_of_the_null() -> None:
    for name, failures, sides in (("two-sided", 4, 2.0), ("longer", 4, 1.0), ("shorter", 7, 1.0)):
        procedure = procedure_of_document(checked_content(LIVES[name]))
        found = inference_at(procedure, Looks(np.array([MOST]), "", None, ""), Sum(float(failures)), ACCEPT, LEVEL)
        at_most, fewer = (followed(procedure, MOST, 100.0, most.__ge__)[0] for most in (failures, failures - 1))
        expected = 1.0 - fewer if name == "shorter" else at_most
        assert found.p_value == pytest.approx(sides * expected, rel=1e-9)
        assert found.lower is not None
        assert found.lower < (found.maximum_likelihood or 0.0) < (found.upper or 0.0)


def measured(content: dict[str, Any], values: list[float]) -> tuple[State, Inference]:
    document, state = checked_content(content), State()
    state = observe(procedure_of_document(document), state, {"values": values}, NOW)
    return state, inference_of(document, state, numbered([{"values": values}]), LEVEL)


def repeated(mean: float, sigma: float, **change: Any) -> dict[str, Any]:
    """The two-sided generalised plan, which is a repeated significance test: reject when |z| comes to 2."""
    return {
        "family": "normal",
        "h0": mean,
        "known": {"sigma": sigma},
        "sides": 2,
        "statistic": "generalised",
        "alpha": 0.1,
        "boundaries": "given",
        "thresholds": {"accept": None, "reject": 2.0},
        "truncation": {"sample_number": 4},
        **change,
    }


@pytest.mark.parametrize(
    "values",
    [[2.4], [0.5, 3.0], [0.3, -0.2, -3.9], [0.9, 0.4, -0.1, 0.6], [0.4, 0.7, 1.2, 1.9], [-1.0, -1.1, -0.9, -0.2]],
)
def test_a_repeated_significance_test_against_dense_quadrature(values: list[float]) -> None:
    state, found = measured(repeated(0.0, 1.0), values)
    region = procedure_of_document(checked_content(repeated(0.0, 1.0))).region
    assert state.sample_number == len(values)
    is_above = sum(values) > 0.0 or state.decision == "accept"
    near = passes(region, len(values), sum(values), 0.0, 1.0, 1 if is_above else -1)
    assert found.p_value == pytest.approx(2.0 * min(near, 1.0 - near), rel=1e-8)
    for limit, sign in ((found.lower, 1), (found.upper, -1)):
        assert limit is not None
        tail = passes(region, len(values), sum(values), limit, 1.0, 1 if is_above else -1)
        assert (tail if (sign > 0) == is_above else 1.0 - tail) == pytest.approx(0.05, rel=1e-7)


@pytest.mark.parametrize("change", [{}, {"statistic": "mixture", "known": {"tau": 0.5}}, {"h1": 0.8, "sides": None}])
def test_means_far_from_zero_lose_nothing(change: dict[str, Any]) -> None:
    """A mean of a million and a spread of a thousandth: the same test, to the digits that the data themselves keep."""
    values = [2.0**-2, 2.0**-1, 1.25, 3.0]
    unit = 2.0**-10

    def plan(mean: float, scale: float) -> dict[str, Any]:
        body = repeated(mean, scale)
        if "known" in change:
            body |= {"statistic": "mixture", "known": {"sigma": scale, "prior": {"tau": 0.5 * scale}}}
        if "h1" in change:
            body |= {"h1": mean + 0.8 * scale, "beta": 0.1, "thresholds": {"accept": -2.0, "reject": 2.0}}
            del body["sides"]
        return body

    plain, far = measured(plan(0.0, 1.0), values), measured(plan(1e6, unit), [1e6 + unit * value for value in values])
    assert plain[0].sample_number == far[0].sample_number
    assert far[1].p_value == pytest.approx(plain[1].p_value, rel=1e-9)
    for name in ("lower", "upper", "median_unbiased", "unbiased", "maximum_likelihood"):
        near, there = getattr(plain[1], name), getattr(far[1], name)
        assert (there - 1e6) / unit == pytest.approx(near, abs=1e-6), name
    assert (far[1].bias or 0.0) / unit == pytest.approx(plain[1].bias, rel=1e-6)


def test_an_open_mixture_of_measurements() -> None:
    """Robbins's test without an end, decided at the second measurement: both tails by one integral over the first."""
    content = {
        "family": "normal",
        "h0": 0.0,
        "sides": 2,
        "statistic": "mixture",
        "alpha": 0.05,
        "known": {"sigma": 1.0, "prior": {"tau": 1.0}},
    }
    state, found = measured(content, [2.0, 4.0])
    assert (state.decision, state.sample_number) == ("reject", 2)
    # By hand: x**2/4 - ln(2)/2 comes to ln 20 at x = 3.6526 after one, 6 after two is beyond.
    edge = math.sqrt(4.0 * (math.log(20.0) + math.log(2.0) / 2.0))
    x = np.linspace(-edge, edge, 20_001)
    up = norm.sf(edge) + simpson(norm.pdf(x) * norm.sf(6.0 - x), x=x)
    assert found.p_value == pytest.approx(2.0 * up, rel=1e-9)
    assert found.bias is not None
    assert found.reasons == {}


def test_the_words_say_what_the_figures_of_such_plans_mean() -> None:
    two_sided, open_ = (meanings_of(checked_content(PLANS[name]), LEVEL) for name in ("two-sided", "open mixture"))
    assert two_sided["p_value"].startswith("Twice the smaller")
    assert "rejections below" in two_sided["ordering"]
    assert "for ever" not in two_sided["ordering"]
    assert "for ever" in open_["ordering"]
    assert "at most 10 %" in open_["interval"]
    furthest = of_units("two-sided").ordered[0].inference
    assert "towards a larger proportion nonconforming" in furthest.reasons["upper"]
    assert "H1" not in str(furthest.reasons)


@pytest.mark.parametrize("statistic", ["generalised", "mixture"])
def test_two_sides_cannot_be_truncated_by_failures(statistic: str) -> None:
    """Reaching the exposure with fewer failures would reject, however well they fit H0."""
    plan = {**LIVES["two-sided"], "truncation": {"exposure": 600.0, "failures": 20}, "statistic": statistic}
    if statistic == "mixture":
        plan["known"] = {"prior": {"shape": 1.0, "rate": 100.0}}
    with pytest.raises(InvalidPlan) as refused:
        checked_content(plan)
    assert [fault.pointer for fault in refused.value.faults] == ["/truncation/failures"]
