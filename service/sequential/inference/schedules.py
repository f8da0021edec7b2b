"""
The looks that a test has taken, cut into stages over which the region does not change, for whole totals.

Quantity: stages up to the moment of the decision, and what came last.
Method: totals never fall, so whatever is beyond the upper limit at the end of a stage has left during it, and a total
above the highest lower limit so far stays above; consecutive looks with equal limits are one stage, however far apart.
Accuracy: that of the region.
Cost: a few operations for each look.
Source: Aroian (1968), Technometrics 10, 125-132; for continuous time Dvoretzky, Kiefer and Wolfowitz (1953), Annals of
Mathematical Statistics 24, 254-264.
"""

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from service.sequential.double import FloatArray
from service.sequential.exact.stretches import stretches_of_time
from service.sequential.region import TIE, Region


class Stage(NamedTuple):
    """
    A piece of sampling between two changes of the region.

    Attributes:
        begin, duration: In progress.
        room: Totals from it on end above during the stage; infinite where none do.
        cut: Totals up to it end below when the stage ends; minus infinity where none do.
    """

    begin: float
    duration: float
    room: float
    cut: float


@dataclass(frozen=True)
class Schedule:
    """
    What came before the decision.

    Attributes:
        stages: In order, the last one ending at `begin`.
        begin: Where the last look, or the moment of the decision, began.
        duration: The progress of the last look; zero where the total is watched in time.
    """

    stages: tuple[Stage, ...]
    begin: float
    duration: float


def schedule_of_looks(region: Region, looks: FloatArray) -> Schedule:
    """
    The stages of a test that is looked at now and then.

    Args:
        looks: Array of shape (looks,): the progress at each look taken, the deciding one last.
    """
    if len(looks) == 1:
        return Schedule((), 0.0, float(looks[0]))
    before = looks[:-1]
    limits = region.limits(before)
    # Limits that are no whole numbers are those of the totals beyond them.
    cuts, rooms = np.maximum.accumulate(np.floor(limits.lower)), np.ceil(limits.upper)
    ends = np.ones(len(before), dtype=bool)
    ends[:-1] = rooms[1:] != rooms[:-1]
    ends |= cuts > np.concatenate([[-np.inf], cuts[:-1]])
    places = np.flatnonzero(ends)
    moments = np.concatenate([[0.0], before[places]])
    rows = zip(moments[:-1], np.diff(moments), rooms[places], cuts[places], strict=True)
    stages = tuple(Stage(*(float(number) for number in row)) for row in rows)
    return Schedule(stages, float(before[-1]), float(looks[-1] - before[-1]))


def schedule_of_time(region: Region, until: float) -> Schedule:
    """The stages of a test watched in continuous time from the origin; what happens at `until` itself is left out."""
    stages, now = [], 0.0
    for stretch in stretches_of_time(region, 0.0, 0):
        end = now + stretch.duration
        room = math.inf if stretch.room is None else float(stretch.room)
        if end >= until * (1.0 - TIE):
            stages.append(Stage(now, until - now, room, -math.inf))
            break
        stages.append(Stage(now, stretch.duration, room, float(stretch.cut) if stretch.cut >= 0 else -math.inf))
        now = end
    return Schedule(tuple(stages), until, 0.0)
