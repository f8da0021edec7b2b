"""Curves over one axis, told apart by their dashes as well as their colours, with a key."""

from dataclasses import dataclass
from xml.etree.ElementTree import Element

from service.pages.charts.frame import LEFT, TOP, Axis, Frame, framed
from service.pages.charts.svg import DASHES, FAINT, INK, SERIES, add, line, polyline

SIZE = (560.0, 300.0)


@dataclass(frozen=True)
class Series:
    """One curve with its name; `is_light` for one that only accompanies another."""

    name: str
    points: tuple[tuple[float, float], ...]
    number: int = 0
    is_light: bool = False


@dataclass(frozen=True)
class Upright:
    """A number on the axis worth a line and a name."""

    at: float
    name: str


def curves_drawing(  # noqa: PLR0913 - what a drawing has
    across: Axis,
    up: Axis,
    series: tuple[Series, ...],
    uprights: tuple[Upright, ...],
    title: str,
    name: str,
    size: tuple[float, float] = SIZE,
) -> Element:
    """The curves; `name` tells the drawing from others on its page."""
    frame = framed(size, across, up, title, "; ".join(each.name for each in series), name)
    for upright in uprights:
        x = frame.x(upright.at)
        line(frame.root, x, frame.y.end, x, frame.y.begin, stroke=FAINT, stroke_dasharray="1 3")
        add(frame.root, "text", upright.name, x=x, y=TOP - 5.0, text_anchor="middle", fill=FAINT)
    for each in series:
        polyline(
            frame.inside,
            [(frame.x(x), frame.y(y)) for x, y in each.points],
            stroke=SERIES[each.number % len(SERIES)],
            stroke_width=1.0 if each.is_light else 2.0,
            stroke_dasharray=DASHES[each.number % len(DASHES)] or "none",
        )
    if len({each.name for each in series}) > 1:
        _key(frame, series)
    return frame.root


def _key(frame: Frame, series: tuple[Series, ...]) -> None:
    """Which curve is which, in the upper right corner."""
    named = {each.name: each for each in reversed(series)}
    for place, each in enumerate(reversed(named.values())):
        y = frame.y.end + 14.0 + 17.0 * place
        x = max(LEFT + 60.0, frame.x.end - 150.0)
        stroke = SERIES[each.number % len(SERIES)]
        dash = DASHES[each.number % len(DASHES)] or "none"
        width = 1.0 if each.is_light else 2.0
        line(frame.root, x, y - 4.0, x + 28.0, y - 4.0, stroke=stroke, stroke_width=width, stroke_dasharray=dash)
        add(frame.root, "text", each.name, x=x + 34.0, y=y, fill=INK)
