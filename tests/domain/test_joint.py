"""Joint decisions and risks against plain enumeration in fractions."""

import itertools
from fractions import Fraction

import pytest

from service.domain.checking import checked_content
from service.domain.joint import Basis, joint_of, risks_in
from service.domain.plan import Plan
from service.domain.sequential_test import SequentialTest, Status, Subject, SubjectKind
from service.domain.state import Decision, State
from tests.domain.test_observing import NOW

BARE = {"family": "bernoulli", "h0": 0.01, "h1": 0.1, "boundaries": "wald", "statistic": "simple"}


def a_plan(alpha: float, beta: float, **more: object) -> Plan:
    return Plan("p", checked_content({**BARE, "alpha": alpha, "beta": beta, **more}), "", NOW, "me")


def a_test(decision: Decision) -> SequentialTest:
    subject = Subject(SubjectKind.LOT, "x")
    return SequentialTest("t", "p", subject, {}, Status.OPEN, 1, NOW, "me", NOW, State(decision=decision))


@pytest.mark.parametrize("decisions", list(itertools.product(Decision, repeat=3)))
def test_one_rejection_rejects_and_all_must_accept(decisions: tuple[Decision, ...]) -> None:
    joint = joint_of([(a_test(decision), a_plan(0.05, 0.1)) for decision in decisions]).decision
    names = {str(decision) for decision in decisions}
    assert joint == ("reject" if "reject" in names else "accept" if names == {"accept"} else "continue")


def test_the_joint_risks_are_those_of_all_outcomes_counted() -> None:
    """Each of the eight outcomes of three independent tests of a good lot, with its probability."""
    risks = [(Fraction(1, 20), Fraction(1, 10)), (Fraction(1, 100), Fraction(1, 20)), (Fraction(1, 10), Fraction(1, 5))]
    rejected = Fraction(0)
    for errs in itertools.product([True, False], repeat=3):
        probability = Fraction(1)
        for is_wrong, (alpha, _) in zip(errs, risks, strict=True):
            probability *= alpha if is_wrong else 1 - alpha
        rejected += probability if any(errs) else 0
    joint = joint_of([(a_test(Decision.CONTINUE), a_plan(float(alpha), float(beta))) for alpha, beta in risks])
    assert joint.independent == pytest.approx(float(rejected), rel=1e-14)
    assert joint.bound == pytest.approx(0.16, rel=1e-14)
    assert joint.consumers == 0.2
    assert [each.basis for each in joint.risks] == [Basis.STATED] * 3


def test_attained_risks_come_before_stated_ones_and_unknown_ones_make_the_joint_unknown() -> None:
    calibrated = a_plan(0.05, 0.1, boundaries="calibrated")
    attained = calibrated.content["attained"]
    assert risks_in(calibrated).alpha == attained["alpha"] != 0.05
    joint = joint_of([(a_test(Decision.ACCEPT), calibrated), (a_test(Decision.ACCEPT), a_plan(0.01, 0.01))])
    assert [each.basis for each in joint.risks] == [Basis.ATTAINED, Basis.STATED]
    assert joint.consumers == attained["beta"]
    silent = Plan("p", '{"family": "score", "boundaries": "given"}', "", NOW, "me")
    nothing = joint_of([(a_test(Decision.REJECT), silent), (a_test(Decision.ACCEPT), calibrated)])
    assert (nothing.decision, nothing.independent, nothing.bound, nothing.consumers) == ("reject", None, None, None)
