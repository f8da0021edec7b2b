"""
Simulated courses of the invariant test: where each ends, and how.

Quantity: for independent courses under one standardised mean, the look at which the ratio first comes to a threshold
(or to the wall), the sums there and the decision.
Method: measurements are drawn with sigma = 1, which the invariant does not see; with two samples, one of each at
every look, half the squared difference and what the pair adds about the common mean. The sum over the root of the sum
of squares is compared with limits computed once for each look, so that no ratio is evaluated on the way.
Accuracy: that of the limits, 1e-12 in the ratio; the draws are exact.
Cost: some 50 nanoseconds for each look of each course.
Source: Cox (1952), Proceedings of the Cambridge Philosophical Society 48, 290-299; Helmert's (1876) transformation
for the squares about the mean of two samples.

A batch is a fixed number of courses with a stream of random numbers of its own, derived from the seed, the mean's
place and the batch's number: what is found does not depend on how many batches are made at a time, or in which order.
"""

import math
from dataclasses import dataclass

import numpy as np

from service.sequential.boundaries import Thresholds
from service.sequential.double import BoolArray, FloatArray, IndexArray
from service.sequential.errors import OutOfRange
from service.sequential.exact.characteristics import TooMuchWork
from service.sequential.invariant import InvariantRatio, Looks, one_sample, t_of, two_samples
from service.sequential.invariant_bounds import information
from service.sequential.invariant_shapes import Outline, Shapes

# Courses of one batch.
BATCH = 4096
# A course that sees more looks is not followed.
MOST_LOOKS = 1_000_000
# Shapes are followed to a wall within so many times the looks that a course is expected to take without it.
NEAR_WALL = 3.0
# Looks taken at once: a quarter of those seen, within these.
FEWEST_AT_ONCE, MOST_AT_ONCE = 4, 64


@dataclass(frozen=True)
class InvariantTest:
    """
    Build it with `invariant_test`.

    Attributes:
        samples: 1, measurements or differences within pairs; 2, one measurement of each sample at every look.
        last: The look at which a decision is forced, if any: reject where the ratio is above zero.
    """

    ratio: InvariantRatio
    thresholds: Thresholds
    samples: int = 1
    last: int | None = None

    def looks(self, number: FloatArray) -> Looks:
        """What the looks with these numbers, from 1 on, know of the precision."""
        return one_sample(number) if self.samples == 1 else two_samples(number, number)

    def drift(self, delta: float) -> float:
        """The mean of one term of the sum that t is made of, in units of its standard deviation."""
        return delta if self.samples == 1 else delta / math.sqrt(2.0)

    def between(self, thresholds: Thresholds) -> "InvariantTest":
        """The same test between other thresholds."""
        return InvariantTest(self.ratio, thresholds, self.samples, self.last)

    @property
    def has_near_wall(self) -> bool:
        """Many courses come to the wall, and with one side their shapes say much of how they end."""
        ratio = self.ratio
        if self.last is None or ratio.sides != 1:
            return False
        under0 = -self.thresholds.accept / information(ratio.delta0, ratio.delta1, self.samples)
        under1 = self.thresholds.reject / information(ratio.delta1, ratio.delta0, self.samples)
        return self.last <= NEAR_WALL * max(under0, under1)


def invariant_test(
    ratio: InvariantRatio, thresholds: Thresholds, samples: int = 1, last: int | None = None
) -> InvariantTest:
    """
    Args:
        thresholds: accept < 0 < reject.
        samples: 1 or 2.
        last: At least 2.

    Raises:
        OutOfRange: One of them is not so.
    """
    if not -math.inf < thresholds.accept < 0.0:
        raise OutOfRange("accept", "must be finite and below 0", thresholds.accept)
    if not 0.0 < thresholds.reject < math.inf:
        raise OutOfRange("reject", "must be finite and above 0", thresholds.reject)
    if samples not in {1, 2}:
        raise OutOfRange("samples", "must be 1 or 2", samples)
    if last is not None and last < 2:
        raise OutOfRange("last", "must be at least 2", last)
    return InvariantTest(ratio, thresholds, samples, last)


@dataclass(frozen=True)
class Endings:
    """
    How courses ended; arrays of shape (courses,).

    Attributes:
        looks: The number of the deciding look.
        total, squares: The sums there, sigma being 1; `squares` about the common mean of the pairs for two samples.
        is_rejected: The decision.
        shapes: Of the courses, where these were followed.
    """

    looks: IndexArray
    total: FloatArray
    squares: FloatArray
    is_rejected: BoolArray
    shapes: Shapes | None = None

    @property
    def alignment(self) -> FloatArray:
        """The alignment of t at the end, see `invariant`."""
        return self.total / np.sqrt(self.looks * self.squares)


class Walker:
    """
    Makes batches of courses of one test; keeps the limits of the looks seen so far.

    Where the wall is near, courses are followed beyond their decisions, until their shapes have no choice left, unless
    that is not asked for.
    """

    def __init__(self, test: InvariantTest, *, follows_shapes: bool = True) -> None:
        self.test = test
        self._follows_shapes = follows_shapes and test.has_near_wall
        self._lower, self._upper = np.zeros(0), np.zeros(0)

    def batch(self, delta: float, seed: int, place: int, number: int) -> Endings:
        """
        One batch of courses under `delta`.

        Args:
            seed: Not below 0.
            place, number: Which stream of random numbers: the place of delta among others, and the batch's number.

        Raises:
            TooMuchWork: A course sees too many looks.
        """
        source = np.random.Generator(np.random.PCG64(np.random.SeedSequence(seed, spawn_key=(place, number))))
        drift, is_magnitude = self.test.drift(delta), self.test.ratio.sides == 2
        ends = np.zeros(BATCH, np.intp), np.zeros(BATCH), np.zeros(BATCH), np.zeros(BATCH, np.bool_)
        going, total, squares, seen = np.arange(BATCH), np.zeros(BATCH), np.zeros(BATCH), 0
        is_decided, outline = np.zeros(BATCH, np.bool_), Outline(BATCH) if self._follows_shapes else None
        while going.size:
            count = self._count(seen)
            terms = source.standard_normal((going.size, count)) + drift
            growth = terms * terms
            if self.test.samples == 2:
                about = source.standard_normal((going.size, count))
                # The first pair is its own mean.
                growth += np.where(seen + np.arange(count) > 0, about * about, 0.0)
            totals = total[:, np.newaxis] + np.cumsum(terms, axis=1)
            all_squares = squares[:, np.newaxis] + np.cumsum(growth, axis=1)
            place_of = totals / np.sqrt(all_squares)
            if is_magnitude:
                place_of = np.abs(place_of)
            is_above = place_of >= self._upper[seen : seen + count]
            is_out = is_above | (place_of <= self._lower[seen : seen + count])
            first = is_out.argmax(axis=1)
            row = np.arange(going.size)
            is_over = is_out[row, first] & ~is_decided[going]
            over, at = going[is_over], (row[is_over], first[is_over])
            for kept, found in zip(
                ends, (seen + 1 + first[is_over], totals[at], all_squares[at], is_above[at]), strict=True
            ):
                kept[over] = found
            is_decided[over] = True
            goes_on = ~is_decided[going]
            if outline is not None:
                self._outline(outline, going, seen, totals, all_squares)
                goes_on |= outline.is_open(going)
            going, total, squares = going[goes_on], totals[goes_on, -1], all_squares[goes_on, -1]
            seen += count
        looks, end_total, end_squares, above = ends
        shapes = None if outline is None else outline.shapes
        return Endings(looks, end_total, end_squares, above if self.test.ratio.is_upward else ~above, shapes)

    def _outline(
        self, outline: Outline, going: IndexArray, seen: int, totals: FloatArray, all_squares: FloatArray
    ) -> None:
        """Follow the shapes over the same looks."""
        number = np.arange(seen + 1.0, seen + totals.shape[1] + 1.0)
        means = np.ascontiguousarray(totals.T) / number[:, np.newaxis]
        about = np.maximum(all_squares.T - number[:, np.newaxis] * means * means, 0.0)
        part, ones = slice(seen, seen + len(number)), Looks(np.ones(len(number)), number)
        limits = [t_of(ones, limit[part] / np.sqrt(number)) for limit in (self._lower, self._upper)]
        outline.extend(going, number, means, about, (limits[0], limits[1]))

    def _count(self, seen: int) -> int:
        """How many looks to take at once; makes sure that their limits are there."""
        count = min(max(seen // 4, FEWEST_AT_ONCE), MOST_AT_ONCE)
        if self.test.last is not None:
            count = min(count, self.test.last - seen)
        if seen + count > MOST_LOOKS:
            raise TooMuchWork(MOST_LOOKS, "looks")
        while len(self._lower) < seen + count:
            self._extend()
        return count

    def _extend(self) -> None:
        """As many limits again, and some."""
        known, last = len(self._lower), self.test.last
        number = np.arange(known + 1.0, min(2 * known + 128, last or MOST_LOOKS) + 1.0)
        lower, upper = self._limits(number, self.test.thresholds)
        if last is not None and number[-1] == last:
            # Where the ratio is zero at the wall it accepts; that has no probability.
            lower[-1:], _ = self._limits(number[-1:], Thresholds(0.0, 0.0))
            upper[-1] = lower[-1]
        self._lower, self._upper = np.concatenate([self._lower, lower]), np.concatenate([self._upper, upper])

    def _limits(self, number: FloatArray, thresholds: Thresholds) -> tuple[FloatArray, FloatArray]:
        """Limits of the sum over the root of the squares."""
        found, root = self.test.ratio.alignment_limits(self.test.looks(number), thresholds), np.sqrt(number)
        accept, reject = root * found.accept, root * found.reject
        return (accept, reject) if self.test.ratio.is_upward else (reject, accept)
