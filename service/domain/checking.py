"""The door for what a caller sends as a plan: every rule it must obey, and the canonical document it becomes."""

import math
from collections.abc import Mapping, Sequence
from functools import lru_cache
from typing import Any

from service.domain import standards
from service.domain.calibrating import Risks, calibrated, exact_figures, risks_of
from service.domain.errors import ComputationTooLarge, Fault, InvalidPlan, located
from service.domain.families import FAMILIES, Family
from service.domain.families.base import positive_rule
from service.domain.plan import Content, canonical, rounded
from service.domain.procedure import Procedure, procedure_of_document
from service.domain.tables import faults_of_table
from service.sequential.errors import OutOfRange
from service.sequential.region import StraightRegion

BOUNDARY_RULES = ("wald", "strict", "calibrated", "given", "table")
LARGEST_SAMPLE_NUMBER = 1_000_000_000
REQUIRED = ("family", "h0", "h1", "alpha", "beta")
DEFAULTS = {"boundaries": "wald", "statistic": "simple"}


def checked_content(given: Content) -> str:
    """
    Check what a caller sends as a plan (its name left out) and return it as a canonical document.

    A standard's name is replaced by its table; calibrated thresholds and the exact risks of calibrated boundaries and
    tables are computed once, here, and stored with the plan.

    Raises:
        InvalidPlan: With a fault for each thing that cannot be right.
        ComputationTooLarge: The boundaries cannot be calibrated within the limit of work.
    """
    content = standards.expanded({key: value for key, value in {**DEFAULTS, **given}.items() if value is not None})
    missing = [Fault(f"/{name}", "is required") for name in REQUIRED if name not in content]
    if missing or (faults := _faults_of(content)):
        raise InvalidPlan(missing or faults)
    try:
        document = canonical(_completed(content))
        compiled = procedure_of_document(document)
    except OutOfRange as error:
        raise InvalidPlan([Fault("/h1", f"{error.rule}; h0 is {content['h0']!r}, h1 {content['h1']!r}")]) from error
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
def attained_by(standard: standards.Standard) -> Risks:
    """The exact risks of a standard plan at its own hypotheses."""
    scale = {"scale": 1.0} if standard.needs_scale else {}
    procedure = procedure_of_document(checked_content({"standard": standard.name, **DEFAULTS, **scale}))
    return risks_of(procedure, exact_figures(procedure, procedure.hypotheses))


def _completed(content: Content) -> dict[str, Any]:
    """With what is computed from it once and for all."""
    completed = dict(content)
    if content["boundaries"] == "calibrated":
        thresholds = calibrated(content)
        completed["thresholds"] = {"accept": rounded(thresholds.accept), "reject": rounded(thresholds.reject)}
    if content["boundaries"] in ("calibrated", "table"):
        procedure = procedure_of_document(canonical(completed))
        try:
            risks = risks_of(procedure, exact_figures(procedure, procedure.hypotheses))
        except ComputationTooLarge:
            return completed
        completed["attained"] = {"alpha": rounded(risks.alpha), "beta": rounded(risks.beta)}
    return completed


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
        *_faults_of_rows(family, content),
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
    faults = []
    if rule != "table" and "table" in content:
        faults.append(Fault("/table", f'belongs to "table" boundaries, not {rule!r}'))
    if rule != "given" and thresholds:
        faults.append(Fault("/thresholds", f'belong to "given" boundaries, not {rule!r}'))
    if rule != "given":
        return faults
    if thresholds is None:
        return [*faults, Fault("/thresholds", 'are required for "given" boundaries')]
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
        if limit is not None:
            faults.append(Fault(f"/truncation/{name}", f"{limit}; received {value!r}"))
    return faults


def _faults_of_rows(family: Family, content: Content) -> list[Fault]:
    if content["boundaries"] != "table":
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
    if not isinstance(procedure.region, StraightRegion):
        return
    wall, first = procedure.region.wall, procedure.region.first_possible_decision()
    if wall is not None and wall.progress < first and math.isfinite(first):
        rule = f"must not come before the first possible decision, at {first:.0f}; received {wall.progress:.0f}"
        raise InvalidPlan([Fault("/truncation/sample_number", rule)])
