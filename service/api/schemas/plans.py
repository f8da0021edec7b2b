"""Plans."""

from datetime import datetime
from typing import Any

from pydantic import ConfigDict, Field

from service.api.schemas.common import Answer, Form, Name, Number, Whole, shown_as
from service.domain.plan import Plan
from service.domain.procedure import lines_of, procedure_of

EXAMPLE: dict[str, Any] = {
    "name": "seal-leak",
    "family": "bernoulli",
    "h0": 0.01,
    "h1": 0.05,
    "alpha": 0.05,
    "beta": 0.10,
    "boundaries": "wald",
    "truncation": {"sample_number": 200},
}


STORED: dict[str, Any] = {
    **EXAMPLE,
    "parameter": "proportion nonconforming",
    "statistic": "simple",
    "known": None,
    "thresholds": {"accept": -2.251291798606495, "reject": 2.8903717578961645},
    "lines": {"slope": 0.02499, "accept_intercept": 1.36382, "reject_intercept": 1.75096},
    "fingerprint": "0d5f…",
    "created_at": "2031-05-04T09:00:00Z",
    "created_by": "me",
}


class TruncationForm(Form):
    """Where a decision is forced."""

    sample_number: Whole | None = Field(None, description="Units; for families without exposure.")
    exposure: Number | None = Field(None, description="Exposure; for families with it.")
    failures: Whole | None = Field(None, description="With `exposure`: this failure before it decides at once.")


class ThresholdsForm(Form):
    """Limits of the log-likelihood ratio, in nats."""

    accept: Number
    reject: Number


class PlanForm(Form):
    """A plan: what is promised before the first datum."""

    model_config = ConfigDict(json_schema_extra={"examples": [EXAMPLE]})

    name: Name
    family: str = Field(description="bernoulli, poisson, exponential or normal.")
    h0: Number = Field(description="Parameter under H0; see the family.")
    h1: Number = Field(description="Parameter under H1.")
    alpha: Number = Field(description="Producer's risk: P(reject) when H0 is true.")
    beta: Number = Field(description="Consumer's risk: P(accept) when H1 is true.")
    boundaries: str = Field("wald", description="wald, strict or given.")
    statistic: str = Field("simple", description="simple.")
    thresholds: ThresholdsForm | None = Field(None, description='With "given" boundaries.')
    truncation: TruncationForm | None = None
    known: dict[Name, Number] | None = Field(None, description='What the family needs to know: {"sigma": 0.6}.')

    def content(self) -> dict[str, Any]:
        """The plan without its name, as the domain takes it."""
        return self.model_dump(exclude_none=True, exclude={"name"})


class ThresholdsOut(Answer):
    """Accept at or below ln B, reject at or above ln A, in nats."""

    accept: float
    reject: float


class LinesOut(Answer):
    """The region's two lines; where H1 lies below H0 the intercepts and comparisons turn round."""

    slope: float
    accept_intercept: float
    reject_intercept: float


class PlanOut(Answer):
    """A stored plan."""

    model_config = shown_as(STORED)

    name: str
    family: str
    parameter: str
    h0: float
    h1: float
    alpha: float
    beta: float
    boundaries: str
    statistic: str
    truncation: dict[str, float] | None
    known: dict[str, float] | None
    thresholds: ThresholdsOut
    lines: LinesOut
    fingerprint: str
    created_at: datetime
    created_by: str

    @classmethod
    def of(cls, plan: Plan) -> "PlanOut":
        """From the domain's plan."""
        procedure = procedure_of(plan)
        content = {"truncation": None, "known": None, **plan.content}
        content["thresholds"] = ThresholdsOut.model_validate(procedure.thresholds)
        return cls(
            name=plan.name,
            parameter=procedure.family.parameter,
            lines=LinesOut.model_validate(lines_of(procedure)),
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
