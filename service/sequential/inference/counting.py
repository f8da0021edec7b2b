"""
An observed outcome of a test of whole totals, among all that could have come.

Quantity: the probabilities of the outcomes further up and further down, at any parameter, and the mean of the first
unit given the outcome.
Method: the totals that go on are followed once, from stage to stage, under one parameter near the estimate; under any
other, each is more or less probable by a factor that depends only on where it stands. What leaves above in a stage is
the upper tail of one increase, what leaves below is read off at its end. The mean of the first unit is a ratio of
numbers of paths: to the outcome from the first increase, and from the origin.
Accuracy: positive terms are added, so small probabilities have as many digits as large ones: about 1e-13 relative.
Cost: stages times the squared width of the region once, then stages times the width for each parameter.
Source: Girshick, Mosteller and Savage (1946), Annals of Mathematical Statistics 17, 13-23 (paths); Siegmund (1985),
Sequential Analysis, section 2.3.
"""

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from service.sequential.double import FloatArray, IndexArray
from service.sequential.exact.characteristics import TooMuchWork
from service.sequential.exact.stretches import WIDEST
from service.sequential.inference.laws import Law
from service.sequential.inference.ordering import Tails
from service.sequential.inference.schedules import Schedule, Stage

# Multiplications of one pass, and totals kept from it.
MOST_WORK = 1_000_000_000
MOST_ENTRIES = 4_000_000
# Probabilities of leaving above that are evaluated for each parameter.
MOST_CHANCES = 500_000
# A stage costs about as much as so many multiplications.
STAGE_WORK = 10_000
# Increases whose probabilities are computed at once.
FEWEST_INCREASES = 32
# Probabilities smaller than this are scaled up.
SMALL = 1e-100


@dataclass(frozen=True)
class _Standing:
    """
    Totals that go on, or that have left: arrays of shape (entries,).

    Attributes:
        total, progress: Where each stands.
        log_weight: Ln of its probability under the reference.
    """

    total: FloatArray
    progress: FloatArray
    log_weight: FloatArray


@dataclass(frozen=True)
class _Pass:
    """
    One pass through the schedule under the reference.

    Attributes:
        leaving: The totals at the beginning of each stage that may leave above in it.
        duration_index, needed: For each of those its stage's duration, as an index of `durations`, and the increase
            that ends it above.
        cut: What ended below, where and when.
        last: The totals before the last look.
    """

    leaving: _Standing
    duration_index: IndexArray
    needed: FloatArray
    durations: FloatArray
    cut: _Standing
    last: _Standing


@dataclass(frozen=True)
class CountedOutcome:
    """
    Where a test of whole totals ended.

    Attributes:
        law: How totals grow.
        schedule: The stages up to the end.
        total: The total at the end.
        is_above: It ended above, or at the wall on that side; else below.
    """

    law: Law
    schedule: Schedule
    total: int
    is_above: bool

    @cached_property
    def reference(self) -> float:
        """See `Outcome`; where the last look brought more than the rest explains, near what came before it."""
        stages, begin = self.schedule.stages, self.schedule.begin
        if not stages:
            return self.law.near(float(self.total), self.schedule.duration)
        return self.law.near(min(float(self.total), stages[-1].room, self.law.largest(begin)), begin)

    def natural(self, mean: float) -> float:
        """See `Outcome`."""
        return self.law.natural(mean)

    def mean(self, natural: float) -> float:
        """See `Outcome`."""
        return self.law.mean(natural)

    def tails(self, natural: float) -> Tails:
        """See `Outcome`."""
        passed, law, last = self._passed, self.law, self.schedule.duration
        weights = self._weights(passed.last, natural)
        missing = float(self.total) - passed.last.total
        if not self._is_summed_down:
            before = self._left_above(natural)
            up = law.reaches(natural, last, missing)
            further = law.reaches(natural, last, missing + 1.0)
            return Tails.of_up(before + float(weights @ up), before + float(weights @ further))
        before = float(self._weights(passed.cut, natural).sum())
        down, further = law.stays(natural, last, missing), law.stays(natural, last, missing - 1.0)
        return Tails.of_down(before + float(weights @ down), before + float(weights @ further))

    def first_step_mean(self) -> float:
        """See `Outcome`; exact up to rounding, for totals that are looked at now and then."""
        law, natural = self.law, self.reference
        if not self.schedule.stages:
            return float(self.total) / self.schedule.duration
        walk = _Walk(law, natural, self._most, 1)
        walk.go(self.schedule)
        from_first, from_origin = self._log_arrival(walk.last(self.schedule)), self._log_arrival(self._passed.last)
        return law.mean(natural) * math.exp(from_first - from_origin)

    @cached_property
    def _passed(self) -> _Pass:
        return _Walk(self.law, self.reference, self._most).passed(self.schedule)

    @cached_property
    def _is_summed_down(self) -> bool:
        """
        Probabilities are added up from the lower end.

        So they are also where nothing could have ended above before this, and totals may be of any size: to the lower
        end lie only those up to this one.
        """
        stages, law = self.schedule.stages, self.law
        has_no_room = bool(stages) and all(stage.room == math.inf for stage in stages)
        return not self.is_above or (has_no_room and law.largest(self.schedule.begin) == math.inf)

    @property
    def _most(self) -> float:
        """Totals beyond this one are of no account: they never come back to it."""
        return float(self.total) if self._is_summed_down else math.inf

    def _left_above(self, natural: float) -> float:
        """The probability of having ended above before the last look."""
        passed = self._passed
        if not passed.needed.size:
            return 0.0
        widest = int(max(passed.needed.max(), 0.0)) + 1
        if widest * len(passed.durations) > MOST_CHANCES:
            raise TooMuchWork(MOST_CHANCES, "chances to evaluate")
        needed = np.arange(widest, dtype=float)
        reaches = self.law.reaches(natural, passed.durations[:, np.newaxis], needed)
        chances = reaches[passed.duration_index, np.maximum(passed.needed, 0.0).astype(int)]
        return float(self._weights(passed.leaving, natural) @ chances)

    def _weights(self, standing: _Standing, natural: float) -> FloatArray:
        """The probabilities of these under a parameter."""
        factor = self.law.log_factor(natural, self.reference, standing.total, standing.progress)
        weights: FloatArray = np.exp(np.minimum(standing.log_weight + factor, 0.0))
        return weights

    def _log_arrival(self, last: _Standing) -> float:
        """Ln of the probability, under the reference and up to a constant, of arriving here from these totals."""
        law, duration = self.law, self.schedule.duration
        most = int(min(float(self.total) - self._passed.last.total[0], law.largest(duration)))
        missing = float(self.total) - last.total
        possible = (missing >= 0.0) & (missing <= most)
        chances = law.falling(self.reference, duration, most, len(self._passed.last.total) + 1)
        logs = last.log_weight[possible] + chances[(most - missing[possible]).astype(int)]
        largest = float(logs.max(initial=-math.inf))
        return largest + math.log(float(np.exp(logs - largest).sum())) if largest > -math.inf else -math.inf


class _Walk:
    """The probabilities of the totals that go on, moved from stage to stage under the reference."""

    def __init__(self, law: Law, natural: float, most: float, first: int = 0) -> None:
        self._law, self._natural, self._most, self._lowest = law, natural, most, first
        self.begin = law.first_step if first else 0.0
        self._alive, self._log_scale, self._work, self._entries = np.ones(1), 0.0, 0, 0
        self._increases: dict[float, FloatArray] = {}
        self.leaving, self.cut = _Collected(), _Collected()
        self._rooms: list[float] = []
        self._durations: dict[float, int] = {}
        self._indices: list[int] = []

    def go(self, schedule: Schedule) -> None:
        """Go through all stages."""
        for i, stage in enumerate(schedule.stages):
            begin, duration = stage.begin, stage.duration
            if i == 0:  # the first increase has used up a part of it, or made it longer
                begin, duration = self.begin, duration - self.begin
            if stage.room < math.inf and math.isinf(self._most):
                # Only totals from which one increase leads over the room.
                skipped = int(min(max(0.0, stage.room - self._law.largest(duration) - self._lowest), len(self._alive)))
                self.leaving.add(self._alive[skipped:], self._lowest + skipped, begin, self._log_scale)
                self._rooms.append(stage.room)
                self._indices.append(self._durations.setdefault(duration, len(self._durations)))
            self._advance(stage, duration)

    def last(self, schedule: Schedule) -> _Standing:
        """The totals that then go on."""
        last = _Collected()
        last.add(self._alive, self._lowest, max(schedule.begin, self.begin), self._log_scale)
        return last.together()

    def passed(self, schedule: Schedule) -> _Pass:
        """All that the outcomes on both sides need."""
        self.go(schedule)
        leaving, counts = self.leaving.together(), self.leaving.counts
        return _Pass(
            leaving=leaving,
            duration_index=np.repeat(np.array(self._indices, dtype=np.intp), counts),
            needed=np.repeat(np.array(self._rooms), counts) - leaving.total,
            durations=np.array(list(self._durations), dtype=float),
            cut=self.cut.together(),
            last=self.last(schedule),
        )

    def _advance(self, stage: Stage, duration: float) -> None:
        """Move by one stage; what its cut ends is kept."""
        width = self._width(stage, duration)
        moved = self._moved(duration, width)
        if stage.cut >= self._lowest:
            cut = min(width, int(stage.cut) + 1 - self._lowest)
            self.cut.add(moved[:cut], self._lowest, stage.begin + stage.duration, self._log_scale)
            self._lowest, moved = self._lowest + cut, moved[cut:]
        self._alive = moved
        largest = moved.max() if len(moved) else 0.0
        if 0.0 < largest < SMALL:
            self._alive = moved / largest
            self._log_scale += math.log(largest)

    def _width(self, stage: Stage, duration: float) -> int:
        """The totals that can go on during a stage, from the lowest; counts the work too."""
        count = len(self._alive)
        width = count - 1 + self._law.widest(self._natural, duration)
        room = min(stage.room, self._most + 1.0)
        if room < math.inf:
            width = min(width, max(0, int(room) - self._lowest))
        self._work += count * width + STAGE_WORK
        self._entries += count
        if width > WIDEST:
            raise TooMuchWork(WIDEST, "totals at once")
        if self._work > MOST_WORK:
            raise TooMuchWork(MOST_WORK, "multiplications")
        if self._entries > MOST_ENTRIES:
            raise TooMuchWork(MOST_ENTRIES, "totals to keep")
        return width

    def _moved(self, duration: float, width: int) -> FloatArray:
        alive = self._alive[:width]
        if not len(alive):
            return np.zeros(0)
        known = self._increases.get(duration)
        if known is None or len(known) < width:
            known = self._law.increases(self._natural, duration, max(width, FEWEST_INCREASES))
            self._increases[duration] = known
        moved: FloatArray = np.convolve(alive, known[:width])[:width]
        return moved


class _Collected:
    """Rows of totals that stand side by side, put together at the end."""

    def __init__(self) -> None:
        self._masses: list[FloatArray] = []
        self._rows: list[tuple[float, float, float]] = []

    @property
    def counts(self) -> IndexArray:
        """How many totals each row has."""
        return np.array([len(masses) for masses in self._masses], dtype=np.intp)

    def add(self, masses: FloatArray, lowest: int, progress: float, log_scale: float) -> None:
        """Keep a row of totals from the lowest on."""
        self._masses.append(masses)
        self._rows.append((float(lowest), progress, log_scale))

    def together(self) -> _Standing:
        """All rows, one after the other."""
        if not self._masses:
            return _Standing(np.zeros(0), np.zeros(0), np.zeros(0))
        counts = self.counts
        lowest, progress, log_scale = (np.repeat(np.array(column), counts) for column in zip(*self._rows, strict=True))
        places = np.arange(len(lowest)) - np.repeat(np.cumsum(counts) - counts, counts)
        with np.errstate(divide="ignore"):  # what underflows never comes to anything
            log_weight = np.log(np.concatenate(self._masses)) + log_scale
        return _Standing(lowest + places, progress, log_weight)
