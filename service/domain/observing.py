"""
The one heart: observations in, the next state out. Pure.

The same function serves a live submission, a rehearsal of historical data and an audit of the log.
"""

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from datetime import datetime
from typing import Any

import numpy as np

from service.domain.errors import Fault, InvalidObservations
from service.domain.families import Increments
from service.domain.families.base import Start
from service.domain.procedure import Procedure
from service.domain.state import Decided, Decision, State, Sum
from service.domain.statistics import ABOVE, BELOW
from service.sequential.curved import CurvedRegion
from service.sequential.double import Double, FloatArray, running_sum, two_sum
from service.sequential.tables import UnitTable
from service.sequential.walk import Exit, first_exit_at_reports, first_exit_in_time

# Whole numbers up to here are exact in a double.
LARGEST_TOTAL = 2.0**53
# Observations whose evidence is found together where each takes a quadrature.
PIECE = 1024


@dataclass(frozen=True)
class Position:
    """Where a walk stands: after, or within, the observation at `index` of its submission."""

    index: int
    progress: Double
    total: Double


@dataclass(frozen=True)
class Walk:
    """The walk of one submission: running progress, total and carried sums after each of its observations."""

    progress: Double
    total: Double
    carried: tuple[Double, ...] = ()

    @property
    def end(self) -> Position:
        """After its last observation."""
        last = len(self.total.value) - 1
        return Position(last, self.progress.at(last), self.total.at(last))


def observe(procedure: Procedure, state: State, document: Mapping[str, Any], at: datetime) -> State:
    """
    Take the observations of one submission one by one, and stop counting where they decide.

    Args:
        procedure: The plan, compiled.
        state: The state before.
        document: The submission as posted, `{"values": [...]}` or `{"observations": [{...}]}`, of sound form.
        at: When it was received; it becomes the time of a decision that falls in it.

    Raises:
        InvalidObservations: An observation cannot be right; the fault names it.
    """
    increments = procedure.family.read(document, procedure.known)
    for _, part in parts_of(procedure, increments):
        state = _after(procedure, state, part, at)
    return state


def parts_of(procedure: Procedure, increments: Increments, begin: int = 0) -> Iterator[tuple[int, Increments]]:
    """
    Increments from `begin` on, in parts where each look is dear: what comes after the decision need not be looked at.

    Each comes with the place of its first observation.
    """
    count = len(increments.total)
    step = PIECE if procedure.family.is_invariant else max(1, count)
    for start in range(begin, count, step):
        part = slice(start, start + step)
        carried = tuple(terms[part] for terms in increments.carried)
        yield start, Increments(increments.units[part], increments.progress[part], increments.total[part], carried)


def _after(procedure: Procedure, state: State, increments: Increments, at: datetime) -> State:
    """The state after increments that are taken one by one."""
    count = len(increments.total)
    if state.is_decided:
        return replace(state, sequence=state.sequence + count, overrun=state.overrun + count)
    walk = walk_from(procedure, state, increments)
    _check_rows(procedure, state, walk)
    exit_ = first_exit(procedure, walk, increments)
    if exit_ is None:
        return replace(_moved(procedure, state, increments, walk, walk.end), sequence=state.sequence + count)
    position = Position(exit_.index, exit_.progress, exit_.total)
    moved = _moved(procedure, state, increments, walk, position)
    return replace(
        moved,
        sequence=state.sequence + count,
        decision=exit_.decision,
        decided=_decided(procedure, state, moved, exit_, at),
        overrun=count - exit_.index - 1,
    )


def walk_from(procedure: Procedure, state: State, increments: Increments) -> Walk:
    """
    Running progress and total from where the state stands, as if nothing could stop the walk.

    Raises:
        InvalidObservations: The sums grow past what can be kept exactly.
    """
    family = procedure.family
    if family.carries:
        before = zip(_carried(procedure, state), increments.carried, strict=True)
        carried = tuple(running_sum(_double(start), terms) for start, terms in before)
        walk = Walk(*family.place(carried, procedure.known), carried)
    else:
        start = state.exposure if family.has_exposure else Sum(float(state.sample_number))
        progress = running_sum(_double(start), increments.progress)
        walk = Walk(progress, running_sum(_double(state.total), increments.total))
    _check_size(procedure, walk.progress.value, walk.total.value)
    return walk


def standing_of(procedure: Procedure, state: State) -> Start:
    """The point of the region at which a state stands."""
    family = procedure.family
    if family.carries:
        sums = [Double(np.array([number.high]), np.array([number.low])) for number in _carried(procedure, state)]
        progress, total = family.place(sums, procedure.known)
        rounded = [two_sum(number.high, number.low) for number in sums]
        values = tuple(float(number.high[0]) for number in rounded)
        rest = tuple(float(number.low[0]) for number in rounded)
        return Start(float(progress.value[0]), float(total.value[0]), values, rest)
    progress_of = state.exposure.value if family.has_exposure else float(state.sample_number)
    return Start(progress_of, state.total.value)


def direction_of_rejection(procedure: Procedure, state: State) -> str | None:
    """Of a two-sided plan's rejection: on which side of h0 the parameter lies; None for others."""
    if not procedure.has_two_directions or state.decision is not Decision.REJECT:
        return None
    standing, region = standing_of(procedure, state), procedure.region
    if isinstance(region, CurvedRegion):
        is_above = standing.total > float(region.evidence.expected(np.array([standing.progress]))[0])
        return ABOVE if is_above != procedure.family.parameter_lowers_total else BELOW
    estimate = procedure.family.estimate(standing, procedure.known)
    return ABOVE if estimate is None or estimate > procedure.hypotheses[0] else BELOW


def first_exit(procedure: Procedure, walk: Walk, increments: Increments) -> Exit | None:
    """Where the walk leaves the region, watched as the family is."""
    if procedure.family.is_watched_in_time:
        return first_exit_in_time(procedure.region, walk.progress, walk.total, increments.total)
    return first_exit_at_reports(procedure.region, walk.progress, walk.total)


def _moved(procedure: Procedure, state: State, increments: Increments, walk: Walk, position: Position) -> State:
    """The state whose walk of this submission stands at this position."""
    evidence = float(procedure.evidence.log(position.progress, position.total))
    if not math.isfinite(evidence):
        raise InvalidObservations([Fault("", "the sums are too large for the plan's likelihood ratio")])
    carried = tuple(sums.at(position.index) for sums in walk.carried)
    return replace(
        state,
        sample_number=state.sample_number + int(np.sum(increments.units[: position.index + 1])),
        exposure=_sum(position.progress) if procedure.family.has_exposure else state.exposure,
        total=_sum(procedure.family.displayed(carried, position.total, procedure.known)),
        log_likelihood_ratio=evidence + 0.0,  # a negative zero becomes a plain one
        carried=tuple(_sum(sums) for sums in carried),
    )


def _decided(procedure: Procedure, before: State, moved: State, exit_: Exit, at: datetime) -> Decided:
    return Decided(
        sequence=before.sequence + exit_.index + 1,
        sample_number=moved.sample_number,
        exposure=moved.exposure.value if procedure.family.has_exposure else None,
        at=at,
        cause=exit_.cause,
    )


def _check_rows(procedure: Procedure, state: State, walk: Walk) -> None:
    """No group may pass over a row of a table: what would have been decided there would never be known."""
    region = procedure.region
    if not isinstance(region, UnitTable):
        return
    ends = walk.progress.value
    begins = np.concatenate([[float(state.sample_number)], ends[:-1]])
    rows = np.array(region.sample_numbers, float)
    next_row = rows[np.minimum(np.searchsorted(rows, begins, side="right"), len(rows) - 1)]
    passed = np.flatnonzero((ends > next_row) & (begins < next_row))
    if passed.size:
        i = int(passed[0])
        where = f"{next_row[i] - begins[i]:.0f} units lead to sample number {next_row[i]:.0f}"
        rule = f"a group may not pass over a row of the table: {where}"
        field = "/size" if "size" in procedure.family.fields else ""
        raise InvalidObservations([Fault(f"/observations/{i}{field}", rule)])


def _check_size(procedure: Procedure, progress: FloatArray, total: FloatArray) -> None:
    family = procedure.family
    too_large = not family.has_exposure and progress[-1] > LARGEST_TOTAL
    if too_large or (family.span.is_integer and total[-1] > LARGEST_TOTAL):
        raise InvalidObservations([Fault("", "the totals would pass 2**53 and no longer be exact")])


def _carried(procedure: Procedure, state: State) -> tuple[Sum, ...]:
    """The sums so far; all are zero before the first observation."""
    return state.carried or (Sum(),) * len(procedure.family.carries)


def _double(number: Sum) -> Double:
    return Double.of(number.high, number.low)


def _sum(number: Double) -> Sum:
    return Sum(float(number.high), float(number.low))
