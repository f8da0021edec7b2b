"""A lot or an experiment with all its tests."""

from collections.abc import Sequence
from typing import Any

from pydantic import Field

from service.api.schemas.common import Answer, shown_as
from service.api.schemas.tests import DispositionOut, SubjectOut
from service.domain.joint import Joint
from service.domain.plan import Plan
from service.domain.sequential_test import SequentialTest

LOT: dict[str, Any] = {
    "subject": {"kind": "lot", "name": "2041/B"},
    "decision": "continue",
    "producers_risk": {"if_independent": 0.0975, "at_most": 0.1},
    "consumers_risk": 0.1,
    "tests": [
        {
            "key": f"lot-2041-{name}",
            "plan": f"seal-{name}",
            "decision": decision,
            "status": "open",
            "corrections": 0,
            "disposition": None,
            "alpha": 0.05,
            "beta": 0.1,
            "risks": "stated",
        }
        for name, decision in (("leak", "accept"), ("width", "continue"))
    ],
}


class JointProducersRiskOut(Answer):
    """The probability that a subject which is good in every characteristic is rejected by at least one test."""

    if_independent: float | None = Field(description="1 - prod(1 - alpha): exact where the tests are independent.")
    at_most: float | None = Field(description="Sum of the alphas (Boole): holds whatever their dependence.")


class CharacteristicOut(Answer):
    """One test of the subject, with the risks that the joint ones are made of."""

    key: str
    plan: str
    decision: str
    status: str
    corrections: int
    disposition: DispositionOut | None
    alpha: float | None
    beta: float | None
    risks: str = Field(description="attained: computed exactly and stored with the plan; stated: as the plan asks for.")


class SubjectStateOut(Answer):
    """The tests of one subject and their joint decision: reject when one rejects, accept when all accept."""

    model_config = shown_as(LOT)

    subject: SubjectOut
    decision: str
    producers_risk: JointProducersRiskOut
    consumers_risk: float | None = Field(
        description="The largest beta: bounds the acceptance of a subject that is bad in one characteristic or more."
    )
    tests: list[CharacteristicOut]

    @classmethod
    def of(cls, tests: Sequence[tuple[SequentialTest, Plan]], joint: Joint) -> "SubjectStateOut":
        """From the tests with their plans, and what they come to."""
        return cls(
            subject=SubjectOut.model_validate(tests[0][0].subject),
            decision=joint.decision,
            producers_risk=JointProducersRiskOut(if_independent=joint.independent, at_most=joint.bound),
            consumers_risk=joint.consumers,
            tests=[
                CharacteristicOut(
                    key=test.key,
                    plan=test.plan,
                    decision=test.state.decision,
                    status=test.status,
                    corrections=test.corrections,
                    disposition=None if test.disposition is None else DispositionOut.of(test.disposition),
                    alpha=risks.alpha,
                    beta=risks.beta,
                    risks=risks.basis,
                )
                for (test, _), risks in zip(tests, joint.risks, strict=True)
            ],
        )
