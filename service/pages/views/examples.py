"""A sensible plan of each family and statistic, with invented numbers, for whoever begins to design one."""

from collections.abc import Mapping
from typing import Any

from service.domain.families import FAMILIES
from service.domain.plan import Content
from service.domain.statistics import STATISTICS

RISKS = {"alpha": 0.05, "beta": 0.10}
_ARMS = {"sigma_a": 0.4, "sigma_b": 0.4}

_STATED: Mapping[str, Mapping[str, Any]] = {
    "bernoulli": {"h0": 0.02, "h1": 0.08},
    "poisson": {"h0": 0.5, "h1": 1.5},
    "exponential": {"h0": 900.0, "h1": 300.0},
    "normal": {"h0": 10.0, "h1": 10.2, "known": {"sigma": 0.25}},
    "lognormal": {"h0": 100.0, "h1": 70.0, "known": {"sigma": 0.4}},
    "negative_binomial": {"h0": 2.0, "h1": 4.0, "known": {"dispersion": 3.0}},
    "normal_variance": {"h0": 0.01, "h1": 0.02},
    "weibull": {"h0": 1000.0, "h1": 500.0, "known": {"shape": 1.8}},
    "paired": {"h0": 1.0, "h1": 3.0},
    "poisson_ratio": {"h0": 1.0, "h1": 0.5, "known": {"exposure_ratio": 1.0}},
    "normal_difference": {"h0": 0.0, "h1": 0.3, "known": _ARMS},
    "normal_two_sample": {"h0": 0.0, "h1": 0.3, "known": _ARMS},
    "score": {},
}
# Where a composite plan is truncated, and the prior of a mixture.
_ENDS = {"poisson": 40.0, "exponential": 9000.0, "weibull": 15.0, "normal_two_sample": 60.0}
_UNITS = 150
_PRIORS: Mapping[str, Mapping[str, float]] = {
    "poisson": {"shape": 1.0, "rate": 1.0},
    "exponential": {"shape": 1.0, "rate": 900.0},
    "weibull": {"shape": 1.0, "rate": 1.0},
    "normal": {"tau": 0.2},
    "lognormal": {"tau": 0.4},
    "normal_difference": {"tau": 0.3},
    "normal_two_sample": {"tau": 0.3},
}
_BETA = {"a": 1.0, "b": 1.0}
# Standardised means of an invariant plan.
_STANDARDISED = {"h0": 0.0, "h1": 0.8}


def example_of(family: str, statistic: str) -> Content:
    """The example of a family with a statistic; with a simple one where the family does not serve the statistic."""
    known_family = family if family in _STATED else "bernoulli"
    stated = {"family": known_family, "statistic": statistic, **RISKS, **_STATED[known_family]}
    if statistic == "invariant":
        return {**stated, **_STANDARDISED, "known": {}, "boundaries": "wald"}
    if statistic not in ("generalised", "mixture"):
        boundaries = "wald" if FAMILIES[known_family].has_model else "strict"
        return {**stated, "statistic": "simple", "boundaries": boundaries}
    has_exposure = FAMILIES[known_family].has_exposure
    end = {"exposure": _ENDS.get(known_family, 40.0)} if has_exposure else {"sample_number": _UNITS}
    stated |= {"truncation": end, "boundaries": STATISTICS[statistic].boundaries[0]}
    if statistic == "mixture":
        for name in ("h1", "beta"):
            stated.pop(name, None)
        stated["known"] = {**stated.get("known", {}), "prior": _PRIORS.get(known_family, _BETA)}
    return stated
