"""
Walks of long tests, kept thinned in the memory of this process, so that drawing one again reads only what is new.

A walk is that of one test under its plan with so many corrections: what was posted never changes, so it can only go on
from where it ended; a correction begins another one. Whatever is kept, the answer is the same.
"""

import threading
from collections import OrderedDict

from service.domain.gathering import gathered
from service.domain.path import Path, Walked, begun, gone_on, thinned
from service.domain.plan import Plan
from service.domain.procedure import procedure_of
from service.domain.sequential_test import SequentialTest
from service.storage.reader import Reader

# Points that are kept of a walk, some 200 kB, and the most that may be asked for.
MOST_POINTS = 5000
# Walks that are kept at most; those asked for longest ago go first.
MOST_WALKS = 64
# Walks of fewer observations are walked again each time: that takes a few milliseconds.
SHORT = 2000

Named = tuple[str, str, int]


class Walks:
    """The walks of this process; safe from every thread."""

    def __init__(self) -> None:
        self._kept: OrderedDict[Named, Walked] = OrderedDict()
        self._lock = threading.Lock()

    def path_of(self, reader: Reader, test: SequentialTest, plan: Plan, points: int) -> Path:
        """
        The walk of a test as it was read, thinned.

        Args:
            reader: Reads its log.
            test, plan: As read together.
            points: From 4 to `MOST_POINTS`.
        """
        procedure, state = procedure_of(plan), test.state
        through = state.decided.sequence if state.decided else state.sequence
        named = (test.key, plan.fingerprint, test.corrections)
        walked = self._found(named, through) or begun(procedure)
        if walked.state.sequence < through:
            log = gathered(reader.log.bodies(test, walked.state.sequence, through))
            walked = gone_on(procedure, walked, log, MOST_POINTS)
            self._keep(named, walked)
        return thinned(walked.path, points)

    def _found(self, named: Named, through: int) -> Walked | None:
        """The walk so far; None where it has gone on further than the test that was read."""
        with self._lock:
            walked = self._kept.get(named)
            if walked is None or walked.state.sequence > through:
                return None
            self._kept.move_to_end(named)
            return walked

    def _keep(self, named: Named, walked: Walked) -> None:
        if walked.state.sequence < SHORT:
            return
        with self._lock:
            other = self._kept.get(named)
            if other is None or other.state.sequence < walked.state.sequence:
                self._kept[named] = walked
            self._kept.move_to_end(named)
            while len(self._kept) > MOST_WALKS:
                self._kept.popitem(last=False)
