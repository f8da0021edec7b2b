"""The main drawing of a test: its walk between the limits, either as the evidence or as the total."""

from dataclasses import dataclass
from typing import Any
from xml.etree.ElementTree import Element

from service.domain.state import Decision
from service.pages.charts.frame import Axis, Frame, framed
from service.pages.charts.marks import draw_mark
from service.pages.charts.svg import ACCEPT, DASHES, FAINT, INK, OPEN, PAPER, REJECT, add, joined, line, polyline

SIZE = (820.0, 400.0)
# Points that are each marked.
FEW = 60
# Room above and below what is drawn, as a share of its height.
MARGIN = 0.06

Curve = tuple[tuple[float, float], ...]


@dataclass(frozen=True)
class Limit:
    """
    One limit of the region.

    Attributes:
        decision: What lies beyond it.
        is_below: It is the lower one.
        points: From left to right; more than one piece where it is broken off.
    """

    decision: Decision
    is_below: bool
    pieces: tuple[Curve, ...]


@dataclass(frozen=True)
class Reach:
    """A shortest way from where the test stands to a decision."""

    decision: Decision
    end: tuple[float, float]
    words: str


@dataclass(frozen=True)
class WalkPicture:
    """
    What is drawn; places are pairs of progress and height.

    Attributes:
        wall: The progress at which a decision is forced, None without truncation.
        decision: What the walk has come to.
    """

    across: Axis
    up: Axis
    title: str
    description: str
    walk: Curve
    limits: tuple[Limit, ...]
    reaches: tuple[Reach, ...]
    wall: float | None
    decision: Decision


def walk_drawing(picture: WalkPicture, name: str = "walk") -> Element:
    """The drawing; `name` tells it from others on its page."""
    frame = framed(SIZE, picture.across, picture.up, picture.title, picture.description, name)
    draw_region(frame, picture.limits, picture.wall, name)
    for reach in picture.reaches:
        _reach(frame, picture.walk[-1], reach)
    _walk(frame, picture)
    return frame.root


def draw_region(frame: Frame, limits: tuple[Limit, ...], wall: float | None, name: str) -> None:
    """The limits with what lies beyond them hatched, and the wall."""
    _patterns(frame.root, name)
    for limit in limits:
        _limit(frame, limit, name)
    if wall is not None:
        _wall(frame, wall)


def _patterns(root: Element, name: str) -> None:
    """Hatches that stay apart in black and white."""
    defs = add(root, "defs")
    for decision, colour, path in ((Decision.ACCEPT, ACCEPT, "M0 3H6"), (Decision.REJECT, REJECT, "M0 6L6 0")):
        pattern = add(defs, "pattern", id=f"{name}-{decision}", width=6, height=6, patternUnits="userSpaceOnUse")
        add(pattern, "path", d=path, stroke=colour, stroke_width=0.9, stroke_opacity=0.55)


def _limit(frame: Frame, limit: Limit, name: str) -> None:
    colour = ACCEPT if limit.decision is Decision.ACCEPT else REJECT
    edge = frame.height if limit.is_below else 0.0
    longest: list[tuple[float, float]] = []
    for piece in limit.pieces:
        points = [(frame.x(x), _unbounded(frame, y)) for x, y in piece]
        zone = [(points[0][0], edge), *points, (points[-1][0], edge)]
        add(frame.inside, "polygon", points=joined(zone), fill=f"url(#{name}-{limit.decision})", stroke="none")
        polyline(frame.inside, points, stroke=colour, stroke_width=2)
        longest = points if len(points) > len(longest) or not longest else longest
    if longest:
        _name_limit(frame, limit, longest, colour)


def _name_limit(frame: Frame, limit: Limit, points: list[tuple[float, float]], colour: str) -> None:
    """The word at the right end of a limit, inside its zone and with paper behind it."""
    inside = [(x, y) for x, y in points if frame.y.end + 22.0 < y < frame.y.begin - 22.0] or points[-1:]
    x, y = inside[-1]
    word = str(limit.decision)
    y = min(frame.y.begin - 8.0, max(frame.y.end + 14.0, y + (17.0 if limit.is_below else -8.0)))
    end = min(x, frame.x.end - 8.0)
    halo: dict[str, Any] = {"stroke": PAPER, "stroke_width": 4, "paint_order": "stroke", "stroke_linejoin": "round"}
    add(frame.root, "text", word, x=end, y=y, text_anchor="end", fill=colour, font_weight="bold", **halo)


def _unbounded(frame: Frame, value: float) -> float:
    """Where a number lies, beyond the frame too; the frame cuts it off."""
    share = (value - frame.y.low) / (frame.y.high - frame.y.low)
    return frame.y.begin + max(-1.0, min(2.0, share)) * (frame.y.end - frame.y.begin)


def _wall(frame: Frame, progress: float) -> None:
    x = frame.x(progress)
    line(frame.inside, x, frame.y.end, x, frame.y.begin, stroke=INK, stroke_width=2)
    middle = (frame.y.end + frame.y.begin) / 2.0
    turned = f"rotate(-90 {x - 6.0:.2f} {middle:.2f})"
    halo: dict[str, Any] = {"stroke": PAPER, "stroke_width": 4, "paint_order": "stroke"}
    add(
        frame.root,
        "text",
        "truncation",
        x=x - 6.0,
        y=middle,
        text_anchor="middle",
        fill=FAINT,
        transform=turned,
        **halo,
    )


def _reach(frame: Frame, begin: tuple[float, float], reach: Reach) -> None:
    colour = ACCEPT if reach.decision is Decision.ACCEPT else REJECT
    ends = [(frame.x(begin[0]), frame.y(begin[1])), (frame.x(reach.end[0]), frame.y(reach.end[1]))]
    drawn = polyline(frame.inside, ends, stroke=colour, stroke_width=1.6, stroke_dasharray=DASHES[2])
    add(drawn, "title", f"{reach.words} more: {reach.decision}")


def _walk(frame: Frame, picture: WalkPicture) -> None:
    points = [(frame.x(x), frame.y(y)) for x, y in picture.walk]
    polyline(frame.inside, points, stroke=INK, stroke_width=1.6, stroke_linejoin="round")
    if len(points) <= FEW:
        for x, y in points[:-1]:
            add(frame.inside, "circle", cx=x, cy=y, r=2, fill=INK)
    x, y = points[-1]
    if picture.decision is Decision.CONTINUE:
        add(frame.root, "circle", cx=x, cy=y, r=5.5, fill=OPEN, stroke=PAPER, stroke_width=1.5)
    else:
        draw_mark(frame.root, picture.decision, x, y, 9.0)
