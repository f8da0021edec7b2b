"""
The bias of the maximum-likelihood estimate at a parameter.

Quantity: E(estimate) - parameter, over all ends of the test, where the estimate is total/progress, or for failures
watched in time progress/total.
Method: while sampling goes on, each look moves total/progress on average by (mean * progress - total)/progress * step/
(next progress), so the bias is the sum of that over all looks taken, and only the mean of the totals that go on is
needed. In time, the moments at which failures end the test are gamma distributed within a stretch.
Accuracy: 1e-9 of the mean of one unit, or of the standard deviation of a measurement; for failures in time, ends of
probability 1e-11 are left out.
Cost: one pass to the end of the test at one parameter.
Source: Cox (1952), Proceedings of the Cambridge Philosophical Society 48, 290-299, and Whitehead (1986), Biometrika 73,
573-581, for the bias after sequential tests; the sum is the telescoped expectation.
"""

import math
from collections.abc import Iterator
from typing import NamedTuple

import numpy as np
from scipy.special import gammainc

from service.sequential.double import FloatArray
from service.sequential.exact.characteristics import TooMuchWork
from service.sequential.exact.stretches import WIDEST, Stretch, stretches_of_looks, stretches_of_time
from service.sequential.inference.laws import Law, RateLaw
from service.sequential.inference.measuring import Frame, Kernel, limits_seen, points_between
from service.sequential.region import Region, looks_to_wall

MOST_LOOKS, MOST_STRETCHES = 200_000, 50_000
MOST_WORK = 1_000_000_000
STRETCH_WORK = 5_000
BLOCK = 256
# Numbers, or stretches, after which contributions are added up.
BATCH, BATCH_STRETCHES = 200_000, 250
# Sampling is followed until what is still to come moves the bias by less than this share of the mean, or of the
# standard deviation: an estimate moves on by no more than the width of the region over the progress.
NEGLIGIBLE = 1e-9
# Failures in time are followed until this much is left.
UNFOLLOWED = 1e-11
# Totals that together have less probability are given up where no limit ends them.
UNLIKELY = 1e-17
# Durations whose tables are kept.
MOST_TABLES = 32


def bias_of_counts(region: Region, law: Law, natural: float, step: float) -> float:
    """
    The bias of total/progress for whole totals looked at after each `step` of progress.

    Raises:
        TooMuchWork: The test may go on for too long, or between limits too far apart.
    """
    counted = _Counts(law, natural, step)
    for stretch in stretches_of_looks(region, step, 0.0):
        counted.advance(stretch)
        if counted.is_over:
            break
    return counted.bias()


class _Row(NamedTuple):
    """The totals that go on at the beginning of a stretch: from the lowest on, after so many looks."""

    lowest: int
    looks: float
    alive: FloatArray


class _Counts:
    """
    The sum of what each look contributes.

    The loop does as little as it can for each stretch; stretches of equal shape are added up together, in `_gather`.
    """

    def __init__(self, law: Law, natural: float, step: float) -> None:
        self._law, self._natural, self._step, self._mean = law, natural, step, law.mean(natural)
        self._alive, self._lowest, self._looks, self._work = np.ones(1), 0, 0.0, 0
        self._rows: dict[tuple[float, int, int], list[_Row]] = {}
        self._gathered, self._waiting, self._is_over = 0.0, 0, False
        self._tables: dict[float, tuple[FloatArray, FloatArray]] = {}
        self._increases: dict[float, FloatArray] = {}
        self._widest: dict[float, int] = {}

    @property
    def is_over(self) -> bool:
        """True once nothing worth following is left."""
        return self._is_over

    def bias(self) -> float:
        """The sum, once all is over."""
        self._gather()
        return self._gathered

    def advance(self, stretch: Stretch) -> None:
        """Move by one stretch."""
        count = len(self._alive)
        width = count - 1 + self._most(stretch.duration)
        width = width if stretch.room is None else min(width, max(0, stretch.room - self._lowest))
        self._work += width * (count + round(stretch.duration)) + STRETCH_WORK
        if width > WIDEST:
            raise TooMuchWork(WIDEST, "totals at once")
        if self._work > MOST_WORK:
            raise TooMuchWork(MOST_WORK, "multiplications")
        row = _Row(self._lowest, self._looks, self._alive)
        self._rows.setdefault((stretch.duration, width, count), []).append(row)
        moved = self._moved(stretch.duration, width)
        cut = width if stretch.is_last else min(width, max(0, stretch.cut + 1 - self._lowest))
        self._alive, self._lowest = moved[cut:], self._lowest + cut
        if stretch.room is None:
            self._alive = _without_the_furthest(self._alive)
        self._looks += stretch.duration
        # Much to add up, or many stretches, after which nothing may be left.
        self._waiting += width * round(stretch.duration) + BATCH // BATCH_STRETCHES
        if self._waiting > BATCH or stretch.is_last or not len(self._alive):
            self._gather()
            reach = (len(self._alive) + 1.0) / (self._looks * self._step)
            self._is_over = float(self._alive.sum()) * reach < NEGLIGIBLE * self._mean

    def _most(self, duration: float) -> int:
        if duration not in self._widest:
            self._widest[duration] = self._law.widest(self._natural, duration * self._step)
        return self._widest[duration]

    def _gather(self) -> None:
        """Add up what the stretches since the last time contribute."""
        for (duration, width, count), rows in self._rows.items():
            alive = np.array([row.alive for row in rows])
            risen = np.arange(float(count))
            goes_on, rise = alive.sum(axis=1)[:, np.newaxis], (alive @ risen)[:, np.newaxis]
            if duration > 1.0 and min(width, count):
                # Inside a stretch only what has outgrown the room has ended.
                inside = alive[:, :width]
                reach = width - 1 - np.arange(inside.shape[1])
                stays, increases = (table[:, reach].T for table in self._table(duration, width))
                goes_on = np.concatenate([goes_on, inside @ stays], axis=1)
                further = (inside * risen[:width]) @ stays + inside @ increases
                rise = np.concatenate([rise, further], axis=1)
            lowest, begins = (
                np.array(column, dtype=float)[:, np.newaxis] for column in list(zip(*rows, strict=True))[:2]
            )
            looks = begins + np.arange(goes_on.shape[1])
            progress = looks * self._step
            errors = self._mean * progress * goes_on - lowest * goes_on - rise
            shares = np.divide(errors, progress * (looks + 1.0), out=np.zeros_like(errors), where=looks > 0.0)
            self._gathered += float(shares.sum())
        self._rows, self._waiting = {}, 0

    def _table(self, duration: float, width: int) -> tuple[FloatArray, FloatArray]:
        """
        P(increase <= reach) and E(increase; increase <= reach) after each look inside a stretch, for reaches below
        `width`: arrays of shape (looks, reaches).
        """
        known = self._tables.get(duration)
        if known is not None and known[0].shape[1] >= width:
            return known
        law, natural = self._law, self._natural
        progress = self._step * np.arange(1.0, duration)[:, np.newaxis]
        reach = np.arange(float(width))
        stays = law.stays(natural, progress, reach)
        # k * P(k) is the mean times the probability of k - 1 further increases once the first has come.
        increases = self._mean * progress * law.stays(natural, progress - law.first_step, reach - 1.0)
        if len(self._tables) >= MOST_TABLES:
            self._tables.clear()
        self._tables[duration] = (stays, increases)
        return stays, increases

    def _moved(self, duration: float, width: int) -> FloatArray:
        alive = self._alive[:width]
        if not len(alive):
            return np.zeros(0)
        known = self._increases.get(duration)
        if known is None or len(known) < width:
            known = self._increases[duration] = self._law.increases(self._natural, duration * self._step, width)
        moved: FloatArray = np.convolve(alive, known[:width])[:width]
        return moved


def bias_of_measurements(region: Region, frame: Frame, natural: float) -> float:
    """
    The bias of the average of measurements.

    Raises:
        TooMuchWork: The test may go on for too long, or between limits too far apart.
    """
    bias, masses, work = 0.0, np.ones(1), 0
    kernel: Kernel | None = None
    for begin, count in _blocks(region, 1.0):
        looks = begin + np.arange(float(count))
        lower, upper = limits_seen(region, frame, looks, natural)
        if kernel is None or not np.ptp(lower) == np.ptp(upper) == 0.0:
            points = points_between(lower, upper)
            kernel = kernel.with_points(points) if kernel else Kernel(natural, points)
        work += points * points * count
        if work > MOST_WORK:
            raise TooMuchWork(MOST_WORK, "multiplications")
        for look, low, high in zip(looks.tolist(), lower.tolist(), upper.tolist(), strict=True):
            masses = kernel.step(masses, low, high)
            goes_on = float(masses.sum())
            bias += (natural * look * goes_on - float(masses @ kernel.nodes)) / (look * (look + 1.0))
            if goes_on * (high - low) < NEGLIGIBLE * look:
                return float(frame.sigma * bias)
    return float(frame.sigma * bias)


def bias_of_life(region: Region, rate: float) -> float:
    """
    The bias of time/failures, among the ends with a failure, for failures watched in time.

    Raises:
        TooMuchWork: The test may go on for too long.
    """
    begun = _Lives(rate)
    for i, stretch in enumerate(stretches_of_time(region, 0.0, 0)):
        if i > MOST_STRETCHES:
            raise TooMuchWork(MOST_STRETCHES, "stretches")
        begun.advance(stretch)
        if begun.goes_on < UNFOLLOWED:
            break
    return begun.sum / begun.probability - 1.0 / rate


class _Lives:
    """Sums over the ends of a test of failures: their probability, and that times time/failures."""

    def __init__(self, rate: float) -> None:
        self._rate, self._law = rate, RateLaw()
        self._alive, self._lowest, self._time = np.ones(1), 0, 0.0
        self.sum: float = 0.0
        self.probability: float = 0.0

    @property
    def goes_on(self) -> float:
        """The probability of still testing."""
        return float(self._alive.sum())

    def advance(self, stretch: Stretch) -> None:
        """Add the failures that end the test during a stretch, and what ends at its end."""
        room, expected = stretch.room, self._rate * stretch.duration
        if room is None:
            width = len(self._alive) + self._law.widest(math.log(self._rate), stretch.duration)
        else:
            width = room - self._lowest
        if width > WIDEST:
            raise TooMuchWork(WIDEST, "totals at once")
        if room is not None:
            # A failure that ends the test is the first, second, … from here: its moment is gamma distributed.
            needed = room - self._lowest - np.arange(len(self._alive), dtype=float)
            comes = self._alive * gammainc(needed, expected)
            moments = self._time * comes + self._alive * needed / self._rate * gammainc(needed + 1.0, expected)
            self._end(np.array([float(room)]), np.array([comes.sum()]), np.array([moments.sum()]))
        moved = np.convolve(self._alive, self._law.increases(np.log(self._rate), stretch.duration, width))[:width]
        self._time += stretch.duration
        cut = width if stretch.is_last else min(width, max(0, stretch.cut + 1 - self._lowest))
        totals = self._lowest + np.arange(cut, dtype=float)
        self._end(totals, moved[:cut], self._time * moved[:cut])
        self._alive, self._lowest = moved[cut:], self._lowest + cut
        if room is None:
            self._alive = _without_the_furthest(self._alive)

    def _end(self, totals: FloatArray, masses: FloatArray, moments: FloatArray) -> None:
        has_failed = totals > 0.0
        self.probability += float(masses[has_failed].sum())
        self.sum += float((moments[has_failed] / totals[has_failed]).sum())


def _without_the_furthest(alive: FloatArray) -> FloatArray:
    """Where nothing ends above: the totals without those at the end that have next to no probability."""
    beyond = np.cumsum(alive[::-1])[::-1]
    kept: FloatArray = alive[: int(np.count_nonzero(beyond > UNLIKELY))]
    return kept


def _blocks(region: Region, step: float) -> Iterator[tuple[float, int]]:
    """First look and length of blocks of looks up to the one before the wall."""
    last = None if region.wall is None else looks_to_wall(region.wall, step, 0.0)
    begin = 1
    while last is None or begin < last:
        if begin > MOST_LOOKS:
            raise TooMuchWork(MOST_LOOKS, "looks")
        count = BLOCK if last is None else min(BLOCK, last - begin)
        yield float(begin), count
        begin += count
