"""The picture of a plan: its region, and a dozen courses that tests of it may take under each hypothesis."""

import math
from collections.abc import Sequence

import numpy as np

from service.domain.courses import Course, courses_of
from service.domain.errors import InvalidQuestion
from service.domain.procedure import Procedure
from service.pages.charts.frame import Axis
from service.pages.charts.region import RegionPicture, Track
from service.pages.charts.walk import MARGIN, Limit
from service.pages.views.picture import EVIDENCE, FIRST, View, limits_of, wall_of
from service.pages.words import figure

COURSES = 12
# How far the picture reaches past the longest course.
AHEAD = 1.06
# The limits before this share of the picture may lie outside of it: some begin at infinity.
EARLY = 0.25


def region_picture(
    procedure: Procedure, title: str, view: View, seed: int | None, usual: float | None = None
) -> RegionPicture:
    """
    What to draw of a plan.

    Args:
        title: The plan's name.
        view: One of `views_of`.
        seed: Of the courses; None draws none.
        usual: How far most tests go, where that is known.
    """
    tracks = () if seed is None else _tracks(procedure, view, np.random.default_rng(seed))
    end = _end(procedure, tracks, usual)
    limits = limits_of(procedure, view, end)
    family = procedure.family
    wall = wall_of(procedure)
    return RegionPicture(
        across=Axis(family.axis, 0.0, end, is_whole=not family.has_exposure),
        up=_up(
            EVIDENCE if view is View.EVIDENCE else family.counted,
            limits,
            tracks,
            end,
            is_whole=family.span.is_integer and view is View.COUNT,
        ),
        title=f"{title}: the region in which sampling goes on",
        description=_description(procedure, tracks),
        limits=limits,
        wall=wall if wall is not None and wall <= end else None,
        tracks=tracks,
    )


def _tracks(procedure: Procedure, view: View, source: np.random.Generator) -> tuple[Track, ...]:
    """A dozen courses under each hypothesis that can be drawn."""
    found = []
    for number, parameter in enumerate(procedure.hypotheses):
        try:
            courses = courses_of(procedure, parameter, source, COURSES)
        except InvalidQuestion:
            continue
        found += [_track(procedure, view, number, course) for course in courses]
    return tuple(found)


def _track(procedure: Procedure, view: View, number: int, course: Course) -> Track:
    path = course.path
    progress = path.progress if procedure.family.has_exposure else path.sample_number
    heights = path.log_likelihood_ratio if view is View.EVIDENCE else path.total
    points = tuple((float(x), float(y)) for x, y in zip(progress, heights, strict=True))
    return Track(f"H{number}", number, points, course.decision)


def _end(procedure: Procedure, tracks: Sequence[Track], usual: float | None) -> float:
    """The right end: a little past the longest course, or as far as most tests go; a table is shown to its last row."""
    wall = wall_of(procedure)
    if procedure.thresholds is None and wall is not None:
        return wall * 1.02
    longest = max((track.points[-1][0] for track in tracks), default=usual or 0.0)
    if longest == 0.0:
        horizon = wall if wall is not None else procedure.region.open_horizon(0.0)
        longest = horizon or FIRST
    return longest * AHEAD if wall is None else min(longest * AHEAD, wall * 1.02)


def _up(name: str, limits: Sequence[Limit], tracks: Sequence[Track], end: float, *, is_whole: bool) -> Axis:
    heights = [y for track in tracks for _, y in track.points]
    heights += [y for limit in limits for piece in limit.pieces for x, y in piece if x >= EARLY * end]
    heights = [y for y in heights if math.isfinite(y)] or [0.0]
    low, high = min(heights), max(heights)
    margin = (high - low) * MARGIN or 1.0
    return Axis(name, 0.0 if is_whole else low - margin, high + margin, is_whole=is_whole)


def _description(procedure: Procedure, tracks: Sequence[Track]) -> str:
    """How the courses ended, in words."""
    said = []
    for number, parameter in enumerate(procedure.hypotheses):
        ends = [track.decision.value for track in tracks if track.number == number]
        counted = ", ".join(f"{ends.count(end)} {end}" for end in ("accept", "reject", "continue") if end in ends)
        if counted:
            said.append(f"Of {len(ends)} courses drawn at {figure(parameter)} (H{number}): {counted}.")
    return " ".join(said)
