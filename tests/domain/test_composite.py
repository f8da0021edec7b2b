"""Plans with composite hypotheses: levels, calibrations and decisions, against enumeration and published values."""

import json
import math
from datetime import UTC, datetime
from fractions import Fraction
from itertools import product
from typing import Any

import numpy as np
import pytest

from service.domain.anytime import always_valid_p_value, confidence_at, confidence_sequence
from service.domain.calibrating import exact_figures, rejects_at
from service.domain.checking import checked_content
from service.domain.errors import InvalidPlan, InvalidQuestion
from service.domain.observing import direction_of_rejection, observe
from service.domain.outlook import outlook_of, ways_of
from service.domain.path import region_points
from service.domain.procedure import Procedure, procedure_of_document
from service.domain.state import Cause, Decision, State

NOW = datetime(2031, 5, 4, tzinfo=UTC)

LEAK = {"family": "bernoulli", "h0": 0.1, "alpha": 0.1, "statistic": "generalised"}
APART = {**LEAK, "h1": 0.4, "beta": 0.2}
MIXED = {**LEAK, "statistic": "mixture", "known": {"prior": {"a": 1.0, "b": 4.0}}}
WALL = {"truncation": {"sample_number": 10}}

PLANS: dict[str, dict[str, Any]] = {
    "up to a wall": {**LEAK, **WALL},
    "down to a wall": {**LEAK, "h0": 0.6, "direction": "below", **WALL},
    "two sides": {**LEAK, "h0": 0.4, "sides": 2, **WALL},
    "apart": {**APART, "truncation": {"sample_number": 12}, "beta": 0.3},
    "apart, down": {**APART, "h0": 0.7, "h1": 0.3, "beta": 0.3, "truncation": {"sample_number": 12}},
    "mixture up": {**MIXED, **WALL},
    "mixture down": {**MIXED, "h0": 0.6, "direction": "below", **WALL},
    "mixture, two sides": {**MIXED, "h0": 0.4, "sides": 2, **WALL},
    "mixture, calibrated": {**MIXED, "boundaries": "calibrated", **WALL},
}


def procedure(plan: dict[str, Any]) -> Procedure:
    return procedure_of_document(checked_content(plan))


def enumerated(plan: dict[str, Any], p: Fraction) -> tuple[dict[str, Fraction], Fraction]:
    """Probabilities of the decisions and the mean sample number: every sequence of results is observed one by one."""
    compiled, last = procedure(plan), plan["truncation"]["sample_number"]
    found, mean = {"accept": Fraction(0), "reject": Fraction(0)}, Fraction(0)
    alive = [(State(), Fraction(1))]
    for _ in range(last):
        following: dict[int, tuple[State, Fraction]] = {}
        for (state, weight), value in product(alive, (0, 1)):
            chance = weight * (p if value else 1 - p)
            after = observe(compiled, state, {"values": [value]}, NOW)
            mean += chance if not after.is_decided else 0
            if after.is_decided:
                found[after.decision] += chance
                mean += chance * after.sample_number - chance * (after.sample_number - 1)
                continue
            height = int(after.total.value)
            before = following.get(height, (after, Fraction(0)))[1]
            following[height] = (after, before + chance)
        alive = list(following.values())
    assert not alive
    return found, mean


@pytest.mark.parametrize("name", PLANS)
def test_exact_figures_are_those_of_observing_every_sequence(name: str) -> None:
    compiled = procedure(PLANS[name])
    for p in (Fraction(1, 10), Fraction(2, 5), Fraction(3, 5)):
        decisions, mean = enumerated(PLANS[name], p)
        found = exact_figures(compiled, [float(p)])
        assert rejects_at(compiled, found, 0) == pytest.approx(float(decisions["reject"]), abs=1e-13)
        assert float(found.mean[0]) == pytest.approx(float(mean), rel=1e-12)


@pytest.mark.parametrize("name", PLANS)
def test_the_level_is_kept_at_every_point_of_h0(name: str) -> None:
    """On a fine grid, and the worst point is the one that the plan names."""
    plan = PLANS[name]
    document = checked_content(plan)
    attained, compiled = json.loads(document)["attained"], procedure_of_document(document)
    is_h0_below = plan.get("direction") != "below" and plan.get("h1", 1.0) > plan["h0"]
    side = np.linspace(1e-6, plan["h0"], 201) if is_h0_below else np.linspace(plan["h0"], 1 - 1e-6, 201)
    grid = [plan["h0"]] if plan.get("sides") == 2 else side.tolist()
    found = exact_figures(compiled, grid)
    levels = [rejects_at(compiled, found, i) for i in range(len(grid))]
    assert max(levels) <= plan["alpha"] + 1e-12
    assert attained["alpha"] == pytest.approx(max(levels), rel=1e-9)
    assert attained["alpha_at"] == plan["h0"]
    if "beta" in plan:
        assert attained["beta"] <= plan["beta"]
        assert attained["beta_at"] == plan["h1"]


def test_calibrated_thresholds_are_the_smallest_that_keep_the_level() -> None:
    """By hand: of all thresholds the evidence can take, none below the calibrated one keeps alpha."""
    plan = PLANS["up to a wall"]
    document = json.loads(checked_content(plan))
    threshold = document["thresholds"]["reject"]
    compiled, last = procedure(plan), plan["truncation"]["sample_number"]
    values = sorted(
        {
            float(compiled.evidence.log(*(_one(x) for x in (float(n), float(d))))[0])
            for n in range(1, last + 1)
            for d in range(n + 1)
        }
    )
    below = [value for value in values if 0.0 < value <= threshold]
    given = {**plan, "boundaries": "given", "thresholds": {"reject": below[-1]}}
    assert json.loads(checked_content(given))["attained"]["alpha"] > plan["alpha"]
    above = {**plan, "boundaries": "given", "thresholds": {"reject": next(v for v in values if v > threshold)}}
    assert json.loads(checked_content(above))["attained"]["alpha"] <= plan["alpha"]


@pytest.mark.parametrize(
    ("horizon", "critical"),
    [(1, 2.853937), (2, 3.046977), (3, 3.162106), (5, 3.297183), (10, 3.467952), (20, 3.628123), (50, 3.819903)],
)
def test_published_critical_values_of_the_poisson_ratio(horizon: int, critical: float) -> None:
    """
    Kulldorff and others (2011), Sequential Analysis 30, 58-78 [recalled, recomputed to 6 decimals]: alpha .05, a look
    after every event, up to so many expected ones. Events in time are failures at mean life 1.
    """
    plan = {"family": "exponential", "h0": 1.0, "alpha": 0.05, "statistic": "generalised", "direction": "below"}
    document = json.loads(checked_content({**plan, "truncation": {"exposure": float(horizon)}}))
    assert document["thresholds"]["reject"] == pytest.approx(critical, abs=6e-7)
    assert document["attained"]["alpha"] == pytest.approx(0.05, abs=1e-9)


@pytest.mark.parametrize("family", ["bernoulli", "poisson", "normal"])
def test_a_strict_mixture_keeps_its_level_and_rejects_in_a_direction(family: str) -> None:
    known = {
        "bernoulli": {"prior": {"a": 2.0, "b": 2.0}},
        "poisson": {"prior": {"shape": 2.0, "rate": 4.0}},
        "normal": {"sigma": 1.0, "prior": {"tau": 0.5}},
    }[family]
    axis = "exposure" if family == "poisson" else "sample_number"
    plan = {"family": family, "h0": 0.5, "alpha": 0.05, "statistic": "mixture", "sides": 2, "known": known}
    document = checked_content({**plan, "truncation": {axis: 200}})
    compiled = procedure_of_document(document)
    assert 0.0 < json.loads(document)["attained"]["alpha"] <= 0.05
    for value, direction in ((1, "above"), (0 if family != "normal" else -1, "below")):
        state = observe(compiled, State(), {"values": [value] * 40}, NOW)
        assert state.decision is Decision.REJECT
        assert direction_of_rejection(compiled, state) == direction
    ends = procedure_of_document(checked_content(plan))
    assert observe(ends, State(), {"values": [1, 0] * 500}, NOW).decision is Decision.CONTINUE
    with pytest.raises(InvalidQuestion, match="go on for ever"):
        exact_figures(ends, [0.5])
    outlook = outlook_of(checked_content(plan), State())
    assert outlook.expected == ()
    assert outlook.ways.accept is None
    assert outlook.ways.reject is not None


def test_the_wall_of_a_two_sided_plan_accepts_what_lies_between() -> None:
    compiled = procedure({**PLANS["two sides"]})
    state = observe(compiled, State(), {"values": [0, 1, 0, 1, 0, 1, 0, 0, 1, 0]}, NOW)
    assert (state.decision, state.decided and state.decided.cause) == (Decision.ACCEPT, Cause.TRUNCATION)
    last = region_points(compiled, 10.0)[-1]
    assert last.accept is None
    assert (last.reject_below, last.reject) == (0.0, 8.0)
    ways = ways_of(compiled, State())
    assert ways.accept is not None
    assert ways.accept.words == "10 units more that end with a total from 1 to 7"
    assert ways.reject_below is not None
    assert ways.reject_below.words.endswith("conforming units")


def _one(value: float) -> Any:
    from service.sequential.double import Double  # noqa: PLC0415

    return Double(np.array([value]), np.zeros(1))


def test_the_confidence_sequence_of_robbins() -> None:
    """Robbins (1970): V = 1, tau**2 = .04, n = 50, mean .4: half-width .461197 and p .120349, evaluated twice."""
    plan = {"family": "normal", "h0": 0.0, "alpha": 0.05, "statistic": "mixture", "sides": 2}
    compiled = procedure({**plan, "known": {"sigma": 1.0, "prior": {"tau": 0.2}}})
    state = observe(compiled, State(), {"values": [0.4] * 50}, NOW)
    assert always_valid_p_value(compiled, state.log_likelihood_ratio) == pytest.approx(0.120349, abs=5e-7)
    found = confidence_at(compiled, state)
    assert found is not None
    assert found.level == 0.95
    assert (found.upper[0] - found.lower[0]) / 2 == pytest.approx(0.461197, abs=5e-7)


def test_a_confidence_sequence_never_leaves_the_true_parameter_more_often_than_it_says() -> None:
    """Every sequence of results up to 40 units, by the totals at which the limits leave p out."""
    compiled = procedure({**MIXED, "alpha": 0.2})
    progress, totals = (grid.ravel() for grid in np.meshgrid(np.arange(1.0, 41.0), np.arange(41.0)))
    inside = totals <= progress
    found = confidence_sequence(compiled, progress[inside], totals[inside])
    assert found is not None
    limits = {
        (int(n), int(d)): (low, high)
        for n, d, low, high in zip(progress[inside], totals[inside], found.lower, found.upper, strict=True)
    }
    for p in (0.03, 0.1, 0.35, 0.8):
        alive, left_out = {0: 1.0}, 0.0
        for n in range(1, 41):
            moved: dict[int, float] = {}
            for d, weight in alive.items():
                moved[d + 1] = moved.get(d + 1, 0.0) + weight * p
                moved[d] = moved.get(d, 0.0) + weight * (1 - p)
            out = {d for d in moved if not limits[n, d][0] <= p <= limits[n, d][1]}
            left_out += sum(moved.pop(d) for d in out)
            alive = moved
        assert 0.0 < left_out <= 0.2


def test_a_p_value_is_valid_at_all_moments_and_generalised_plans_have_none() -> None:
    assert always_valid_p_value(procedure(APART | WALL), 3.0) is None
    simple = procedure({"family": "bernoulli", "h0": 0.1, "h1": 0.4, "alpha": 0.1, "beta": 0.2})
    assert always_valid_p_value(simple, math.log(40.0)) == pytest.approx(1 / 40)
    assert always_valid_p_value(simple, -5.0) == 1.0
    assert confidence_at(simple, State()) is None


@pytest.mark.parametrize(
    ("plan", "pointer"),
    [
        ({**LEAK}, "/truncation"),
        ({**LEAK, **WALL, "beta": 0.1}, "/beta"),
        ({**LEAK, **WALL, "boundaries": "wald"}, "/boundaries"),
        ({**LEAK, **WALL, "boundaries": "strict"}, "/boundaries"),
        ({**LEAK, **WALL, "sides": 3}, "/sides"),
        ({**LEAK, **WALL, "sides": 2, "h1": 0.3}, "/h1"),
        ({**LEAK, **WALL, "sides": 2, "direction": "above"}, "/direction"),
        ({**LEAK, **WALL, "direction": "up"}, "/direction"),
        ({**APART, "direction": "above"}, "/direction"),
        ({**LEAK, **WALL, "known": {"prior": {"a": 1.0, "b": 1.0}}}, "/known/prior"),
        ({**LEAK, "truncation": {"sample_number": 1}, "alpha": 0.01}, "/truncation"),
        ({**MIXED, "h1": 0.4}, "/h1"),
        ({**MIXED, "beta": 0.2}, "/beta"),
        ({**MIXED, "known": {}}, "/known/prior"),
        ({**MIXED, "known": {"prior": {"a": 1.0}}}, "/known/prior/b"),
        ({**MIXED, "known": {"prior": {"a": 1.0, "b": -1.0}}}, "/known/prior/b"),
        ({**MIXED, "known": {"prior": {"shape": 1.0, "rate": 1.0}}}, "/known/prior/a"),
        ({**MIXED, "boundaries": "calibrated"}, "/truncation"),
        ({**MIXED, "boundaries": "given", "thresholds": {"accept": -1.0, "reject": 3.0}}, "/thresholds/accept"),
        ({**LEAK, "statistic": "best"}, "/statistic"),
        ({"family": "bernoulli", "h0": 0.1, "h1": 0.2, "alpha": 0.1, "beta": 0.1, "sides": 2}, "/sides"),
        ({"family": "normal_variance", "h0": 1.0, "alpha": 0.1, "statistic": "generalised", **WALL}, "/statistic"),
    ],
)
def test_what_cannot_be_right_is_named(plan: dict[str, Any], pointer: str) -> None:
    with pytest.raises(InvalidPlan) as refused:
        checked_content(plan)
    assert pointer in [fault.pointer for fault in refused.value.faults]


def test_a_mixture_is_not_ended_by_a_number_of_failures() -> None:
    """It would reject whatever the evidence: with one failure allowed, in 86 of a hundred good lots."""
    plan = {"family": "exponential", "h0": 1.0, "alpha": 0.05, "statistic": "mixture", "direction": "below"}
    known = {"prior": {"shape": 1.0, "rate": 1.0}}
    with pytest.raises(InvalidPlan) as refused:
        checked_content({**plan, "known": known, "truncation": {"exposure": 2.0, "failures": 1}})
    assert [fault.pointer for fault in refused.value.faults] == ["/truncation/failures"]


@pytest.mark.parametrize(
    ("family", "known", "pointer"),
    [
        ("bernoulli", {"prior": {"a": 3e14, "b": 7e14}}, "/known/prior/a"),
        ("normal", {"sigma": 1e-100, "prior": {"tau": 1e100}}, "/known/prior/tau"),
        ("poisson_ratio", {"exposure_ratio": 1e90, "prior": {"a": 1.0, "b": 1.0}}, "/h1"),
    ],
)
def test_what_leaves_no_digits_is_refused(family: str, known: dict[str, Any], pointer: str) -> None:
    with pytest.raises(InvalidPlan) as refused:
        checked_content(
            {"family": family, "h0": 0.3, "alpha": 0.05, "statistic": "mixture", "sides": 2, "known": known}
        )
    assert pointer in [fault.pointer for fault in refused.value.faults]


def test_failures_at_once_reject_below_in_life() -> None:
    """Four failures before any time has passed: there is no estimate, but the direction is plain."""
    known = {"prior": {"shape": 1.0, "rate": 1.0}}
    plan = {"family": "exponential", "h0": 1.0, "alpha": 0.05, "statistic": "mixture", "sides": 2, "known": known}
    compiled = procedure(plan)
    state = observe(compiled, State(), {"values": [0.0] * 4}, NOW)
    assert state.decision is Decision.REJECT
    assert direction_of_rejection(compiled, state) == "below"
