"""The curves of one plan, each as a drawing of its own for a paper."""

import math
from enum import StrEnum
from xml.etree.ElementTree import Element

from service.domain.characteristics import Promise
from service.domain.plan import Plan
from service.domain.procedure import procedure_of
from service.pages.charts.curves import Series, Upright, curves_drawing
from service.pages.charts.frame import Axis

# Room above the highest curve, for the key.
ABOVE = 1.25
MOST = "0.95"


class Figure(StrEnum):
    """What is drawn over the true parameter."""

    OC = "oc"
    ASN = "asn"


def curve_of(plan: Plan, promise: Promise, figure: Figure) -> Element:
    """The operating characteristic, or the average sample number (or exposure) with what 95 % need at most."""
    procedure = procedure_of(plan)
    family = procedure.family
    across = Axis(family.parameter, promise.points[0].parameter, promise.points[-1].parameter)
    uprights = tuple(Upright(at, f"H{number}") for number, at in enumerate(procedure.hypotheses))
    if figure is Figure.OC:
        points = tuple((point.parameter, point.probability_of_acceptance) for point in promise.points)
        up, title = Axis("probability of acceptance", 0.0, 1.0), f"Operating characteristic of plan {plan.name}"
        return curves_drawing(across, up, (Series("probability of acceptance", points),), uprights, title, "oc")
    spreads = [(point.parameter, point.exposure or point.sample_number) for point in promise.points]
    mean = tuple((at, each.mean) for at, each in spreads if each is not None and math.isfinite(each.mean))
    most = tuple(
        (at, each.quantiles[MOST]) for at, each in spreads if each is not None and math.isfinite(each.quantiles[MOST])
    )
    series = (Series("average", mean), Series("95 % need at most", most, 1))
    high = max(y for each in series for _, y in each.points)
    up = Axis(family.axis, 0.0, high * ABOVE, is_whole=not family.has_exposure)
    return curves_drawing(across, up, series, uprights, f"Sample numbers of plan {plan.name}", "asn")
