"""A small mark for each decision: told apart by its shape, not by its colour alone."""

from typing import Any
from xml.etree.ElementTree import Element

from markupsafe import Markup

from service.domain.state import Decision
from service.pages.charts.svg import ACCEPT, OPEN, PAPER, REJECT, add, drawing, markup

SIZE = 24.0


def mark(decision: str) -> Markup:
    """A tick in a disc, a cross in a square, or an arrow in a ring; the word always stands beside it."""
    root = drawing(SIZE, SIZE, str(decision))
    root.set("aria-hidden", "true")
    root.set("class", "mark")
    draw_mark(root, Decision(decision), SIZE / 2.0, SIZE / 2.0, SIZE / 2.0 - 2.0)
    return markup(root)


def draw_mark(parent: Element, decision: Decision, x: float, y: float, radius: float) -> None:
    """The mark around a point."""
    r = radius
    stroke: dict[str, Any] = {"fill": "none", "stroke_width": radius / 4.0, "stroke_linecap": "round"}
    if decision is Decision.ACCEPT:
        add(parent, "circle", cx=x, cy=y, r=r, fill=ACCEPT)
        add(parent, "path", d=_path(x, y, r, (-0.45, 0.05), (-0.1, 0.4), (0.5, -0.35)), stroke=PAPER, **stroke)
    elif decision is Decision.REJECT:
        add(parent, "rect", x=x - r, y=y - r, width=2.0 * r, height=2.0 * r, fill=REJECT)
        for ends in (((-0.45, -0.45), (0.45, 0.45)), ((-0.45, 0.45), (0.45, -0.45))):
            add(parent, "path", d=_path(x, y, r, *ends), stroke=PAPER, **stroke)
    else:
        add(parent, "circle", cx=x, cy=y, r=r * 0.9, fill=PAPER, stroke=OPEN, stroke_width=r / 5.0)
        add(parent, "path", d=_path(x, y, r, (-0.45, 0.0), (0.4, 0.0)), stroke=OPEN, **stroke)
        add(parent, "path", d=_path(x, y, r, (0.1, -0.3), (0.4, 0.0), (0.1, 0.3)), stroke=OPEN, **stroke)


def _path(x: float, y: float, radius: float, *points: tuple[float, float]) -> str:
    return "M" + "L".join(f"{x + dx * radius:.2f} {y + dy * radius:.2f}" for dx, dy in points)
