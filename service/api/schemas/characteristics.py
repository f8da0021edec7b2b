"""What a plan promises."""

from typing import Annotated, Any

from pydantic import ConfigDict, FailFast, Field

from service.api.schemas.common import Answer, Form, optional, shown_as
from service.api.schemas.plans import EXAMPLE as PLAN
from service.api.schemas.plans import AttainedOut, LinesOut, PlanContentForm, ThresholdsOut, TruncationForm
from service.domain.characteristics import Point, Promise, Simulation, Spread
from service.domain.designing import Suggestion
from service.domain.procedure import lines_of, procedure_of_document
from service.web.fields import Name, Number, Whole

PROMISE: dict[str, Any] = {
    "method": "recursion",
    "error_bound": 1.1e-13,
    "attained": {"alpha": 0.0220, "beta": 0.0996},
    "points": [
        {
            "parameter": 0.01,
            "probability_of_acceptance": 0.97795,
            "average_sample_number": 30.21273,
            "standard_deviation": 12.2,
            "quantiles": {"0.5": 24.0, "0.9": 50.0, "0.95": 50.0, "0.99": 75.0},
            "average_exposure": None,
            "exposure_standard_deviation": None,
            "exposure_quantiles": None,
            "average_failures": None,
            "wald": {"probability_of_acceptance": 0.95, "average": 24.3},
            "siegmund": None,
        }
    ],
    "fixed_sample": {
        "size": 52,
        "acceptance_limit": 2,
        "accepts_at_most": True,
        "alpha": 0.0159,
        "beta": 0.0966,
        "saving_at_h0": 0.42,
        "saving_at_h1": 0.57,
    },
    "thresholds": {"accept": -2.2512917986, "reject": 2.8903717579},
    "lines": {"slope": 0.0397, "accept_intercept": 0.9389, "reject_intercept": 1.2054},
    "suggested_truncation": None,
}


SIMULATED: dict[str, Any] = {
    **PROMISE,
    "method": "simulation",
    "error_bound": None,
    "attained": {
        "alpha": 0.0444,
        "beta": 0.0906,
        "alpha_standard_error": 0.00013,
        "beta_standard_error": 0.00025,
        "seed": 1,
    },
    "points": [
        {
            **PROMISE["points"][0],
            "parameter": 0.5,
            "probability_of_acceptance": 0.0906,
            "probability_standard_error": 0.00025,
            "average_sample_number": 22.1,
            "average_standard_error": 0.06,
            "wald": None,
        }
    ],
    "fixed_sample": None,
    "lines": None,
    "simulation": {
        "seed": 1,
        "courses": 57344,
        "least_average_sample_number": {"h0": 15.9, "h1": 19.0},
    },
}


class TruncationQuestionForm(Form):
    """How much longer than without truncation sampling may become on average, as a share."""

    inflation: Number


class CandidateForm(PlanContentForm):
    """A plan to compare with others."""

    name: Name | None = None


class CharacteristicsForm(PlanContentForm):
    """A plan that is not stored, or several to compare, and the true parameters to ask about."""

    model_config = ConfigDict(
        json_schema_extra={
            "examples": [
                {**PLAN, "at": [0.01, 0.05]},
                {"candidates": [PLAN, {**PLAN, "name": "exact", "boundaries": "calibrated"}], "at": [0.01, 0.05]},
            ]
        }
    )

    name: Name | None = None
    at: Annotated[list[Number], FailFast(), Field(max_length=500)] = Field(default_factory=list)
    suggest_truncation: TruncationQuestionForm | None = Field(
        None, description="Ask for a truncation, as small as the search finds."
    )
    seed: Whole | None = Field(None, description="Of an invariant plan: the seed of the simulation, 1 when left out.")
    candidates: Annotated[list[CandidateForm], Field(min_length=1, max_length=8)] | None = None


class ApproximateOut(Answer):
    """An approximation, named as one."""

    probability_of_acceptance: float
    average: float = Field(description="Mean sample number, or mean exposure for families with it.")


class FixedSampleOut(Answer):
    """The smallest fixed sample that keeps the stated risks, and what sequential sampling saves on average."""

    size: int | float
    acceptance_limit: int | float
    accepts_at_most: bool
    alpha: float
    beta: float
    saving_at_h0: float
    saving_at_h1: float


class PointOut(Answer):
    """The figures at one true parameter."""

    parameter: float
    probability_of_acceptance: float
    average_sample_number: float | None = Field(description="None where reports have no fixed size.")
    standard_deviation: float | None
    quantiles: dict[str, float] | None
    average_exposure: float | None
    exposure_standard_deviation: float | None
    exposure_quantiles: dict[str, float] | None
    average_failures: float | None
    wald: ApproximateOut | None
    siegmund: ApproximateOut | None
    probability_standard_error: float | None = Field(None, description="Where the figures are simulated.")
    average_standard_error: float | None = None

    @classmethod
    def of(cls, point: Point) -> "PointOut":
        """From the domain's point."""
        number, exposure = _members(point.sample_number), _members(point.exposure)
        return cls(
            parameter=point.parameter,
            probability_of_acceptance=point.probability_of_acceptance,
            average_sample_number=number[0],
            standard_deviation=number[1],
            quantiles=number[2],
            average_exposure=exposure[0],
            exposure_standard_deviation=exposure[1],
            exposure_quantiles=exposure[2],
            average_failures=point.failures,
            wald=None if point.wald is None else ApproximateOut.model_validate(point.wald),
            siegmund=None if point.siegmund is None else ApproximateOut.model_validate(point.siegmund),
            probability_standard_error=point.probability_error,
            average_standard_error=point.average_error,
        )


class SuggestionOut(Answer):
    """A truncation, as small as the search finds, whose calibrated boundaries keep both risks within the inflation."""

    truncation: TruncationForm
    thresholds: ThresholdsOut
    attained: AttainedOut
    average_at_h0: float = Field(description="Mean sample number, or mean exposure for families with it.")
    average_at_h1: float
    inflation: float

    @classmethod
    def of(cls, suggestion: Suggestion) -> "SuggestionOut":
        """From the domain's suggestion."""
        at = suggestion.at if suggestion.axis == "exposure" else int(suggestion.at)
        return cls(
            truncation=TruncationForm.model_validate({suggestion.axis: at}),
            thresholds=ThresholdsOut.model_validate(suggestion.thresholds),
            attained=AttainedOut.model_validate(suggestion.attained),
            average_at_h0=suggestion.average_at_h0,
            average_at_h1=suggestion.average_at_h1,
            inflation=suggestion.inflation,
        )


class LeastOut(Answer):
    """What no test that keeps the stated risks can have a smaller average sample number than."""

    h0: float
    h1: float


class SimulatedOut(Answer):
    """How figures were simulated; the same seed gives the same ones."""

    seed: int
    courses: int
    least_average_sample_number: LeastOut

    @classmethod
    def of(cls, simulation: Simulation) -> "SimulatedOut":
        """From the domain's account of it."""
        least = LeastOut(h0=simulation.least_at_h0, h1=simulation.least_at_h1)
        return cls(seed=simulation.seed, courses=simulation.courses, least_average_sample_number=least)


class CharacteristicsOut(Answer):
    """What a plan promises."""

    model_config = shown_as(PROMISE)

    method: str
    error_bound: float | None = Field(description="Null where the figures are simulated.")
    attained: AttainedOut
    points: list[PointOut]
    fixed_sample: FixedSampleOut | None
    thresholds: ThresholdsOut | None
    lines: LinesOut | None
    suggested_truncation: SuggestionOut | None = Field(None, description="Where it was asked for.")
    simulation: SimulatedOut | None = Field(None, description="Null where the figures are exact.")

    @classmethod
    def of(cls, promise: Promise, document: str, suggestion: Suggestion | None = None) -> "CharacteristicsOut":
        """From the domain's promise of a plan's document."""
        procedure = procedure_of_document(document)
        return cls(
            thresholds=optional(ThresholdsOut, procedure.thresholds),
            lines=optional(LinesOut, lines_of(procedure)),
            suggested_truncation=None if suggestion is None else SuggestionOut.of(suggestion),
            method=promise.method,
            error_bound=promise.error_bound,
            attained=_attained(promise),
            points=[PointOut.of(point) for point in promise.points],
            fixed_sample=None if promise.fixed_sample is None else FixedSampleOut.model_validate(promise.fixed_sample),
            simulation=None if promise.simulation is None else SimulatedOut.of(promise.simulation),
        )


class CandidateOut(CharacteristicsOut):
    """One of the plans that are compared."""

    name: str | None


class ComparisonOut(Answer):
    """Candidate plans side by side, at the same true parameters."""

    model_config = shown_as({"candidates": [{"name": "seal-leak", **PROMISE}]})

    candidates: list[CandidateOut]


def _attained(promise: Promise) -> AttainedOut:
    simulation = promise.simulation
    if simulation is None:
        return AttainedOut(alpha=promise.alpha, beta=promise.beta, alpha_at=None, beta_at=None)
    return AttainedOut(
        alpha=promise.alpha,
        beta=promise.beta,
        alpha_standard_error=simulation.alpha_error,
        beta_standard_error=simulation.beta_error,
        seed=simulation.seed,
    )


def _members(spread: Spread | None) -> tuple[float | None, float | None, dict[str, float] | None]:
    return (None, None, None) if spread is None else (spread.mean, spread.standard_deviation, spread.quantiles)
