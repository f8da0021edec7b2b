"""
Observations drawn at random from a plan's model, for showing what a plan does. Pure: the generator is an argument.

Quantity: independent observations of each family under a true parameter, in the form in which they are posted.
Method: numpy's generators. Where exact figures suppose something of reports to come, so do these: a report of exposure
1 (`poisson`), one event (`poisson_ratio`), a pair that differs (`paired`), a whole life (`exponential`, `weibull`), and
measurements of two arms in turn. An unknown mean is drawn as 0 and an unknown standard deviation as 1, which the
statistics of such plans do not see.
Accuracy: that of the generator.
Cost: one draw for each observation, two where it holds two measurements.
"""

from collections.abc import Callable, Mapping

import numpy as np

from service.domain.errors import InvalidObservations, InvalidQuestion
from service.domain.families.base import LARGEST_COUNT, Column, Increments
from service.domain.procedure import Procedure
from service.sequential.double import FloatArray

Known = Mapping[str, float]
Fields = dict[str, FloatArray]
# The generator, the true parameter, what the plan knows, and how many.
Sampler = Callable[[np.random.Generator, float, Known, int], Fields]


def sampled(procedure: Procedure, parameter: float, source: np.random.Generator, count: int) -> Increments:
    """
    So many observations under a true parameter.

    Raises:
        InvalidQuestion: The family has no model, or they would be too large to be observations.
    """
    family = procedure.family
    sampler = (INVARIANT if family.is_invariant else SAMPLERS).get(family.name)
    if sampler is None:
        raise InvalidQuestion(f"Nothing can be drawn for {family.name}: it brings no model of the observations.")
    try:
        drawn = sampler(source, parameter, procedure.known, count)
        given = {**{field: np.full(count, value) for field, value in family.optional.items()}, **drawn}
        columns = {field: Column(values, lambda i: f"/observations/{i}") for field, values in given.items()}
        return family.increments(columns, procedure.known)
    except InvalidObservations:
        raise InvalidQuestion("Nothing can be drawn: observations would be too large for a test.") from None


def _bernoulli(source: np.random.Generator, parameter: float, _: Known, count: int) -> Fields:
    return {"value": (source.random(count) < parameter).astype(float)}


def _poisson(source: np.random.Generator, parameter: float, _: Known, count: int) -> Fields:
    _check_mean(parameter)
    return {"value": source.poisson(parameter, count).astype(float)}


def _negative_binomial(source: np.random.Generator, parameter: float, known: Known, count: int) -> Fields:
    _check_mean(parameter)
    # A Poisson count whose rate varies by a gamma law.
    rates = source.gamma(known["dispersion"], parameter / known["dispersion"], count)
    return {"value": source.poisson(np.minimum(rates, LARGEST_COUNT)).astype(float)}


def _exponential(source: np.random.Generator, parameter: float, _: Known, count: int) -> Fields:
    return {"time": parameter * source.standard_exponential(count), "failed": np.ones(count)}


def _weibull(source: np.random.Generator, parameter: float, known: Known, count: int) -> Fields:
    return {"time": parameter * source.weibull(known["shape"], count), "failed": np.ones(count)}


def _normal(source: np.random.Generator, parameter: float, known: Known, count: int) -> Fields:
    return {"value": source.normal(parameter, known["sigma"], count)}


def _lognormal(source: np.random.Generator, parameter: float, known: Known, count: int) -> Fields:
    with np.errstate(over="ignore"):
        return {"value": parameter * np.exp(known["sigma"] * source.standard_normal(count))}


def _spread(source: np.random.Generator, parameter: float, known: Known, count: int) -> Fields:
    return {"value": source.normal(known.get("mean", 0.0), parameter, count)}


def _paired(source: np.random.Generator, parameter: float, _: Known, count: int) -> Fields:
    in_b = (source.random(count) < parameter / (1.0 + parameter)).astype(float)
    return {"a": 1.0 - in_b, "b": in_b}


def _poisson_ratio(source: np.random.Generator, parameter: float, known: Known, count: int) -> Fields:
    return _paired(source, parameter * known["exposure_ratio"], known, count)


def _difference(source: np.random.Generator, parameter: float, known: Known, count: int) -> Fields:
    a = source.normal(0.0, known["sigma_a"], count)
    return {"a": a, "b": source.normal(parameter, known["sigma_b"], count)}


def _two_sample(source: np.random.Generator, parameter: float, known: Known, count: int) -> Fields:
    in_b = (np.arange(count) % 2).astype(np.float64)
    sigma = np.where(in_b > 0.0, known["sigma_b"], known["sigma_a"])
    return {"value": parameter * in_b + sigma * source.standard_normal(count), "arm": in_b}


def _standardised(source: np.random.Generator, parameter: float, known: Known, count: int) -> Fields:
    return {"value": source.normal(known["reference"] + parameter, 1.0, count)}


def _standardised_difference(source: np.random.Generator, parameter: float, known: Known, count: int) -> Fields:
    return {"a": np.zeros(count), "b": source.normal(known["reference"] + parameter, 1.0, count)}


def _standardised_two_sample(source: np.random.Generator, parameter: float, _: Known, count: int) -> Fields:
    return _two_sample(source, parameter, {"sigma_a": 1.0, "sigma_b": 1.0}, count)


def _check_mean(parameter: float) -> None:
    """Counts of so large a mean could not be posted, and the generator would not draw them."""
    if parameter > LARGEST_COUNT:
        raise InvalidQuestion(f"Nothing can be drawn: counts would be above {LARGEST_COUNT}.")


SAMPLERS: dict[str, Sampler] = {
    "bernoulli": _bernoulli,
    "poisson": _poisson,
    "exponential": _exponential,
    "normal": _normal,
    "lognormal": _lognormal,
    "negative_binomial": _negative_binomial,
    "normal_variance": _spread,
    "weibull": _weibull,
    "paired": _paired,
    "poisson_ratio": _poisson_ratio,
    "normal_difference": _difference,
    "normal_two_sample": _two_sample,
}
# Of the forms that families take in an invariant plan.
INVARIANT: dict[str, Sampler] = {
    "normal": _standardised,
    "normal_difference": _standardised_difference,
    "normal_two_sample": _standardised_two_sample,
}
