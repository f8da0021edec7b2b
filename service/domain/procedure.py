"""
A plan made ready to run: its content checked once and compiled to a likelihood ratio and a region.

Content is plain JSON with its defaults filled in; `checked_content` is the door for what a caller sends,
`procedure_of` for what is stored.
"""

import json
import math
from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

from service.domain.errors import Fault, InvalidPlan
from service.domain.families import FAMILIES, Family
from service.domain.families.base import positive_rule
from service.domain.plan import Plan, canonical
from service.sequential import boundaries
from service.sequential.boundaries import Thresholds
from service.sequential.errors import OutOfRange
from service.sequential.likelihood import LikelihoodRatio
from service.sequential.region import StraightRegion, Wall, straight_region

BOUNDARY_RULES = ("wald", "strict", "given")
LARGEST_SAMPLE_NUMBER = 1_000_000_000

Content = Mapping[str, Any]


@dataclass(frozen=True)
class Procedure:
    """A plan's numbers at work: the family, the evidence, the two thresholds and the region that decides."""

    family: Family
    ratio: LikelihoodRatio
    thresholds: Thresholds
    region: StraightRegion
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


def checked_content(given: Content) -> str:
    """
    Check what a caller sends as a plan (its name left out) and return it as a canonical document.

    Raises:
        InvalidPlan: With a fault for each thing that cannot be right.
    """
    content = {key: value for key, value in given.items() if value is not None}
    faults = _faults_of(content)
    if faults:
        raise InvalidPlan(faults)
    document = canonical(content)
    try:
        compiled = _compiled(document)
    except OutOfRange as error:
        raise InvalidPlan([Fault("/h1", f"{error.rule}; h0 is {content['h0']!r}, h1 {content['h1']!r}")]) from error
    _check_truncation_leaves_a_choice(compiled)
    return document


def procedure_of_document(document: str) -> Procedure:
    """The procedure of a canonical document from `checked_content`, for plans that are not stored."""
    return _compiled(document)


def procedure_of(plan: Plan) -> Procedure:
    """The procedure of a stored plan; compiled once for each content."""
    return _compiled(plan.document)


def lines_of(procedure: Procedure) -> Lines:
    """The lines of a procedure whose region is bounded by straight ones."""
    region = procedure.region
    lower, upper = region.lower_intercept, region.upper_intercept
    accept, reject = (lower, upper) if procedure.ratio.is_upward else (upper, lower)
    return Lines(procedure.ratio.slope, accept, reject)


@lru_cache(maxsize=1024)
def _compiled(document: str) -> Procedure:
    content: Content = json.loads(document)
    family = FAMILIES[content["family"]]
    ratio = family.likelihood_ratio(content["h0"], content["h1"], content.get("known", {}))
    thresholds = _thresholds(content)
    region = straight_region(ratio, thresholds, family.span, _wall(content))
    known = content.get("known", {})
    return Procedure(
        family, ratio, thresholds, region, known, (content["h0"], content["h1"]), (content["alpha"], content["beta"])
    )


def _thresholds(content: Content) -> Thresholds:
    if content["boundaries"] == "given":
        return Thresholds(float(content["thresholds"]["accept"]), float(content["thresholds"]["reject"]))
    rule = boundaries.strict if content["boundaries"] == "strict" else boundaries.wald
    return rule(content["alpha"], content["beta"])


def _wall(content: Content) -> Wall | None:
    truncation = content.get("truncation")
    if truncation is None:
        return None
    progress = truncation.get("exposure", truncation.get("sample_number"))
    return Wall(float(progress), truncation.get("failures"))


def _faults_of(content: Content) -> list[Fault]:
    family = FAMILIES.get(content["family"])
    if family is None:
        known = ", ".join(FAMILIES)
        return [Fault("/family", f"must be one of {known}; received {content['family']!r}")]
    return [
        *_faults_of_statistic(content),
        *_faults_of_hypotheses(family, content),
        *_faults_of_risks(content),
        *_faults_of_boundaries(content),
        *_faults_of_known(family, content.get("known", {})),
        *_faults_of_truncation(family, content.get("truncation")),
    ]


def _faults_of_statistic(content: Content) -> list[Fault]:
    statistic = content["statistic"]
    return [] if statistic == "simple" else [Fault("/statistic", f"must be simple; received {statistic!r}")]


def _faults_of_hypotheses(family: Family, content: Content) -> list[Fault]:
    faults = [
        Fault(f"/{name}", f"{rule}: it is a {family.parameter}; received {content[name]!r}")
        for name in ("h0", "h1")
        if (rule := family.hypothesis_rule(content[name])) is not None
    ]
    if content["h0"] == content["h1"]:
        faults.append(Fault("/h1", f"must differ from h0; received {content['h1']!r} for both"))
    return faults


def _faults_of_risks(content: Content) -> list[Fault]:
    alpha, beta = content["alpha"], content["beta"]
    faults = [
        Fault(f"/{name}", f"must lie strictly between 0 and 1; received {risk!r}")
        for name, risk in (("alpha", alpha), ("beta", beta))
        if not 0.0 < risk < 1.0
    ]
    if not faults and alpha + beta >= 1.0:
        faults.append(Fault("/beta", f"alpha + beta must be below 1; received {alpha!r} + {beta!r}"))
    return faults


def _faults_of_boundaries(content: Content) -> list[Fault]:
    rule, thresholds = content["boundaries"], content.get("thresholds")
    if rule not in BOUNDARY_RULES:
        return [Fault("/boundaries", f"must be one of {', '.join(BOUNDARY_RULES)}; received {rule!r}")]
    if rule != "given":
        return [Fault("/thresholds", f'belong to "given" boundaries, not {rule!r}')] if thresholds else []
    if thresholds is None:
        return [Fault("/thresholds", 'are required for "given" boundaries')]
    faults = []
    if not -1e6 <= thresholds["accept"] < 0.0:  # noqa: PLR2004
        faults.append(
            Fault("/thresholds/accept", f"must lie below 0 (at least -1e6); received {thresholds['accept']!r}")
        )
    if not 0.0 < thresholds["reject"] <= 1e6:  # noqa: PLR2004
        faults.append(Fault("/thresholds/reject", f"must lie above 0 (at most 1e6); received {thresholds['reject']!r}"))
    return faults


def _faults_of_known(family: Family, known: Mapping[str, float]) -> list[Fault]:
    faults = [Fault(f"/known/{name}", f"is required for {family.name}") for name in family.known if name not in known]
    for name, value in known.items():
        if name not in family.known:
            faults.append(Fault(f"/known/{name}", f"means nothing for {family.name}"))
        elif (rule := positive_rule(value)) is not None:
            faults.append(Fault(f"/known/{name}", f"{rule}; received {value!r}"))
    return faults


def _faults_of_truncation(family: Family, truncation: Mapping[str, float] | None) -> list[Fault]:
    if truncation is None:
        return []
    axis = "exposure" if family.has_exposure else "sample_number"
    allowed = {axis, "failures"} if family.is_watched_in_time else {axis}
    faults = [
        Fault(f"/truncation/{name}", f"means nothing for {family.name}; truncate it by {axis}")
        for name in truncation
        if name not in allowed
    ]
    if axis not in truncation:
        faults.append(Fault(f"/truncation/{axis}", f"is required to truncate {family.name}"))
    for name, value in truncation.items():
        limit = positive_rule(value) if name == "exposure" else _count_rule(value)
        if limit is not None:
            faults.append(Fault(f"/truncation/{name}", f"{limit}; received {value!r}"))
    return faults


def _count_rule(value: float) -> str | None:
    within = 1 <= value <= LARGEST_SAMPLE_NUMBER
    return None if within else f"must be a whole number from 1 to {LARGEST_SAMPLE_NUMBER}"


def _check_truncation_leaves_a_choice(procedure: Procedure) -> None:
    """A wall before the first possible decision would make the boundaries meaningless."""
    wall, first = procedure.region.wall, procedure.region.first_possible_decision()
    if wall is not None and wall.progress < first and math.isfinite(first):
        rule = f"must not come before the first possible decision, at {first:.0f}; received {wall.progress:.0f}"
        raise InvalidPlan([Fault("/truncation/sample_number", rule)])
