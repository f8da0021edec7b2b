"""Courses drawn at random: they are tests like any other, and fall out as often as the exact figures say."""

import math
from typing import Any

import numpy as np
import pytest

from service.domain.characteristics import promise_of
from service.domain.checking import checked_content
from service.domain.courses import MOST_OBSERVATIONS, Course, courses_of
from service.domain.errors import InvalidQuestion
from service.domain.families import FAMILIES, INVARIANT
from service.domain.procedure import Procedure, procedure_of_document
from service.domain.sampling import INVARIANT as INVARIANT_SAMPLERS
from service.domain.sampling import SAMPLERS
from service.domain.state import Decision

RISKS = {"alpha": 0.1, "beta": 0.1}
ARMS = {"sigma_a": 0.5, "sigma_b": 0.5}
CONTENTS: dict[str, dict[str, Any]] = {
    "bernoulli": {"h0": 0.1, "h1": 0.3},
    "poisson": {"h0": 1.0, "h1": 2.0},
    "exponential": {"h0": 900.0, "h1": 300.0},
    "normal": {"h0": 10.0, "h1": 10.3, "known": {"sigma": 0.5}},
    "lognormal": {"h0": 100.0, "h1": 70.0, "known": {"sigma": 0.5}},
    "negative_binomial": {"h0": 1.0, "h1": 2.0, "known": {"dispersion": 2.0}},
    "normal_variance": {"h0": 1.0, "h1": 1.6},
    "weibull": {"h0": 1000.0, "h1": 600.0, "known": {"shape": 2.0}},
    "paired": {"h0": 1.0, "h1": 3.0},
    "poisson_ratio": {"h0": 1.0, "h1": 0.4, "known": {"exposure_ratio": 2.0}},
    "normal_difference": {"h0": 0.0, "h1": 0.5, "known": ARMS},
}
COURSES, FEWER, SEED = 300, 100, 20_260


def procedure_with(family: str, **content: Any) -> Procedure:
    return procedure_of_document(document_with(family, **content))


def document_with(family: str, **content: Any) -> str:
    return checked_content({"family": family, **RISKS, **content})


def drawn(procedure: Procedure, parameter: float, number: int, seed: int = SEED) -> tuple[Course, ...]:
    return courses_of(procedure, parameter, np.random.default_rng(seed), number)


def test_every_family_with_a_model_can_be_drawn() -> None:
    with_model = {name for name, family in FAMILIES.items() if family.has_model}
    assert SAMPLERS.keys() == with_model
    assert INVARIANT_SAMPLERS.keys() == INVARIANT.keys()


@pytest.mark.parametrize("family", CONTENTS)
@pytest.mark.parametrize("under", ["h0", "h1"])
def test_courses_end_as_often_and_as_late_as_the_exact_figures_say(family: str, under: str) -> None:
    """Within 4.5 standard errors, which chance passes over once in 150,000 seeds."""
    document = document_with(family, **CONTENTS[family])
    parameter = CONTENTS[family][under]
    point = promise_of(document, [parameter]).points[0]
    courses = drawn(procedure_of_document(document), parameter, COURSES)
    accepted = sum(course.decision is Decision.ACCEPT for course in courses)
    assert all(course.decision is not Decision.CONTINUE for course in courses)
    chance = point.probability_of_acceptance
    assert abs(accepted - COURSES * chance) < 4.5 * math.sqrt(COURSES * chance * (1.0 - chance))
    spread = point.exposure or point.sample_number
    assert spread is not None
    has_exposure = procedure_of_document(document).family.has_exposure
    ends = [float((course.path.progress if has_exposure else course.path.sample_number)[-1]) for course in courses]
    assert abs(np.mean(ends) - spread.mean) < 4.5 * spread.standard_deviation / math.sqrt(COURSES)


@pytest.mark.parametrize("family", ["normal", "normal_difference", "normal_two_sample"])
def test_courses_of_an_invariant_plan_keep_its_risks(family: str) -> None:
    """Strict boundaries: each error happens at most as often as stated, within 4.5 standard errors."""
    procedure = procedure_with(family, h0=0.0, h1=1.2, statistic="invariant", boundaries="strict")
    most = FEWER * 0.1 + 4.5 * math.sqrt(FEWER * 0.1 * 0.9)
    for parameter, wrong, right in ((0.0, Decision.REJECT, Decision.ACCEPT), (1.2, Decision.ACCEPT, Decision.REJECT)):
        decisions = [course.decision for course in drawn(procedure, parameter, FEWER)]
        assert decisions.count(wrong) <= most
        assert decisions.count(wrong) + decisions.count(right) == FEWER


def test_two_arms_in_turn_and_a_table_are_drawn_too() -> None:
    arms = procedure_with("normal_two_sample", h0=0.0, h1=1.0, known=ARMS)
    assert {course.decision for course in drawn(arms, 1.0, 40)} <= {Decision.ACCEPT, Decision.REJECT}
    rows = [{"sample_number": 20, "accept": 0, "reject": 3}, {"sample_number": 40, "accept": 2, "reject": 3}]
    table = procedure_with("bernoulli", h0=0.02, h1=0.15, boundaries="table", table=rows)
    for course in drawn(table, 0.15, 40):
        number, total = int(course.path.sample_number[-1]), float(course.path.total[-1])
        assert number in {20, 40}
        assert (total >= 3) == (course.decision is Decision.REJECT)


def test_the_same_seed_gives_the_same_courses_and_another_does_not() -> None:
    procedure = procedure_with("normal", **CONTENTS["normal"])
    first, again, other = (drawn(procedure, 10.0, 3, seed) for seed in (7, 7, 8))
    for one, two in zip(first, again, strict=True):
        assert np.array_equal(one.path.total, two.path.total)
    assert not np.array_equal(first[0].path.total, other[0].path.total)


def test_a_course_that_goes_on_for_too_long_is_left_undecided() -> None:
    procedure = procedure_with("bernoulli", h0=1e-6, h1=2e-6)
    course = drawn(procedure, 1e-6, 1)[0]
    assert course.decision is Decision.CONTINUE
    assert course.path.sample_number[-1] == MOST_OBSERVATIONS


@pytest.mark.parametrize(
    ("family", "content", "parameter"),
    [
        ("score", {"boundaries": "strict"}, 0.0),
        ("poisson", {"h0": 1e12, "h1": 2e12}, 1e12),
        ("negative_binomial", {"h0": 1e12, "h1": 2e12, "known": {"dispersion": 3.0}}, 1e12),
        ("exponential", {"h0": 1e100, "h1": 1e99}, 1e100),
    ],
)
def test_what_no_test_could_observe_is_not_drawn(family: str, content: dict[str, Any], parameter: float) -> None:
    procedure = procedure_with(family, **content)
    with pytest.raises(InvalidQuestion, match="Nothing can be drawn"):
        drawn(procedure, parameter, 1)
