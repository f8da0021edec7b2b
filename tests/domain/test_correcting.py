"""A corrected log says what a log without the mistake would have said, whatever the family and the split."""

import json
from collections.abc import Iterable
from dataclasses import replace
from datetime import timedelta
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from service.domain.correcting import Action, Correction, Piece, pieces, replayed, settled
from service.domain.errors import InvalidCorrection
from service.domain.observing import observe
from service.domain.state import Decision, State
from tests.domain.test_observing import NOW, procedure

PLANS: dict[str, dict[str, Any]] = {
    "bernoulli": {"family": "bernoulli", "h0": 0.1, "h1": 0.4},
    "exponential": {"family": "exponential", "h0": 200.0, "h1": 100.0},
    "normal": {"family": "normal", "h0": 10.0, "h1": 10.5, "known": {"sigma": 0.7}},
}
RULES = {"alpha": 0.1, "beta": 0.1, "boundaries": "wald", "statistic": "simple"}
LATER = NOW + timedelta(days=1)


def an_observation(family: str) -> st.SearchStrategy[dict[str, Any]]:
    if family == "bernoulli":
        return st.fixed_dictionaries({"value": st.integers(0, 1)})
    if family == "exponential":
        return st.fixed_dictionaries({"time": st.floats(0.1, 90.0), "failed": st.booleans()})
    return st.fixed_dictionaries({"value": st.floats(8.0, 12.0)})


def a_correction(at: int, replacement: dict[str, Any] | None) -> Correction:
    action = Action.VOID if replacement is None else Action.REPLACE
    text = None if replacement is None else json.dumps(replacement)
    return Correction(
        "lot", at, action, text, "typo", "d", LATER, "me", None, 2, before=Decision.CONTINUE, state=State()
    )


@st.composite
def corrected_logs(draw: st.DrawFn) -> tuple[str, list[list[dict[str, Any]]], dict[int, Correction]]:
    family = draw(st.sampled_from(sorted(PLANS)))
    log = draw(st.lists(st.lists(an_observation(family), min_size=1, max_size=5), min_size=1, max_size=6))
    count = sum(map(len, log))
    made = draw(st.dictionaries(st.integers(1, count), st.none() | an_observation(family), max_size=4))
    return family, log, {at: a_correction(at, replacement) for at, replacement in made.items()}


@given(corrected_logs())
@settings(max_examples=150, deadline=None)
def test_the_corrected_log_is_that_of_the_observations_that_are_left(
    case: tuple[str, list[list[dict[str, Any]]], dict[int, Correction]],
) -> None:
    family, log, corrections = case
    plan = procedure({**PLANS[family], **RULES})
    submissions, first = [], 1
    for posted in log:
        submissions.append((first, json.dumps({"observations": posted})))
        first += len(posted)

    def read(after: int, through: int) -> Iterable[Piece]:
        assert (after, through) == (0, first - 1)
        return [piece for at, body in submissions for piece in pieces(at, body, NOW, corrections)]

    state = replayed(plan, State(), read, first - 1)

    left: list[dict[str, Any]] = []
    numbers: list[int] = []
    for number, observation in enumerate((each for posted in log for each in posted), start=1):
        correction = corrections.get(number)
        if correction is None or correction.replacement is not None:
            left.append(observation if correction is None else json.loads(correction.replacement or ""))
            numbers.append(number)
    clean = observe(plan, State(), {"observations": left}, NOW) if left else State()
    decided = clean.decided and replace(clean.decided, sequence=numbers[clean.decided.sequence - 1])
    assert state == replace(clean, sequence=first - 1, voided=first - 1 - len(left), decided=decided)
    assert state.counted == len(left) - clean.overrun


def test_bare_values_are_cut_around_what_is_corrected() -> None:
    made = {2: a_correction(2, None), 4: a_correction(4, {"value": 1}), 9: a_correction(9, None)}
    assert list(pieces(1, '{"values": [0, 1, 0, 0, 1]}', NOW, made)) == [
        (1, '{"values": [0]}', NOW),
        (3, '{"values": [0]}', NOW),
        (4, '{"observations": [{"value": 1}]}', NOW),
        (5, '{"values": [1]}', NOW),
    ]
    assert list(pieces(3, '{"values":[0, 1]}', NOW, {})) == [(3, '{"values":[0, 1]}', NOW)]


def test_a_decision_that_a_correction_brings_about_is_of_its_moment() -> None:
    plan = procedure({**PLANS["bernoulli"], **RULES})
    rejected = observe(plan, State(), {"values": [1, 1, 1]}, NOW)
    assert rejected.decided is not None
    assert settled(State(), rejected, LATER).decided == replace(rejected.decided, at=LATER)
    stood = replace(rejected, decided=replace(rejected.decided, at=NOW - timedelta(days=3)))
    assert settled(stood, rejected, LATER) == stood
    assert settled(rejected, State(), LATER) == State()


def test_a_correction_after_which_a_row_of_a_table_would_be_passed_over_is_refused() -> None:
    table = [{"sample_number": 10, "accept": 0, "reject": 3}, {"sample_number": 20, "accept": 2, "reject": 3}]
    plan = procedure({"family": "bernoulli", "h0": 0.1, "h1": 0.4, **RULES, "boundaries": "table", "table": table})
    body = '{"observations": [{"value": 1, "size": 10}, {"value": 0, "size": 10}]}'
    made = {1: a_correction(1, {"value": 1, "size": 5})}
    with pytest.raises(InvalidCorrection) as refused:
        replayed(plan, State(), lambda _after, _through: pieces(1, body, NOW, made), 2)
    assert "from observation 2 on" in refused.value.faults[0].detail
