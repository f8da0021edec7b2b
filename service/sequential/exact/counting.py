"""
Exact figures of a test whose total is a whole number, looked at in steps or watched in time.

Quantity: probabilities of both decisions, mean, standard deviation and quantiles of the further progress.
Method: between two changes of the limits the set of totals that go on is constant, and the probabilities of the totals
move by one convolution, however long the stretch; all parameters at once. Totals only grow, so whatever is beyond the
upper limit at the end of a stretch has left during it. Without a wall it runs until the probability of still sampling
is below 1e-13.
Accuracy: rounding, about 1e-15 for each stretch, and the probability that is no longer followed.
Cost: stretches times the squared width of the region, for each parameter.
Source: Aroian (1968), Technometrics 10, 125-132 (direct method); Dvoretzky, Kiefer and Wolfowitz (1953), Annals of
Mathematical Statistics 24, 254-264; Epstein and Sobel (1955), Annals of Mathematical Statistics 26, 82-93.
"""

from collections.abc import Iterator
from typing import NamedTuple

import numpy as np

from service.sequential.double import FloatArray, IndexArray
from service.sequential.exact.characteristics import LEVELS, NEGLIGIBLE, QUANTILES, Characteristics, TooMuchWork, spread
from service.sequential.exact.processes import Process
from service.sequential.exact.stretches import NO_CUT, WIDEST, Stretch, stretches_of_looks, stretches_of_time
from service.sequential.region import Region

# Multiplications of one computation.
MOST_WORK = 800_000_000
# A stretch costs about as much as so many multiplications, however narrow it is.
STRETCH_WORK = 2_000
# Bisections of a stretch of time: to thirteen digits of it.
BISECTIONS = 44
# A convolution of at most so many products is done by a matrix; so many matrices are kept.
SMALL, MOST_MATRICES = 500_000, 200
# Where nothing ends above, the furthest totals that together have this probability are counted there all the same.
UNFOLLOWED = 1e-17
# Stretches are gathered after so many of them, or so many numbers.
BATCH_STRETCHES, BATCH = 64, 2_000_000


def counting_characteristics(
    region: Region, process: Process, progress: float = 0.0, total: int = 0
) -> Characteristics:
    """
    Follow the totals from one point of the region until everything is decided.

    Args:
        region: The continuation region, of whole totals.
        process: How totals grow under the true parameters.
        progress, total: Where sampling stands, inside the region; the figures are of what is still to come.

    Raises:
        TooMuchWork: The region is too wide, or too long, to be followed.
    """
    course = _Course(process, total)
    for stretch in _stretches(region, process, progress, total):
        course.advance(stretch)
        if course.is_over:
            break
    return course.summary()


def _stretches(region: Region, process: Process, progress: float, total: int) -> Iterator[Stretch]:
    if process.step > 0.0:
        return stretches_of_looks(region, process.step, progress)
    return stretches_of_time(region, progress, total)


class _Piece(NamedTuple):
    """
    One stretch gone through.

    Attributes:
        time: When it began.
        duration: How long it was.
        width: Places within its room, counted from the lowest total.
        alive: Array of shape (points, 1, totals): the probabilities at its beginning.
        below, between: Arrays of shape (points,): what ended below, and between the limits of the wall, at its end.
    """

    time: float
    duration: float
    width: int
    alive: FloatArray
    below: FloatArray
    between: FloatArray


class _Course:
    """
    The probabilities of the totals that go on, moved from stretch to stretch.

    The loop does as little as it can for each stretch; sums over many stretches are made together, in `_gather`.
    """

    def __init__(self, process: Process, total: int) -> None:
        points = process.points
        self._process, self._lowest = process, total
        self._alive, self._nothing = np.ones((points, 1, 1)), np.zeros(points)
        self._time, self._stretches, self._work, self._is_over = 0.0, 0, 0, False
        self._below, self._between, self._above = np.zeros(points), np.zeros(points), np.zeros(points)
        self._mean, self._second = np.zeros(points), np.zeros(points)
        self._quantiles = np.full((points, len(QUANTILES)), np.nan)
        self._pieces: list[_Piece] = []
        self._matrices: dict[tuple[float, int, int], FloatArray] = {}
        self._stays: dict[float, tuple[FloatArray, FloatArray]] = {}

    @property
    def is_over(self) -> bool:
        """True once nothing worth following is left."""
        return self._is_over

    def advance(self, stretch: Stretch) -> None:
        """Move by one stretch: what passes its room ends above, what its cut reaches ends below."""
        width = self._width(stretch)
        moved = self._moved(stretch.duration, width)
        below, cut = self._nothing, stretch.cut + 1 - self._lowest
        if cut > 0 and stretch.cut > NO_CUT:
            below = moved[:, 0, :cut].sum(axis=1)
            self._lowest, moved_on = self._lowest + min(cut, width), moved[:, :, cut:]
        else:
            moved_on = moved
        if stretch.room is None:
            moved_on = _without_the_furthest(moved_on)
        between = self._nothing
        if stretch.is_last:
            count = None if stretch.top is None else max(0, stretch.top - self._lowest)
            between = moved_on[:, 0, :count].sum(axis=1)
        self._pieces.append(_Piece(self._time, stretch.duration, width, self._alive, below, between))
        self._alive = moved_on[:, :, :0] if stretch.is_last else moved_on
        self._time += stretch.duration
        if stretch.is_last or self._alive.shape[2] == 0 or self._is_batch_full(width):
            self._gather()

    def summary(self) -> Characteristics:
        """The figures once all is over."""
        scale = self._process.step or 1.0
        rest = self._alive.sum(axis=(1, 2))
        is_left = rest > 0.0
        # What is no longer followed would still last about as long as it took to become negligible.
        left_out = float(np.max(rest[is_left] * (1.0 + self._time / self._mean[is_left]), initial=0.0))
        bound = left_out + (self._stretches + 1) * 8.0 * float(np.finfo(float).eps)
        deviation = scale * spread(self._mean, self._second)
        quantiles = scale * self._quantiles
        return Characteristics(
            self._below, self._between, self._above, scale * self._mean, deviation, quantiles, bound, self._work
        )

    def _width(self, stretch: Stretch) -> int:
        """The totals that can go on during a stretch, from the lowest; counts the work too."""
        width = count = self._alive.shape[2]
        if self._process.largest is not None:
            width += self._process.largest * int(stretch.duration)
        elif stretch.room is None:
            width += self._process.furthest(stretch.duration)
        if stretch.room is not None:
            room = max(0, stretch.room - self._lowest)
            width = room if self._process.largest is None else min(width, room)
        self._stretches += 1
        self._work += self._process.points * width * count + STRETCH_WORK
        if width > WIDEST:
            raise TooMuchWork(WIDEST, "totals at once")
        if self._work > MOST_WORK:
            raise TooMuchWork(MOST_WORK, "multiplications")
        return width

    def _moved(self, duration: float, width: int) -> FloatArray:
        """The totals after a stretch, those below `width` places; array of shape (points, 1, width)."""
        points, _, count = self._alive.shape
        if points * count * width > SMALL:
            return _convolved(self._alive, self._process.increases(duration, width))
        matrix = self._matrices.get((duration, count, width))
        if matrix is None:
            increases = self._process.increases(duration, max(count, width))
            i, j = np.arange(count)[:, np.newaxis], np.arange(width)
            padded = np.concatenate([increases, np.zeros((points, 1))], axis=1)
            matrix = padded[:, np.where(j >= i, j - i, -1)]
            if len(self._matrices) < MOST_MATRICES:
                self._matrices[duration, count, width] = matrix
        moved: FloatArray = self._alive @ matrix
        return moved

    def _is_batch_full(self, width: int) -> bool:
        return len(self._pieces) * self._process.points * width >= BATCH or len(self._pieces) >= BATCH_STRETCHES

    def _gather(self) -> None:
        """Add up what the stretches since the last time contribute."""
        pieces, widest = self._pieces, max(1, *(piece.width for piece in self._pieces))
        # A total is placed by its reach: how far it may still rise within the room of its stretch.
        reaches = np.zeros((len(pieces), self._process.points, widest))
        beyond = np.zeros((len(pieces), self._process.points))
        for k, piece in enumerate(pieces):
            inside = piece.alive[:, 0, : piece.width]
            reaches[k, :, piece.width - inside.shape[1] : piece.width] = inside[:, ::-1]
            if piece.alive.shape[2] > piece.width:  # beyond the room already: still there until the next look
                beyond[k] = piece.alive[:, 0, piece.width :].sum(axis=1)
        self._gather_moments(reaches, beyond, widest)
        below, between = np.array([piece.below for piece in pieces]), np.array([piece.between for piece in pieces])
        before = reaches.sum(axis=2) + beyond
        last = self._alive.sum(axis=(1, 2))
        rest = np.concatenate([before[1:], last[np.newaxis]])
        ends_alone = self._alive.shape[2] == 0 and not np.any(last)
        after = rest + below + between
        self._below += below.sum(axis=0)
        self._between += between.sum(axis=0)
        self._above += (before - after).sum(axis=0)
        self._gather_quantiles(reaches, after, rest)
        self._pieces = []
        self._is_over = ends_alone or float(np.max(last)) < NEGLIGIBLE

    def _gather_moments(self, reaches: FloatArray, beyond: FloatArray, widest: int) -> None:
        """Add to the first two moments of the time sampled."""
        times = np.array([[piece.time] for piece in self._pieces])
        stays = [self._stay(piece.duration, widest) for piece in self._pieces]
        stayed = np.einsum("kpr,kpr->kp", reaches, np.array([stay for stay, _ in stays])) + beyond
        later = np.einsum("kpr,kpr->kp", reaches, np.array([moment for _, moment in stays]))
        self._mean += stayed.sum(axis=0)
        self._second += 2.0 * (times * stayed + later).sum(axis=0)
        if self._process.step > 0.0:
            self._second += stayed.sum(axis=0)

    def _stay(self, duration: float, width: int) -> tuple[FloatArray, FloatArray]:
        """The stays of a stretch; stretches of equal length come again and again."""
        known = self._stays.get(duration)
        if known is None or known[0].shape[1] < width:
            known = self._process.stays(duration, width)
            self._stays[duration] = known
        return known[0][:, :width], known[1][:, :width]

    def _gather_quantiles(self, reaches: FloatArray, after: FloatArray, rest: FloatArray) -> None:
        """Find the quantiles that fall into these stretches, or at their ends."""
        starts = np.array([piece.time for piece in self._pieces])
        durations = np.array([piece.duration for piece in self._pieces])
        reached = rest[:, :, np.newaxis] <= LEVELS
        points, columns = np.nonzero(np.isnan(self._quantiles) & reached.any(axis=0))
        if not len(points):
            return
        k, levels = reached.argmax(axis=0)[points, columns], LEVELS[columns]
        at_end = after[k, points] > levels
        inside = self._moments_inside(points, reaches[k, points], durations[k], levels)
        self._quantiles[points, columns] = starts[k] + np.where(at_end, durations[k], inside)

    def _moments_inside(
        self, points: IndexArray, reaches: FloatArray, durations: FloatArray, levels: FloatArray
    ) -> FloatArray:
        """When, within its stretch, sampling first goes on with at most its level; array of shape (points,)."""
        process, width = self._process.only(points), reaches.shape[1]
        is_stepwise = process.step > 0.0
        low, high = np.zeros(len(points)), durations
        for _ in range(BISECTIONS):
            middle = np.floor(0.5 * (low + high)) if is_stepwise else 0.5 * (low + high)
            if is_stepwise and np.all(high - low <= 1.0):
                break
            within = np.cumsum(process.increases(middle, width), axis=1)
            # At its beginning a stretch is never over, whatever lies beyond its room.
            is_early = ((reaches * within).sum(axis=1) > levels) | (middle <= low)
            low, high = np.where(is_early, middle, low), np.where(is_early, high, middle)
        return high


def _convolved(alive: FloatArray, increases: FloatArray) -> FloatArray:
    """The convolution of wide rows, increase by increase, cut to the width of `increases`."""
    (points, _, count), width = alive.shape, increases.shape[1]
    moved = np.zeros((points, 1, width))
    for increase in np.flatnonzero(increases.any(axis=0)):
        reach = min(count, width - int(increase))
        moved[:, 0, increase : increase + reach] += alive[:, 0, :reach] * increases[:, increase : increase + 1]
    return moved


def _without_the_furthest(alive: FloatArray) -> FloatArray:
    """The totals without those at the end that have next to no probability under any parameter."""
    beyond = np.cumsum(alive[:, 0, ::-1].max(axis=0))[::-1]
    kept: FloatArray = alive[:, :, : max(1, int(np.count_nonzero(beyond > UNFOLLOWED)))]
    return kept
