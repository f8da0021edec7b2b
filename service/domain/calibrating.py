"""Thresholds fitted so that a plan's exact risks are the stated ones, and the exact risks of any plan."""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from service.domain.errors import ComputationTooLarge, Fault, InvalidPlan, InvalidQuestion
from service.domain.families.base import ORIGIN, Start
from service.domain.plan import Content
from service.domain.procedure import Procedure, with_thresholds
from service.domain.statistics import accepts_early
from service.sequential import boundaries, calibration
from service.sequential.boundaries import Thresholds
from service.sequential.calibration import Risks, RisksNotMet
from service.sequential.curved import CurvedRegion
from service.sequential.decision import Decision
from service.sequential.exact.characteristics import Characteristics, TooMuchWork
from service.sequential.fixed_sample import FixedSample

# Multiplications that one calibration may take in all, and computations that it takes at the least.
MOST_WORK = 600_000_000
FEWEST_TRIES = 12
# Parameters at which the worst risks are looked for; and how far from a single hypothesis: in standard deviations of
# the estimate at the truncation, but not below this share of it.
WORST_POINTS, DEVIATIONS, NEAREST = 33, 3.0, 0.1


class Budget:
    """What computations that belong together may cost."""

    def __init__(self, most: int = MOST_WORK) -> None:
        self._most, self._spent = most, 0

    def spend(self, work: int, times: int = 1) -> None:
        """
        Take note of work done, and ask whether so many times that would be too much.

        Raises:
            ComputationTooLarge: It is, or would be.
        """
        self._spent += work
        if self._spent + (times - 1) * work > self._most:
            raise ComputationTooLarge(f"{self._most} multiplications")


def calibrated(content: Content, budget: Budget | None = None) -> Thresholds:
    """
    Thresholds whose exact risks equal the stated ones, or for whole-number totals looked at in steps those of the
    smallest region that exceeds neither.

    Args:
        content: A plan's content without faults.
        budget: What it may cost, together with what was spent from it before.

    Raises:
        InvalidPlan: No thresholds keep the risks, most often because of the truncation.
        ComputationTooLarge: It would take too long.
    """
    if not accepts_early(content):
        return Thresholds(-math.inf, _calibrated_reject(content, budget or Budget()))
    allowed = budget or Budget()

    def risks_at(thresholds: Thresholds, times: int = 1) -> Risks:
        procedure = with_thresholds(content, thresholds)
        found = exact_figures(procedure, procedure.hypotheses)
        allowed.spend(found.work, times)
        return Risks(rejects_at(procedure, found, 0), accepts_at(procedure, found, 1))

    stated = Risks(content["alpha"], content["beta"])
    # One computation between limits that are surely wide enough tells whether all of them can be paid for.
    risks_at(boundaries.strict(stated.alpha, stated.beta), times=FEWEST_TRIES)
    procedure = with_thresholds(content, Thresholds(-1.0, 1.0))
    find: Callable[[calibration.RisksAt, Risks], Thresholds] = (
        calibration.smallest if procedure.family.has_stepwise_risks else calibration.matching
    )
    try:
        return find(risks_at, stated)
    except RisksNotMet as error:
        where = "/truncation" if "truncation" in content else "/alpha"
        rule = "leaves no calibrated boundaries that keep both risks" if "truncation" in content else "cannot be met"
        detail = f"{rule}; the nearest attain alpha {error.least.alpha:.4g} and beta {error.least.beta:.4g}"
        raise InvalidPlan([Fault(where, detail)]) from error


def _calibrated_reject(content: Content, budget: Budget) -> float:
    """The reject threshold of a plan that accepts at its truncation only."""
    stated = content["alpha"]

    def alpha_at(reject: float, times: int = 1) -> float:
        procedure = with_thresholds(content, Thresholds(-math.inf, reject))
        found = exact_figures(procedure, procedure.hypotheses[:1])
        budget.spend(found.work, times)
        return rejects_at(procedure, found, 0)

    strict = boundaries.strict(stated, stated).reject
    alpha_at(strict, times=FEWEST_TRIES)
    family = with_thresholds(content, Thresholds(-math.inf, strict)).family
    try:
        return calibration.reject_alone(alpha_at, stated, is_stepwise=family.has_stepwise_risks)
    except RisksNotMet as error:
        detail = f"leaves no threshold that keeps alpha; the farthest attains {error.least.alpha:.4g}"
        raise InvalidPlan([Fault("/truncation", detail)]) from error


def exact_figures(procedure: Procedure, parameters: Sequence[float], start: Start = ORIGIN) -> Characteristics:
    """
    Exact figures at these parameters, from a point of the region on.

    Raises:
        InvalidQuestion: Sampling may go on for ever.
        ComputationTooLarge: They need more steps than are allowed.
    """
    if procedure.may_go_on_for_ever:
        rule = (
            "Where H0 is true this plan may go on for ever, so it has no sample numbers; truncate it to ask for them."
        )
        raise InvalidQuestion(
            rule, [Fault("/truncation", "is required for exact figures of a plan that never accepts")]
        )
    try:
        return procedure.family.exact(procedure.region, np.array(parameters), procedure.known, start)
    except TooMuchWork as error:
        raise ComputationTooLarge(error.limit) from error


@dataclass(frozen=True)
class Attained:
    """Exact risks: P(reject) at h0 and P(accept) at h1; `beta` is None where the plan states no h1."""

    alpha: float
    beta: float | None


@dataclass(frozen=True)
class Worst:
    """The largest risks over composite hypotheses, and the parameters that have them."""

    alpha: float
    alpha_at: float
    beta: float | None
    beta_at: float | None


def risks_of(procedure: Procedure, found: Characteristics) -> Attained:
    """The exact risks, from figures whose first points are the plan's hypotheses."""
    has_alternative = len(procedure.hypotheses) > 1
    return Attained(rejects_at(procedure, found, 0), accepts_at(procedure, found, 1) if has_alternative else None)


def worst_of(procedure: Procedure) -> Worst:
    """
    The largest exact risks over both hypotheses, looked for on a grid of each and at its edge.

    Raises:
        InvalidQuestion, ComputationTooLarge: As for `exact_figures`.
    """
    edges = procedure.hypotheses
    grid = () if procedure.is_two_sided else procedure.family.grid(*around(procedure), WORST_POINTS)
    h1_is_above = procedure.is_upward != procedure.family.parameter_lowers_total
    parameters = (*edges, *grid)
    found = exact_figures(procedure, parameters)

    def worst(
        edge: float, *, above: bool, risk: Callable[[Procedure, Characteristics, int], float]
    ) -> tuple[float, float]:
        on_side = (i for i, at in enumerate(parameters) if at == edge or (at > edge) == above)
        risks = [(risk(procedure, found, i), parameters[i]) for i in on_side]
        # Of equal risks the edge's is named.
        return max(risks, key=lambda pair: (pair[0], pair[1] == edge))

    alpha = worst(edges[0], above=not h1_is_above, risk=rejects_at)
    beta = worst(edges[1], above=h1_is_above, risk=accepts_at) if len(edges) > 1 else (None, None)
    return Worst(*alpha, *beta)


def around(procedure: Procedure) -> tuple[float, float]:
    """Two parameters between and around which all that matters happens: the hypotheses, or so far from the only one."""
    hypotheses, region, family = procedure.hypotheses, procedure.region, procedure.family
    if len(hypotheses) > 1 or not isinstance(region, CurvedRegion) or region.wall is None:
        return min(hypotheses, default=math.nan), max(hypotheses, default=math.nan)
    at_wall = np.array([region.wall.progress])
    away = DEVIATIONS * float(region.evidence.deviation(at_wall)[0]) / region.wall.progress
    edge = family.mean_of(hypotheses[0], procedure.known)
    low = edge - away if math.isinf(family.span.floor) else max(edge - away, NEAREST * edge)
    most = family.span.per_progress
    high = min(edge + away, most - NEAREST * (most - edge)) if math.isfinite(most) else edge + away
    ends = family.parameter_of(low, procedure.known), family.parameter_of(high, procedure.known)
    return min(ends), max(ends)


def accepts_at(procedure: Procedure, found: Characteristics, i: int) -> float:
    """The probability of acceptance at the i-th parameter."""
    return _probability(procedure, found, i, Decision.ACCEPT)


def rejects_at(procedure: Procedure, found: Characteristics, i: int) -> float:
    """The probability of rejection at the i-th parameter."""
    return _probability(procedure, found, i, Decision.REJECT)


def fixed_sample_of(procedure: Procedure) -> FixedSample | None:
    """The smallest fixed sample with the stated risks, where both are; its lower hypothesis is that of small totals."""
    alpha, beta = procedure.risks
    if beta is None or len(procedure.hypotheses) == 1:
        return None
    h0, h1 = procedure.hypotheses
    lower, upper, risks = (h0, h1, (alpha, beta)) if procedure.is_upward else (h1, h0, (beta, alpha))
    return procedure.family.fixed_sample(lower, upper, risks, procedure.known)


def _probability(procedure: Procedure, found: Characteristics, i: int, decision: Decision) -> float:
    """The probability of all ends with this decision at the i-th parameter."""
    region = procedure.region
    ends = ((region.below, found.below), (region.between, found.between), (region.above, found.above))
    return min(1.0, max(0.0, float(sum(probabilities[i] for end, probabilities in ends if end is decision))))


__all__ = [
    "Attained",
    "Budget",
    "Worst",
    "accepts_at",
    "around",
    "calibrated",
    "exact_figures",
    "fixed_sample_of",
    "rejects_at",
    "risks_of",
    "worst_of",
]
