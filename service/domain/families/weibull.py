"""Lives of units that wear in or wear out: a Weibull law with a known shape."""

import math
from collections.abc import Mapping
from dataclasses import replace
from typing import ClassVar

import numpy as np

from service.domain.families.base import (
    LARGEST_EXPONENT,
    LARGEST_REAL,
    ORIGIN,
    Column,
    Increments,
    Start,
    TableKind,
    Way,
    plural,
    poisson_motion,
    reals,
    refuse,
)
from service.domain.families.exponential import Exponential
from service.sequential import likelihood
from service.sequential.approximations import Motion
from service.sequential.double import FloatArray
from service.sequential.exact.characteristics import Characteristics
from service.sequential.fixed_sample import FixedSample
from service.sequential.likelihood import LikelihoodRatio
from service.sequential.region import Region
from service.sequential.transforms import power_spans

SMALLEST_SHAPE, LARGEST_SHAPE = 0.01, 100.0


class Weibull(Exponential):
    """
    One observation is a stretch of one unit's life: the age that it reached, and whether it failed there.

    It begins at age 0, or at the age `from` that was reported before. The exposure of a stretch is the number of
    failures that H0 expects in it, (age/h0)**shape less the same of `from`. On that axis failures come at a constant
    rate, 1 under H0, so all else is as for `exponential` with mean lives 1 and (h1/h0)**shape: watched in continuous
    time, so that acceptance may fall inside a stretch.
    """

    name: ClassVar[str] = "weibull"
    parameter: ClassVar[str] = "characteristic life (63.2 % fail before it)"
    counted: ClassVar[str] = "failures"
    axis: ClassVar[str] = "exposure, unit-time transformed by the shape"
    optional: ClassVar[Mapping[str, float]] = {"from": 0.0}
    known: ClassVar[tuple[str, ...]] = ("shape",)
    table: ClassVar[TableKind | None] = None
    no_unbiased_estimate: ClassVar[str | None] = "A characteristic life has no unbiased estimate after such a test."
    no_bias: ClassVar[str | None] = "Is known of the mean exposure for a failure only, not of the root of it."

    def known_rule(self, name: str, value: float) -> str | None:
        """See `Family`."""
        within = SMALLEST_SHAPE <= value <= LARGEST_SHAPE
        return None if within else f"must be from {SMALLEST_SHAPE:g} to {LARGEST_SHAPE:g}"

    def settled(self, known: Mapping[str, float], h0: float, h1: float) -> Mapping[str, float]:
        """With the life that exposure is measured by, `life`: that of H0."""
        return {**known, "life": h0}

    def likelihood_ratio(self, h0: float, h1: float, known: Mapping[str, float]) -> LikelihoodRatio:
        """See `Family`."""
        return likelihood.weibull(h0, h1, known["shape"])

    def mean_of(self, parameter: float, known: Mapping[str, float]) -> float:
        """See `Family`."""
        return _rate(parameter, known)

    def parameter_of(self, mean: float, known: Mapping[str, float]) -> float:
        """See `Family`."""
        if mean == 0.0:
            return math.inf
        logarithm = math.log(known["life"]) - math.log(mean) / known["shape"]
        return math.exp(logarithm) if logarithm < LARGEST_EXPONENT else math.inf

    def exact(
        self, region: Region, parameters: FloatArray, known: Mapping[str, float], start: Start = ORIGIN
    ) -> Characteristics:
        """See `Family`."""
        means = np.array([1.0 / _rate(float(parameter), known) for parameter in parameters])
        return super().exact(region, means, known, start)

    def ways(self, region: Region, start: Start, known: Mapping[str, float]) -> tuple[Way | None, Way | None]:
        """See `Family`."""
        down, up = super().ways(region, start, known)
        return down and _without_failure(down, known), up and _with_failures(up, known)

    def estimate(self, start: Start, known: Mapping[str, float]) -> float | None:
        """See `Family`."""
        multiple = super().estimate(start, known)
        if multiple is None:
            return None
        logarithm = math.log(known["life"]) + math.log(multiple) / known["shape"]
        return math.exp(logarithm) if abs(logarithm) < math.log(LARGEST_REAL) else None

    def motion(self, parameter: float, known: Mapping[str, float]) -> Motion:
        """See `Family`."""
        return poisson_motion(_rate(parameter, known))

    def fixed_sample(
        self, lower: float, upper: float, risks: tuple[float, float], known: Mapping[str, float]
    ) -> FixedSample | None:
        """See `Family`."""
        return super().fixed_sample(1.0 / _rate(lower, known), 1.0 / _rate(upper, known), risks, known)

    def increments(self, columns: Mapping[str, Column], known: Mapping[str, float]) -> Increments:
        """See `Family`."""
        age, begin = columns["time"], columns["from"]
        refuse(
            [
                *reals(age, "must be 0 or above", age.values >= 0.0),
                *reals(begin, "must be 0 or above", begin.values >= 0.0),
            ]
        )
        refuse(age.require(age.values >= begin.values, "must not lie before the age `from` which it was watched"))
        exposure = power_spans(begin.values, age.values, known["life"], known["shape"])
        refuse(age.require(exposure <= LARGEST_REAL, "must not make H0 expect more than 1e100 failures"))
        return Increments(np.ones(len(exposure), np.int64), exposure, columns["failed"].values)


def _rate(life: float, known: Mapping[str, float]) -> float:
    """Failures for each that H0 expects; lives so long or short that a double could not hold it are cut."""
    logarithm = known["shape"] * (math.log(known["life"]) - math.log(life))
    return math.exp(min(max(logarithm, -math.log(LARGEST_REAL)), math.log(LARGEST_REAL)))


def _without_failure(way: Way, known: Mapping[str, float]) -> Way:
    """The same way down in the words of this family."""
    return replace(way, words=f"{_aged(way, known)}, without failure")


def _with_failures(way: Way, known: Mapping[str, float]) -> Way:
    """The same way up in the words of this family."""
    failures = plural(round(way.total), "failure")
    aged = _aged(way, known)
    return replace(way, words=f"{failures} within {aged}" if way.total else f"{aged}, whatever fails")


def _aged(way: Way, known: Mapping[str, float]) -> str:
    """An exposure as whole units run from new to one age, at most the life under H0."""
    exposure = way.exposure or 0.0
    units = max(1, math.ceil(exposure * (1.0 - 1e-12)))
    age = known["life"] * (exposure / units) ** (1.0 / known["shape"])
    return f"an exposure of {exposure:.6g}, as of {plural(units, 'unit')} from new to age {age:.6g}"
