"""
Inference after the decision of an invariant plan: figures are simulated, each with its standard error.

Only the looks that were taken count, in the arms in which they came, so it takes about a second while somebody waits.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from service.domain.errors import ComputationTooLarge, InvalidQuestion
from service.domain.families.base import Start
from service.domain.families.invariant import Invariant, ratio_of
from service.domain.inferred import Inference, Kind, Looks, Simulated
from service.domain.procedure import Procedure
from service.domain.state import Decision, Sum
from service.sequential.double import Double, two_sum
from service.sequential.exact.characteristics import TooMuchWork
from service.sequential.inference.studying import Studied, StudiedEnd, studied
from service.sequential.invariant_risks import Estimate

# Every inference has the same.
SEED = 1

UNDEFINED = (
    "At the decision t was not defined, because all measurements (of each arm) were equal or an arm had none; so "
    "nothing is said of the {parameter}, and nothing speaks against H0."
)
NO_UNBIASED = "It would be the average of an early t over all ways to this outcome, which are not followed."
NO_BIAS = (
    "Not given: the average of the estimate is ruled by the tests that end after very few measurements, where t varies "
    "without bound."
)
NOT_FOUND = "No standardised mean was found that makes this outcome so extreme."
FILLED = " Later ones are supposed in the arm with fewer measurements, b where they have as many."
NAMES = ("maximum_likelihood", "median_unbiased", "unbiased", "lower", "upper", "bias_of_maximum_likelihood")

MEANINGS_OF_T = {
    "maximum_likelihood": "The {parameter} under which these measurements are most probable, their spread being taken "
    "as it suits best: the last t over the root of the size of its look, the standard deviation having the number of "
    "measurements as its divisor. Stopping when they decide makes it too extreme on average.",
    "ordering": "Most extreme towards H1 are rejections at the boundary, the earliest first; then decisions at the "
    "truncation by their t; then acceptances at the boundary, the latest first.",
}
MEANINGS_OF_TWO_SIDES_OF_T = {
    "ordering": "From large t to small ones: rejections above, the earliest first; then decisions at the truncation "
    "with positive t, by their t; then acceptances with positive t, the latest first; then those with negative t, the "
    "earliest first; and so on in reverse order to the rejections below, the latest first.",
}


def studied_inference(
    procedure: Procedure, looks: Looks, carried: Sequence[Sum], decision: Decision, level: float
) -> Inference:
    """
    The figures for a test that ended at the last of these looks, with these sums and this decision.

    Raises:
        ComputationTooLarge: There were, or would be, too many looks.
    """
    family = procedure.family
    if not isinstance(family, Invariant):
        raise InvalidQuestion(f"The figures of {family.name} plans of this statistic are not simulated.")
    start = _start(carried)
    estimate = family.estimate(start, procedure.known)
    if estimate is None:
        reasons = dict.fromkeys(("p_value", *NAMES), UNDEFINED.format(parameter=family.parameter))
        return Inference(1.0, None, None, None, level, None, None, None, reasons, looks.words)
    end = _end(procedure, family, looks, start, decision)
    try:
        found = studied(end, procedure.hypotheses[0], (1.0 - level) / 2.0, SEED)
    except TooMuchWork as error:
        raise ComputationTooLarge(error.limit) from error
    return _Figures(procedure, end, found, estimate).inference(level, looks.words)


def _start(carried: Sequence[Sum]) -> Start:
    rounded = two_sum(np.array([sum_.high for sum_ in carried]), np.array([sum_.low for sum_ in carried]))
    return Start(carried=tuple(rounded.high.tolist()), rest=tuple(rounded.low.tolist()))


def _end(procedure: Procedure, family: Invariant, looks: Looks, start: Start, decision: Decision) -> StudiedEnd:
    sums = [Double(np.array([high]), np.array([low])) for high, low in zip(start.carried, start.rest, strict=True)]
    at, found = family.studied(sums)
    if procedure.thresholds is None:  # not reached: an invariant plan has both
        raise InvalidQuestion("A plan without thresholds cannot be simulated.")
    wall = procedure.region.wall
    return StudiedEnd(
        ratio=ratio_of(procedure.known),
        thresholds=procedure.thresholds,
        in_b=looks.in_b,
        looks=len(looks.progress),
        place=float(found.t[0]) / math.sqrt(float(at.freedom[0])),
        is_accepted=decision is Decision.ACCEPT,
        last=None if wall is None else int(wall.progress),
    )


@dataclass(frozen=True)
class _Figures:
    """What was found of one end."""

    procedure: Procedure
    end: StudiedEnd
    found: Studied
    estimate: float

    def inference(self, level: float, words: str) -> Inference:
        """The same for people; what was not found is None, with its reason."""
        found, p_value = self.found, self._p_value()
        limits = {"median_unbiased": found.median, "lower": found.lower, "upper": found.upper}
        known = {name: limit for name, limit in limits.items() if math.isfinite(limit.value)}
        reasons = {name: NOT_FOUND for name in limits if name not in known}
        reasons |= {"unbiased": NO_UNBIASED, "bias_of_maximum_likelihood": NO_BIAS}
        values = {name: limit.value for name, limit in known.items()}
        errors = {"p_value": p_value.standard_error} | {name: limit.standard_error for name, limit in known.items()}
        is_simulated = found.courses > 0
        return Inference(
            p_value=p_value.value,
            maximum_likelihood=self.estimate,
            median_unbiased=values.get("median_unbiased"),
            unbiased=None,
            level=level,
            lower=values.get("lower"),
            upper=values.get("upper"),
            bias=None,
            reasons=reasons,
            looks=words + (FILLED if self.end.is_between and self.end.in_b is not None else ""),
            kind=Kind.SIMULATED if is_simulated else Kind.EXACT,
            simulated=Simulated(SEED, found.courses, errors) if is_simulated else None,
        )

    def _p_value(self) -> Estimate:
        """Of ends at least as extreme towards H1; towards both sides twice the smaller."""
        found = self.found
        if not self.procedure.has_two_directions:
            return found.up if self.end.ratio.is_upward else found.down
        smaller = min(found.up, found.down, key=lambda tail: tail.value)
        return Estimate(min(1.0, 2.0 * smaller.value), 2.0 * smaller.standard_error)


__all__ = ["MEANINGS_OF_T", "MEANINGS_OF_TWO_SIDES_OF_T", "SEED", "studied_inference"]
