"""The walk of a test for drawing: evidence and totals against progress, thinned, with the region around it."""

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from service.domain.families import Increments
from service.domain.families.base import ORIGIN
from service.domain.observing import first_exit, walk_from
from service.domain.procedure import Procedure
from service.domain.state import State, Sum
from service.sequential.double import Double, FloatArray
from service.sequential.tables import UnitTable
from service.sequential.walk import Exit

REGION_POINTS = 201


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


def path_of(procedure: Procedure, documents: Iterable[tuple[int, Mapping[str, Any]]], points: int) -> Path:
    """
    Walk the log once more and keep at most `points` of its points.

    First, last and crossing stay, and so do the smallest and the largest evidence of each stretch left out.

    Args:
        procedure: The plan, compiled.
        documents: The observations of the test that count, some at a time and in order, with the first sequence.
        points: At least 4.
    """
    read = ((first, procedure.family.read(document, procedure.known)) for first, document in documents)
    return thinned(joined([piece for piece, _ in pieces_of(procedure, read)]), points)


def pieces_of(
    procedure: Procedure, submissions: Iterable[tuple[int, Increments]]
) -> Iterator[tuple[Path, Exit | None]]:
    """
    The walk piece by piece, the origin first, until it leaves the region; the last piece then comes with its exit.

    Args:
        procedure: The plan, compiled.
        submissions: Increments in order, with the first sequence of each; no more are taken after the exit.
    """
    state = State()
    yield _origin(procedure), None
    for first, increments in submissions:
        walk = walk_from(procedure, state, increments)
        exit_ = first_exit(procedure, walk, increments)
        count = len(increments.total) if exit_ is None else exit_.index + 1
        progress, total = _cut(walk.progress, count), _cut(walk.total, count)
        if exit_ is not None:
            progress, total = _ending_in(progress, exit_.progress), _ending_in(total, exit_.total)
        units = state.sample_number + np.cumsum(increments.units[:count])
        sequence = first + np.arange(count)
        evidence = procedure.evidence.log(progress, total)
        shown = procedure.family.displayed([_cut(sums, count) for sums in walk.carried], total, procedure.known)
        yield Path(sequence, units, progress.value, shown.value, evidence), exit_
        if exit_ is not None:
            return
        state = State(
            sequence=int(sequence[-1]),
            sample_number=int(units[-1]),
            exposure=_last(progress),
            total=_last(total),
            carried=tuple(_last(sums) for sums in walk.carried),
        )


def region_points(procedure: Procedure, reached: float, *, to_wall: bool = True) -> list[RegionPoint]:
    """The region from the origin to its wall, or a little past what was reached where it has none or is not wanted."""
    region = procedure.region
    horizon = region.wall.progress if region.wall is not None and to_wall else region.open_horizon(reached)
    progress = np.linspace(0.0, max(horizon, reached), REGION_POINTS)
    if isinstance(region, UnitTable):
        progress = np.array([0.0, *region.sample_numbers])
    elif not procedure.family.has_exposure:
        progress = np.unique(np.ceil(progress))
    idle = procedure.family.idle_units(ORIGIN)
    limits = procedure.family.drawn(region, progress, procedure.known)
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


def _origin(procedure: Procedure) -> Path:
    zero = np.zeros(1)
    evidence = procedure.evidence.log(Double(zero, zero), Double(zero, zero)) + 0.0
    return Path(np.zeros(1, np.int64), np.zeros(1, np.int64), zero, zero, evidence)


def joined(pieces: Sequence[Path]) -> Path:
    """Pieces of one walk in order, as one."""
    columns = ("sequence", "sample_number", "progress", "total", "log_likelihood_ratio")
    return Path(**{name: np.concatenate([getattr(piece, name) for piece in pieces]) for name in columns})


def thinned(path: Path, points: int) -> Path:
    """Keep at most so many points: the first and last point and each stretch's extremes of the evidence."""
    count = len(path.sequence)
    if count <= points:
        return path
    kept = {0, count - 1}
    for stretch in np.array_split(np.arange(1, count - 1), max(1, (points - 2) // 2)):
        evidence = path.log_likelihood_ratio[stretch]
        kept.update((int(stretch[np.argmin(evidence)]), int(stretch[np.argmax(evidence)])))
    index = np.array(sorted(kept))
    return Path(
        path.sequence[index],
        path.sample_number[index],
        path.progress[index],
        path.total[index],
        path.log_likelihood_ratio[index],
    )


def _cut(sums: Double, count: int) -> Double:
    return Double(sums.high[:count], sums.low[:count])


def _ending_in(sums: Double, last: Double) -> Double:
    """The same sums with the last one replaced by where the walk really ended."""
    return Double(np.append(sums.high[:-1], last.high), np.append(sums.low[:-1], last.low))


def _last(sums: Double) -> Sum:
    return Sum(float(sums.high[-1]), float(sums.low[-1]))


def _finite(value: np.float64) -> float | None:
    return float(value) if np.isfinite(value) else None
