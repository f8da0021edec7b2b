"""Measurements with a known standard deviation."""

from collections.abc import Mapping
from typing import ClassVar

import numpy as np

from service.domain.families.base import LARGEST_REAL, Column, Family, Increments, reals, refuse
from service.sequential import fixed_sample, likelihood
from service.sequential.approximations import Motion
from service.sequential.double import FloatArray
from service.sequential.exact.characteristics import Characteristics
from service.sequential.exact.gaussian import gaussian_characteristics
from service.sequential.fixed_sample import FixedSample
from service.sequential.likelihood import LikelihoodRatio
from service.sequential.region import REALS, Span, StraightRegion


class Normal(Family):
    """One observation is one measurement."""

    name: ClassVar[str] = "normal"
    parameter: ClassVar[str] = "mean"
    known: ClassVar[tuple[str, ...]] = ("sigma",)
    span: ClassVar[Span] = REALS

    def hypothesis_rule(self, value: float) -> str | None:
        """See `Family`."""
        return None if abs(value) <= LARGEST_REAL else "must be at most 1e100 in magnitude"

    def likelihood_ratio(self, h0: float, h1: float, known: Mapping[str, float]) -> LikelihoodRatio:
        """See `Family`."""
        return likelihood.normal(h0, h1, known["sigma"])

    def exact(self, region: StraightRegion, parameters: FloatArray, known: Mapping[str, float]) -> Characteristics:
        """See `Family`."""
        return gaussian_characteristics(region, parameters, known["sigma"])

    def motion(self, parameter: float, known: Mapping[str, float]) -> Motion:
        """See `Family`."""
        variance = known["sigma"] ** 2
        return Motion(lambda t: parameter * t + 0.5 * variance * t * t, parameter, variance)

    def fixed_sample(
        self, lower: float, upper: float, risks: tuple[float, float], known: Mapping[str, float]
    ) -> FixedSample | None:
        """See `Family`."""
        return fixed_sample.normal(lower, upper, known["sigma"], *risks)

    def increments(self, columns: Mapping[str, Column]) -> Increments:
        """See `Family`."""
        value = columns["value"]
        refuse(reals(value, "must be a number", np.isfinite(value.values)))
        count = len(value.values)
        return Increments(np.ones(count, np.int64), np.ones(count), value.values)
