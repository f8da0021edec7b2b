"""Help with choosing a plan: how near a truncation may come before it costs more than it is worth."""

import math
from dataclasses import dataclass
from typing import Any

from service.domain.calibrating import Attained, Budget, calibrated, exact_figures, fixed_sample_of, risks_of
from service.domain.checking import checked_content
from service.domain.errors import ComputationTooLarge, Fault, InvalidPlan, InvalidQuestion
from service.domain.families import family_of
from service.domain.families.base import ORIGIN
from service.domain.plan import Content
from service.domain.procedure import Procedure, procedure_of_document, with_thresholds
from service.sequential.boundaries import Thresholds
from service.sequential.exact.characteristics import Characteristics

LARGEST_INFLATION = 1.0
# Truncations tried in one search.
MOST_TRIES = 40
# Multiplications of one search in all.
MOST_WORK = 1_500_000_000
# Where totals are whole numbers a smaller truncation may do though one above it does not; so many more are looked at.
FURTHER_DOWN = 8
# A truncation by time is found to three digits.
RESOLUTION = 1e-3


@dataclass(frozen=True)
class Suggestion:
    """
    The smallest truncation found that keeps both risks within the inflation.

    Attributes:
        axis: `sample_number` or `exposure`.
        at: Where to truncate.
        thresholds: Calibrated for that truncation, with the `attained` risks.
        average_at_h0, average_at_h1: Mean progress at the decision.
        inflation: By how much the larger of the two averages exceeds that without truncation, as a share.
    """

    axis: str
    at: float
    thresholds: Thresholds
    attained: Attained
    average_at_h0: float
    average_at_h1: float
    inflation: float


def suggested_truncation(content: Content, inflation: float) -> Suggestion:
    """
    A small truncation at which calibrated boundaries keep both risks and neither average, at h0 or h1, exceeds that of
    the calibrated plan without truncation by more than `inflation`.

    It is the smallest that halving finds. Where totals are whole numbers the risks move in steps, and a smaller one may
    do by luck; a few are looked at.

    Args:
        content: A plan as a caller sends it; its boundary rule and truncation are left out of account.
        inflation: A share above 0 and at most 1.

    Raises:
        InvalidPlan: The plan has faults.
        InvalidQuestion: The inflation is out of range, the plan is a table, or its family has no model.
        ComputationTooLarge: No truncation was found within the limit of work.
    """
    if not 0.0 < inflation <= LARGEST_INFLATION:
        rule = f"must be above 0 and at most {LARGEST_INFLATION:g}; received {inflation!r}"
        raise InvalidQuestion("The inflation is out of range.", [Fault("/suggest_truncation/inflation", rule)])
    if content.get("statistic") not in (None, "simple"):
        fault = Fault("/suggest_truncation", f"is for simple plans; received a {content['statistic']} one")
        raise InvalidQuestion("Only simple plans have a truncation suggested.", [fault])
    if "table" in content or "standard" in content:
        fault = Fault("/suggest_truncation", "means nothing for a table: its last row is the end")
        raise InvalidQuestion("A table has its own truncation.", [fault])
    family = family_of(content)
    if family is not None and not family.has_model:
        rule = f"means nothing for {family.name}: without a model no truncation can be weighed"
        raise InvalidQuestion("A truncation is weighed by exact figures.", [Fault("/suggest_truncation", rule)])
    return _Search(content, inflation).run()


@dataclass(frozen=True)
class _Try:
    """A truncation at which calibration worked."""

    at: float
    procedure: Procedure
    found: Characteristics
    inflation: float


class _Search:
    """Bisection over truncations, from the fixed sample size up: no plan can end earlier and keep both risks."""

    def __init__(self, content: Content, inflation: float) -> None:
        left_out = ("truncation", "thresholds", "boundaries")
        stated = {key: value for key, value in content.items() if key not in left_out and value is not None}
        checked_content({**stated, "boundaries": "wald"})
        self._open = {"statistic": "simple", **stated, "boundaries": "calibrated"}
        self._inflation = inflation
        self._tries: dict[float, _Try | None] = {}
        self._budget = Budget(MOST_WORK)
        self._open_plan = procedure_of_document(checked_content(self._open))
        family = self._open_plan.family
        self._axis = "exposure" if family.has_exposure else "sample_number"
        self._is_whole = not family.is_watched_in_time
        self._idle = family.idle_units(ORIGIN)
        self._averages = exact_figures(self._open_plan, self._open_plan.hypotheses).mean

    def run(self) -> Suggestion:
        """Gallop up until a truncation does, then halve the distance down."""
        low, high = 0.0, self._rounded(self._smallest_size())
        while not self._does(high):
            low, high = high, self._rounded(max(1.2 * high, high + 1.0))
        while self._gap(low, high):
            middle = self._rounded(0.5 * (low + high)) if not self._is_whole else math.floor(0.5 * (low + high))
            low, high = (low, middle) if self._does(middle) else (middle, high)
        for lower in range(int(high) - 1, max(0, int(high) - FURTHER_DOWN), -1) if self._is_whole else ():
            high = float(lower) if self._does(float(lower)) else high
        return self._suggestion(self._tries[high])

    def _gap(self, low: float, high: float) -> bool:
        return high - low > 1.0 if self._is_whole else high - low > RESOLUTION * high

    def _rounded(self, at: float) -> float:
        return float(math.ceil(at)) if self._is_whole else float(f"{at:.4g}")

    def _smallest_size(self) -> float:
        fixed = fixed_sample_of(self._open_plan)
        return float(max(self._averages)) + self._idle if fixed is None else fixed.size

    def _does(self, at: float) -> bool:
        """Whether this truncation keeps both risks within the inflation."""
        if at not in self._tries:
            if len(self._tries) >= MOST_TRIES:
                raise ComputationTooLarge(f"{MOST_TRIES} truncations")
            self._tries[at] = self._try(at)
        tried = self._tries[at]
        return tried is not None and tried.inflation <= self._inflation

    def _try(self, at: float) -> _Try | None:
        content: dict[str, Any] = {**self._open, "truncation": {self._axis: int(at) if self._is_whole else at}}
        try:
            procedure = with_thresholds(content, calibrated(content, self._budget))
        except InvalidPlan:
            return None
        found = exact_figures(procedure, procedure.hypotheses)
        return _Try(at, procedure, found, float((found.mean / self._averages).max()) - 1.0)

    def _suggestion(self, tried: _Try | None) -> Suggestion:
        if tried is None or tried.procedure.thresholds is None:  # not reached: what is suggested was tried
            raise ComputationTooLarge(f"{MOST_TRIES} truncations")
        return Suggestion(
            axis=self._axis,
            at=tried.at,
            thresholds=tried.procedure.thresholds,
            attained=risks_of(tried.procedure, tried.found),
            average_at_h0=float(tried.found.mean[0]) + self._idle,
            average_at_h1=float(tried.found.mean[1]) + self._idle,
            inflation=max(0.0, tried.inflation),
        )
