"""All that a page shows of plans that were judged: rows of figures, curves, and a picture of each region."""

from collections.abc import Sequence
from dataclasses import dataclass

from markupsafe import Markup

from service.pages.charts.region import region_drawing
from service.pages.charts.svg import markup
from service.pages.views.curves import QUANTILE, acceptance_drawing, has_curves, sample_number_drawing, spread_of
from service.pages.views.figures import Row, rows_of, words_of
from service.pages.views.judging import Judged
from service.pages.views.picture import View, views_of
from service.pages.views.region_picture import region_picture


@dataclass(frozen=True)
class Picture:
    """
    The region of one plan.

    Attributes:
        view: What its height is: that asked for, or the only one that the plan has.
        words: How its courses ended; empty without any.
    """

    judged: Judged
    view: View
    drawing: Markup
    words: str


@dataclass(frozen=True)
class Shown:
    """
    What is shown.

    Attributes:
        acceptance, numbers: The two drawings of curves; None where there are no figures.
        words: What the first of the plans promises.
    """

    judged: tuple[Judged, ...]
    rows: tuple[Row, ...]
    words: tuple[str, ...]
    acceptance: Markup | None
    numbers: Markup | None
    pictures: tuple[Picture, ...]

    @property
    def can_simulate(self) -> bool:
        """Whether pressing Simulate would bring figures."""
        return any(each.needs_simulating for each in self.judged)

    @property
    def is_running(self) -> bool:
        """Whether looking again will."""
        return any(each.is_running for each in self.judged)


def shown_of(judged: Sequence[Judged], view: View, seed: int | None) -> Shown:
    """
    Rows, curves and pictures.

    Args:
        view: What the height of the pictures is, where a plan can be drawn so.
        seed: Of the courses drawn in them; None draws none.
    """
    sound = [each for each in judged if each.document is not None]
    curves = has_curves(sound)
    return Shown(
        judged=tuple(judged),
        rows=rows_of(sound),
        words=words_of(sound[0]) if sound else (),
        acceptance=markup(acceptance_drawing(sound)) if curves else None,
        numbers=markup(sample_number_drawing(sound)) if curves else None,
        pictures=tuple(_picture(each, view, seed) for each in sound),
    )


def view_in(typed: str) -> View:
    """The height of a picture as an address says it; totals where it does not."""
    return View(typed) if typed in set(View) else View.COUNT


def _picture(judged: Judged, view: View, seed: int | None) -> Picture:
    views = views_of(judged.procedure)
    chosen = view if view in views else views[0]
    picture = region_picture(judged.procedure, judged.title, chosen, seed, _usual(judged))
    return Picture(judged, chosen, markup(region_drawing(picture, f"region-{judged.letter}")), picture.description)


def _usual(judged: Judged) -> float | None:
    """How far 95 % of the tests go under either hypothesis."""
    spreads = [spread for point in judged.ends if (spread := spread_of(point)) is not None]
    return max((spread.quantiles[QUANTILE] for spread in spreads), default=None)
