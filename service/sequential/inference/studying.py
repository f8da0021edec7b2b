"""
An observed end of an invariant test among all that could have come, and what it says of the standardised mean.

Quantity: the probabilities of ends at least as far up and at least as far down, at one standardised mean; the limits
of confidence, and the standardised mean that has the end in the middle.
Method: further up are larger t at the same look, and the exits above at earlier ones. So only the looks taken so far
count, and courses over them are drawn under one mean that has the end near the middle. At another mean each counts with
the ratio of both densities of the t it ended with, which is that of all t on its way; a limit is the root of the
weighted mean. What lies towards a limit is usual under the middle, so that small probabilities keep their relative
error. Where nothing could decide at an earlier look, the law of t is integrated instead.
Accuracy: the standard error stated with each figure; of integrals 1e-12 relative.
Cost: some 50 nanoseconds for each look of each course, and some 25 evaluations of all weights.
Source: Cox (1952), Proceedings of the Cambridge Philosophical Society 48, 290-299 (the ratio of the last t is that of
all); Siegmund (1976), Annals of Statistics 4, 673-684 (importance sampling of sequential tests); for the ordering see
`ordering`.

Whatever is added to all measurements raises every t of a course, so that with one side both probabilities are monotone
in the mean. With two sides an acceptance has ends above and below it: all with positive t, the latest acceptances
first, lie above all with negative t, the earliest first. Ends that come later lie on both sides of it, so its courses
are followed to their ends, arms being filled evenly from there on. There a course may, seldom, jump over the middle,
so monotony is not proved; whatever the mean, each tail still has at most its probability.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from scipy.optimize import brentq

from service.sequential.boundaries import Thresholds
from service.sequential.double import BoolArray, FloatArray, IndexArray
from service.sequential.exact.characteristics import TooMuchWork
from service.sequential.invariant import LARGEST_DELTA, InvariantRatio, Looks, one_sample, two_samples
from service.sequential.invariant_risks import Estimate, log_density_at
from service.sequential.noncentral import upper_tail

# Looks of a course at the most, looks of all courses together, about, and courses; fewer where weights are dear.
MOST_LOOKS = 20_000
WORK, FEWEST, MOST, MOST_FAR = 10_000_000, 1_000, 20_000, 4_000
# Courses that look for the middle, how far from it their share above may be, and how often they look.
PILOTS, MIDDLE, MOST_PILOTS = 400, 0.2, 60
# Fewer on one side of the end, under the largest mean, say nothing of where the middle is.
FEW = 0.05
# Limits lie about so many units from the middle; weights beyond this mean are dear.
REACH, FAR = 3.0, 10.0
# Looks taken at once.
AT_ONCE = 32
# Streams of random numbers.
PILOT, MAIN = 0, 1
# Roots of integrals are known to these digits, those of simulations to a share of the unit that is nothing beside their
# standard error; slopes are taken over another.
DIGITS, CLOSE, SHARE = 1e-13, 1e-6, 0.01
# Steps outwards, each twice as long, before a root is given up.
MOST_STEPS = 60


@dataclass(frozen=True)
class StudiedEnd:
    """
    Where an invariant test ended.

    Attributes:
        thresholds: accept < 0 < reject.
        in_b: 1 for each measurement of b and 0 for each of a, up to the deciding one; None for one sample.
        looks: How many were taken, the deciding one included.
        place: t over the root of its degrees of freedom, at the decision.
        is_accepted: The decision.
        last: The look at which a decision is forced, if any.
    """

    ratio: InvariantRatio
    thresholds: Thresholds
    in_b: tuple[float, ...] | None
    looks: int
    place: float
    is_accepted: bool
    last: int | None

    @property
    def is_between(self) -> bool:
        """Accepted with two sides before the wall: ends that come later lie above and below."""
        return self.ratio.sides == 2 and self.is_accepted and self.looks != self.last


@dataclass(frozen=True)
class Studied:
    """
    What the end says.

    Attributes:
        up, down: The probabilities of ends at least as far up, and down, at the mean asked about.
        lower, median, upper: Standardised means; infinite where none was found.
        courses: How many were simulated; 0 where nothing had to be.
    """

    up: Estimate
    down: Estimate
    lower: Estimate
    median: Estimate
    upper: Estimate
    courses: int


def studied(end: StudiedEnd, null: float, tail: float, seed: int) -> Studied:
    """
    Args:
        null: The mean for the probabilities.
        tail: Outside of each limit, in (0, 1/2).
        seed: Not below 0; the same gives the same figures.

    Raises:
        TooMuchWork: The test, or one that goes on from where this one was accepted, sees too many looks; or its
            middle lies further out than means are looked for.
    """
    if end.looks > MOST_LOOKS:
        raise TooMuchWork(MOST_LOOKS, "looks")
    if end.ratio.sides == 2 and end.place < 0.0:
        found = studied(replace(end, place=-end.place), -null, tail, seed)
        lower, median, upper = (
            Estimate(-limit.value, limit.standard_error) for limit in (found.upper, found.median, found.lower)
        )
        return Studied(found.down, found.up, lower, median, upper, found.courses)
    courses = _Courses(end)
    law: _Exact | _Weighed = _Exact(courses) if courses.is_first_chance else _weighed(courses, seed)

    def share_outside(delta: float) -> Estimate:
        down = law.down(delta)
        return Estimate(-down.value, down.standard_error)

    return Studied(
        up=law.up(null),
        down=law.down(null),
        lower=_root(law, law.up, tail),
        median=_root(law, law.excess, 0.0),
        upper=_root(law, share_outside, -tail),
        courses=law.courses,
    )


def _root(law: "_Exact | _Weighed", rising: Callable[[float], Estimate], goal: float) -> Estimate:
    """Where a rising figure comes to a goal, looked for outwards from the middle; infinite where it is not found."""

    def excess(delta: float) -> float:
        return rising(delta).value - goal

    direction = -1.0 if excess(law.middle) > 0.0 else 1.0
    near, step = law.middle, law.unit
    for _ in range(MOST_STEPS):
        far = near + direction * step
        if excess(far) * direction >= 0.0:
            root = float(brentq(excess, near, far, xtol=law.close, rtol=DIGITS))
            error = rising(root).standard_error
            if error > 0.0:
                apart = SHARE * law.unit
                error *= 2.0 * apart / (excess(root + apart) - excess(root - apart))
            return Estimate(root, error)
        near, step = far, 2.0 * step
    return Estimate(direction * math.inf, 0.0)


@dataclass(frozen=True)
class _Schedule:
    """
    Looks and their limits, of t over the root of its degrees of freedom; arrays of shape (looks,).

    Attributes:
        counts: Of a and of b.
        lower, upper: At or beyond them a course ends.
        inner: Likewise at or below it in magnitude, with two sides.
    """

    in_b: FloatArray
    counts: tuple[FloatArray, FloatArray]
    looks: Looks
    lower: FloatArray
    upper: FloatArray
    inner: FloatArray


@dataclass(frozen=True)
class _Ends:
    """Where courses ended; arrays of shape (courses,). Looks count from 1, places are as in `StudiedEnd`."""

    looks: IndexArray
    places: FloatArray


class _Courses:
    """Courses of a test to an observed end, or beyond it; keeps the limits of the looks seen so far."""

    def __init__(self, end: StudiedEnd) -> None:
        self.end = end
        # The look at which all courses end.
        self._final = min(end.last or MOST_LOOKS, MOST_LOOKS) if end.is_between else end.looks
        self.schedule = self._scheduled(end.looks)

    @property
    def size(self) -> float:
        """Of the look at the end."""
        return float(self.schedule.looks.size[self.end.looks - 1])

    @property
    def freedom(self) -> float:
        """Likewise."""
        return float(self.schedule.looks.freedom[self.end.looks - 1])

    @property
    def is_first_chance(self) -> bool:
        """Nothing could decide at an earlier look, and later ones do not matter."""
        before = slice(0, self.end.looks - 1)
        plan = self.schedule
        limits = (-plan.lower[before], plan.upper[before], -plan.inner[before])
        return not self.end.is_between and all(bool(np.all(np.isposinf(limit))) for limit in limits)

    def followed(self, delta: float, courses: int, seed: int, stream: int) -> _Ends:
        """
        Independent courses under one mean.

        Raises:
            TooMuchWork: One of them does not end.
        """
        source = np.random.Generator(np.random.PCG64(np.random.SeedSequence(seed, spawn_key=(stream,))))
        looks, places = np.zeros(courses, np.intp), np.zeros(courses)
        going, seen = np.arange(courses), 0
        sum_a, sum_b, squares = np.zeros(courses), np.zeros(courses), np.zeros(courses)
        while going.size:
            part = slice(seen, min(seen + AT_ONCE, self._final))
            if part.start == part.stop:
                raise TooMuchWork(MOST_LOOKS, "looks")
            plan = self._known(part.stop)
            in_b, (count_a, count_b) = plan.in_b[part], (counts[part] for counts in plan.counts)
            terms = source.standard_normal((going.size, len(in_b)))
            sums_b = sum_b[:, np.newaxis] + np.cumsum(terms * in_b, axis=1)
            sums_a = sum_a[:, np.newaxis] + np.cumsum(terms * (1.0 - in_b), axis=1)
            all_squares = squares[:, np.newaxis] + np.cumsum(terms * terms, axis=1)
            mean_a, mean_b = sums_a / np.maximum(count_a, 1.0), sums_b / np.maximum(count_b, 1.0)
            about = np.sqrt(np.maximum(all_squares - sums_a * mean_a - sums_b * mean_b, 0.0))
            # While t is not defined no limit is reached.
            about[:, plan.looks.freedom[part] < 1.0] = 1.0
            shift = (mean_b - mean_a + delta) * np.sqrt(plan.looks.size[part])
            is_out = (shift >= plan.upper[part] * about) | (shift <= plan.lower[part] * about)
            is_out |= np.abs(shift) <= plan.inner[part] * about
            if part.stop == self.end.looks == self._final:
                is_out[:, -1] = True
            first, row = is_out.argmax(axis=1), np.arange(going.size)
            is_over = is_out[row, first]
            at = row[is_over], first[is_over]
            looks[going[is_over]], places[going[is_over]] = seen + 1 + at[1], shift[at] / about[at]
            rest = ~is_over
            going, seen = going[rest], part.stop
            sum_a, sum_b, squares = sums_a[rest, -1], sums_b[rest, -1], all_squares[rest, -1]
        return _Ends(looks, places)

    def is_above(self, ends: _Ends) -> BoolArray:
        """Which ends lie at least as far up as the observed one."""
        looks, places, end, plan = ends.looks, ends.places, self.end, self.schedule
        is_here = looks == end.looks
        if not end.is_between:
            return np.where(is_here, places >= end.place, places >= plan.upper[looks - 1])
        is_earlier = (looks < end.looks) & (np.abs(places) <= plan.inner[looks - 1])
        above: BoolArray = (places > 0.0) & ~is_earlier & ~(is_here & (places < end.place))
        return above

    def _known(self, count: int) -> _Schedule:
        """At least so many looks."""
        if count > len(self.schedule.in_b):
            self.schedule = self._scheduled(min(max(count, 2 * len(self.schedule.in_b)), self._final))
        return self.schedule

    def _scheduled(self, count: int) -> _Schedule:
        end, number = self.end, np.arange(1.0, count + 1.0)
        in_b = np.ones(count) if end.in_b is None else _filled(end.in_b, count)
        counts = number - np.cumsum(in_b), np.cumsum(in_b)
        looks = one_sample(number) if end.in_b is None else two_samples(*counts)
        accept, reject = self._limits(looks, end.thresholds)
        if end.is_between and count == end.last:
            at_wall = Looks(looks.freedom[-1:], looks.size[-1:])
            accept[-1:], reject[-1:] = self._limits(at_wall, Thresholds(0.0, 0.0))
        if end.ratio.sides == 2:
            return _Schedule(in_b, counts, looks, -reject, reject, accept)
        lower, upper = (accept, reject) if end.ratio.is_upward else (reject, accept)
        return _Schedule(in_b, counts, looks, lower, upper, np.full(count, -np.inf))

    def _limits(self, looks: Looks, thresholds: Thresholds) -> tuple[FloatArray, FloatArray]:
        found, root = self.end.ratio.t_limits(looks, thresholds), np.sqrt(np.maximum(looks.freedom, 1.0))
        return found.accept / root, found.reject / root


def _filled(taken: tuple[float, ...], count: int) -> FloatArray:
    """Arms as they were taken; from there on in the one with fewer measurements, b where they have as many."""
    in_b = list(taken[:count])
    lead = 2.0 * sum(in_b) - len(in_b)
    while len(in_b) < count:
        in_b.append(1.0 if lead <= 0.0 else 0.0)
        lead += 2.0 * in_b[-1] - 1.0
    return np.array(in_b)


class _Exact:
    """The first look at which anything could decide: its t has the noncentral law."""

    courses = 0

    def __init__(self, courses: _Courses) -> None:
        self._freedom, self._root_size, self._place = courses.freedom, math.sqrt(courses.size), courses.end.place
        self.middle = self._place * math.sqrt(self._freedom) / self._root_size
        self.unit, self.close = _unit(self.middle, courses.size), DIGITS

    def up(self, delta: float) -> Estimate:
        """The probability of ends at least as far up."""
        return Estimate(upper_tail(self._freedom, delta * self._root_size, self._place), 0.0)

    def down(self, delta: float) -> Estimate:
        """Likewise down."""
        return Estimate(upper_tail(self._freedom, -delta * self._root_size, -self._place), 0.0)

    def excess(self, delta: float) -> Estimate:
        """Half of how much more probable the ends further up are."""
        return Estimate(0.5 * (self.up(delta).value - self.down(delta).value), 0.0)


def _weighed(courses: _Courses, seed: int) -> "_Weighed":
    """Courses under a mean that has the end near the middle."""
    middle, looks = _middle(courses, seed)
    is_far = abs(middle) + REACH * _unit(middle, courses.size) > FAR
    number = int(min(max(WORK / looks, FEWEST), MOST_FAR if is_far else MOST))
    return _Weighed(courses, courses.followed(middle, number, seed, MAIN), middle)


def _middle(courses: _Courses, seed: int) -> tuple[float, float]:
    """
    A mean under which about half of the ends lie further up, and how many looks a course takes there.

    Raises:
        TooMuchWork: It lies further out than means are looked for; courses would have no weight where it is.
    """
    estimate = courses.end.place * math.sqrt(courses.freedom / courses.size)
    at = min(max(estimate, -LARGEST_DELTA), LARGEST_DELTA)
    low, high, step = -LARGEST_DELTA, LARGEST_DELTA, _unit(at, courses.size)
    is_bracketed = [False, False]
    for _ in range(MOST_PILOTS):
        ends = courses.followed(at, PILOTS, seed, PILOT)
        share = float(np.mean(courses.is_above(ends)))
        if abs(share - 0.5) <= MIDDLE or high - low <= DIGITS:
            break
        if share > 0.5:
            high, is_bracketed[1] = at, True
        else:
            low, is_bracketed[0] = at, True
        direction = -1.0 if share > 0.5 else 1.0
        following = 0.5 * (low + high) if all(is_bracketed) else min(max(at + direction * step, low), high)
        if following == at:
            break
        at, step = following, 2.0 * step
    if abs(at) >= LARGEST_DELTA and abs(share - 0.5) > 0.5 - FEW:
        raise TooMuchWork(round(LARGEST_DELTA), "standard deviations from the mean to the reference")
    return at, float(np.mean(ends.looks))


def _unit(delta: float, size: float) -> float:
    """About the standard error of an estimate of the standardised mean."""
    return math.sqrt((1.0 + 0.5 * delta * delta) / size)


class _Weighed:
    """Courses that were drawn under the middle, and count for other means with their weights."""

    def __init__(self, courses: _Courses, ends: _Ends, middle: float) -> None:
        self.middle, self.unit, self.courses = middle, _unit(middle, courses.size), len(ends.looks)
        self.close = CLOSE * self.unit
        self._is_above = courses.is_above(ends)
        distinct, self._place = np.unique(ends.looks, return_inverse=True)
        looks = courses.schedule.looks
        self._looks = Looks(looks.freedom[distinct - 1], looks.size[distinct - 1])
        self._alignment = ends.places / np.hypot(1.0, ends.places)
        self._log_drawn = self._log_density(middle)

    def up(self, delta: float) -> Estimate:
        """The probability of ends at least as far up; where it is large it is one less that of the others."""
        return self._probability(delta, self._is_above)

    def down(self, delta: float) -> Estimate:
        """Likewise down."""
        return self._probability(delta, ~self._is_above)

    def excess(self, delta: float) -> Estimate:
        """Half of how much more probable the ends further up are."""
        return _mean(self._weights(delta) * (self._is_above - 0.5))

    def _probability(self, delta: float, chosen: BoolArray) -> Estimate:
        weights = self._weights(delta)
        inside, outside = _mean(weights * chosen), _mean(weights * ~chosen)
        if inside.value <= outside.value:
            return inside
        return Estimate(max(0.0, 1.0 - outside.value), outside.standard_error)

    def _weights(self, delta: float) -> FloatArray:
        weights: FloatArray = np.exp(self._log_density(delta) - self._log_drawn)
        return weights

    def _log_density(self, delta: float) -> FloatArray:
        return log_density_at(self._looks, delta, self._place, self._alignment)


def _mean(values: FloatArray) -> Estimate:
    return Estimate(float(np.mean(values)), float(np.std(values)) / math.sqrt(values.size))
