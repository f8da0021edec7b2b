"""The observation models: what a plan's numbers mean, what an observation may be, and the evidence in it."""

from collections.abc import Mapping
from typing import Any

from service.domain.families.base import Family, Increments
from service.domain.families.bernoulli import Bernoulli
from service.domain.families.exponential import Exponential
from service.domain.families.invariant_forms import InvariantDifference, InvariantNormal, InvariantTwoSample
from service.domain.families.lognormal import Lognormal
from service.domain.families.negative_binomial import NegativeBinomial
from service.domain.families.normal import Normal
from service.domain.families.normal_difference import NormalDifference
from service.domain.families.normal_two_sample import NormalTwoSample
from service.domain.families.normal_variance import NormalVariance
from service.domain.families.paired import Paired
from service.domain.families.poisson import Poisson
from service.domain.families.poisson_ratio import PoissonRatio
from service.domain.families.score import Score
from service.domain.families.spread_about_mean import SpreadAboutMean
from service.domain.families.weibull import Weibull

_ALL: tuple[Family, ...] = (
    Bernoulli(),
    Poisson(),
    Exponential(),
    Normal(),
    Lognormal(),
    NegativeBinomial(),
    NormalVariance(),
    Weibull(),
    Paired(),
    PoissonRatio(),
    NormalDifference(),
    NormalTwoSample(),
    Score(),
)

FAMILIES: dict[str, Family] = {family.name: family for family in _ALL}

# The forms that families take in an invariant plan.
INVARIANT: dict[str, Family] = {
    family.name: family for family in (InvariantNormal(), InvariantDifference(), InvariantTwoSample())
}

_SPREAD_ABOUT_MEAN = SpreadAboutMean()


def family_of(content: Mapping[str, Any]) -> Family | None:
    """The family of a plan in the form that its statistic and what it knows call for; None where it names none."""
    name = content.get("family")
    if content.get("statistic") == "invariant" and name in INVARIANT:
        return INVARIANT[name]
    if name == _SPREAD_ABOUT_MEAN.name and "mean" not in (content.get("known") or {}):
        return _SPREAD_ABOUT_MEAN
    return FAMILIES.get(name or "")


__all__ = ["FAMILIES", "INVARIANT", "Family", "Increments", "family_of"]
