"""The walk for drawing: the same however it was posted, read and kept, and true to what was observed."""

import json
from collections.abc import Iterator
from dataclasses import replace
from functools import reduce
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from service.domain import gathering
from service.domain import path as walking
from service.domain.checking import checked_content
from service.domain.gathering import Gathered, alone, gathered
from service.domain.observing import observe
from service.domain.path import Path, begun, gone_on, path_of, thinned
from service.domain.procedure import Procedure, procedure_of_document
from service.domain.state import Decision, State
from tests.domain.test_observing import NOW

RISKS = {"alpha": 0.001, "beta": 0.001}
PLANS: dict[str, dict[str, Any]] = {
    "bernoulli": {"family": "bernoulli", "h0": 0.3, "h1": 0.4},
    "poisson": {"family": "poisson", "h0": 1.0, "h1": 1.3},
    "exponential": {"family": "exponential", "h0": 120.0, "h1": 90.0},
    "normal": {"family": "normal", "h0": 10.0, "h1": 10.2, "known": {"sigma": 0.7}},
    "invariant": {"family": "normal", "statistic": "invariant", "h0": 0.0, "h1": 0.3, "known": {"reference": 10.0}},
}


def an_observation(kind: str) -> st.SearchStrategy[dict[str, Any]]:
    if kind == "bernoulli":
        return st.fixed_dictionaries({"value": st.integers(0, 1)})
    if kind == "poisson":
        return st.fixed_dictionaries({"value": st.integers(0, 4), "exposure": st.floats(0.1, 3.0)})
    if kind == "exponential":
        return st.fixed_dictionaries({"time": st.floats(0.1, 300.0), "failed": st.booleans()})
    return st.fixed_dictionaries({"value": st.floats(8.0, 12.0)})


def body(observations: list[dict[str, Any]], *, is_plain: bool) -> str:
    if is_plain and all(each.keys() == {"value"} for each in observations):
        return json.dumps({"values": [each["value"] for each in observations]})
    return json.dumps({"observations": observations})


@st.composite
def logs(draw: st.DrawFn) -> tuple[str, list[tuple[int, dict[str, Any]]], list[tuple[int, str]]]:
    """A plan, what counts of its log with the sequences, and the same in submissions with gaps for what is voided."""
    kind = draw(st.sampled_from(sorted(PLANS)))
    posted = draw(st.lists(an_observation(kind), min_size=1, max_size=70))
    voided = draw(st.sets(st.integers(1, len(posted)), max_size=min(5, len(posted) - 1)))
    left = [(i, each) for i, each in enumerate(posted, start=1) if i not in voided]
    cuts = draw(st.sets(st.integers(1, len(posted)), max_size=len(posted))) | voided | {i + 1 for i in voided}
    bodies, held = list[tuple[int, str]](), list[tuple[int, dict[str, Any]]]()
    for i, each in [*left, (len(posted) + 1, {})]:
        if held and (not each or i in cuts):
            bodies.append((held[0][0], body([one for _, one in held], is_plain=draw(st.booleans()))))
            held = []
        held.append((i, each))
    return kind, left, bodies


def compiled(kind: str) -> Procedure:
    return procedure_of_document(checked_content({**PLANS[kind], **RISKS}))


def observed_one_by_one(procedure: Procedure, left: list[tuple[int, dict[str, Any]]]) -> Iterator[tuple[int, State]]:
    state = State()
    for sequence, each in left:
        state = observe(procedure, replace(state, sequence=sequence - 1), {"observations": [each]}, NOW)
        yield sequence, state
        if state.is_decided:
            return


def columns(path: Path) -> list[list[float]]:
    return [column.tolist() for column in vars(path).values()]


@settings(max_examples=80, deadline=None)
@given(logs(), st.integers(4, 80), st.data())
def test_any_split_gives_the_path_of_what_was_observed_one_by_one(
    case: tuple[str, list[tuple[int, dict[str, Any]]], list[tuple[int, str]]], points: int, data: st.DataObject
) -> None:
    """Whole, to the last bit that of the states one by one; thinned, the same walked at once or gone on with."""
    kind, left, bodies = case
    procedure = compiled(kind)
    whole = path_of(procedure, gathered(bodies), 1000)
    states = list(observed_one_by_one(procedure, left))
    assert whole.sequence.tolist() == [0, *(sequence for sequence, _ in states)]
    assert whole.log_likelihood_ratio.tolist()[1:] == [state.log_likelihood_ratio for _, state in states]
    assert whole.total.tolist()[1:] == [state.total.value for _, state in states]
    assert whole.sample_number.tolist()[1:] == [state.sample_number for _, state in states]

    thin = path_of(procedure, gathered(bodies), points)
    assert columns(thin) == columns(thinned(whole, points))
    cut = data.draw(st.integers(0, len(bodies)))
    kept = data.draw(st.integers(points, 100))
    walked = gone_on(procedure, begun(procedure), gathered(bodies[:cut]), kept)
    walked = gone_on(procedure, walked, gathered(bodies[max(0, cut - 1) :]), kept)
    assert columns(thinned(walked.path, points)) == columns(thin)


@settings(max_examples=80, deadline=None)
@given(st.lists(st.integers(0, 1), min_size=1, max_size=300), st.integers(4, 60))
def test_thinning_keeps_the_ends_and_the_extremes_of_every_stretch(values: list[int], points: int) -> None:
    procedure = compiled("bernoulli")
    whole = path_of(procedure, [alone({"values": values})], 1000)
    thin = thinned(whole, points)
    assert len(thin.sequence) <= points
    assert set(thin.sequence) <= set(whole.sequence)
    assert (thin.sequence[0], thin.sequence[-1]) == (0, whole.sequence[-1])
    evidence = whole.log_likelihood_ratio.tolist()
    assert min(thin.log_likelihood_ratio) == min(evidence)
    assert max(thin.log_likelihood_ratio) == max(evidence)
    if len(evidence) <= points:
        assert columns(thin) == columns(whole)
        return
    width = next(2**p for p in range(2, 20) if 2 * -(-(len(evidence) - 1) // 2**p) + 2 <= points)
    shown = dict(zip(thin.sequence.tolist(), thin.log_likelihood_ratio.tolist(), strict=True))
    for begin in range(1, len(evidence), width):
        stretch = evidence[begin : begin + width]
        kept = [shown[i] for i in range(begin, begin + len(stretch)) if i in shown]
        assert (min(kept), max(kept)) == (min(stretch), max(stretch))


def test_a_walk_ends_where_it_decides_and_does_not_go_on() -> None:
    procedure = compiled("bernoulli")
    walked = gone_on(procedure, begun(procedure), [alone({"values": [1] * 60})], 4)
    state = observe(procedure, State(), {"values": [1] * 60}, NOW)
    assert state.decided is not None
    assert walked.state.decision is Decision.REJECT
    assert walked.path.sequence[-1] == state.decided.sequence < 60
    assert walked.path.log_likelihood_ratio[-1] == state.log_likelihood_ratio
    more = Gathered(np.arange(61, 64), {"values": [0, 0, 0]})
    assert gone_on(procedure, walked, [more], 4) is walked


def test_long_walks_are_thinned_on_their_way_without_a_difference(monkeypatch: pytest.MonkeyPatch) -> None:
    document = checked_content({**PLANS["normal"], "alpha": 1e-30, "beta": 1e-30})
    procedure = procedure_of_document(document)
    values = np.random.default_rng(3).normal(10.1, 0.2, 3000).tolist()
    bodies = [(1 + i, json.dumps({"values": values[i : i + 7]})) for i in range(0, 3000, 7)]
    whole = path_of(procedure, gathered(bodies), 5000)
    assert len(whole.sequence) == 3001
    monkeypatch.setattr(walking, "HELD", 100)
    monkeypatch.setattr(gathering, "MOST_CHARACTERS", 400)
    assert columns(path_of(procedure, gathered(bodies), 60)) == columns(thinned(whole, 60))
    step = reduce(lambda walked, one: gone_on(procedure, walked, gathered([one]), 200), bodies, begun(procedure))
    assert columns(thinned(step.path, 60)) == columns(thinned(whole, 60))
