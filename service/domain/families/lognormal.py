"""Positive measurements whose natural logarithm is normal with a known standard deviation."""

import math
from collections.abc import Mapping
from typing import ClassVar

import numpy as np

from service.domain.families.base import (
    LARGEST_EXPONENT,
    LARGEST_REAL,
    ORIGIN,
    Column,
    Increments,
    Start,
    Way,
    positive_rule,
    reals,
    refuse,
)
from service.domain.families.normal import Normal
from service.sequential import likelihood
from service.sequential.approximations import Motion
from service.sequential.double import FloatArray
from service.sequential.exact.characteristics import Characteristics
from service.sequential.fixed_sample import FixedSample
from service.sequential.likelihood import LikelihoodRatio
from service.sequential.region import Region
from service.sequential.transforms import logarithms


class Lognormal(Normal):
    """One observation is one measurement above 0; the total is the sum of the natural logarithms."""

    name: ClassVar[str] = "lognormal"
    parameter: ClassVar[str] = "median"
    counted: ClassVar[str] = "sum of the logarithms"
    no_unbiased_estimate: ClassVar[str | None] = "Unbiased is only the estimate of the median's logarithm."
    no_bias: ClassVar[str | None] = "Is known of the estimate of the median's logarithm only."

    def hypothesis_rule(self, value: float) -> str | None:
        """See `Family`."""
        return positive_rule(value)

    def likelihood_ratio(self, h0: float, h1: float, known: Mapping[str, float]) -> LikelihoodRatio:
        """See `Family`."""
        return likelihood.lognormal(h0, h1, known["sigma"])

    def mean_of(self, parameter: float, known: Mapping[str, float]) -> float:
        """See `Family`."""
        return math.log(parameter)

    def parameter_of(self, mean: float, known: Mapping[str, float]) -> float:
        """See `Family`."""
        return math.exp(mean) if mean < LARGEST_EXPONENT else math.inf

    def exact(
        self, region: Region, parameters: FloatArray, known: Mapping[str, float], start: Start = ORIGIN
    ) -> Characteristics:
        """See `Family`."""
        return super().exact(region, np.log(parameters), known, start)

    def grid(self, low: float, high: float, points: int) -> tuple[float, ...]:
        """Evenly in proportion: one distance of the hypotheses beyond each of them, as for their logarithms."""
        ends = math.log(max(low, 1.0 / LARGEST_REAL)), math.log(min(high, LARGEST_REAL))
        return tuple(math.exp(value) for value in super().grid(*ends, points) if abs(value) <= math.log(LARGEST_REAL))

    def ways(self, region: Region, start: Start, known: Mapping[str, float]) -> tuple[Way | None, Way | None]:
        """See `Family`."""
        down, up = super().ways(region, start, known)
        return _in_measurements(down, "at most"), _in_measurements(up, "at least")

    def estimate(self, start: Start, known: Mapping[str, float]) -> float | None:
        """See `Family`."""
        return math.exp(start.total / start.progress) if start.progress > 0.0 else None

    def motion(self, parameter: float, known: Mapping[str, float]) -> Motion:
        """See `Family`."""
        return super().motion(math.log(parameter), known)

    def fixed_sample(
        self, lower: float, upper: float, risks: tuple[float, float], known: Mapping[str, float]
    ) -> FixedSample | None:
        """See `Family`."""
        return super().fixed_sample(math.log(lower), math.log(upper), risks, known)

    def increments(self, columns: Mapping[str, Column], known: Mapping[str, float]) -> Increments:
        """See `Family`."""
        value = columns["value"]
        refuse(reals(value, "must be above 0", value.values > 0.0))
        measured = super().increments(columns, known)
        return Increments(measured.units, measured.progress, logarithms(value.values))


def _in_measurements(way: Way | None, bound: str) -> Way | None:
    """The same way with its limit as a measurement, where a number can say it."""
    if way is None:
        return None
    if abs(way.total) <= math.log(LARGEST_REAL):
        return Way(way.observations, None, way.total, f"a measurement of {bound} {math.exp(way.total):.6g}")
    return Way(way.observations, None, way.total, f"a measurement whose logarithm is {bound} {way.total:.6g}")
