"""Whether a stream of observations looks like what its plan supposes."""

from typing import Any

from pydantic import Field

from service.api.schemas.common import Answer, shown_as
from service.domain.assumptions import Assumptions
from service.domain.checks import Check
from service.domain.sequential_test import SequentialTest

RUNS: dict[str, Any] = {
    "name": "runs",
    "supposition": "independence",
    "method": "Wald-Wolfowitz runs test, exact",
    "figure": 5.0,
    "expected": 9.64,
    "p_value": 0.0079,
    "adjusted_p_value": 0.016,
    "sentence": "5 runs of like results, where 9.64 are expected: unusual (p = 0.0079), as when like follows like.",
}

ASSUMPTIONS: dict[str, Any] = {
    "key": "lot-2041",
    "family": "bernoulli",
    "decision": "continue",
    "affects_decision": False,
    "observations": 25,
    "overrun": 0,
    "first_sequence": 1,
    "last_sequence": 25,
    "checks": [RUNS],
    "checks_made": 1,
    "smallest_adjusted_p_value": 0.016,
    "summary": "2 checks made, 1 with a p-value below 0.05.",
    "notes": ["These checks have no effect on the decision."],
}


class CheckOut(Answer):
    """One check; figure and p-values are null where it could not be made, and the sentence says why."""

    name: str
    supposition: str = Field(description="independence, steadiness, dispersion, spread or shape.")
    method: str
    figure: float | None
    expected: float | None = Field(description="Of the figure when the supposition holds; null where no number is.")
    p_value: float | None = Field(description="Two-sided.")
    adjusted_p_value: float | None = Field(description="Holm's, for the number of checks made.")
    sentence: str

    @classmethod
    def of(cls, check: Check, adjusted: float | None) -> "CheckOut":
        """From the domain's check."""
        found = check.found
        return cls(
            name=check.name,
            supposition=check.supposition,
            method=check.method,
            figure=None if found is None else found.figure,
            expected=None if found is None else found.expected,
            p_value=None if found is None else found.p_value,
            adjusted_p_value=adjusted,
            sentence=check.sentence,
        )


class AssumptionsOut(Answer):
    """What the observations say about the plan's suppositions; it never changes the decision."""

    model_config = shown_as(ASSUMPTIONS)

    key: str
    family: str
    decision: str
    affects_decision: bool = Field(description="Always false.")
    observations: int = Field(description="Those looked at: counted ones and overrun together.")
    overrun: int = Field(description="How many of them came after the decision.")
    first_sequence: int | None
    last_sequence: int | None
    checks: list[CheckOut]
    checks_made: int
    smallest_adjusted_p_value: float | None
    summary: str
    notes: list[str]

    @classmethod
    def of(cls, found: Assumptions, family: str, test: SequentialTest) -> "AssumptionsOut":
        """From the domain's assumptions."""
        return cls(
            key=test.key,
            family=family,
            decision=test.state.decision,
            affects_decision=False,
            observations=found.observations,
            overrun=found.overrun,
            first_sequence=found.first_sequence,
            last_sequence=found.last_sequence,
            checks=[CheckOut.of(check, p) for check, p in zip(found.checks, found.adjusted, strict=True)],
            checks_made=found.made,
            smallest_adjusted_p_value=found.smallest_adjusted,
            summary=found.summary,
            notes=list(found.notes),
        )
