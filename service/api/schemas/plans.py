"""Plans."""

import math
from datetime import datetime
from typing import Annotated, Any

from pydantic import ConfigDict, Field, field_validator

from service.api.schemas.common import Answer, Form, optional, shown_as
from service.domain.calibrating import Attained
from service.domain.families import FAMILIES
from service.domain.plan import Plan
from service.domain.procedure import lines_of, procedure_of
from service.domain.standards import Standard, source_of
from service.web.fields import Name, Number, Text, Whole

CONTENT: dict[str, Any] = {
    "family": "bernoulli",
    "h0": 0.01,
    "h1": 0.05,
    "alpha": 0.05,
    "beta": 0.10,
    "boundaries": "wald",
    "truncation": {"sample_number": 200},
}

EXAMPLE: dict[str, Any] = {"name": "seal-leak", **CONTENT}

RISKS: dict[str, Any] = {"alpha": 0.05, "beta": 0.10}
EXAMPLES: list[dict[str, Any]] = [
    EXAMPLE,
    {"name": "two-grips", "family": "paired", "h0": 1.0, "h1": 3.0, **RISKS},
    {
        "name": "two-lubricants",
        "family": "poisson_ratio",
        "h0": 1.0,
        "h1": 0.5,
        **RISKS,
        "known": {"exposure_ratio": 2.0},
    },
    {
        "name": "shim-any-spread",
        "family": "normal",
        "statistic": "invariant",
        "h0": 0.0,
        "h1": 0.5,
        **RISKS,
        "known": {"reference": 10.0},
    },
    {"name": "bore-spread", "family": "normal_variance", "h0": 0.01, "h1": 0.02, **RISKS},
    {"name": "own-model", "family": "score", **RISKS, "boundaries": "strict"},
]

STORED: dict[str, Any] = {
    **EXAMPLE,
    "parameter": "proportion nonconforming",
    "statistic": "simple",
    "sides": None,
    "direction": None,
    "known": None,
    "thresholds": {"accept": -2.251291798606495, "reject": 2.8903717578961645},
    "lines": {"slope": 0.02499, "accept_intercept": 1.36382, "reject_intercept": 1.75096},
    "table": None,
    "standard": None,
    "scale": None,
    "source": None,
    "attained": None,
    "fingerprint": "0d5f…",
    "created_at": "2031-05-04T09:00:00Z",
    "created_by": "me",
}

# Members of a stored plan that not every plan has.
OPTIONAL = (
    "h0",
    "h1",
    "beta",
    "sides",
    "direction",
    "truncation",
    "known",
    "table",
    "standard",
    "scale",
    "attained",
)


class TruncationForm(Form):
    """Where a decision is forced."""

    sample_number: Whole | None = Field(None, description="Units; for families without exposure.")
    exposure: Number | None = Field(None, description="Exposure; for families with it.")
    failures: Whole | None = Field(None, description="With `exposure`: this failure before it decides at once.")


class ThresholdsForm(Form):
    """Limits of the log-likelihood ratio, in nats."""

    accept: Number | None = Field(None, description="Left out where nothing accepts before the truncation.")
    reject: Number


class RowForm(Form):
    """A row of a table: a sample number with its numbers, or failures with their times."""

    sample_number: Whole | None = None
    accept: Whole | None = Field(None, description="Accept at this total or on its side of it; null: not in this row.")
    reject: Whole | None = None
    failures: Whole | None = None
    reject_at: Number | None = Field(None, description="Reject when this failure comes at or before this time.")
    accept_at: Number | None = Field(None, description="Accept when the time reaches this with at most so many.")


class PlanContentForm(Form):
    """What a plan promises, its name left out. A standard brings its own family, hypotheses, risks and table."""

    family: str | None = Field(None, description=f"{', '.join(FAMILIES)}. Required.")
    h0: Number | None = Field(None, description="Parameter under H0; see the family. Required, but for score.")
    h1: Number | None = Field(None, description="Parameter under H1; required for simple plans, but for score.")
    alpha: Number | None = Field(None, description="Producer's risk: P(reject) when H0 is true. Required.")
    beta: Number | None = Field(None, description="Consumer's risk: P(accept) when H1 is true.")
    boundaries: str | None = Field(
        None,
        description="wald, strict, calibrated, given or table; when left out wald, for generalised plans calibrated, "
        "for mixture plans strict. Those of invariant plans are calibrated by simulation.",
    )
    table: Annotated[list[RowForm], Field(max_length=2000)] | None = Field(None, description='With "table" boundaries.')
    standard: Text | None = Field(None, description="The name of a standard plan; see GET /v1/standard-plans.")
    scale: Number | None = Field(None, description="With a reliability standard: the lower test mean life.")
    statistic: str | None = Field(None, description="simple (when left out), generalised, mixture or invariant.")
    sides: Whole | None = Field(None, description="2: H0 is h0 alone, against both sides of it. 1 when left out.")
    direction: str | None = Field(None, description="above (when left out) or below: where H1 lies without an h1.")
    thresholds: ThresholdsForm | None = Field(None, description='With "given" boundaries.')
    truncation: TruncationForm | None = None
    known: dict[Name, Number | dict[Name, Number]] | None = Field(
        None,
        description='What the family needs to know: {"sigma": 0.6}; for a mixture its prior: {"prior": {"tau": 0.3}}.',
    )

    def content(self) -> dict[str, Any]:
        """The plan without its name, as the domain takes it."""
        return self.model_dump(exclude_none=True, include=set(PlanContentForm.model_fields))


class PlanForm(PlanContentForm):
    """A plan: what is promised before the first datum."""

    model_config = ConfigDict(json_schema_extra={"examples": [*EXAMPLES]})

    name: Name


class ThresholdsOut(Answer):
    """Accept at or below ln B, reject at or above ln A, in nats."""

    accept: float | None = Field(description="Null where nothing accepts before the truncation.")
    reject: float

    @field_validator("accept", mode="before")
    @classmethod
    def _never(cls, accept: float | None) -> float | None:
        return None if accept is None or math.isinf(accept) else accept


class LinesOut(Answer):
    """The region's two lines; where H1 lies below H0 the intercepts and comparisons turn round."""

    slope: float
    accept_intercept: float
    reject_intercept: float


# A row of a table as it is kept: the entries that it has.
Row = dict[str, int | float]


class AttainedOut(Answer):
    """P(reject) at h0 and P(accept) at h1, exact or simulated; of composite hypotheses the largest, and where."""

    alpha: float
    beta: float | None = Field(None, description="Null where the plan states no h1 apart from h0.")
    alpha_at: float | None = Field(None, description="Of composite hypotheses: the parameter of H0 with this alpha.")
    beta_at: float | None = Field(None, description="Of composite hypotheses: the parameter of H1 with this beta.")
    alpha_standard_error: float | None = Field(None, description="Of simulated risks: the standard error of alpha.")
    beta_standard_error: float | None = None
    alpha_limit: float | None = Field(None, description="Of calibrated invariant plans: alpha's upper limit.")
    beta_limit: float | None = None
    confidence: float | None = Field(None, description="One-sided, of each of the two limits.")
    seed: int | None = Field(None, description="Of the simulation that found them.")


class PlanOut(Answer):
    """A stored plan."""

    model_config = shown_as(STORED)

    name: str
    family: str
    parameter: str
    h0: float | None = Field(description="Null for score.")
    h1: float | None
    alpha: float
    beta: float | None
    boundaries: str
    statistic: str
    sides: int | None
    direction: str | None
    truncation: dict[str, int | float] | None
    known: dict[str, float | dict[str, float]] | None
    thresholds: ThresholdsOut | None = Field(description="Null where the limits are a table's.")
    lines: LinesOut | None = Field(description="Null where straight lines do not bound the region.")
    table: list[Row] | None
    standard: str | None
    scale: float | None
    source: str | None = Field(description="Where the standard stands.")
    attained: AttainedOut | None = Field(
        description="Exact risks, for calibrated boundaries and tables; simulated ones for calibrated invariant plans; "
        "for score the bounds that hold for every model."
    )
    fingerprint: str
    created_at: datetime
    created_by: str

    @classmethod
    def of(cls, plan: Plan) -> "PlanOut":
        """From the domain's plan."""
        procedure = procedure_of(plan)
        content: dict[str, Any] = {**dict.fromkeys(OPTIONAL), **plan.content}
        content["thresholds"] = optional(ThresholdsOut, procedure.thresholds)
        return cls(
            name=plan.name,
            parameter=procedure.family.parameter,
            lines=optional(LinesOut, lines_of(procedure)),
            source=source_of(plan.content.get("standard")),
            fingerprint=plan.fingerprint,
            created_at=plan.created_at,
            created_by=plan.created_by,
            **content,
        )


class PlansOut(Answer):
    """A page of plans, by name."""

    model_config = shown_as({"items": [STORED], "next_cursor": None})

    items: list[PlanOut]
    next_cursor: str | None


class StandardOut(Answer):
    """A standard plan: use it with `{"standard": name}`, and `"scale"` where it needs one."""

    name: str
    title: str
    source: str
    needs_scale: bool
    family: str
    h0: float
    h1: float
    alpha: float
    beta: float
    attained: AttainedOut
    table: list[Row]

    @classmethod
    def of(cls, standard: Standard, attained: Attained) -> "StandardOut":
        """From the catalogue's entry, at scale 1 where it has one."""
        return cls(
            name=standard.name,
            title=standard.title,
            source=standard.source,
            needs_scale=standard.needs_scale,
            attained=AttainedOut.model_validate(attained),
            **standard.content,
        )


class StandardsOut(Answer):
    """The catalogue."""

    model_config = shown_as(
        {
            "items": [
                {
                    "name": "MIL-HDBK-781A/VI-D",
                    "title": "Reliability test plan VI-D: discrimination ratio 3, nominal risks 20 %",
                    "source": "MIL-HDBK-781A (1996), sequential test plans",
                    "needs_scale": True,
                    "family": "exponential",
                    "h0": 3.0,
                    "h1": 1.0,
                    "alpha": 0.2,
                    "beta": 0.2,
                    "attained": {"alpha": 0.182492, "beta": 0.192581},
                    "table": [
                        {"failures": 0, "accept_at": 2.67},
                        {"failures": 1, "accept_at": 4.32},
                        {"failures": 2, "reject_at": 0.36, "accept_at": 4.5},
                        {"failures": 3, "reject_at": 4.5},
                    ],
                }
            ]
        }
    )

    items: list[StandardOut]
