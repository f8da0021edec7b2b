"""Thresholds fitted so that a plan's exact risks are the stated ones, and the exact risks of any plan."""

from collections.abc import Callable, Sequence

import numpy as np

from service.domain.errors import ComputationTooLarge, Fault, InvalidPlan
from service.domain.families.base import ORIGIN, Start
from service.domain.plan import Content
from service.domain.procedure import Procedure, with_thresholds
from service.sequential import boundaries, calibration
from service.sequential.boundaries import Thresholds
from service.sequential.calibration import Risks, RisksNotMet
from service.sequential.decision import Decision
from service.sequential.exact.characteristics import Characteristics, TooMuchWork
from service.sequential.fixed_sample import FixedSample

# Multiplications that one calibration may take in all, and computations that it takes at the least.
MOST_WORK = 600_000_000
FEWEST_TRIES = 12


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
    allowed = budget or Budget()

    def risks_at(thresholds: Thresholds, times: int = 1) -> Risks:
        procedure = with_thresholds(content, thresholds)
        found = exact_figures(procedure, procedure.hypotheses)
        allowed.spend(found.work, times)
        return risks_of(procedure, found)

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


def exact_figures(procedure: Procedure, parameters: Sequence[float], start: Start = ORIGIN) -> Characteristics:
    """
    Exact figures at these parameters, from a point of the region on.

    Raises:
        ComputationTooLarge: They need more steps than are allowed.
    """
    try:
        return procedure.family.exact(procedure.region, np.array(parameters), procedure.known, start)
    except TooMuchWork as error:
        raise ComputationTooLarge(error.limit) from error


def risks_of(procedure: Procedure, found: Characteristics) -> Risks:
    """P(reject) at h0 and P(accept) at h1, from figures whose first two points are h0 and h1."""
    return Risks(alpha=rejects_at(procedure, found, 0), beta=accepts_at(procedure, found, 1))


def accepts_at(procedure: Procedure, found: Characteristics, i: int) -> float:
    """The probability of acceptance at the i-th parameter."""
    accepts = found.below if procedure.region.below is Decision.ACCEPT else found.above
    return _clipped(accepts[i])


def rejects_at(procedure: Procedure, found: Characteristics, i: int) -> float:
    """The probability of rejection at the i-th parameter."""
    rejects = found.above if procedure.region.below is Decision.ACCEPT else found.below
    return _clipped(rejects[i])


def fixed_sample_of(procedure: Procedure) -> FixedSample | None:
    """The smallest fixed sample with the stated risks; its lower hypothesis is that of small totals."""
    (h0, h1), (alpha, beta) = procedure.hypotheses, procedure.risks
    lower, upper, risks = (h0, h1, (alpha, beta)) if procedure.ratio.is_upward else (h1, h0, (beta, alpha))
    return procedure.family.fixed_sample(lower, upper, risks, procedure.known)


def _clipped(probability: float) -> float:
    return min(1.0, max(0.0, float(probability)))


__all__ = [
    "Budget",
    "Risks",
    "accepts_at",
    "calibrated",
    "exact_figures",
    "fixed_sample_of",
    "rejects_at",
    "risks_of",
]
