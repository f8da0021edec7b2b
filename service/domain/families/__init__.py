"""The observation models: what a plan's numbers mean, what an observation may be, and the evidence in it."""

from service.domain.families.base import Family, Increments
from service.domain.families.bernoulli import Bernoulli
from service.domain.families.exponential import Exponential
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

__all__ = ["FAMILIES", "Family", "Increments"]
