"""
The region cut into stretches over which it does not change, for totals that are whole numbers.

Quantity: for each stretch its duration, the totals that go on during it, and the totals that end at its end.
Method: where the total is looked at in steps, runs of looks with equal limits; where it is watched in time, the moments
at which a limit passes a whole number.
Accuracy: that of the region.
Cost: a few operations for each look, or for each whole number passed.
Source: Aroian (1968), Technometrics 10, 125-132; for continuous time Dvoretzky, Kiefer and Wolfowitz (1953), Annals of
Mathematical Statistics 24, 254-264.
"""

import math
from collections.abc import Callable, Iterator
from typing import NamedTuple

import numpy as np

from service.sequential.double import FloatArray
from service.sequential.exact.characteristics import TooMuchWork
from service.sequential.region import Region, looks_to_wall

MOST_LOOKS = 10_000_000
# Totals that are followed at once.
WIDEST = 4_000
SMALLEST_BLOCK, LARGEST_BLOCK = 256, 65_536
# Totals whose moments are asked for at a time.
TOTALS = 64

# Rounding of a moment, relative, and the durations that are compared: two parallel lines make only a few.
ROUNDING, FEW = 1e-15, 8

NO_CUT = -1


class Stretch(NamedTuple):
    """
    A piece of sampling between two changes of the region.

    Attributes:
        duration: Looks, or time.
        room: Totals below it go on while the stretch lasts, all others have ended above; None where all go on.
        cut: Totals up to it end below when the stretch ends; NO_CUT where none do.
        top: Where the wall stands, totals from it on end above, and those between it and the cut end between.
        is_last: Nothing goes on after it.
    """

    duration: float
    room: int | None
    cut: int
    top: int | None
    is_last: bool


def stretches_of_looks(region: Region, step: float, progress: float) -> Iterator[Stretch]:
    """
    Stretches of a region looked at after each `step` of progress, from `progress` on.

    Raises:
        TooMuchWork: More than 10 million looks.
    """
    last = math.inf if region.wall is None else looks_to_wall(region.wall, step, progress)
    begin, block, highest_cut = 1, SMALLEST_BLOCK, NO_CUT
    while begin <= last:
        if begin > MOST_LOOKS:
            raise TooMuchWork(MOST_LOOKS, "looks")
        looks = np.arange(begin, min(begin + block, last + 1), dtype=np.float64)
        limits = region.limits(progress + step * looks)
        cuts = np.maximum.accumulate(np.maximum(limits.lower, highest_cut))
        ends = np.empty(len(looks), dtype=bool)
        ends[:-1] = limits.upper[1:] != limits.upper[:-1]
        ends[-1] = True
        ends |= np.diff(cuts, prepend=highest_cut) > 0
        before = 0
        for end in np.flatnonzero(ends):
            room = _whole(float(limits.upper[end]))
            yield Stretch(float(end + 1 - before), room, int(cuts[end]), room, is_last=bool(looks[end] == last))
            before = int(end) + 1
        highest_cut = int(cuts[-1])
        begin, block = begin + len(looks), min(2 * block, LARGEST_BLOCK)


def stretches_of_time(region: Region, progress: float, total: int) -> Iterator[Stretch]:
    """
    Stretches of a region watched in continuous time, from this progress and total on.

    Raises:
        TooMuchWork: More than 4,000 totals go on at once.
    """
    wall = math.inf if region.wall is None else region.wall.progress
    cap = math.inf if region.wall is None or region.wall.cap is None else region.wall.cap
    lower_at, upper_at = _Moments(region.lower_reached_at), _Moments(region.upper_left_at)
    room: int | None = total + 1
    if math.isinf(cap) and upper_at[total + WIDEST] == -math.inf:  # no total is ever above
        room = None
    while room is not None and room < cap and upper_at[room] <= progress:
        room += 1
        if room - total > WIDEST:
            raise TooMuchWork(WIDEST, "totals at once")
    now, lowest = progress, total
    durations = _Durations()
    while True:
        falls_at = lower_at[lowest]
        rises_at = upper_at[room] if room is not None and room < cap else math.inf
        moment = min(falls_at, rises_at, wall)
        if moment == wall:
            limits = region.limits(np.array([wall]))
            cut, top = (_whole(float(limit[0])) for limit in (limits.lower, limits.upper))
            yield Stretch(wall - now, room, NO_CUT if cut is None else cut, top, is_last=True)
            return
        duration = durations.known_as(moment - now, moment)
        yield Stretch(duration, room, lowest if moment == falls_at else NO_CUT, room, is_last=False)
        now = moment
        lowest += moment == falls_at
        if room is not None:
            room += moment == rises_at


def _whole(limit: float) -> int | None:
    return int(limit) if math.isfinite(limit) else None


class _Moments:
    """The moments of whole totals, asked for many at a time."""

    def __init__(self, moments_of: Callable[[FloatArray], FloatArray]) -> None:
        self._moments_of = moments_of
        self._blocks: dict[int, list[float]] = {}

    def __getitem__(self, total: int) -> float:
        block, place = divmod(total, TOTALS)
        if block not in self._blocks:
            totals = np.arange(block * TOTALS, (block + 1) * TOTALS, dtype=np.float64)
            self._blocks[block] = [float(moment) for moment in self._moments_of(totals)]
        return self._blocks[block][place]


class _Durations:
    """Durations that differ only by the rounding of the moments they lie between, made one, so as to be known again."""

    def __init__(self) -> None:
        self._seen: list[float] = []

    def known_as(self, duration: float, moment: float) -> float:
        """The duration already seen within rounding of the moment, or this one."""
        for seen in self._seen:
            if abs(seen - duration) <= ROUNDING * moment:
                return seen
        if len(self._seen) < FEW:
            self._seen.append(duration)
        return duration
