"""
A plan made ready to run: its content compiled to a likelihood ratio and a region.

Content is plain JSON with its defaults filled in, as `checking.checked_content` makes it.
"""

import json
from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache

from service.domain.families import FAMILIES, Family
from service.domain.plan import Content, Plan
from service.domain.tables import region_of_table
from service.sequential import boundaries
from service.sequential.boundaries import Thresholds
from service.sequential.likelihood import LikelihoodRatio
from service.sequential.region import Region, StraightRegion, Wall, straight_region


@dataclass(frozen=True)
class Procedure:
    """
    A plan's numbers at work: the family, the evidence, the limits and the region that decides.

    `thresholds` is None where the limits are not of the log-likelihood ratio but a table's.
    """

    family: Family
    ratio: LikelihoodRatio
    thresholds: Thresholds | None
    region: Region
    known: Mapping[str, float]
    hypotheses: tuple[float, float]
    risks: tuple[float, float]


@dataclass(frozen=True)
class Lines:
    """
    The region's two lines, as inspection standards draw them; both intercepts are positive.

    Accept when the total <= slope * n - accept_intercept and reject when >= slope * n + reject_intercept; where H1
    lies below H0 the signs of the intercepts and the comparisons turn round.
    """

    slope: float
    accept_intercept: float
    reject_intercept: float


def procedure_of_document(document: str) -> Procedure:
    """The procedure of a canonical document, for plans that are not stored; compiled once for each."""
    return _compiled(document)


def procedure_of(plan: Plan) -> Procedure:
    """The procedure of a stored plan; compiled once for each content."""
    return _compiled(plan.document)


def lines_of(procedure: Procedure) -> Lines | None:
    """The lines of a procedure whose region is bounded by straight ones."""
    region = procedure.region
    if not isinstance(region, StraightRegion):
        return None
    lower, upper = region.lower_intercept, region.upper_intercept
    accept, reject = (lower, upper) if procedure.ratio.is_upward else (upper, lower)
    return Lines(procedure.ratio.slope, accept, reject)


def with_thresholds(content: Content, thresholds: Thresholds) -> Procedure:
    """
    The procedure of a content without a table between other thresholds than its own.

    Raises:
        OutOfRange: Floating point cannot tell the hypotheses apart.
    """
    family, ratio = _evidence(content)
    return _procedure(content, ratio, thresholds, straight_region(ratio, thresholds, family.span, _wall(content)))


@lru_cache(maxsize=1024)
def _compiled(document: str) -> Procedure:
    content: Content = json.loads(document)
    if content["boundaries"] == "table":
        family, ratio = _evidence(content)
        region = region_of_table(family, content["table"], is_upward=ratio.is_upward)
        return _procedure(content, ratio, None, region)
    return with_thresholds(content, _thresholds(content))


def _evidence(content: Content) -> tuple[Family, LikelihoodRatio]:
    family = FAMILIES[content["family"]]
    return family, family.likelihood_ratio(content["h0"], content["h1"], _known(family, content))


def _known(family: Family, content: Content) -> Mapping[str, float]:
    return family.settled(content.get("known", {}), content["h0"], content["h1"])


def _procedure(content: Content, ratio: LikelihoodRatio, thresholds: Thresholds | None, region: Region) -> Procedure:
    family = FAMILIES[content["family"]]
    hypotheses, risks = (content["h0"], content["h1"]), (content["alpha"], content["beta"])
    return Procedure(family, ratio, thresholds, region, _known(family, content), hypotheses, risks)


def _thresholds(content: Content) -> Thresholds:
    """Stored with the plan where they were given or calibrated; what follows from the risks alone is not."""
    if "thresholds" in content:
        return Thresholds(float(content["thresholds"]["accept"]), float(content["thresholds"]["reject"]))
    rule = boundaries.strict if content["boundaries"] == "strict" else boundaries.wald
    return rule(content["alpha"], content["beta"])


def _wall(content: Content) -> Wall | None:
    truncation = content.get("truncation")
    if truncation is None:
        return None
    progress = truncation.get("exposure", truncation.get("sample_number"))
    return Wall(float(progress), truncation.get("failures"))
