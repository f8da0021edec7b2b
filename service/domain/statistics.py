"""
The statistics: what the evidence of a plan is made of, which plans each of them needs, and the region that follows.

`simple` weighs two parameter values; `generalised` two ranges by their suprema; `mixture` averages H1 over a prior;
`invariant` weighs two standardised means by Student's t, whatever the standard deviation is.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass

from service.domain.errors import Fault
from service.domain.families import FAMILIES, INVARIANT, Family
from service.domain.families.base import positive_rule
from service.domain.plan import Content, known_of, prior_of
from service.sequential import generalised
from service.sequential.evidence import Evidence
from service.sequential.likelihood import LikelihoodRatio

ABOVE, BELOW = DIRECTIONS = "above", "below"
# Parameters of a prior beyond these leave too few digits of what the observations add to it.
SMALLEST_PRIOR, LARGEST_PRIOR = 1e-6, 1e6


@dataclass(frozen=True)
class Statistic:
    """
    What a plan with this statistic states.

    Attributes:
        boundaries: The rules that hold for it, the default first.
        required: Members that the plan must have beside those that all have.
        optional: Members that mean something in it and are not required.
        one_sided: Those of them that mean nothing in a two-sided plan.
    """

    name: str
    boundaries: tuple[str, ...]
    required: tuple[str, ...]
    optional: tuple[str, ...] = ()
    one_sided: tuple[str, ...] = ()

    def may_accept(self, content: Content) -> bool:
        """Whether an accept threshold means something in such a plan."""
        return self.weighs_points or (self.name != "mixture" and content.get("sides") != 2)  # noqa: PLR2004

    @property
    def is_simple(self) -> bool:
        """True for the ratio of two parameter values, whose region is straight."""
        return self.name == "simple"

    @property
    def title(self) -> str:
        """A plan with it, for people."""
        return f"{'an' if self.name == 'invariant' else 'a'} {self.name} plan"

    @property
    def weighs_points(self) -> bool:
        """True where one value stands against another, so that both risks are at points."""
        return self.name in {"simple", "invariant"}


STATISTICS = {
    statistic.name: statistic
    for statistic in (
        Statistic("simple", ("wald", "strict", "calibrated", "given", "table"), ("h1", "beta")),
        Statistic(
            "generalised",
            ("calibrated", "given"),
            (),
            optional=("h1", "beta", "sides", "direction"),
            one_sided=("h1", "beta", "direction"),
        ),
        Statistic(
            "mixture", ("strict", "calibrated", "given"), (), optional=("sides", "direction"), one_sided=("direction",)
        ),
        Statistic("invariant", ("wald", "strict", "calibrated", "given"), ("h1", "beta"), optional=("sides",)),
    )
}
# Members that only some statistics know.
SPECIAL = ("h1", "beta", "sides", "direction")


def hypotheses_of(content: Content) -> tuple[float, ...]:
    """The values that the plan states: h0, and h1 where it lies apart from h0; none where the family has no model."""
    if "h0" not in content:
        return ()
    h0, h1 = content["h0"], content.get("h1")
    return (h0,) if h1 is None or h1 == h0 else (h0, h1)


def settled_known(family: Family, content: Content) -> Mapping[str, float]:
    """What the family knows of a plan, with what follows from its hypotheses."""
    h0 = content.get("h0", math.nan)
    known = known_of(content)
    if family.is_invariant:
        known = {**known, "sides": float(content.get("sides", 1))}
    return family.settled(known, h0, content.get("h1", h0))


def faults_of_statistic(family: Family, content: Content) -> list[Fault]:
    """What is wrong with the members that depend on the statistic."""
    statistic = STATISTICS.get(content["statistic"])
    if statistic is None:
        return [Fault("/statistic", f"must be one of {', '.join(STATISTICS)}; received {content['statistic']!r}")]
    allowed = (*statistic.required, *statistic.optional)
    required = [name for name in statistic.required if family.has_model or name != "h1"]
    faults = [Fault(f"/{name}", "is required") for name in required if name not in content]
    faults += [
        Fault(f"/{name}", f"means nothing for {statistic.title}")
        for name in SPECIAL
        if name in content and name not in allowed
    ]
    if statistic.name == "invariant":
        faults += _faults_of_sides(statistic, content) + _faults_of_invariant(family, statistic, content)
    elif not statistic.is_simple:
        faults += _faults_of_sides(statistic, content)
        faults += _faults_of_composite(family, statistic, content)
    return faults


def evidence_of(family: Family, content: Content) -> LikelihoodRatio | Evidence:
    """
    The evidence of a content without faults.

    Raises:
        OutOfRange: Floating point cannot tell the hypotheses apart.
    """
    known, hypotheses = settled_known(family, content), hypotheses_of(content)
    if STATISTICS[content["statistic"]].weighs_points:
        # A family without a model does not look at hypotheses, and its plans have none.
        return family.likelihood_ratio(content.get("h0", math.nan), content.get("h1", math.nan), known)
    direction = direction_of(family, content)
    edge = family.mean_of(content["h0"], known)
    if content["statistic"] == "mixture":
        return family.mixture(edge, direction, known, prior_of(content) or {})
    deviance = family.deviance(known)
    if direction == 0:
        return generalised.TwoSided(deviance, edge)
    ratio = family.likelihood_ratio(hypotheses[0], hypotheses[1], known) if len(hypotheses) > 1 else None
    return generalised.OneSided(deviance, edge, family.mean_of(hypotheses[-1], known), ratio, direction > 0)


def is_two_sided(content: Content) -> bool:
    """H0 is h0 alone, against both sides of it."""
    return bool(content.get("sides") == len(DIRECTIONS))


def direction_of(family: Family, content: Content) -> int:
    """On which side of H0's edge totals speak for H1: 1 above, -1 below, 0 on both."""
    if is_two_sided(content):
        return 0
    hypotheses = hypotheses_of(content)
    is_above = hypotheses[-1] > hypotheses[0] if len(hypotheses) > 1 else content.get("direction", ABOVE) == ABOVE
    return 1 if is_above != family.parameter_lowers_total else -1


def accepts_early(content: Content) -> bool:
    """Whether the plan may accept before it is truncated."""
    if STATISTICS[content["statistic"]].weighs_points:
        return True
    if content["boundaries"] != "given":
        return "beta" in content
    return (content.get("thresholds") or {}).get("accept") is not None


def _faults_of_sides(statistic: Statistic, content: Content) -> list[Fault]:
    faults = []
    sides, direction = content.get("sides", 1), content.get("direction")
    if sides not in (1, 2):
        faults.append(Fault("/sides", f"must be 1 or 2; received {sides!r}"))
    if direction not in (None, ABOVE, BELOW):
        faults.append(Fault("/direction", f"must be {ABOVE} or {BELOW}; received {direction!r}"))
    if is_two_sided(content):
        names = (name for name in statistic.one_sided if name in content)
        faults += [Fault(f"/{name}", "means nothing for a two-sided plan: H0 is h0 alone") for name in names]
        if "failures" in (content.get("truncation") or {}):
            rule = "means nothing for a two-sided plan: neither so many failures nor the exposure without them rejects"
            faults.append(Fault("/truncation/failures", rule))
    return faults


def _faults_of_invariant(family: Family, statistic: Statistic, content: Content) -> list[Fault]:
    """What unknown standard deviations ask of the rest of the plan."""
    if not family.is_invariant:
        return [Fault("/statistic", f"invariant is served for {', '.join(INVARIANT)}, not for {family.name}")]
    faults = _faults_of_prior(family, statistic, content)
    if content.get("sides") != 2:  # noqa: PLR2004
        return faults
    if content.get("h0", 0.0) != 0.0:
        faults.append(Fault("/h0", f"must be 0 in a two-sided plan; received {content['h0']!r}"))
    if content.get("h1", 1.0) <= 0.0:
        faults.append(Fault("/h1", f"must be above 0 in a two-sided plan: both signs are; received {content['h1']!r}"))
    return faults


def _faults_of_composite(family: Family, statistic: Statistic, content: Content) -> list[Fault]:
    """What composite hypotheses ask of the rest of the plan."""
    served = [other.name for other in FAMILIES.values() if other.prior]
    if not family.prior:
        return [Fault("/statistic", f"{statistic.name} is served for {', '.join(served)}, not for {family.name}")]
    faults, is_apart = [], len(hypotheses_of(content)) > 1
    if "beta" in content and not is_apart:
        rule = "needs an h1 apart from h0; leave it out where nothing is to accept before the truncation"
        faults.append(Fault("/beta", rule))
    if is_apart and "direction" in content:
        faults.append(Fault("/direction", "is said by h1 already; leave it out"))
    has_cap = "failures" in (content.get("truncation") or {})
    if statistic.name == "mixture" and has_cap and not is_two_sided(content):
        rule = "means nothing for a mixture plan: it accepts by the exposure and rejects by its evidence alone"
        faults.append(Fault("/truncation/failures", rule))
    if content.get("truncation") is None and not accepts_early(content) and not _may_go_on_for_ever(content):
        rule = "is required: nothing accepts before it"
        faults.append(Fault("/truncation", f"{rule}, and no threshold holds the level without it"))
    return faults + _faults_of_prior(family, statistic, content)


def _may_go_on_for_ever(content: Content) -> bool:
    """Mixtures keep their level however long they run; no other evidence without an accept threshold does."""
    return bool(content["statistic"] == "mixture" and content["boundaries"] != "calibrated")


def _faults_of_prior(family: Family, statistic: Statistic, content: Content) -> list[Fault]:
    prior = prior_of(content)
    if statistic.name != "mixture":
        return [] if prior is None else [Fault("/known/prior", "belongs to mixture plans")]
    wanted = ", ".join(f'"{name}"' for name in family.prior)
    if prior is None:
        return [Fault("/known/prior", f"is required for {family.name}, with {wanted}")]
    if not isinstance(prior, Mapping):
        return [Fault("/known/prior", f"must be an object with {wanted}; received {prior!r}")]
    faults = [
        Fault(f"/known/prior/{name}", f"is required for {family.name}") for name in family.prior if name not in prior
    ]
    for name, value in prior.items():
        if name not in family.prior:
            faults.append(Fault(f"/known/prior/{name}", f"means nothing for {family.name}; its prior has {wanted}"))
        elif (rule := _prior_rule(name, value)) is not None:
            faults.append(Fault(f"/known/prior/{name}", f"{rule}; received {value!r}"))
    return faults


def _prior_rule(name: str, value: float) -> str | None:
    """The rule that a parameter of a prior breaks; `rate` and `tau` have a unit, so that any size may be right."""
    if name in ("rate", "tau"):
        return positive_rule(value)
    within = SMALLEST_PRIOR <= value <= LARGEST_PRIOR
    return None if within else f"must be from {SMALLEST_PRIOR:g} to {LARGEST_PRIOR:g}"
