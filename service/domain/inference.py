"""What may be said once a test is decided: a p-value, an interval and estimates that allow for the stopping rule."""

import hashlib
import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from functools import lru_cache
from typing import Any

import numpy as np

from service.domain.errors import ComputationTooLarge
from service.domain.families.base import ORIGIN, End, Start
from service.domain.inferred import Inference, Kind, Looks
from service.domain.observing import walk_from
from service.domain.procedure import Procedure, procedure_of_document
from service.domain.state import State, Sum
from service.domain.studying import MEANINGS_OF_T, MEANINGS_OF_TWO_SIDES_OF_T, studied_inference
from service.sequential.decision import Decision
from service.sequential.double import Double, FloatArray
from service.sequential.exact.characteristics import TooMuchWork
from service.sequential.exact.stretches import MOST_LOOKS
from service.sequential.inference.ordering import Outcome, lower_limit, median_unbiased, upper_limit
from service.sequential.region import INSIDE
from service.sequential.tables import UnitTable

# What counts of each submission, with the sequence of its first observation.
Documents = Iterable[tuple[int, Mapping[str, Any]]]


IN_TIME = "The test was watched in continuous time, so nothing depends on how it was reported."
ROWS = "The rows of the table up to the decision; how observations were grouped between them does not matter."
EACH = "The test was looked at after each observation, as it was reported."
TAKEN = "The looks that were taken, at the groups or exposures as they were reported; these are taken as given."
IN_ARMS = (
    "The test was looked at after each measurement; in which arms they came, and in what order, is taken as given."
)

NO_MODEL = (
    "The family score brings its own evidence and no model of the observations: there is no parameter to estimate, and "
    "no probability of other outcomes."
)
NO_ESTIMATE = "There is no maximum-likelihood estimate after this outcome."
UNEVEN = "Depends on the groups or exposures that would have come later, and those so far were not alike."
OPEN_END = "No outcome lies further {way} than this one, so this end is that of the parameter's range{beyond}."
AT_END = "This outcome is the furthest {way} there is, so this estimate is the end of the parameter's range{beyond}."
UNBOUNDED = ", which has no bound"
MEANINGS = {
    "p_value": "If H0 were true, the probability of an outcome at least as extreme towards H1 as this one.",
    "maximum_likelihood": "The {parameter} under which these observations are most probable; "
    "stopping when they decide makes it too extreme on average.",
    "median_unbiased": "The {parameter} under which this outcome lies in the middle: "
    "the estimate is about as often too large as too small.",
    "unbiased": "Over many tests under this plan its average is the true {parameter}, whatever that is.",
    "interval": "Whatever the true {parameter}, at least {level} of tests under this plan end with limits around it.",
    "bias_of_maximum_likelihood": "By how much the maximum-likelihood estimate would be off on average "
    "if its value were the true {parameter}.",
    "ordering": "Most extreme towards H1 are rejections at the boundary, the earliest first; then decisions at the "
    "truncation by their total; then acceptances at the boundary, the latest first.",
    "overrun": "Observations that came after the decision. They never count here: "
    "all figures are those of the moment of the decision.",
}
TWO_SIDED = {
    "p_value": "Twice the smaller of two probabilities if H0 were true: of an outcome at least as far up as this one, "
    "and of one at least as far down. A plan need not share alpha equally between its sides, so after a rejection this "
    "may exceed alpha.",
    "ordering": "From large totals to small ones: rejections above, the earliest first; then decisions at the "
    "truncation by their total; then rejections below, the latest first.",
}
# Plans that never accept and have no truncation.
ENDLESS = {
    "interval": "Whatever the true {parameter}, at most {rest} of tests under this plan end with limits that are not "
    "around it.",
    "unbiased": "Over many tests under this plan its average is the true {parameter}, wherever the test is sure to "
    "end; under H0 it may go on for ever.",
    "ordering": "Most extreme towards H1 are the earliest rejections, then the later ones; tests that go on for ever "
    "are the least extreme.",
}
ENDLESS_TWO_SIDED = {
    "ordering": "From large totals to small ones: rejections above, the earliest first; then tests that go on for "
    "ever; then rejections below, the latest first.",
}
# Plans that bring their own evidence.
BOUNDED = {
    "p_value": "A bound: if H0 were true, the sum would ever come to what it is with at most this probability (Ville "
    "1939). It holds as far as the exponential of each increment has a conditional mean of at most 1 under H0, as that "
    "of a likelihood ratio has.",
    "overrun": MEANINGS["overrun"],
}
WITHOUT_FAILURE = " Tests that end without a failure have no such estimate and are left out."
AT_ONCE = "The test was decided before any exposure had passed; that has probability zero whatever the parameter."


def inference_of(document: str, state: State, documents: Documents, level: float) -> Inference:
    """
    What may be said at the decision; overrun never counts. Kept for a while.

    Args:
        document: The plan's canonical document.
        state: Of a decided test.
        documents: Its submissions in order; read only where the looks do not follow from the state.
        level: Of the interval, in (0, 1).

    Raises:
        ComputationTooLarge: The computation needs more steps than are allowed.
    """
    procedure = procedure_of_document(document)
    if not procedure.family.has_model:
        return _bounded(state, level)
    looks = looks_of(procedure, state, documents)
    if procedure.family.is_invariant:
        return _studied(document, looks, state.carried, state.decision, level)
    return _inference(document, looks, state.total, state.decision, level)


def looks_of(procedure: Procedure, state: State, documents: Documents) -> Looks:
    """
    The looks up to the decision: at each unit, at a table's rows, at each report, or, watched in time, at all moments.

    Raises:
        ComputationTooLarge: There are too many.
    """
    decided, family = state.decided, procedure.family
    assert decided is not None
    if family.looks_at_arms:
        in_b = _arms_reported(procedure, decided.sequence, documents)
        return replace(_looks(np.arange(1.0, len(in_b) + 1.0), None, IN_ARMS), in_b=in_b)
    if family.is_watched_in_time:
        return _looks(np.array([state.exposure.value]), None, IN_TIME)
    if isinstance(procedure.region, UnitTable):
        rows = np.array(procedure.region.sample_numbers, dtype=float)
        return _looks(rows[rows <= decided.sample_number], 1.0, ROWS)
    if not family.has_exposure and decided.sequence == decided.sample_number:
        if decided.sample_number > MOST_LOOKS:
            raise ComputationTooLarge(f"{MOST_LOOKS} looks")
        # A look that the region does not see, such as one at a single measurement about its own mean, is none.
        return _looks(np.arange(1.0, decided.sample_number - family.idle_units(ORIGIN) + 1.0), 1.0, EACH)
    progress, steps = _reported(procedure, decided.sequence, documents)
    # What adds nothing to the progress, such as a pair that agrees, is no look.
    progress, steps = progress[steps > 0.0], steps[steps > 0.0]
    if family.carries and family.has_exposure:
        return _looks(progress, None, IN_ARMS)
    is_even = bool(np.all(steps == steps[0]))
    return _looks(progress, float(steps[0]) if is_even else None, EACH if is_even and steps[0] == 1.0 else TAKEN)


def _reported(procedure: Procedure, last: int, documents: Documents) -> tuple[FloatArray, FloatArray]:
    """Progress after each observation up to the deciding one, and what each added: arrays of shape (observations,)."""
    state, progress, steps, reached = State(), [], [], 0.0
    for first, document in documents:
        increments = procedure.family.read(document, procedure.known)
        walk = walk_from(procedure, state, increments)
        state = replace(state, sequence=first - 1)
        count = min(len(increments.total), last - state.sequence)
        progress.append(walk.progress.value[:count])
        # Where progress does not add up by itself, what was gained is the difference.
        gained = np.diff(walk.progress.value, prepend=reached) if procedure.family.carries else increments.progress
        steps.append(gained[:count])
        end = walk.end
        reached = float(end.progress.value)
        state = State(
            sequence=state.sequence + count,
            sample_number=state.sample_number + int(np.sum(increments.units[:count])),
            exposure=Sum(float(end.progress.high), float(end.progress.low)),
            total=Sum(float(end.total.high), float(end.total.low)),
            carried=tuple(Sum(float(sums.high[-1]), float(sums.low[-1])) for sums in walk.carried),
        )
        if state.sequence >= last:
            break
    return np.concatenate(progress), np.concatenate(steps)


def _arms_reported(procedure: Procedure, last: int, documents: Documents) -> tuple[float, ...]:
    """For each measurement up to the deciding one 1 where it came in b, else 0."""
    in_b: list[float] = []
    for first, document in documents:
        if first > last:
            break
        count_of_b = procedure.family.read(document, procedure.known).carried[procedure.family.carries.index("count_b")]
        in_b.extend(count_of_b[: last + 1 - first].tolist())
    return tuple(in_b)


def _looks(progress: FloatArray, step: float | None, words: str) -> Looks:
    return Looks(progress, hashlib.sha256(progress.tobytes()).hexdigest(), step, words)


@lru_cache(maxsize=256)
def _inference(document: str, looks: Looks, total: Sum, decision: Decision, level: float) -> Inference:
    return inference_at(procedure_of_document(document), looks, total, decision, level)


@lru_cache(maxsize=256)
def _studied(document: str, looks: Looks, carried: tuple[Sum, ...], decision: Decision, level: float) -> Inference:
    return studied_inference(procedure_of_document(document), looks, carried, decision, level)


def _bounded(state: State, level: float) -> Inference:
    """What Ville's inequality says of evidence whose law nobody knows: a bound of the p-value."""
    names = ("maximum_likelihood", "median_unbiased", "unbiased", "lower", "upper", "bias_of_maximum_likelihood")
    bound, reasons = math.exp(-max(0.0, state.log_likelihood_ratio)), dict.fromkeys(names, NO_MODEL)
    return Inference(bound, None, None, None, level, None, None, None, reasons, EACH, Kind.BOUND)


def inference_at(procedure: Procedure, looks: Looks, total: Sum, decision: Decision, level: float) -> Inference:
    """
    The figures for a test that ended at the last of these looks, at this total and with this decision.

    Raises:
        ComputationTooLarge: The computation needs more steps than are allowed.
    """
    standing = Start(float(looks.progress[-1]), total.value)
    if standing.progress == 0.0:
        return _decided_at_once(level, looks)
    try:
        found = _Figures(procedure, _outcome(procedure, looks, total, decision), standing, looks, {})
        lower, upper = found.interval((1.0 - level) / 2.0)
        return Inference(
            p_value=found.p_value(),
            maximum_likelihood=found.maximum_likelihood(),
            median_unbiased=found.median_unbiased(),
            unbiased=found.unbiased(),
            level=level,
            lower=lower,
            upper=upper,
            bias=found.bias(),
            reasons=found.reasons,
            looks=looks.words,
        )
    except TooMuchWork as error:
        raise ComputationTooLarge(error.limit) from error


def _outcome(procedure: Procedure, looks: Looks, total: Sum, decision: Decision) -> Outcome:
    region, height = procedure.region, Double.of(total.high, total.low)
    is_above = decision is region.above
    if procedure.is_two_sided:
        where = Double(looks.progress[-1:], np.zeros(1)), Double(np.array([total.high]), np.array([total.low]))
        is_above = bool(region.sides(*where)[0] >= INSIDE)
    return procedure.family.outcome(region, End(looks.progress, height, is_above), procedure.known)


@dataclass(frozen=True)
class _Figures:
    """One outcome and what can be said of it; where there is no figure, or an end of the range, `reasons` says why."""

    procedure: Procedure
    outcome: Outcome
    standing: Start
    looks: Looks
    reasons: dict[str, str]

    def p_value(self) -> float:
        """P under H0 of an outcome at least as extreme towards H1; towards both sides twice the smaller."""
        procedure = self.procedure
        null = procedure.family.mean_of(procedure.hypotheses[0], procedure.known)
        tails = self.outcome.tails(self.outcome.natural(null))
        if procedure.is_two_sided:
            return min(1.0, 2.0 * min(tails.up, tails.down))
        return tails.up if procedure.is_upward else tails.down

    def interval(self, tail: float) -> tuple[float | None, float | None]:
        """The two limits of the parameter."""
        low, high = lower_limit(self.outcome, tail), upper_limit(self.outcome, tail)
        if self.procedure.family.parameter_lowers_total:
            low, high = high, low
        return self._parameter(low, "lower", OPEN_END), self._parameter(high, "upper", OPEN_END)

    def maximum_likelihood(self) -> float | None:
        """From the totals at the decision, as if they had not decided when it came."""
        return self._noted(self._estimate, "maximum_likelihood", NO_ESTIMATE)

    def median_unbiased(self) -> float | None:
        """The parameter under which this outcome is in the middle."""
        return self._parameter(median_unbiased(self.outcome), "median_unbiased", AT_END)

    def unbiased(self) -> float | None:
        """The mean of the first unit, given the outcome."""
        reason = self.procedure.family.no_unbiased_estimate
        return self.outcome.first_step_mean() if reason is None else self._noted(None, "unbiased", reason)

    def bias(self) -> float | None:
        """Of the maximum-likelihood estimate, were its value the true parameter."""
        family, name, estimate = self.procedure.family, "bias_of_maximum_likelihood", self._estimate
        if family.no_bias is not None:
            return self._noted(None, name, family.no_bias)
        step = 0.0 if family.is_watched_in_time else self.looks.step
        if estimate is None or step is None:
            return self._noted(None, name, NO_ESTIMATE if estimate is None else UNEVEN)
        try:
            return float(family.bias(self.procedure.region, estimate, step, self.procedure.known))
        except TooMuchWork as error:
            return self._noted(None, name, f"Would need more than {error.limit}.")

    @property
    def _estimate(self) -> float | None:
        return self.procedure.family.estimate(self.standing, self.procedure.known)

    def _parameter(self, natural: float, name: str, reason: str) -> float | None:
        """The family's parameter; an end of the range has its reason, and an end without a bound is None."""
        parameter = self.procedure.family.parameter_of(self.outcome.mean(natural), self.procedure.known)
        if math.isinf(natural):
            beyond = "" if math.isfinite(parameter) else UNBOUNDED
            self.reasons[name] = reason.format(way=self._way(is_up=natural > 0.0), beyond=beyond)
        return parameter if math.isfinite(parameter) else None

    def _way(self, *, is_up: bool) -> str:
        """Which way large or small totals lie, for people."""
        procedure = self.procedure
        if not procedure.is_two_sided:
            return "towards H1" if is_up == procedure.is_upward else "towards H0"
        size = "larger" if is_up != procedure.family.parameter_lowers_total else "smaller"
        return f"towards a {size} {procedure.family.parameter}"

    def _noted(self, value: float | None, name: str, reason: str) -> float | None:
        if value is None:
            self.reasons[name] = reason
        return value


def _decided_at_once(level: float, looks: Looks) -> Inference:
    """Failures at time zero: nothing but the rejection itself can be said."""
    names = ("maximum_likelihood", "median_unbiased", "unbiased", "lower", "upper", "bias_of_maximum_likelihood")
    return Inference(0.0, None, None, None, level, None, None, None, dict.fromkeys(names, AT_ONCE), looks.words)


def meanings_of(document: str, level: float) -> dict[str, str]:
    """What each figure means, in a sentence."""
    procedure = procedure_of_document(document)
    family, texts = procedure.family, dict(MEANINGS)
    if not family.has_model:
        return dict(BOUNDED)
    if procedure.has_two_directions:
        texts |= TWO_SIDED
    if family.is_invariant:
        texts |= MEANINGS_OF_T | (MEANINGS_OF_TWO_SIDES_OF_T if procedure.has_two_directions else {})
    if procedure.may_go_on_for_ever:
        texts |= ENDLESS | (ENDLESS_TWO_SIDED if procedure.is_two_sided else {})
    words = {"parameter": family.parameter, "level": f"{100.0 * level:g} %", "rest": f"{100.0 - 100.0 * level:g} %"}
    found = {name: text.format(**words) for name, text in texts.items()}
    if family.is_watched_in_time:
        found["bias_of_maximum_likelihood"] += WITHOUT_FAILURE
    return found


__all__ = ["Inference", "Looks", "inference_at", "inference_of", "looks_of", "meanings_of"]
