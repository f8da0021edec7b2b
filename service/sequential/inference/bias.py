"""
The bias of the maximum-likelihood estimate at a parameter.

Quantity: E(estimate) - parameter, over all ends of the test, where the estimate is total/progress, or for failures
watched in time progress/total.
Method: while sampling goes on, each look moves total/progress on average by (mean * progress - total)/progress * step/
(next progress), so the bias is the sum of that over all looks taken, and only the mean of the totals that go on is
needed. In time, the moments at which failures end the test are gamma distributed within a stretch.
Accuracy: rounding, and sampling that goes on with less than 1e-11.
Cost: one pass to the end of the test at one parameter.
Source: Cox (1952), Proceedings of the Cambridge Philosophical Society 48, 290-299, and Whitehead (1986), Biometrika 73,
573-581, for the bias after sequential tests; the sum is the telescoped expectation.
"""

from collections.abc import Iterator

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
STRETCH_WORK = 10_000
BLOCK = 256
# Sampling that goes on with less moves the estimate by no more than this share of its own range.
NEGLIGIBLE = 1e-11
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
        if counted.goes_on < NEGLIGIBLE:
            break
    return counted.bias


class _Counts:
    """The sum of what each look contributes, stretch by stretch, all looks of one at once."""

    def __init__(self, law: Law, natural: float, step: float) -> None:
        self._law, self._natural, self._step = law, natural, step
        self._alive, self._lowest, self._looks, self._work = np.ones(1), 0, 0.0, 0
        self._tables: dict[float, tuple[FloatArray, FloatArray]] = {}
        self._increases: dict[float, FloatArray] = {}
        self.bias = 0.0

    @property
    def goes_on(self) -> float:
        """The probability of still sampling."""
        return float(self._alive.sum())

    def advance(self, stretch: Stretch) -> None:
        """Add the looks of a stretch."""
        width = len(self._alive) - 1 + self._law.widest(self._natural, stretch.duration * self._step)
        width = width if stretch.room is None else min(width, max(0, stretch.room - self._lowest))
        self._work += width * round(stretch.duration) + STRETCH_WORK
        if width > WIDEST:
            raise TooMuchWork(WIDEST, "totals at once")
        if self._work > MOST_WORK:
            raise TooMuchWork(MOST_WORK, "multiplications")
        alive = self._alive[:width]
        if stretch.duration > 1.0 and len(alive):
            self._add_looks_inside(alive, stretch.duration, width)
        moved = self._moved(alive, stretch.duration, width)
        cut = width if stretch.is_last else min(width, max(0, stretch.cut + 1 - self._lowest))
        self._alive, self._lowest = moved[cut:], self._lowest + cut
        self._looks += stretch.duration
        totals = self._lowest + np.arange(len(self._alive), dtype=float)
        self._add(np.array([self._looks]), np.array([self.goes_on]), np.array([self._alive @ totals]))

    def _add(self, looks: FloatArray, goes_on: FloatArray, totals: FloatArray) -> None:
        progress, mean = looks * self._step, self._law.mean(self._natural)
        self.bias += float(np.sum((mean * progress * goes_on - totals) / (progress * (looks + 1.0))))

    def _add_looks_inside(self, alive: FloatArray, duration: float, width: int) -> None:
        """The looks before the end of a stretch, where only what has outgrown the room has ended."""
        stays, increases = self._table(duration, width)
        reach = width - 1 - np.arange(len(alive))
        goes_on = stays[:, reach] @ alive
        totals = stays[:, reach] @ (alive * (self._lowest + np.arange(len(alive)))) + increases[:, reach] @ alive
        self._add(self._looks + np.arange(1.0, duration), goes_on, totals)

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
        increases = law.mean(natural) * progress * law.stays(natural, progress - law.first_step, reach - 1.0)
        if len(self._tables) >= MOST_TABLES:
            self._tables.clear()
        self._tables[duration] = (stays, increases)
        return stays, increases

    def _moved(self, alive: FloatArray, duration: float, width: int) -> FloatArray:
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
    bias, masses, kernel, work = 0.0, np.ones(1), None, 0
    for begin, count in _blocks(region, 1.0):
        looks = begin + np.arange(float(count))
        lower, upper = limits_seen(region, frame, looks, natural)
        if kernel is None or not np.ptp(lower) == np.ptp(upper) == 0.0:
            points = points_between(lower, upper)
            kernel = kernel.with_points(points) if kernel else Kernel(natural, points)
        work += points * points * count
        if work > MOST_WORK:
            raise TooMuchWork(MOST_WORK, "multiplications")
        for look, low, high in zip(looks, lower, upper, strict=True):
            masses = kernel.step(masses, float(low), float(high))
            goes_on = float(masses.sum())
            bias += (natural * look * goes_on - float(masses @ kernel.nodes)) / (look * (look + 1.0))
            if goes_on < NEGLIGIBLE:
                return frame.sigma * bias
    return frame.sigma * bias


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
        if begun.goes_on < NEGLIGIBLE:
            break
    return begun.sum / begun.probability - 1.0 / rate


class _Lives:
    """Sums over the ends of a test of failures: their probability, and that times time/failures."""

    def __init__(self, rate: float) -> None:
        self._rate, self._law = rate, RateLaw()
        self._alive, self._lowest, self._time = np.ones(1), 0, 0.0
        self.sum, self.probability = 0.0, 0.0

    @property
    def goes_on(self) -> float:
        """The probability of still testing."""
        return float(self._alive.sum())

    def advance(self, stretch: Stretch) -> None:
        """Add the failures that end the test during a stretch, and what ends at its end."""
        room = stretch.room if stretch.room is not None else 0
        width, expected = room - self._lowest, self._rate * stretch.duration
        if width > WIDEST:
            raise TooMuchWork(WIDEST, "totals at once")
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

    def _end(self, totals: FloatArray, masses: FloatArray, moments: FloatArray) -> None:
        has_failed = totals > 0.0
        self.probability += float(masses[has_failed].sum())
        self.sum += float((moments[has_failed] / totals[has_failed]).sum())


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
