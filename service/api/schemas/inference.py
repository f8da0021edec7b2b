"""What may be said once a test is decided."""

from typing import Any

from pydantic import Field

from service.api.schemas.common import Answer, shown_as
from service.domain.inference import meanings_of
from service.domain.inferred import Inference, Kind, Simulated
from service.domain.plan import Plan
from service.domain.state import State

ORDERING = "stage-wise"

INFERENCE: dict[str, Any] = {
    "decision": "reject",
    "p_value": 0.0084,
    "p_value_kind": "exact",
    "estimates": {"maximum_likelihood": 0.1429, "median_unbiased": 0.1213, "unbiased": 0.0769},
    "interval": {"level": 0.95, "lower": 0.0178, "upper": 0.3603},
    "ordering": ORDERING,
    "bias_of_maximum_likelihood": 0.0844,
    "overrun": 0,
    "simulation": None,
    "looks": "The test was looked at after each observation, as it was reported.",
    "reasons": {},
    "meanings": {"p_value": "If H0 were true, the probability of an outcome at least as extreme towards H1."},
}


class EstimatesOut(Answer):
    """Estimates of the plan's parameter; where one is null, `reasons` says why."""

    maximum_likelihood: float | None
    median_unbiased: float | None
    unbiased: float | None


class IntervalOut(Answer):
    """Equal-tailed limits of the plan's parameter; null where a side has no bound, with the reason in `reasons`."""

    level: float
    lower: float | None
    upper: float | None


class StandardErrorsOut(Answer):
    """Of each simulated figure; null where the figure itself is null."""

    p_value: float
    median_unbiased: float | None = None
    lower: float | None = None
    upper: float | None = None


class InferenceSimulationOut(Answer):
    """How the figures of an invariant plan were simulated; asked again, they are the same."""

    seed: int
    courses: int = Field(description="Tests that were simulated, up to the look that decided.")
    standard_errors: StandardErrorsOut


class InferenceOut(Answer):
    """Figures that allow for the stopping rule, at the decision."""

    model_config = shown_as(INFERENCE)

    decision: str
    p_value: float
    p_value_kind: Kind = Field(
        description="`exact`, `simulated`, or a `bound` of it for evidence of one's own, which has no model."
    )
    estimates: EstimatesOut
    interval: IntervalOut
    ordering: str | None = Field(description="Which outcomes count as more extreme; null for a bound.")
    bias_of_maximum_likelihood: float | None
    overrun: int = Field(description="Observations after the decision; they never count.")
    simulation: InferenceSimulationOut | None = Field(description="Null where nothing had to be simulated.")
    looks: str = Field(description="Which looks the probabilities are over.")
    reasons: dict[str, str] = Field(description="Why a figure is null, or at the end of the range, by its name.")
    meanings: dict[str, str] = Field(description="What each figure means, in a sentence, by its name.")

    @classmethod
    def of(cls, found: Inference, plan: Plan, state: State) -> "InferenceOut":
        """From the domain's inference."""
        return cls(
            decision=state.decision,
            p_value=found.p_value,
            p_value_kind=found.kind,
            estimates=EstimatesOut.model_validate(found),
            interval=IntervalOut.model_validate(found),
            ordering=None if found.kind is Kind.BOUND else ORDERING,
            bias_of_maximum_likelihood=found.bias,
            overrun=state.overrun,
            simulation=_simulation(found.simulated),
            looks=found.looks,
            reasons=dict(found.reasons),
            meanings=meanings_of(plan.document, found.level),
        )


def _simulation(simulated: Simulated | None) -> InferenceSimulationOut | None:
    if simulated is None:
        return None
    errors = StandardErrorsOut.model_validate(dict(simulated.errors))
    return InferenceSimulationOut(seed=simulated.seed, courses=simulated.courses, standard_errors=errors)
