"""Evidence that the caller brings: sums, decisions, and no claim beyond what holds for every model."""

import itertools
import json
import math
from fractions import Fraction
from typing import Any

import numpy as np
import pytest
from mpmath import mpf

from service.domain.characteristics import promise_of
from service.domain.checking import checked_candidates, checked_content
from service.domain.designing import suggested_truncation
from service.domain.errors import InvalidObservations, InvalidPlan, InvalidQuestion
from service.domain.observing import observe
from service.domain.outlook import outlook_of
from service.domain.path import region_points
from service.domain.procedure import procedure_of_document
from service.domain.state import State
from tests.domain.test_observing import NOW

SCORE: dict[str, Any] = {"family": "score", "alpha": 0.05, "beta": 0.10, "boundaries": "strict"}


def document(**change: Any) -> str:
    return checked_content({**SCORE, **change})


def attained(plan: str) -> Any:
    return json.loads(plan).get("attained")


def posted(plan: str, values: list[float], state: State | None = None) -> State:
    return observe(procedure_of_document(plan), state or State(), {"values": values}, NOW)


def test_the_evidence_is_the_sum_of_what_was_posted() -> None:
    plan = document(boundaries="given", thresholds={"accept": -1e6, "reject": 1e6})
    values = np.random.default_rng(1).normal(0.0, 3.0, 5000).tolist()
    whole = posted(plan, values)
    assert whole.log_likelihood_ratio == pytest.approx(float(sum(map(mpf, values), mpf(0))), rel=1e-14)
    state = State()
    for i in range(0, 5000, 7):
        state = posted(plan, values[i : i + 7], state)
    assert state == whole
    assert (whole.sample_number, whole.total.value) == (5000, whole.log_likelihood_ratio)


def test_the_first_crossing_decides() -> None:
    plan = document()
    state = posted(plan, [1.5, 1.0, 0.4, 0.2, -9.0])
    assert (state.decision, state.sample_number, state.overrun) == ("reject", 4, 1)
    assert posted(plan, [math.log(0.10)]).decision == "accept"
    assert posted(plan, [0.12, -0.4]).decision == "continue"


def test_strict_limits_keep_both_risks_under_any_model() -> None:
    """All 3**7 streams of a three-valued model, each weighed by its exact chance; the bound is Ville's (1939)."""
    under0 = [Fraction(2, 10), Fraction(3, 10), Fraction(5, 10)]
    under1 = [Fraction(6, 10), Fraction(3, 10), Fraction(1, 10)]
    increments = [math.log(q / p) for p, q in zip(under0, under1, strict=True)]
    procedure = procedure_of_document(document(alpha=0.2, beta=0.2))
    rejected = accepted = Fraction(0)
    for stream in itertools.product(range(3), repeat=7):
        state = observe(procedure, State(), {"values": [increments[i] for i in stream]}, NOW)
        if state.decision == "reject":
            rejected += math.prod(under0[i] for i in stream)
        if state.decision == "accept":
            accepted += math.prod(under1[i] for i in stream)
    assert Fraction(1, 20) < rejected <= Fraction(2, 10)
    assert Fraction(1, 20) < accepted <= Fraction(2, 10)


def test_only_bounds_are_claimed_and_none_of_forced_decisions() -> None:
    assert attained(document()) == {"alpha": 0.05, "beta": 0.1}
    given = document(boundaries="given", thresholds={"accept": -2.0, "reject": 4.0})
    assert attained(given) == {"alpha": pytest.approx(math.exp(-4), rel=1e-11), "beta": pytest.approx(math.exp(-2))}
    far = document(boundaries="given", thresholds={"accept": -1e6, "reject": 1e6})
    assert attained(far)["alpha"] > 0.0
    assert attained(document(truncation={"sample_number": 30})) is None


def test_the_truncation_decides_by_the_sign_of_the_sum() -> None:
    plan = document(truncation={"sample_number": 2})
    for values, decision in (([1.0, -0.5], "reject"), ([1.0, -1.0], "accept"), ([0.5, -1.0], "accept")):
        state = posted(plan, values)
        assert state.decided is not None
        assert (state.decision, state.decided.cause) == (decision, "truncation")


def test_the_outlook_has_ways_and_room_but_expects_nothing() -> None:
    plan = document(truncation={"sample_number": 30})
    outlook = outlook_of(plan, posted(plan, [0.5, 0.25]))
    assert outlook.ways.accept is not None
    assert outlook.ways.reject is not None
    assert outlook.ways.accept.words == "an increment of at most -3.05259"
    assert outlook.ways.reject.words == "an increment of at least 2.24573"
    assert outlook.room is not None
    assert outlook.room.sample_number == 28
    assert (outlook.expected, outlook.estimate) == ((), None)


def test_the_region_is_a_strip_that_can_be_drawn() -> None:
    points = region_points(procedure_of_document(document()), 12.0)
    assert {(point.accept, point.reject) for point in points} == {(math.log(0.10), math.log(20.0))}


@pytest.mark.parametrize("at", [[], [0.5]])
def test_exact_figures_need_a_model(at: list[float]) -> None:
    with pytest.raises(InvalidQuestion, match="no exact figures"):
        promise_of(document(), at)
    with pytest.raises(InvalidQuestion, match="weighed by exact figures"):
        suggested_truncation(SCORE, 0.05)


@pytest.mark.parametrize(
    ("change", "pointers"),
    [
        ({"h0": 0.0, "h1": 1.0}, ["/h0", "/h1"]),
        ({"boundaries": "wald"}, ["/boundaries"]),
        ({"boundaries": "calibrated"}, ["/boundaries"]),
        ({"boundaries": "table", "table": [{"sample_number": 3, "accept": 0, "reject": 1}]}, ["/boundaries"]),
        ({"boundaries": "loose"}, ["/boundaries"]),
        ({"alpha": None}, ["/alpha"]),
        ({"known": {"sigma": 1.0}}, ["/known/sigma"]),
        ({"truncation": {"exposure": 2.0}}, ["/truncation/exposure", "/truncation/sample_number"]),
        ({"boundaries": "given"}, ["/thresholds"]),
    ],
)
def test_what_only_a_model_could_promise_is_refused(change: dict[str, Any], pointers: list[str]) -> None:
    with pytest.raises(InvalidPlan) as caught:
        document(**change)
    assert [fault.pointer for fault in caught.value.faults] == pointers


def test_a_score_is_compared_with_no_other_family() -> None:
    normal = {"family": "normal", "h0": 0.0, "h1": 1.0, "alpha": 0.05, "beta": 0.1, "known": {"sigma": 1.0}}
    with pytest.raises(InvalidPlan) as caught:
        checked_candidates([normal, SCORE])
    assert caught.value.faults[0].pointer == "/candidates/1/family"


@pytest.mark.parametrize("value", [math.inf, -math.inf, math.nan, 1e101])
def test_an_increment_is_a_finite_number(value: float) -> None:
    with pytest.raises(InvalidObservations) as caught:
        posted(document(), [0.1, value])
    assert [fault.pointer for fault in caught.value.faults] == ["/values/1"]
