"""
Thresholds of the invariant test whose simulated risks are the stated ones.

Quantity: `accept` and `reject` with P0(reject) = alpha and P1(accept) = beta, as far as simulation can tell, and the
risks of these thresholds in a second simulation with random numbers of its own.
Method: courses are followed as far as any thresholds that are tried, and of each only the looks are kept at which the
ratio is higher, or lower, than ever before: the first of these beyond a threshold is where the test would end. So all
thresholds see the same courses, and as a later record weighs less, the estimated risks are monotone in both
thresholds; the smallest region that exceeds neither is found as for exact risks.
Accuracy: that of the second simulation, stated with it. With a confidence, both risks aimed at are lowered so that
the upper confidence limits of the second simulation are expected to stay below the stated ones by two standard
errors.
Cost: about 0.5 microseconds for each look of each course, and some hundred passes over the records.
Source: see `invariant_risks` and `calibration`. Without simulation, `boundaries.strict` keeps both risks exactly for
any test of the invariant: its likelihood ratio is a martingale with mean one (Ville 1939).
"""

import math
from dataclasses import dataclass

import numpy as np
from numpy.polynomial import chebyshev
from scipy.special import ndtri

from service.sequential.boundaries import Thresholds, strict
from service.sequential.calibration import OUTERMOST, Risks, smallest
from service.sequential.double import FloatArray, IndexArray
from service.sequential.exact.characteristics import TooMuchWork
from service.sequential.invariant import log_density
from service.sequential.invariant_risks import (
    LARGEST_INTERPOLATED,
    Estimate,
    Progress,
    Report,
    Run,
    no_report,
    polynomials,
)
from service.sequential.invariant_walks import BATCH, MOST_LOOKS, InvariantTest

# Looks taken at once.
AT_ONCE = 16
# Streams of random numbers for finding are apart from those for confirming.
FINDING, CONFIRMING = 0, 1


@dataclass(frozen=True)
class Search:
    """
    What is asked of a calibration.

    Attributes:
        is_guarded: Stay so far below the stated risks that the upper limits do; otherwise they are met on average.
        confidence: Of each upper limit.
        batches: Courses under each hypothesis, in batches, to find the thresholds and again to confirm them.
    """

    is_guarded: bool = False
    confidence: float = 0.95
    batches: int = 8


USUAL_SEARCH = Search()


@dataclass(frozen=True)
class Calibrated:
    """
    Attributes:
        alpha, beta: From the confirming simulation.
        alpha_limit, beta_limit: Upper confidence limits of the true risks, one-sided.
    """

    thresholds: Thresholds
    alpha: Estimate
    beta: Estimate
    alpha_limit: float
    beta_limit: float


def calibrated(
    test: InvariantTest,
    stated: Risks,
    seed: int,
    search: Search = USUAL_SEARCH,
    report: Report = no_report,
) -> Calibrated:
    """
    Find thresholds for a test, whose own thresholds do not matter.

    Args:
        stated: Both in (0, 1), alpha + beta < 1.
        seed: Not below 0; the same gives the same thresholds.
        report: Called after each batch; what it raises ends the search, and passes.

    Raises:
        RisksNotMet: The wall is too near.
        TooMuchWork: A course sees too many looks.
    """
    records = _records(test, stated, seed, search.batches, report)
    aim = stated
    if search.is_guarded:
        found = _errors(records, smallest(records.risks_at, stated))
        room = float(ndtri(search.confidence)) + 2.0 * math.sqrt(2.0)
        aim = Risks(stated.alpha - room * found.alpha, stated.beta - room * found.beta)
    thresholds = smallest(records.risks_at, aim)
    ratio = test.ratio
    run = Run(test.between(thresholds), (ratio.delta0, ratio.delta1), 2 * seed + CONFIRMING)
    run.extend(
        search.batches, lambda progress: report(Progress(progress.courses + progress.expected, 2 * progress.expected))
    )
    under0, under1 = (point.rejection for point in run.figures((ratio.delta0, ratio.delta1)).points)
    level = search.confidence
    beta = Estimate(1.0 - under1.value, under1.standard_error)
    return Calibrated(thresholds, under0, beta, under0.upper(level), beta.upper(level))


def _errors(records: "Records", thresholds: Thresholds) -> Risks:
    """Standard errors of the risks of the first simulation."""
    return Risks(*(math.sqrt(values.var() / values.size) for values in records.weighed(thresholds)))


@dataclass(frozen=True)
class Records:
    """
    The looks of each course at which its ratio was higher or lower than ever before.

    Attributes:
        course: The course of each record; array of shape (records,), ascending, and by look within a course.
        ratio: The ratio there.
        last: The ratio of each course where it was left, at the wall if there is one; array of shape (courses,).
    """

    course: IndexArray
    ratio: FloatArray
    last: FloatArray

    def weighed(self, thresholds: Thresholds) -> tuple[FloatArray, FloatArray]:
        """
        For each course what it adds to the mean of both risks; arrays of shape (courses,).

        Half of the courses come from each hypothesis: under H0 a ratio of r has the weight 2/(1 + exp(r)).
        """
        beyond = np.flatnonzero((self.ratio >= thresholds.reject) | (self.ratio <= thresholds.accept))
        course, end = self.course[beyond], self.last.copy()
        first = np.flatnonzero(np.diff(course, prepend=-1))
        end[course[first]] = self.ratio[beyond[first]]
        is_rejected = end > 0.0
        # 2/(1 + exp(r)), without overflow.
        alpha = np.where(is_rejected, 2.0 * np.exp(-np.logaddexp(0.0, end)), 0.0)
        beta = np.where(is_rejected, 0.0, 2.0 * np.exp(-np.logaddexp(0.0, -end)))
        return alpha, beta

    def risks_at(self, thresholds: Thresholds) -> Risks:
        """The estimated risks; monotone in both thresholds."""
        alpha, beta = self.weighed(thresholds)
        return Risks(float(alpha.mean()), float(beta.mean()))


def _records(test: InvariantTest, stated: Risks, seed: int, batches: int, report: Report) -> Records:
    widest = strict(stated.alpha, stated.beta)
    if test.last is not None:
        widest = Thresholds(OUTERMOST * widest.accept, OUTERMOST * widest.reject)
    tracker = _Tracker(test.between(widest))
    parts: list[Records] = []
    for number in range(batches):
        for place, delta in enumerate((test.ratio.delta0, test.ratio.delta1)):
            parts.append(tracker.batch(delta, 2 * seed + FINDING, place, number))
            report(Progress(len(parts) * BATCH, 4 * batches * BATCH))
    course = np.concatenate([part.course + i * BATCH for i, part in enumerate(parts)])
    return Records(course, np.concatenate([p.ratio for p in parts]), np.concatenate([p.last for p in parts]))


class _Tracker:
    """Follows courses with their ratio at every look; keeps the polynomials of the looks seen so far."""

    def __init__(self, test: InvariantTest) -> None:
        self._test = test
        ratio = test.ratio
        # With two sides a density is the mean of those of delta and -delta.
        self._deltas = (ratio.delta0, ratio.delta1)
        self._terms = [np.zeros((1, 0)) for _ in self._deltas]

    def batch(self, delta: float, seed: int, place: int, number: int) -> Records:
        """One batch of courses under `delta`, to the thresholds of the test or its wall."""
        source = np.random.Generator(np.random.PCG64(np.random.SeedSequence(seed, spawn_key=(place, number))))
        drift, thresholds = self._test.drift(delta), self._test.thresholds
        going, total, squares, seen = np.arange(BATCH), np.zeros(BATCH), np.zeros(BATCH), 0
        highest, lowest, last = np.zeros(BATCH), np.zeros(BATCH), np.zeros(BATCH)
        courses: list[IndexArray] = []
        ratios: list[FloatArray] = []
        while going.size:
            count = AT_ONCE if self._test.last is None else min(AT_ONCE, self._test.last - seen)
            if count <= 0:
                break
            if seen + count > MOST_LOOKS:
                raise TooMuchWork(MOST_LOOKS, "looks")
            terms = source.standard_normal((going.size, count)) + drift
            growth = terms * terms
            if self._test.samples == 2:
                about = source.standard_normal((going.size, count))
                growth += np.where(seen + np.arange(count) > 0, about * about, 0.0)
            totals = total[:, np.newaxis] + np.cumsum(terms, axis=1)
            all_squares = squares[:, np.newaxis] + np.cumsum(growth, axis=1)
            looks = np.arange(seen + 1.0, seen + count + 1.0)
            ratio = self._ratio(looks, totals / np.sqrt(looks * all_squares))
            tops = np.maximum.accumulate(np.column_stack([highest, ratio]), axis=1)
            bottoms = np.minimum.accumulate(np.column_stack([lowest, ratio]), axis=1)
            rows, columns = np.nonzero((ratio > tops[:, :-1]) | (ratio < bottoms[:, :-1]))
            courses.append(going[rows])
            ratios.append(ratio[rows, columns])
            last[going] = ratio[:, -1]
            goes_on = (tops[:, -1] < thresholds.reject) & (bottoms[:, -1] > thresholds.accept)
            going, total, squares = going[goes_on], totals[goes_on, -1], all_squares[goes_on, -1]
            highest, lowest = tops[goes_on, -1], bottoms[goes_on, -1]
            seen += count
        course = np.concatenate(courses)
        order = np.argsort(course, kind="stable")
        return Records(course[order], np.concatenate(ratios)[order], last)

    def _ratio(self, looks: FloatArray, alignment: FloatArray) -> FloatArray:
        """The ratio at consecutive looks, for an array of shape (courses, looks)."""
        values = [self._log_density(i, looks, alignment) for i in range(2)]
        return values[1] - values[0]

    def _log_density(self, which: int, looks: FloatArray, alignment: FloatArray) -> FloatArray:
        delta, sides = self._deltas[which], self._test.ratio.sides
        if delta == 0.0:
            return np.zeros(alignment.shape)
        if abs(delta) > LARGEST_INTERPOLATED:
            return log_density(self._test.looks(looks), alignment, delta, sides)
        first, end = int(looks[0]) - 1, int(looks[-1])
        known = self._terms[which].shape[1]
        if known < end:
            more = polynomials(self._test, delta, np.arange(known + 1.0, max(2 * known, end) + 1.0))
            self._terms[which] = more if known == 0 else np.concatenate([self._terms[which], more], axis=1)
        terms = self._terms[which][:, np.newaxis, first:end]
        one = np.asarray(chebyshev.chebval(alignment, terms, tensor=False), np.float64)
        if sides == 1:
            return one
        both: FloatArray = np.logaddexp(one, chebyshev.chebval(-alignment, terms, tensor=False)) - math.log(2.0)
        return both
