"""Counts over an exposure: defects for an area, events for unit-hours."""

from collections.abc import Mapping
from typing import ClassVar

import numpy as np

from service.domain.families.base import Column, Family, Increments, positive_rule, reals, refuse, whole_numbers
from service.sequential import likelihood
from service.sequential.likelihood import LikelihoodRatio
from service.sequential.region import COUNTS, Span


class Poisson(Family):
    """One observation is a count with its exposure (1 where none is given), looked at when it is reported."""

    name: ClassVar[str] = "poisson"
    parameter: ClassVar[str] = "rate per unit of exposure"
    optional: ClassVar[Mapping[str, float]] = {"exposure": 1.0}
    span: ClassVar[Span] = COUNTS
    has_exposure: ClassVar[bool] = True

    def hypothesis_rule(self, value: float) -> str | None:
        """See `Family`."""
        return positive_rule(value)

    def likelihood_ratio(self, h0: float, h1: float, known: Mapping[str, float]) -> LikelihoodRatio:
        """See `Family`."""
        return likelihood.poisson(h0, h1)

    def increments(self, columns: Mapping[str, Column]) -> Increments:
        """See `Family`."""
        value, exposure = columns["value"], columns["exposure"]
        refuse([*whole_numbers(value, 0), *reals(exposure, "must be above 0", exposure.values > 0.0)])
        return Increments(np.ones(len(value.values), np.int64), exposure.values, value.values)
