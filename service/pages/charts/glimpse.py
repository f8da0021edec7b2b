"""A test's position between its limits, small enough for a row of a list."""

from service.domain.state import Decision
from service.pages.charts.marks import draw_mark
from service.pages.charts.scale import Scale
from service.pages.charts.svg import ACCEPT, FAINT, INK, PAPER, REJECT, RULE, add, drawing, line, markup
from service.pages.views.position import Position

WIDTH, HEIGHT, EDGE = 168.0, 26.0, 14.0


def glimpse(position: Position) -> str:
    """Accept on the left, reject on the right (on both sides of a two-sided plan), and where the test stands."""
    root = drawing(WIDTH, HEIGHT, position.words)
    root.set("class", "glimpse")
    middle = HEIGHT / 2.0
    line(root, EDGE, middle, WIDTH - EDGE, middle, stroke=RULE, stroke_width=6.0)
    left = REJECT if position.is_two_sided else ACCEPT
    line(root, EDGE, 4.0, EDGE, HEIGHT - 4.0, stroke=left, stroke_width=2.0, stroke_dasharray=_dash(position))
    line(root, WIDTH - EDGE, 4.0, WIDTH - EDGE, HEIGHT - 4.0, stroke=REJECT, stroke_width=2.0)
    if position.zero is not None:
        x = Scale(0.0, 1.0, EDGE, WIDTH - EDGE)(position.zero)
        line(root, x, middle - 5.0, x, middle + 5.0, stroke=FAINT, stroke_width=1.0)
    x = Scale(0.0, 1.0, EDGE, WIDTH - EDGE)(position.share)
    if position.decision is Decision.CONTINUE:
        add(root, "circle", cx=x, cy=middle, r=5.5, fill=INK, stroke=PAPER, stroke_width=1.5)
    else:
        draw_mark(root, position.decision, x, middle, 9.0)
    return markup(root)


def _dash(position: Position) -> str:
    """A limit that is not there before the truncation is dashed."""
    return "none" if position.has_accept_limit or position.is_two_sided else "2 2"
