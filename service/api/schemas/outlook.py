"""What is still needed from where a test stands."""

from typing import Any

from pydantic import Field

from service.api.schemas.common import Answer, optional, shown_as
from service.domain.characteristics import Spread
from service.domain.outlook import Expected, Outlook
from service.domain.state import State

OUTLOOK: dict[str, Any] = {
    "decision": "continue",
    "accept": {"observations": 21, "exposure": None, "total": 0, "words": "21 conforming units"},
    "reject": {"observations": 2, "exposure": None, "total": 2, "words": "2 nonconforming units"},
    "reject_below": None,
    "room": {"sample_number": 180, "exposure": None, "failures": None},
    "estimate": 0.05,
    "expected": [
        {
            "under": "h0",
            "parameter": 0.01,
            "probability_of_acceptance": 0.87,
            "probability_of_rejection": 0.13,
            "further_sample_number": {
                "average": 31.2,
                "standard_deviation": 20.1,
                "quantiles": {"0.5": 21.0, "0.9": 61.0, "0.95": 61.0, "0.99": 101.0},
            },
            "further_exposure": None,
        }
    ],
    "error_bound": 1e-12,
    "reason": None,
}


class WayOut(Answer):
    """A shortest way to a decision."""

    observations: int | None = Field(description="Units or reports that it takes; null where time alone does it.")
    exposure: float | None = Field(description="Further exposure: what it takes, or what there may be at most.")
    total: float = Field(description="By how much the total may rise at most, or must at least.")
    words: str


class RoomOut(Answer):
    """What is left before the truncation."""

    sample_number: int | None
    exposure: float | None
    failures: int | None


class FurtherOut(Answer):
    """Mean, standard deviation and quantiles of what is still to come."""

    average: float
    standard_deviation: float
    quantiles: dict[str, float]

    @classmethod
    def of(cls, spread: Spread | None) -> "FurtherOut | None":
        """From the domain's spread, if there is one."""
        if spread is None:
            return None
        return cls(average=spread.mean, standard_deviation=spread.standard_deviation, quantiles=spread.quantiles)


class ExpectedOut(Answer):
    """Exact figures of the rest of the test under one true parameter."""

    under: str = Field(description="h0, h1 or estimate.")
    parameter: float
    probability_of_acceptance: float
    probability_of_rejection: float
    further_sample_number: FurtherOut | None
    further_exposure: FurtherOut | None

    @classmethod
    def of(cls, expected: Expected) -> "ExpectedOut":
        """From the domain's figures."""
        return cls(
            under=expected.under,
            parameter=expected.parameter,
            probability_of_acceptance=expected.probability_of_acceptance,
            probability_of_rejection=expected.probability_of_rejection,
            further_sample_number=FurtherOut.of(expected.further_sample_number),
            further_exposure=FurtherOut.of(expected.further_exposure),
        )


class OutlookOut(Answer):
    """What is still needed: null and empty where the test is decided."""

    model_config = shown_as(OUTLOOK)

    decision: str
    accept: WayOut | None
    reject: WayOut | None
    reject_below: WayOut | None = Field(description="To the lower limit of a two-sided plan; null for others.")
    room: RoomOut | None = Field(description="Null without truncation.")
    estimate: float | None = Field(description="Maximum likelihood, from the observations so far.")
    expected: list[ExpectedOut]
    error_bound: float
    reason: str | None = Field(description="Why nothing is expected of a test that goes on; null for others.")

    @classmethod
    def of(cls, outlook: Outlook, state: State) -> "OutlookOut":
        """From the domain's outlook."""
        return cls(
            decision=state.decision,
            accept=optional(WayOut, outlook.ways.accept),
            reject=optional(WayOut, outlook.ways.reject),
            reject_below=optional(WayOut, outlook.ways.reject_below),
            room=optional(RoomOut, outlook.room),
            estimate=outlook.estimate,
            expected=[ExpectedOut.of(expected) for expected in outlook.expected],
            error_bound=outlook.error_bound,
            reason=outlook.reason,
        )
