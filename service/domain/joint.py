"""
One subject with several characteristics, each under a test of its own: the joint decision and its risks. Pure.

Quantity: the probability that the tests together turn away a subject that is good in all characteristics, and that they
accept one that is bad in one of them. Method: the joint decision rejects when one test rejects and accepts when all
accept. So a good subject is turned away when at least one test errs: 1 - prod(1 - alpha_i) if the tests are
independent, and at most sum(alpha_i) however they depend on each other (Boole's inequality). A subject that is bad in
characteristic i is accepted only if test i accepts it, so with a probability of at most beta_i, whatever the other
characteristics are: the largest beta_i bounds it for every subject that is bad in one of them. Accuracy: rounding.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from enum import StrEnum

from service.domain.plan import Plan
from service.domain.sequential_test import SequentialTest
from service.domain.state import Decision


class Basis(StrEnum):
    """Where the risks of a plan come from: computed exactly and stored with it, or as it states them."""

    ATTAINED = "attained"
    STATED = "stated"


@dataclass(frozen=True)
class Risks:
    """The two risks of one plan; None where it promises none."""

    alpha: float | None
    beta: float | None
    basis: Basis


@dataclass(frozen=True)
class Joint:
    """
    What the tests of one subject come to together; risks are None where a test promises none.

    Attributes:
        independent: The joint producer's risk if the tests are independent.
        bound: The same, whatever their dependence.
        consumers: The joint consumer's risk, for a subject that is bad in one characteristic or more.
    """

    decision: Decision
    risks: tuple[Risks, ...]
    independent: float | None
    bound: float | None
    consumers: float | None


def joint_of(tests: Sequence[tuple[SequentialTest, Plan]]) -> Joint:
    """The joint decision of at least one test, and its risks."""
    risks = tuple(risks_in(plan) for _, plan in tests)
    alphas, betas = [each.alpha for each in risks], [each.beta for each in risks]
    known_alphas = [alpha for alpha in alphas if alpha is not None]
    known_betas = [beta for beta in betas if beta is not None]
    has_alphas, has_betas = len(known_alphas) == len(risks), len(known_betas) == len(risks)
    return Joint(
        decision=_decision([test.state.decision for test, _ in tests]),
        risks=risks,
        # 1 - prod(1 - alpha) without the loss of digits that small risks would suffer.
        independent=-math.expm1(sum(math.log1p(-alpha) for alpha in known_alphas)) if has_alphas else None,
        bound=min(1.0, math.fsum(known_alphas)) if has_alphas else None,
        consumers=max(known_betas) if has_betas else None,
    )


def risks_in(plan: Plan) -> Risks:
    """The attained risks where the plan knows them, else the stated ones."""
    attained = plan.content.get("attained")
    source = plan.content if attained is None else attained
    basis = Basis.STATED if attained is None else Basis.ATTAINED
    return Risks(source.get("alpha"), source.get("beta"), basis)


def _decision(decisions: Sequence[Decision]) -> Decision:
    if Decision.REJECT in decisions:
        return Decision.REJECT
    return Decision.ACCEPT if all(each is Decision.ACCEPT for each in decisions) else Decision.CONTINUE
