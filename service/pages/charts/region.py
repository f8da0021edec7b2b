"""A plan's region without a test, with courses drawn at random through it."""

from dataclasses import dataclass
from xml.etree.ElementTree import Element

from service.domain.state import Decision
from service.pages.charts.frame import LEFT, Axis, Frame, framed
from service.pages.charts.marks import draw_mark
from service.pages.charts.svg import INK, OPEN, add, line, polyline
from service.pages.charts.walk import Curve, Limit, draw_region

SIZE = (560.0, 340.0)
# A course under one hypothesis is told from one under the other by its dashes as well as its colour.
STROKES = ((INK, "none"), (OPEN, "4 3"))


@dataclass(frozen=True)
class Track:
    """One course: under which hypothesis, where it went and what it came to."""

    hypothesis: str
    number: int
    points: Curve
    decision: Decision


@dataclass(frozen=True)
class RegionPicture:
    """What is drawn; places are pairs of progress and height."""

    across: Axis
    up: Axis
    title: str
    description: str
    limits: tuple[Limit, ...]
    wall: float | None
    tracks: tuple[Track, ...]


def region_drawing(picture: RegionPicture, name: str) -> Element:
    """The drawing; `name` tells it from others on its page."""
    frame = framed(SIZE, picture.across, picture.up, picture.title, picture.description, name)
    draw_region(frame, picture.limits, picture.wall, name)
    for track in picture.tracks:
        _track(frame, track)
    for track in picture.tracks:
        _end(frame, track)
    _key(frame, picture.tracks)
    return frame.root


def _track(frame: Frame, track: Track) -> None:
    colour, dash = STROKES[track.number % len(STROKES)]
    points = [(frame.x(x), frame.y(y)) for x, y in track.points]
    drawn = polyline(frame.inside, points, stroke=colour, stroke_width=1, stroke_opacity=0.75, stroke_dasharray=dash)
    add(drawn, "title", f"{track.hypothesis}: {track.decision}")


def _end(frame: Frame, track: Track) -> None:
    if track.decision is not Decision.CONTINUE:
        x, y = track.points[-1]
        draw_mark(frame.inside, track.decision, frame.x(x), frame.y(y), 4.5)


def _key(frame: Frame, tracks: tuple[Track, ...]) -> None:
    """Which courses are whose, below the axis."""
    named = {track.hypothesis: track.number for track in tracks}
    for place, (hypothesis, number) in enumerate(named.items()):
        colour, dash = STROKES[number % len(STROKES)]
        x, y = LEFT + 90.0 * place, frame.height - 10.0
        line(frame.root, x, y - 4.0, x + 26.0, y - 4.0, stroke=colour, stroke_width=1.5, stroke_dasharray=dash)
        add(frame.root, "text", f"if {hypothesis}", x=x + 32.0, y=y, fill=INK)
