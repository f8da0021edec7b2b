"""
A plan made ready to run: its content compiled to its evidence and a region.

Content is plain JSON with its defaults filled in, as `checking.checked_content` makes it.
"""

import json
import math
from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache

from service.domain.families import Family, family_of
from service.domain.families.base import ORIGIN
from service.domain.plan import Content, Plan
from service.domain.statistics import accepts_early, evidence_of, hypotheses_of, settled_known
from service.domain.tables import region_of_table
from service.sequential import boundaries
from service.sequential.boundaries import Thresholds
from service.sequential.curved import CurvedRegion
from service.sequential.decision import Decision
from service.sequential.evidence import Evidence
from service.sequential.likelihood import LikelihoodRatio
from service.sequential.region import Region, StraightRegion, Wall, straight_region

TWO_SIDES = 2


@dataclass(frozen=True)
class Procedure:
    """
    A plan's numbers at work: the family, the evidence, the limits and the region that decides.

    Attributes:
        thresholds: None where the limits are not of the log-likelihood ratio but a table's. `accept` is minus infinity
            where nothing accepts before the truncation.
        hypotheses: h0, and h1 where the plan states one apart from it; none where the family has no model.
        risks: alpha, and beta where the plan states one.
    """

    family: Family
    evidence: LikelihoodRatio | Evidence
    thresholds: Thresholds | None
    region: Region
    known: Mapping[str, float]
    hypotheses: tuple[float, ...]
    risks: tuple[float, float | None]

    @property
    def is_two_sided(self) -> bool:
        """Both limits of the region reject."""
        return self.region.below is self.region.above

    @property
    def has_two_directions(self) -> bool:
        """A rejection says on which side of h0 the parameter lies."""
        return self.is_two_sided or self.known.get("sides") == TWO_SIDES

    @property
    def is_upward(self) -> bool:
        """Large totals speak for H1."""
        return self.region.above is Decision.REJECT

    @property
    def may_go_on_for_ever(self) -> bool:
        """Nothing but the rejection of H0 ends sampling."""
        never_accepts = self.thresholds is not None and math.isinf(self.thresholds.accept)
        return never_accepts and self.region.wall is None


@dataclass(frozen=True)
class Lines:
    """
    The region's two lines over the sample number (or exposure), as inspection standards draw them.

    Both intercepts are positive, but where the first unit makes no progress the nearer one may not be.

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
    if not isinstance(region, StraightRegion) or procedure.family.is_invariant:
        return None
    # The region may run over fewer than all units.
    shift = region.ratio.slope * procedure.family.idle_units(ORIGIN)
    lower, upper = region.lower_intercept + shift, region.upper_intercept - shift
    accept, reject = (lower, upper) if procedure.is_upward else (upper, lower)
    return Lines(region.ratio.slope, accept, reject)


def with_thresholds(content: Content, thresholds: Thresholds) -> Procedure:
    """
    The procedure of a content without a table between other thresholds than its own.

    Raises:
        OutOfRange: Floating point cannot tell the hypotheses apart.
    """
    family = _family(content)
    evidence, wall = evidence_of(family, content), _wall(family, content)
    region: Region
    if isinstance(evidence, LikelihoodRatio):
        region = straight_region(evidence, thresholds, family.span, wall)
    else:
        region = CurvedRegion(evidence, thresholds, family.span, wall)
    return _procedure(content, evidence, thresholds, region)


@lru_cache(maxsize=1024)
def _compiled(document: str) -> Procedure:
    content: Content = json.loads(document)
    if content["boundaries"] == "table":
        family = _family(content)
        evidence = evidence_of(family, content)
        region = region_of_table(family, content["table"], is_upward=evidence.is_upward)
        return _procedure(content, evidence, None, region)
    return with_thresholds(content, _thresholds(content))


def _procedure(
    content: Content, evidence: LikelihoodRatio | Evidence, thresholds: Thresholds | None, region: Region
) -> Procedure:
    family, risks = _family(content), (content["alpha"], content.get("beta"))
    return Procedure(
        family, evidence, thresholds, region, settled_known(family, content), hypotheses_of(content), risks
    )


def _thresholds(content: Content) -> Thresholds:
    """Stored with the plan where they were given or calibrated; what follows from the risks alone is not."""
    stored = content.get("thresholds")
    if stored is not None:
        accept = stored.get("accept")
        return Thresholds(-math.inf if accept is None else float(accept), float(stored["reject"]))
    if not accepts_early(content):
        return Thresholds(-math.inf, boundaries.strict(content["alpha"], 1.0).reject)
    rule = boundaries.strict if content["boundaries"] == "strict" else boundaries.wald
    return rule(content["alpha"], content["beta"])


def _family(content: Content) -> Family:
    family = family_of(content)
    if family is None:  # not reached: a content without faults names one
        raise KeyError(content["family"])
    return family


def _wall(family: Family, content: Content) -> Wall | None:
    truncation = content.get("truncation")
    if truncation is None:
        return None
    progress = truncation.get("exposure", truncation.get("sample_number")) - family.idle_units(ORIGIN)
    return Wall(float(progress), truncation.get("failures"))
