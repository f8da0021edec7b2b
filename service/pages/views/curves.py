"""The curves of one plan or of several laid over each other: probability of acceptance, and sample numbers."""

import math
from collections.abc import Iterator, Sequence
from xml.etree.ElementTree import Element

from service.domain.characteristics import Point, Spread
from service.domain.errors import Conflict, Invalid
from service.pages.charts.curves import Series, Upright, curves_drawing
from service.pages.charts.frame import Axis
from service.pages.views.judging import Judged

# Curves that one drawing can tell apart.
MOST_SERIES = 3
# What most tests need at most.
QUANTILE = "0.95"
# Room above the highest curve, for the key.
ABOVE = 1.25


def acceptance_drawing(judged: Sequence[Judged], name: str = "acceptance") -> Element:
    """The operating characteristic of plans of one family; at least one of them has a curve."""
    series = tuple(
        Series(each.title, tuple((point.parameter, point.probability_of_acceptance) for point in _points(each)), number)
        for number, each in _drawn(judged)
    )
    up = Axis("probability of acceptance", 0.0, 1.0)
    return curves_drawing(_across(judged), up, series, _uprights(judged), "Operating characteristic", name)


def sample_number_drawing(judged: Sequence[Judged], name: str = "numbers") -> Element:
    """The average and the 95 % sample number (or exposure) of the same plans, and the first one's fixed sample."""
    series = [each for number, one in _drawn(judged) for each in _numbers(one, number)]
    across = _across(judged)
    fixed = next((each.curve.fixed_sample for _, each in _drawn(judged) if each.curve is not None), None)
    if fixed is not None and len(judged) < MOST_SERIES:
        points = ((across.low, fixed.size), (across.high, fixed.size))
        series.append(Series("fixed sample", points, len(judged), is_light=True))
    high = max(y for each in series for _, y in each.points)
    family = next(each for _, each in _drawn(judged)).procedure.family
    up = Axis(family.axis, 0.0, high * ABOVE, is_whole=not family.has_exposure)
    title = "Average sample number, and what 95 % of the tests need at most"
    return curves_drawing(across, up, tuple(series), _uprights(judged), title, name)


def spread_of(point: Point) -> Spread | None:
    """What ends with the decision: the exposure of families that have one, else the sample number."""
    return point.exposure or point.sample_number


def has_curves(judged: Sequence[Judged]) -> bool:
    """Whether there is anything to draw."""
    return any(each.curve is not None for each in judged)


def check_curves(judged: Sequence[Judged]) -> None:
    """
    Ask whether all of these have a curve.

    Raises:
        Conflict: They are simulated, and that is not done.
        Invalid: There are none, for another reason.
    """
    troubled = next((each for each in judged if each.curve is None), None)
    if troubled is not None:
        raise Invalid(troubled.trouble) if troubled.question is None else Conflict(troubled.trouble)


def _drawn(judged: Sequence[Judged]) -> Iterator[tuple[int, Judged]]:
    return ((number, each) for number, each in enumerate(judged) if each.curve is not None)


def _points(judged: Judged) -> tuple[Point, ...]:
    return judged.curve.points if judged.curve is not None else ()


def _numbers(judged: Judged, number: int) -> Iterator[Series]:
    spreads = [(point.parameter, spread_of(point)) for point in _points(judged)]
    mean = [(at, spread.mean) for at, spread in spreads if spread is not None]
    most = [(at, spread.quantiles[QUANTILE]) for at, spread in spreads if spread is not None]
    yield Series(f"{judged.title}, average", _finite(mean), number)
    yield Series(f"{judged.title}, 95 %", _finite(most), number, is_light=True)


def _finite(points: Sequence[tuple[float, float]]) -> tuple[tuple[float, float], ...]:
    return tuple((x, y) for x, y in points if math.isfinite(y))


def _across(judged: Sequence[Judged]) -> Axis:
    parameters = [point.parameter for _, each in _drawn(judged) for point in _points(each)]
    family = next(each for _, each in _drawn(judged)).procedure.family
    return Axis(family.parameter, min(parameters), max(parameters))


def _uprights(judged: Sequence[Judged]) -> tuple[Upright, ...]:
    """The hypotheses; those in which a candidate differs from the ones before it carry its name."""
    named: dict[float, str] = {}
    for _, each in _drawn(judged):
        whose = f" {each.title}" if named else ""  # before this one adds its own
        for number, at in enumerate(each.procedure.hypotheses):
            named.setdefault(at, f"H{number}{whose}")
    return tuple(Upright(at, name) for at, name in named.items())
