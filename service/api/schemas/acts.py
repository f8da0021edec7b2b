"""Corrections and dispositions: what people do to a test, with a reason."""

from typing import Any, Self

from pydantic import ConfigDict, Field, model_validator

from service.api.schemas.common import Form, shown_as
from service.api.schemas.observations import CorrectionOut, ObservationForm
from service.api.schemas.tests import STATE, TestOut, members
from service.domain.correcting import Action
from service.domain.disposing import Verdict
from service.ingest.commands import Corrected
from service.web.fields import Reason

CORRECTIONS: list[dict[str, Any]] = [
    {"sequence": 7, "action": "void", "reason": "Seal 7 was tested without its ring."},
    {"sequence": 9, "action": "replace", "observation": {"value": 0}, "reason": "Typed 1 for 0; see sheet 12."},
]
CORRECTION: dict[str, Any] = {
    "number": 4,
    "action": "void",
    "observation": None,
    "reason": "Seal 7 was tested without its ring.",
    "by": "inspector-4",
    "at": "2031-05-04T10:00:00Z",
}
DISPOSITIONS: list[dict[str, Any]] = [
    {"disposition": "accept", "reason": "Certificate 2041/B."},
    {
        "disposition": "concession",
        "reason": "For use in drains only.",
        "deviation_reason": "The customer takes the lot as it is; letter of 4 May.",
    },
]


class CorrectionForm(Form):
    """Void or replace one observation; a later correction of the same one takes the place of this."""

    model_config = ConfigDict(json_schema_extra={"examples": [*CORRECTIONS]})

    sequence: int = Field(strict=True, ge=1, le=2**53, description="Which observation.")
    action: Action
    observation: ObservationForm | None = Field(default=None, description="What counts in its place, for replace.")
    reason: Reason

    @model_validator(mode="after")
    def _fits_its_action(self) -> Self:
        if (self.observation is not None) != (self.action is Action.REPLACE):
            raise ValueError('give "observation" with the action replace, and with no other')
        return self


class DispositionForm(Form):
    """What was done with the subject; what does not follow from the decision needs a reason of its own for that."""

    model_config = ConfigDict(json_schema_extra={"examples": [*DISPOSITIONS]})

    disposition: Verdict
    reason: Reason
    deviation_reason: Reason | None = None


class CorrectedOut(TestOut):
    """The state right after a correction, and what the decision was before."""

    model_config = shown_as(
        {
            **STATE,
            "decision": "continue",
            "decided": None,
            "outlook": {"accept": "1 conforming unit", "reject": "3 nonconforming units", "reject_below": None},
            "sample_number": 23,
            "observations": 23,
            "overrun": 0,
            "corrections": 1,
            "voided": 1,
            "decision_changed": True,
            "corrected_after_decision": True,
            "version": 3,
            "sequence": 7,
            "correction": CORRECTION,
            "decision_before": "accept",
        }
    )

    sequence: int
    correction: CorrectionOut
    decision_before: str

    @classmethod
    def after(cls, corrected: Corrected) -> "CorrectedOut":
        """From the outcome of a correction."""
        return cls(
            **members(corrected.test, corrected.plan),
            sequence=corrected.correction.observation,
            correction=CorrectionOut.of(corrected.correction),
            decision_before=corrected.correction.before,
        )
