"""Two axes with their marks and names, and the room between them for whatever is drawn."""

from dataclasses import dataclass, replace
from xml.etree.ElementTree import Element

from service.pages.charts.scale import Scale, tick_words, ticks
from service.pages.charts.svg import FAINT, INK, PAPER, RULE, add, drawing, line

LEFT, RIGHT, TOP, BOTTOM = 64.0, 16.0, 18.0, 46.0
# Half the width of an axis that shows a single number, as a share of it.
NARROWEST = 0.05


@dataclass(frozen=True)
class Axis:
    """What an axis shows: its name, the numbers at its ends, and whether only whole ones mean something."""

    name: str
    low: float
    high: float
    is_whole: bool = False


@dataclass(frozen=True)
class Frame:
    """
    A drawing with axes.

    Attributes:
        inside: Where curves go; what leaves it is cut off.
    """

    root: Element
    inside: Element
    x: Scale
    y: Scale
    width: float
    height: float


def framed(  # noqa: PLR0913 - what every frame says
    size: tuple[float, float], across: Axis, up: Axis, title: str, description: str, name: str
) -> Frame:
    """
    An empty frame.

    Args:
        size: Width and height in pixels.
        across, up: The two axes.
        title, description: For those who cannot see it.
        name: Of this drawing, unique on its page.
    """
    width, height = size
    across, up = _opened(across), _opened(up)
    root = drawing(width, height, title, description)
    add(root, "rect", x=0, y=0, width=width, height=height, fill=PAPER)
    x = Scale(across.low, across.high, LEFT, width - RIGHT)
    y = Scale(up.low, up.high, height - BOTTOM, TOP)
    _across(root, x, across, height)
    _up(root, y, up, width)
    clip = add(add(root, "defs"), "clipPath", id=f"{name}-room")
    add(clip, "rect", x=LEFT, y=TOP, width=width - RIGHT - LEFT, height=height - BOTTOM - TOP)
    inside = add(root, "g", clip_path=f"url(#{name}-room)")
    add(root, "path", d=f"M{LEFT} {TOP}V{height - BOTTOM}H{width - RIGHT}", fill="none", stroke=INK)
    return Frame(root, inside, x, y, width, height)


def _opened(axis: Axis) -> Axis:
    """With some room where its ends are one number, or too near for a double to tell apart."""
    if axis.high > axis.low:
        return axis
    room = max(1.0, abs(axis.low)) * NARROWEST
    return replace(axis, low=axis.low - room, high=axis.low + room)


def _across(root: Element, x: Scale, axis: Axis, height: float) -> None:
    marks = ticks(axis.low, axis.high, max(2, int((x.end - x.begin) / 80.0)), is_whole=axis.is_whole)
    for value, words in zip(marks, tick_words(marks), strict=True):
        line(root, x(value), TOP, x(value), height - BOTTOM, stroke=RULE, stroke_width=0.6)
        line(root, x(value), height - BOTTOM, x(value), height - BOTTOM + 4.0, stroke=INK)
        add(root, "text", words, x=x(value), y=height - BOTTOM + 17.0, text_anchor="middle", fill=INK)
    middle = (x.begin + x.end) / 2.0
    add(root, "text", axis.name, x=middle, y=height - 10.0, text_anchor="middle", fill=FAINT)


def _up(root: Element, y: Scale, axis: Axis, width: float) -> None:
    marks = ticks(axis.low, axis.high, max(2, int((y.begin - y.end) / 45.0)), is_whole=axis.is_whole)
    for value, words in zip(marks, tick_words(marks), strict=True):
        line(root, LEFT, y(value), width - RIGHT, y(value), stroke=RULE, stroke_width=0.6)
        line(root, LEFT - 4.0, y(value), LEFT, y(value), stroke=INK)
        add(root, "text", words, x=LEFT - 8.0, y=y(value) + 4.0, text_anchor="end", fill=INK)
    middle = (y.begin + y.end) / 2.0
    turned = f"rotate(-90 14 {middle:.2f})"
    add(root, "text", axis.name, x=14.0, y=middle, text_anchor="middle", fill=FAINT, transform=turned)
