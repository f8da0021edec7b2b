"""The picture of a test out of its path and its region: evidence between constant limits, or totals between lines."""

import math
from collections.abc import Callable, Sequence
from enum import StrEnum
from itertools import groupby

from service.domain.families.base import ORIGIN, Way
from service.domain.observing import standing_of
from service.domain.outlook import ways_of
from service.domain.path import Path, RegionPoint, region_points
from service.domain.plan import Plan
from service.domain.procedure import Procedure, procedure_of
from service.domain.sequential_test import SequentialTest, Stage
from service.domain.state import Decision
from service.pages.charts.frame import Axis
from service.pages.charts.walk import MARGIN, Curve, Limit, Reach, WalkPicture
from service.pages.views.saying import saying_of

# How far a picture reaches beyond where the test stands, where no truncation ends it: so many times as far.
AHEAD = 1.6
# Where nothing says how far to draw.
FIRST = 10.0
EVIDENCE = "log-likelihood ratio Λ"


class View(StrEnum):
    """What the height of the picture is."""

    EVIDENCE = "evidence"
    COUNT = "count"


def views_of(procedure: Procedure) -> tuple[View, ...]:
    """The ways in which a plan's tests can be drawn: a table has no limits of the evidence."""
    return (View.COUNT,) if procedure.thresholds is None else (View.EVIDENCE, View.COUNT)


def picture_of(test: SequentialTest, plan: Plan, path: Path, view: View) -> WalkPicture:
    """
    What to draw of a test.

    Args:
        test, plan: As read together.
        path: Its walk, thinned.
        view: One of `views_of`.
    """
    procedure = procedure_of(plan)
    heights = path.log_likelihood_ratio if view is View.EVIDENCE else path.total
    # Units are shown as people count them, though the region may run over fewer.
    along = path.progress if procedure.family.has_exposure else path.sample_number
    walk = tuple((float(x), float(y)) for x, y in zip(along, heights, strict=True))
    reaches = _reaches(test, procedure, view)
    end = _end(procedure, walk, reaches)
    limits = limits_of(procedure, view, end)
    saying = saying_of(test, plan)
    family = procedure.family
    counts = family.span.is_integer and view is View.COUNT
    return WalkPicture(
        across=Axis(family.axis, 0.0, end, is_whole=not family.has_exposure),
        up=_up(EVIDENCE if view is View.EVIDENCE else family.counted, walk, limits, reaches, is_whole=counts),
        title=f"{test.subject.kind.value.capitalize()} {test.subject.name}: {saying.headline}",
        description=saying.sentence,
        walk=walk,
        limits=limits,
        reaches=reaches,
        wall=wall_of(procedure),
        decision=test.state.decision,
    )


def _end(procedure: Procedure, walk: Curve, reaches: tuple[Reach, ...]) -> float:
    """The right end: the wall, or a good way past the test and the ends of its shortest ways."""
    wall = wall_of(procedure)
    if wall is not None:
        return max(wall, walk[-1][0]) * 1.02
    return max([walk[-1][0] * AHEAD, *(reach.end[0] * 1.1 for reach in reaches)]) or FIRST


def wall_of(procedure: Procedure) -> float | None:
    """The truncation as people count it."""
    wall = procedure.region.wall
    return None if wall is None else wall.progress + procedure.family.idle_units(ORIGIN)


def limits_of(procedure: Procedure, view: View, end: float) -> tuple[Limit, ...]:
    """The limits of a plan from the origin to this progress."""
    if view is View.EVIDENCE:
        return _constant(procedure, end)
    wall = wall_of(procedure)
    return _lines(procedure, region_points(procedure, end, to_wall=wall is None or wall <= end), end)


def _constant(procedure: Procedure, end: float) -> tuple[Limit, ...]:
    """The limits of the evidence; one that nothing reaches is not drawn."""
    thresholds = procedure.thresholds
    if thresholds is None:
        return ()
    ends = ((thresholds.accept, Decision.ACCEPT, True), (thresholds.reject, Decision.REJECT, False))
    return tuple(
        Limit(decision, is_below, (((0.0, height), (end, height)),))
        for height, decision, is_below in ends
        if math.isfinite(height)
    )


def _lines(procedure: Procedure, region: Sequence[RegionPoint], end: float) -> tuple[Limit, ...]:
    """The limits of the total along the progress."""
    columns: tuple[tuple[Callable[[RegionPoint], float | None], Decision, bool], ...] = (
        (lambda point: point.accept, Decision.ACCEPT, procedure.is_upward),
        (lambda point: point.reject, Decision.REJECT, not procedure.is_upward and not procedure.has_two_directions),
        (lambda point: point.reject_below, Decision.REJECT, True),
    )
    found = []
    for height_of, decision, is_below in columns:
        pieces = _pieces([(point.progress, height_of(point)) for point in region if point.progress <= end])
        if pieces:
            found.append(Limit(decision, is_below, pieces))
    return tuple(found)


def _pieces(points: Sequence[tuple[float, float | None]]) -> tuple[Curve, ...]:
    """Stretches of a limit that is not everywhere."""
    grouped = groupby(points, key=lambda point: point[1] is not None)
    return tuple(tuple((x, y) for x, y in stretch if y is not None) for is_there, stretch in grouped if is_there)


def _reaches(test: SequentialTest, procedure: Procedure, view: View) -> tuple[Reach, ...]:
    """The shortest ways that lead somewhere on the picture."""
    if test.stage is not Stage.RUNNING:
        return ()
    ways = ways_of(procedure, test.state)
    has_exposure = procedure.family.has_exposure
    begin = standing_of(procedure, test.state).progress if has_exposure else float(test.state.sample_number)
    shown = test.state.total.value
    named = ((ways.accept, Decision.ACCEPT), (ways.reject, Decision.REJECT), (ways.reject_below, Decision.REJECT))
    found = []
    for way, decision in named:
        steps = None if way is None else _steps(way)
        if way is None or steps is None:
            continue
        height = _limit_of(procedure, decision) if view is View.EVIDENCE else shown + way.total
        if height is not None and math.isfinite(height) and not (procedure.family.is_invariant and view is View.COUNT):
            found.append(Reach(decision, (begin + steps, height), way.words))
    return tuple(found)


def _steps(way: Way) -> float | None:
    """How far a way leads along the progress."""
    if way.exposure is not None:
        return way.exposure
    return None if way.observations is None else float(way.observations)


def _limit_of(procedure: Procedure, decision: Decision) -> float | None:
    if procedure.thresholds is None:
        return None
    return procedure.thresholds.accept if decision is Decision.ACCEPT else procedure.thresholds.reject


def _up(name: str, walk: Curve, limits: tuple[Limit, ...], reaches: tuple[Reach, ...], *, is_whole: bool) -> Axis:
    """The height: all of the walk, and the limits as far as they do not dwarf it."""
    heights = [y for _, y in walk] + [reach.end[1] for reach in reaches]
    heights += [y for limit in limits for piece in limit.pieces for _, y in piece]
    low, high = min(heights), max(heights)
    margin = (high - low) * MARGIN or 1.0
    return Axis(name, max(0.0, low) if is_whole else low - margin, high + margin, is_whole=is_whole)
