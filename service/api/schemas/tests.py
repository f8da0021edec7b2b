"""Tests and their state."""

import math
from datetime import datetime
from typing import Annotated, Any

from pydantic import ConfigDict, Field

from service.api.schemas.common import Answer, Form, optional, shown_as
from service.api.schemas.plans import ThresholdsOut
from service.domain.anytime import ConfidenceSequence, always_valid_p_value, confidence_at
from service.domain.disposing import Disposition
from service.domain.families import Family
from service.domain.families.base import Way
from service.domain.observing import direction_of_rejection
from service.domain.outlook import Ways, ways_of
from service.domain.plan import Plan
from service.domain.procedure import Procedure, procedure_of
from service.domain.sequential_test import SequentialTest, Subject, SubjectKind
from service.domain.state import State
from service.ingest.commands import Posted
from service.web.fields import Name, Text

EXAMPLE: dict[str, Any] = {
    "key": "lot-2041",
    "plan": "seal-leak",
    "subject": {"kind": "lot", "name": "2041/B"},
    "labels": {"line": "3"},
}


STATE: dict[str, Any] = {
    **EXAMPLE,
    "decision": "accept",
    "log_likelihood_ratio": -2.2874443153037967,
    "thresholds": {"accept": -2.251291798606495, "reject": 2.8903717578961645},
    "always_valid_p_value": 1.0,
    "confidence_sequence": None,
    "sample_number": 24,
    "observations": 24,
    "exposure": None,
    "total": 0,
    "decided": {
        "sample_number": 24,
        "exposure": None,
        "at": "2031-05-04T09:30:00Z",
        "cause": "boundary",
        "direction": None,
    },
    "outlook": None,
    "overrun": 1,
    "corrections": 0,
    "voided": 0,
    "decision_changed": False,
    "corrected_after_decision": False,
    "disposition": None,
    "status": "open",
    "version": 2,
    "registered_at": "2031-05-04T09:00:00Z",
    "updated_at": "2031-05-04T09:30:00Z",
}


class SubjectForm(Form):
    """What is tested."""

    kind: SubjectKind
    name: Text

    def subject(self) -> Subject:
        """The domain's value."""
        return Subject(self.kind, self.name)


class TestForm(Form):
    """The registration of a test."""

    __test__ = False
    model_config = ConfigDict(json_schema_extra={"examples": [EXAMPLE]})

    key: Name
    plan: Name
    subject: SubjectForm
    labels: Annotated[dict[Name, Text], Field(max_length=20)] = Field(default_factory=dict)


class SubjectOut(Answer):
    """What is tested."""

    kind: SubjectKind
    name: str


class DecidedOut(Answer):
    """The moment of the decision."""

    sample_number: int
    exposure: float | None
    at: datetime
    cause: str
    direction: str | None = Field(description="Of a two-sided plan's rejection: above or below h0; null for others.")


class ConfidenceOut(Answer):
    """Limits of the parameter at this moment; null where they are those of its range at infinity."""

    level: float
    lower: float | None
    upper: float | None

    @classmethod
    def of(cls, sequence: ConfidenceSequence | None, index: int) -> "ConfidenceOut | None":
        """From one point of the domain's confidence sequence."""
        if sequence is None:
            return None
        lower, upper = float(sequence.lower[index]), float(sequence.upper[index])
        ends = (end if math.isfinite(end) else None for end in (lower, upper))
        return cls(**dict(zip(("lower", "upper"), ends, strict=True)), level=sequence.level)


class WaysOut(Answer):
    """The shortest way to each decision in words; null where there is none."""

    accept: str | None
    reject: str | None
    reject_below: str | None = Field(description="To the lower limit of a two-sided plan; null for others.")

    @classmethod
    def of(cls, ways: Ways) -> "WaysOut":
        """From the domain's ways."""
        return cls(accept=_words(ways.accept), reject=_words(ways.reject), reject_below=_words(ways.reject_below))


class DispositionOut(Answer):
    """What was finally done with the subject."""

    disposition: str
    reason: str
    deviates: bool = Field(description="True where it does not follow from the decision.")
    deviation_reason: str | None
    by: str
    at: datetime

    @classmethod
    def of(cls, disposition: Disposition) -> "DispositionOut":
        """From the domain's disposition."""
        return cls(
            disposition=disposition.verdict,
            reason=disposition.reason,
            deviates=disposition.deviates,
            deviation_reason=disposition.deviation_reason,
            by=disposition.by,
            at=disposition.at,
        )


class TestOut(Answer):
    """A test and where it stands."""

    __test__ = False
    model_config = shown_as(STATE)

    key: str
    plan: str
    subject: SubjectOut
    labels: dict[str, str]
    decision: str
    log_likelihood_ratio: float
    thresholds: ThresholdsOut | None
    always_valid_p_value: float | None = Field(
        description="For any moment: under H0 it is ever at or below a with probability at most a. Null for "
        "generalised plans."
    )
    confidence_sequence: ConfidenceOut | None = Field(
        description="Limits that hold at all moments together; null for plans without a prior."
    )
    sample_number: int
    observations: int = Field(description="Observations counted so far, whatever each of them adds.")
    exposure: float | None
    total: int | float
    decided: DecidedOut | None
    outlook: WaysOut | None = Field(description="The least that is still needed; null once decided.")
    overrun: int
    corrections: int = Field(description="How many were made.")
    voided: int = Field(description="Observations that corrections took out.")
    decision_changed: bool = Field(description="True once a correction has made the decision another.")
    corrected_after_decision: bool = Field(description="True once a decided test was corrected.")
    disposition: DispositionOut | None
    status: str
    version: int
    registered_at: datetime
    updated_at: datetime

    @classmethod
    def of(cls, test: SequentialTest, plan: Plan) -> "TestOut":
        """From the domain's test and its plan."""
        return cls(**members(test, plan))


class PostedOut(TestOut):
    """The state right after a submission, with the sequences that its observations were given."""

    model_config = shown_as({**STATE, "first_sequence": 1, "last_sequence": 25})

    first_sequence: int
    last_sequence: int

    @classmethod
    def after(cls, posted: Posted) -> "PostedOut":
        """From the outcome of a submission."""
        return cls(
            **members(posted.test, posted.plan),
            first_sequence=posted.first_sequence,
            last_sequence=posted.last_sequence,
        )


class TestsOut(Answer):
    """A page of tests, by key."""

    __test__ = False
    model_config = shown_as({"items": [STATE], "next_cursor": None})

    items: list[TestOut]
    next_cursor: str | None


def total_of(family: Family, value: float) -> int | float:
    """A total in its natural unit: a whole number where the family counts."""
    return int(value) if family.span.is_integer else value


def members(test: SequentialTest, plan: Plan) -> dict[str, Any]:
    """The members of a test and where it stands."""
    procedure, state = procedure_of(plan), test.state
    return {
        "key": test.key,
        "plan": test.plan,
        "subject": SubjectOut.model_validate(test.subject),
        "labels": dict(test.labels),
        "decision": state.decision,
        "log_likelihood_ratio": state.log_likelihood_ratio,
        "thresholds": optional(ThresholdsOut, procedure.thresholds),
        "always_valid_p_value": always_valid_p_value(procedure, state.log_likelihood_ratio),
        "confidence_sequence": ConfidenceOut.of(confidence_at(procedure, state), 0),
        "sample_number": state.sample_number,
        "observations": state.counted,
        "exposure": state.exposure.value if procedure.family.has_exposure else None,
        "total": total_of(procedure.family, state.total.value),
        "decided": _decided(procedure, state),
        "outlook": None if state.is_decided else WaysOut.of(ways_of(procedure, state)),
        "overrun": state.overrun,
        "corrections": test.corrections,
        "voided": state.voided,
        "decision_changed": test.decision_changed,
        "corrected_after_decision": test.corrected_after_decision,
        "disposition": None if test.disposition is None else DispositionOut.of(test.disposition),
        "status": test.status,
        "version": test.version,
        "registered_at": test.registered_at,
        "updated_at": test.updated_at,
    }


def _decided(procedure: Procedure, state: State) -> DecidedOut | None:
    decided = state.decided
    if decided is None:
        return None
    return DecidedOut(
        sample_number=decided.sample_number,
        exposure=decided.exposure,
        at=decided.at,
        cause=decided.cause,
        direction=direction_of_rejection(procedure, state),
    )


def _words(way: Way | None) -> str | None:
    return None if way is None else way.words
