"""The walk of a test for drawing: evidence and totals against progress, thinned, with the region around it."""

from collections.abc import Iterable, Iterator
from dataclasses import dataclass, fields
from typing import Any

import numpy as np
from numpy.typing import NDArray

from service.domain.families import Increments
from service.domain.families.base import ORIGIN
from service.domain.gathering import Gathered
from service.domain.observing import first_exit, parts_of, walk_from
from service.domain.procedure import Procedure
from service.domain.state import Decision, State, Sum
from service.sequential.double import Double, FloatArray
from service.sequential.tables import UnitTable

REGION_POINTS = 201
# Points held before they are thinned.
HELD = 50_000


@dataclass(frozen=True)
class Path:
    """
    The counted observations of a test; arrays of shape (points,), the first point being the origin.

    `sequence` is the observation after which each point was reached.
    """

    sequence: NDArray[np.int64]
    sample_number: NDArray[np.int64]
    progress: FloatArray
    total: FloatArray
    log_likelihood_ratio: FloatArray


@dataclass(frozen=True)
class RegionPoint:
    """
    The limits of the total at one progress; None where no total of the family decides.

    `reject_below` is the lower limit of a two-sided region, whose upper one is `reject`. In a two-sided invariant plan
    `accept` is a limit of the magnitude.
    """

    progress: float
    accept: float | None
    reject: float | None
    reject_below: float | None


@dataclass(frozen=True)
class Walked:
    """
    What is kept of a walk that may go on.

    Attributes:
        state: Where it stands; decided where it has left the region.
    """

    path: Path
    state: State


def path_of(procedure: Procedure, log: Iterable[Gathered], points: int) -> Path:
    """
    Walk the log once more and keep at most `points` of its points.

    The origin and the last point stay, and so do the smallest and the largest evidence of each stretch left out; the
    stretches depend on the number of observations alone, never on how these were posted or read.

    Args:
        procedure: The plan, compiled.
        log: The observations as they count now, in order; voided ones are gaps.
        points: At least 4.
    """
    return gone_on(procedure, begun(procedure), log, points).path


def begun(procedure: Procedure) -> Walked:
    """A walk before its first observation."""
    zero = np.zeros(1)
    evidence = procedure.evidence.log(Double(zero, zero), Double(zero, zero)) + 0.0
    return Walked(Path(np.zeros(1, np.int64), np.zeros(1, np.int64), zero, zero, evidence), State())


def gone_on(procedure: Procedure, walked: Walked, log: Iterable[Gathered], points: int) -> Walked:
    """
    The walk with what was observed since; the same to the last bit as if all had been walked at once.

    Args:
        procedure: As for the walk so far.
        walked: Kept with at least `points` points.
        log: As for `path_of`; what the walk has seen already is passed over.
        points: At least 4.
    """
    return followed(procedure, walked, _unseen(procedure, walked.state.sequence, log), points)


def followed(
    procedure: Procedure, walked: Walked, observations: Iterable[tuple[NDArray[np.int64], Increments]], points: int
) -> Walked:
    """The same for increments with their sequences; none is taken after the decision."""
    if walked.state.is_decided:
        return walked
    pieces, held, state = [walked.path], len(walked.path.sequence), walked.state
    for sequences, increments in observations:
        piece, state = _walked(procedure, state, sequences, increments)
        pieces.append(piece)
        held += len(piece.sequence)
        if held > HELD:
            pieces = [thinned(_joined(pieces), points)]
            held = len(pieces[0].sequence)
        if state.is_decided:
            break
    return Walked(thinned(_joined(pieces), points), state)


def thinned(path: Path, points: int) -> Path:
    """
    At most `points` of a path: its ends, and the extremes of the evidence in stretches of equally many observations.

    Stretches are of 4, 8, 16 … sequences and nest, so a path that was thinned to more points before gives the same.
    """
    last = int(path.sequence[-1])
    if last < points:
        return path
    power = 2
    while 2 * (-(-last >> power)) + 2 > points:
        power += 1
    stretch = (path.sequence[1:] - 1) >> power
    begins = np.flatnonzero(np.diff(stretch, prepend=-1)) + 1
    kept = np.unique([0, *_extremes(path.log_likelihood_ratio, begins), len(path.sequence) - 1])
    return Path(*(column[kept] for column in _columns(path)))


def region_points(procedure: Procedure, reached: float, *, to_wall: bool = True) -> list[RegionPoint]:
    """The region from the origin to its wall, or a little past what was reached where it has none or is not wanted."""
    region = procedure.region
    horizon = region.wall.progress if region.wall is not None and to_wall else region.open_horizon(reached)
    progress = np.linspace(0.0, max(horizon, reached), REGION_POINTS)
    if isinstance(region, UnitTable):
        progress = np.array([0.0, *region.sample_numbers])
    elif not procedure.family.has_exposure:
        progress = np.unique(np.ceil(progress))
    return region_at(procedure, progress)


def region_at(procedure: Procedure, progress: FloatArray) -> list[RegionPoint]:
    """The limits at each of these places of a path; array of shape (points,)."""
    idle = procedure.family.idle_units(ORIGIN)
    limits = procedure.family.drawn(procedure.region, progress, procedure.known)
    return [
        _region_point(procedure, float(at) + idle, _finite(low), _finite(high))
        for at, low, high in zip(progress, limits.lower, limits.upper, strict=True)
    ]


def _region_point(procedure: Procedure, progress: float, lower: float | None, upper: float | None) -> RegionPoint:
    if procedure.is_two_sided:
        return RegionPoint(progress, None, upper, lower)
    if procedure.has_two_directions:
        return RegionPoint(progress, lower, upper, None if upper is None else -upper)
    return (
        RegionPoint(progress, lower, upper, None) if procedure.is_upward else RegionPoint(progress, upper, lower, None)
    )


def _unseen(procedure: Procedure, seen: int, log: Iterable[Gathered]) -> Iterator[tuple[NDArray[np.int64], Increments]]:
    """The observations after the sequence `seen`, in parts; none is empty."""
    for sequences, document in log:
        increments = procedure.family.read(document, procedure.known)
        known = int(np.searchsorted(sequences, seen, side="right"))
        for begin, part in parts_of(procedure, increments, known):
            yield sequences[begin : begin + len(part.total)], part


def _walked(
    procedure: Procedure, state: State, sequences: NDArray[np.int64], increments: Increments
) -> tuple[Path, State]:
    """The points of a walk from a state on, and the state after them."""
    walk = walk_from(procedure, state, increments)
    exit_ = first_exit(procedure, walk, increments)
    count = len(increments.total) if exit_ is None else exit_.index + 1
    progress, total = _cut(walk.progress, count), _cut(walk.total, count)
    if exit_ is not None:
        progress, total = _ending_in(progress, exit_.progress), _ending_in(total, exit_.total)
    units = state.sample_number + np.cumsum(increments.units[:count])
    evidence = procedure.evidence.log(progress, total)
    carried = tuple(_cut(sums, count) for sums in walk.carried)
    shown = procedure.family.displayed(carried, total, procedure.known)
    after = State(
        sequence=int(sequences[count - 1]),
        sample_number=int(units[-1]),
        exposure=_last(progress),
        total=_last(total),
        carried=tuple(_last(sums) for sums in carried),
        decision=Decision.CONTINUE if exit_ is None else exit_.decision,
    )
    return Path(sequences[:count], units, progress.value, shown.value, evidence), after


def _columns(path: Path) -> tuple[NDArray[Any], ...]:
    return tuple(getattr(path, field.name) for field in fields(path))


def _joined(pieces: list[Path]) -> Path:
    return Path(*(np.concatenate(column) for column in zip(*map(_columns, pieces), strict=True)))


def _extremes(evidence: FloatArray, begins: NDArray[np.intp]) -> NDArray[np.intp]:
    """The first smallest and the first largest of each stretch; the origin, before all of them, belongs to none."""
    counts = np.diff(begins, append=len(evidence))
    found = []
    for extreme in (np.minimum, np.maximum):
        is_one = evidence[1:] == np.repeat(extreme.reduceat(evidence, begins), counts)
        places = np.flatnonzero(is_one) + 1
        stretch = np.searchsorted(begins, places, side="right")
        found.append(places[np.unique(stretch, return_index=True)[1]])
    return np.concatenate(found)


def _cut(sums: Double, count: int) -> Double:
    return Double(sums.high[:count], sums.low[:count])


def _ending_in(sums: Double, last: Double) -> Double:
    """The same sums with the last one replaced by where the walk really ended."""
    return Double(np.append(sums.high[:-1], last.high), np.append(sums.low[:-1], last.low))


def _last(sums: Double) -> Sum:
    return Sum(float(sums.high[-1]), float(sums.low[-1]))


def _finite(value: np.float64) -> float | None:
    return float(value) if np.isfinite(value) else None
