"""The door for what a caller sends as a plan: every rule it must obey, and the canonical document it becomes."""

import math
from collections.abc import Mapping, Sequence
from dataclasses import asdict
from functools import lru_cache
from typing import Any

import numpy as np

from service.domain import standards
from service.domain.calibrating import Attained, calibrated, exact_figures, risks_of, worst_of
from service.domain.errors import ComputationTooLarge, Fault, InvalidPlan, InvalidQuestion, located
from service.domain.families import FAMILIES, Family, family_of
from service.domain.families.base import positive_rule
from service.domain.plan import Content, canonical, known_of, rounded
from service.domain.procedure import Procedure, procedure_of_document
from service.domain.simulating import simulated_thresholds
from service.domain.statistics import STATISTICS, faults_of_statistic
from service.domain.tables import faults_of_table
from service.sequential import boundaries
from service.sequential.boundaries import Thresholds
from service.sequential.curved import CurvedRegion
from service.sequential.decision import Decision
from service.sequential.errors import OutOfRange
from service.sequential.region import StraightRegion

LARGEST_SAMPLE_NUMBER = 1_000_000_000
HYPOTHESES = ("h0", "h1")
# Boundary rules that need no model of the observations.
FOR_EVERY_MODEL = ("strict", "given")
DEFAULTS = {"statistic": "simple"}


def checked_content(given: Content) -> str:
    """
    Check what a caller sends as a plan (its name left out) and return it as a canonical document.

    A standard's name is replaced by its table; calibrated thresholds and the exact risks of calibrated boundaries and
    tables are computed once, here, and stored with the plan.

    Raises:
        InvalidPlan: With a fault for each thing that cannot be right.
        ComputationTooLarge: The boundaries cannot be calibrated within the limit of work.
    """
    content = _with_defaults(given)
    missing = [Fault(f"/{name}", "is required") for name in _required(content) if name not in content]
    if missing or (faults := _faults_of(content)):
        raise InvalidPlan(missing or faults)
    try:
        document = canonical(_completed(content))
        compiled = procedure_of_document(document)
    except OutOfRange as error:
        detail = f"{error.rule}; received {error.received!r}"
        if error.argument == "h1":
            detail = f"{error.rule}; h0 is {content['h0']!r}, h1 {content.get('h1')!r}"
        raise InvalidPlan([Fault(f"/{error.argument}", detail)]) from error
    _check_truncation_leaves_a_choice(compiled)
    return document


def checked_candidates(given: Sequence[Content]) -> list[str]:
    """
    Check plans that are to be compared, all of one family.

    Raises:
        InvalidPlan: With the faults of the first candidate that has any; pointers begin with its place.
    """
    documents: list[str] = []
    for place, content in enumerate(given):
        with located(f"/candidates/{place}"):
            documents.append(checked_content(content))
            families = [procedure_of_document(document).family.name for document in documents]
            if families[-1] != families[0]:
                rule = f"must be that of the first candidate, {families[0]}; received {families[-1]}"
                raise InvalidPlan([Fault("/family", rule)])
    return documents


@lru_cache(maxsize=64)
def attained_by(standard: standards.Standard) -> Attained:
    """The exact risks of a standard plan at its own hypotheses."""
    scale = {"scale": 1.0} if standard.needs_scale else {}
    procedure = procedure_of_document(checked_content({"standard": standard.name, **DEFAULTS, **scale}))
    return risks_of(procedure, exact_figures(procedure, procedure.hypotheses))


def _with_defaults(given: Content) -> Content:
    """What was stated, with a standard's name replaced by its table and the defaults filled in."""
    content = standards.expanded({key: value for key, value in {**DEFAULTS, **given}.items() if value is not None})
    statistic = STATISTICS.get(content["statistic"], STATISTICS["simple"])
    return {"boundaries": statistic.boundaries[0], **content}


def _completed(content: Content) -> dict[str, Any]:
    """With what is computed from it once and for all."""
    completed = dict(content)
    family = family_of(content)
    if family is not None and not family.has_model:
        return {**completed, **_bounded(content)}
    if family is not None and family.is_invariant:
        return {**completed, **(simulated_thresholds(content) if content["boundaries"] == "calibrated" else {})}
    if content["boundaries"] == "calibrated":
        completed["thresholds"] = _rounded(calibrated(content))
    is_simple = STATISTICS[content["statistic"]].is_simple
    if content["boundaries"] in ("calibrated", "table") or not is_simple:
        procedure = procedure_of_document(canonical(completed))
        try:
            completed["attained"] = _attained(procedure) if is_simple else _worst(procedure)
        except (ComputationTooLarge, InvalidQuestion):
            return completed
    return completed


def _rounded(thresholds: Thresholds) -> dict[str, float]:
    ends = {"accept": thresholds.accept, "reject": thresholds.reject}
    return {name: rounded(value) for name, value in ends.items() if math.isfinite(value)}


def _attained(procedure: Procedure) -> dict[str, float | None]:
    risks = risks_of(procedure, exact_figures(procedure, procedure.hypotheses))
    return {name: None if value is None else rounded(value) for name, value in asdict(risks).items()}


def _worst(procedure: Procedure) -> dict[str, float | None]:
    """The risks at the worst points of both hypotheses, and these points."""
    return {name: None if value is None else rounded(value) for name, value in asdict(worst_of(procedure)).items()}


def _bounded(content: Content) -> dict[str, Any]:
    """The bounds of the risks that hold for every model; a forced decision has none."""
    thresholds = procedure_of_document(canonical(content)).thresholds
    if thresholds is None or "truncation" in content:
        return {}
    alpha, beta = boundaries.guaranteed(thresholds)
    return {"attained": {"alpha": rounded(alpha), "beta": rounded(beta)}}


def _required(content: Content) -> tuple[str, ...]:
    family = family_of(content)
    has_model = family is None or family.has_model
    return ("family", "h0", "alpha") if has_model else ("family", "alpha")


def _faults_of(content: Content) -> list[Fault]:
    family = family_of(content)
    if family is None:
        known = ", ".join(FAMILIES)
        return [Fault("/family", f"must be one of {known}; received {content['family']!r}")]
    members = faults_of_statistic(family, content)
    if members:
        return members
    return [
        *_faults_of_hypotheses(family, content),
        *_faults_of_risks(content),
        *_faults_of_boundaries(content),
        *_faults_of_model(family, content),
        *_faults_of_known(family, content["statistic"], known_of(content)),
        *_faults_of_truncation(family, content.get("truncation")),
        *_faults_of_rows(family, content),
    ]


def _faults_of_hypotheses(family: Family, content: Content) -> list[Fault]:
    if not family.has_model:
        reason = f"means nothing for {family.name}: its increments hold both hypotheses"
        return [Fault(f"/{name}", reason) for name in HYPOTHESES if name in content]
    faults = [
        Fault(f"/{name}", f"{rule}: it is a {family.parameter}; received {content[name]!r}")
        for name in HYPOTHESES
        if name in content and (rule := family.hypothesis_rule(content[name])) is not None
    ]
    if STATISTICS[content["statistic"]].weighs_points and content["h0"] == content["h1"]:
        faults.append(Fault("/h1", f"must differ from h0; received {content['h1']!r} for both"))
    return faults


def _faults_of_risks(content: Content) -> list[Fault]:
    alpha, beta = content["alpha"], content.get("beta")
    faults = [
        Fault(f"/{name}", f"must lie strictly between 0 and 1; received {risk!r}")
        for name, risk in (("alpha", alpha), ("beta", beta))
        if risk is not None and not 0.0 < risk < 1.0
    ]
    if not faults and beta is not None and alpha + beta >= 1.0:
        faults.append(Fault("/beta", f"alpha + beta must be below 1; received {alpha!r} + {beta!r}"))
    return faults


def _faults_of_boundaries(content: Content) -> list[Fault]:
    rule, thresholds = content["boundaries"], content.get("thresholds")
    statistic = STATISTICS[content["statistic"]]
    if rule not in statistic.boundaries:
        where = "" if statistic.is_simple else f" for {statistic.title}"
        return [Fault("/boundaries", f"must be one of {', '.join(statistic.boundaries)}{where}; received {rule!r}")]
    faults = []
    if rule != "table" and "table" in content:
        faults.append(Fault("/table", f'belongs to "table" boundaries, not {rule!r}'))
    if rule != "given" and thresholds:
        faults.append(Fault("/thresholds", f'belong to "given" boundaries, not {rule!r}'))
    if rule != "given":
        return faults
    if thresholds is None:
        return [*faults, Fault("/thresholds", 'are required for "given" boundaries')]
    accept = thresholds.get("accept")
    if accept is None and statistic.weighs_points:
        faults.append(Fault("/thresholds/accept", "is required"))
    if accept is not None and not statistic.may_accept(content):
        faults.append(Fault("/thresholds/accept", "means nothing here: nothing accepts before the truncation"))
    if accept is not None and not -1e6 <= accept < 0.0:  # noqa: PLR2004
        faults.append(Fault("/thresholds/accept", f"must lie below 0 (at least -1e6); received {accept!r}"))
    if not 0.0 < thresholds["reject"] <= 1e6:  # noqa: PLR2004
        faults.append(Fault("/thresholds/reject", f"must lie above 0 (at most 1e6); received {thresholds['reject']!r}"))
    return faults


def _faults_of_model(family: Family, content: Content) -> list[Fault]:
    """Without a model only what holds for every model is promised."""
    rule = content["boundaries"]
    if family.has_model or rule in FOR_EVERY_MODEL or rule not in STATISTICS[content["statistic"]].boundaries:
        return []
    reason = "other rules promise risks that only a model of the observations can give"
    return [Fault("/boundaries", f"must be strict or given for {family.name}: {reason}; received {rule!r}")]


def _faults_of_known(family: Family, statistic: str, known: Mapping[str, float]) -> list[Fault]:
    faults = [Fault(f"/known/{name}", f"is required for {family.name}") for name in family.known if name not in known]
    for name, value in known.items():
        if name not in (*family.known, *family.may_know):
            where = f"an invariant plan of {family.name}" if statistic == "invariant" else family.name
            faults.append(Fault(f"/known/{name}", f"means nothing for {where}"))
        elif not isinstance(value, float | int):
            faults.append(Fault(f"/known/{name}", f"must be a number; received {value!r}"))
        elif (rule := family.known_rule(name, value)) is not None:
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
        if limit is None and name == "sample_number":
            limit = family.truncation_rule(value)
        if limit is not None:
            faults.append(Fault(f"/truncation/{name}", f"{limit}; received {value!r}"))
    return faults


def _faults_of_rows(family: Family, content: Content) -> list[Fault]:
    if content["boundaries"] != "table" or not family.has_model:
        return []
    if content.get("truncation") is not None:
        return [Fault("/truncation", "means nothing beside a table: its last row is the end")]
    if "table" not in content:
        return [Fault("/table", 'is required for "table" boundaries')]
    is_upward = (content["h0"] < content["h1"]) != family.parameter_lowers_total
    return faults_of_table(family, content["table"], is_upward=is_upward)


def _count_rule(value: float) -> str | None:
    within = 1 <= value <= LARGEST_SAMPLE_NUMBER
    return None if within else f"must be a whole number from 1 to {LARGEST_SAMPLE_NUMBER}"


def _check_truncation_leaves_a_choice(procedure: Procedure) -> None:
    """A wall before the first possible decision would make the boundaries meaningless."""
    if isinstance(procedure.region, CurvedRegion):
        _check_something_rejects(procedure.region)
    if not isinstance(procedure.region, StraightRegion):
        return
    wall, first = procedure.region.wall, procedure.region.first_possible_decision()
    if wall is not None and wall.progress < first and math.isfinite(first):
        rule = f"must not come before the first possible decision, at {first:.0f}; received {wall.progress:.0f}"
        raise InvalidPlan([Fault("/truncation/sample_number", rule)])


def _check_something_rejects(region: CurvedRegion) -> None:
    """A threshold that no total can reach before the wall, nor at it, would make the test an idle one."""
    if region.wall is None or region.wall.cap is not None:
        return
    limits = region.limits(np.array([region.wall.progress]))
    ends = ((region.below, limits.lower), (region.above, limits.upper))
    most = region.span.per_progress * region.wall.progress
    if not any(end is Decision.REJECT and region.span.floor <= limit[0] <= most for end, limit in ends):
        raise InvalidPlan([Fault("/truncation", "comes before any total could reject: the threshold is out of reach")])
