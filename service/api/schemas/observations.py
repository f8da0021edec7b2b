"""Observations: as posted, as logged, and as a path to draw."""

import json
from collections.abc import Mapping
from datetime import UTC, datetime
from typing import Annotated, Any, Literal, Self

from pydantic import ConfigDict, FailFast, Field, StrictBool, StringConstraints, model_validator

from service.api.schemas.common import Answer, Form, optional, shown_as
from service.api.schemas.plans import CONTENT as PLAN
from service.api.schemas.plans import PlanContentForm, ThresholdsOut
from service.api.schemas.tests import ConfidenceOut, total_of
from service.domain.anytime import ConfidenceSequence, always_valid_p_value, confidence_sequence
from service.domain.correcting import Correction
from service.domain.families import Family
from service.domain.gathering import alone
from service.domain.log import LoggedObservation, fields_of
from service.domain.path import Path, RegionPoint, path_of, region_points
from service.domain.procedure import Procedure
from service.domain.state import State
from service.web.fields import Moment, Number, Text

EXAMPLES: list[dict[str, Any]] = [
    {"values": [0, 0, 1]},
    {"observations": [{"value": 2, "size": 50, "unit": "tray-7", "observed_at": "2031-05-04T09:30:00Z"}]},
    {"observations": [{"time": 41.5, "failed": True}, {"time": 200.0, "failed": False}]},
    {"observations": [{"a": 0, "b": 1}, {"a": 1, "b": 1}]},
    {"observations": [{"arm": "a", "value": 10.1}, {"arm": "b", "value": 10.4}]},
    {"observations": [{"time": 900.0, "from": 650.0, "failed": False}]},
]


LOGGED: dict[str, Any] = {
    "sequence": 24,
    "value": 0,
    "size": 1,
    "unit": "seal-0024",
    "observed_at": "2031-05-04T09:29:58Z",
    "received_at": "2031-05-04T09:30:00Z",
    "submitted_by": "line-2-tester",
    "counted": True,
    "correction": None,
}

ANYTIME = {"always_valid_p_value": 1.0, "confidence_sequence": None}

PATH: dict[str, Any] = {
    "key": "lot-2041",
    "decision": "continue",
    "axis": "sample_number",
    "thresholds": {"accept": -2.251291798606495, "reject": 2.8903717578961645},
    "points": [
        {"sequence": 0, "sample_number": 0, "exposure": None, "total": 0, "log_likelihood_ratio": 0.0, **ANYTIME},
        {
            "sequence": 1,
            "sample_number": 1,
            "exposure": None,
            "total": 0,
            "log_likelihood_ratio": -0.0953101798043249,
            **ANYTIME,
        },
    ],
    "region": [
        {"sample_number": 1, "exposure": None, "accept": None, "reject": None, "reject_below": None},
        {"sample_number": 24, "exposure": None, "accept": 0, "reject": 3, "reject_below": None},
    ],
}


REHEARSAL: dict[str, Any] = {
    "log_likelihood_ratio": -0.0953101798043249,
    "sample_number": 1,
    "exposure": None,
    "total": 0,
    "cause": None,
    "overrun": 0,
    **{name: value for name, value in PATH.items() if name != "key"},
}


# Blanks around a serial number say nothing, and blanks alone are none.
Unit = Annotated[Text, StringConstraints(strip_whitespace=True)]


class ObservationForm(Form):
    """
    One observation. Which fields mean something depends on the family; absent ones are left out, not null.

    The defaults here are never used: what counts is which fields were sent.
    """

    value: Number = Field(default_factory=float, description="Result: 0 or 1, a count, or a measurement.")
    time: Number = Field(
        default_factory=float, description="Unit-time since the report before (exponential), or age reached (weibull)."
    )
    from_: Number = Field(
        alias="from", default_factory=float, description="Age from which it was watched (weibull), 0 when left out."
    )
    exposure: Number = Field(default_factory=float, description="Exposure of a count (poisson), 1 when left out.")
    size: Number = Field(default_factory=float, description="Units in the group (bernoulli), 1 when left out.")
    a: Number = Field(default_factory=float, description="Result in arm a, of families that compare two arms.")
    b: Number = Field(default_factory=float, description="Result in arm b.")
    arm: Literal["a", "b"] = Field(
        default="a", description="Whose result it is, where arms are measured one at a time."
    )
    failed: StrictBool = Field(
        default_factory=bool, description="Whether a failure ended the time (exponential, weibull)."
    )
    unit: Unit = Field(default_factory=str, description="Serial number; may be counted once in a test.")
    observed_at: Moment = Field(
        default_factory=lambda: datetime.min.replace(tzinfo=UTC),
        description="When it was observed, with its time zone (RFC 3339).",
    )


class ObservationsForm(Form):
    """A submission: either bare `values` or `observations` with more to say about each; the order is theirs."""

    model_config = ConfigDict(json_schema_extra={"examples": [*EXAMPLES]})

    # One fault is enough to refuse all; naming every bad element of a long list would take minutes.
    values: Annotated[list[Number], FailFast(), Field(min_length=1)] = Field(default_factory=list)
    observations: Annotated[list[ObservationForm], FailFast(), Field(min_length=1)] = Field(default_factory=list)

    @model_validator(mode="after")
    def _one_form(self) -> Self:
        if len(self.model_fields_set) != 1:
            raise ValueError('give either "values" or "observations"')
        return self


class RehearsalForm(Form):
    """Historical observations with a plan that is not stored."""

    model_config = ConfigDict(json_schema_extra={"examples": [{"plan": PLAN, "submission": EXAMPLES[0]}]})

    plan: PlanContentForm
    submission: ObservationsForm


class CorrectionOut(Answer):
    """A correction of an observation, beside what was posted."""

    number: int = Field(description="Its place in the history of the test.")
    action: str = Field(description="void or replace.")
    observation: dict[str, Any] | None = Field(description="What counts in its place; null where it is voided.")
    reason: str
    by: str
    at: datetime

    @classmethod
    def of(cls, correction: Correction) -> "CorrectionOut":
        """From the domain's correction."""
        return cls(
            number=correction.number,
            action=correction.action,
            observation=None if correction.replacement is None else json.loads(correction.replacement),
            reason=correction.reason,
            by=correction.actor,
            at=correction.received_at,
        )


class LoggedOut(Answer):
    """One observation of the log."""

    model_config = shown_as(LOGGED)

    sequence: int
    value: int | float | None = None
    time: int | float | None = None
    from_: int | float | None = Field(None, alias="from")
    exposure: int | float | None = None
    size: int | float | None = None
    a: int | float | None = None
    b: int | float | None = None
    arm: str | None = None
    failed: bool | None = None
    unit: str | None
    observed_at: str | None
    received_at: datetime
    submitted_by: str
    counted: bool
    correction: CorrectionOut | None = Field(description="The correction in force; null for what counts as posted.")

    @classmethod
    def of(cls, entry: LoggedObservation) -> "LoggedOut":
        """From the domain's entry."""
        return cls(
            sequence=entry.sequence,
            unit=entry.unit,
            observed_at=entry.observed_at,
            received_at=entry.received_at,
            submitted_by=entry.actor,
            counted=entry.is_counted,
            correction=None if entry.correction is None else CorrectionOut.of(entry.correction),
            **entry.fields,
        )


class LogOut(Answer):
    """A page of the log, by sequence."""

    model_config = shown_as({"items": [LOGGED], "next_cursor": None})

    items: list[LoggedOut]
    next_cursor: str | None


class PathPointOut(Answer):
    """The walk after one observation."""

    sequence: int
    sample_number: int
    exposure: float | None
    total: int | float
    log_likelihood_ratio: float
    always_valid_p_value: float | None
    confidence_sequence: ConfidenceOut | None


class RegionPointOut(Answer):
    """The totals that accept and reject at one sample number or exposure; null where none does."""

    sample_number: int | None
    exposure: float | None
    accept: int | float | None
    reject: int | float | None
    reject_below: int | float | None = Field(description="The lower limit of a two-sided plan; null for others.")


class PathOut(Answer):
    """The walk of the evidence, thinned, and the region around it."""

    model_config = shown_as(PATH)

    key: str
    decision: str
    axis: str = Field(description="What the region runs over: sample_number or exposure.")
    thresholds: ThresholdsOut | None
    points: list[PathPointOut]
    region: list[RegionPointOut]


class RehearsalOut(Answer):
    """What a plan would have answered to historical observations; nothing is stored."""

    model_config = shown_as(REHEARSAL)

    decision: str
    log_likelihood_ratio: float
    sample_number: int
    exposure: float | None
    total: int | float
    cause: str | None
    overrun: int
    axis: str
    thresholds: ThresholdsOut | None
    points: list[PathPointOut]
    region: list[RegionPointOut]

    @classmethod
    def of(cls, procedure: Procedure, state: State, document: Mapping[str, Any], points: int) -> "RehearsalOut":
        """From the state at the end of the rehearsal."""
        return cls(
            decision=state.decision,
            log_likelihood_ratio=state.log_likelihood_ratio,
            sample_number=state.sample_number,
            exposure=state.exposure.value if procedure.family.has_exposure else None,
            total=total_of(procedure.family, state.total.value),
            cause=state.decided.cause if state.decided else None,
            overrun=state.overrun,
            **drawn(procedure, path_of(procedure, [alone(document)], points)),
        )


def drawn(procedure: Procedure, path: Path) -> dict[str, Any]:
    """The members of an answer that draw a walk: its points, and the region around them."""
    region = region_points(procedure, float(path.progress[-1]))
    sequence = confidence_sequence(procedure, path.progress, path.total)
    return {
        "axis": "exposure" if procedure.family.has_exposure else "sample_number",
        "thresholds": optional(ThresholdsOut, procedure.thresholds),
        "points": [_path_point(procedure, path, sequence, i) for i in range(len(path.sequence))],
        "region": [_region_point(procedure, point) for point in region],
    }


def csv_columns(family: Family) -> list[str]:
    """The header of the log as CSV."""
    as_posted = ["sequence", *family.fields, "unit", "observed_at", "received_at", "submitted_by", "counted"]
    in_place = [f"corrected_{name}" for name in (*family.fields, "unit", "observed_at")]
    return [*as_posted, "correction", *in_place, "correction_reason", "corrected_by", "corrected_at"]


def csv_row(family: Family, entry: LoggedObservation) -> dict[str, Any]:
    """The cells of one observation by column: as posted, and what counts in its place if it was corrected."""
    row = LoggedOut.of(entry).model_dump(mode="json", by_alias=True)
    note = row.pop("correction")
    if note is None:
        return row
    observation = note["observation"]
    fields = {} if observation is None else {**observation, **fields_of(family, observation)}
    told = {"correction": note["action"], "correction_reason": note["reason"]}
    told |= {"corrected_by": note["by"], "corrected_at": note["at"]}
    return {**row, **told, **{f"corrected_{name}": value for name, value in fields.items()}}


def _path_point(procedure: Procedure, path: Path, sequence: ConfidenceSequence | None, index: int) -> PathPointOut:
    return PathPointOut(
        sequence=int(path.sequence[index]),
        sample_number=int(path.sample_number[index]),
        exposure=float(path.progress[index]) if procedure.family.has_exposure else None,
        total=total_of(procedure.family, float(path.total[index])),
        log_likelihood_ratio=float(path.log_likelihood_ratio[index]),
        always_valid_p_value=always_valid_p_value(procedure, float(path.log_likelihood_ratio[index])),
        confidence_sequence=ConfidenceOut.of(sequence, index),
    )


def _region_point(procedure: Procedure, point: RegionPoint) -> RegionPointOut:
    has_exposure = procedure.family.has_exposure
    return RegionPointOut(
        sample_number=None if has_exposure else int(point.progress),
        exposure=point.progress if has_exposure else None,
        accept=_limit(procedure, point.accept),
        reject=_limit(procedure, point.reject),
        reject_below=_limit(procedure, point.reject_below),
    )


def _limit(procedure: Procedure, total: float | None) -> int | float | None:
    return None if total is None else total_of(procedure.family, total)
