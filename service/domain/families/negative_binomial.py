"""Counts that vary more than a Poisson count does, with a known dispersion."""

import math
from collections.abc import Mapping
from typing import ClassVar

import numpy as np

from service.domain.families.base import (
    LARGEST_EXPONENT,
    ORIGIN,
    Column,
    End,
    Family,
    Increments,
    Start,
    Way,
    plural,
    positive_rule,
    refuse,
    whole_numbers,
)
from service.sequential import fixed_sample, likelihood
from service.sequential.approximations import Motion
from service.sequential.double import FloatArray
from service.sequential.exact.characteristics import Characteristics
from service.sequential.exact.counting import counting_characteristics
from service.sequential.exact.processes import Overdispersed
from service.sequential.fixed_sample import FixedSample
from service.sequential.inference.bias import bias_of_counts
from service.sequential.inference.counting import CountedOutcome
from service.sequential.inference.laws import OverdispersedLaw
from service.sequential.inference.ordering import Outcome
from service.sequential.inference.schedules import schedule_of_looks
from service.sequential.likelihood import LikelihoodRatio
from service.sequential.region import UNIT_COUNTS, Region, Span
from service.sequential.ways import looks_to_lower

SMALLEST_DISPERSION, LARGEST_DISPERSION = 1e-6, 1e12


class NegativeBinomial(Family):
    """One observation is the count of one unit; its variance is mean + mean**2 / dispersion."""

    name: ClassVar[str] = "negative_binomial"
    parameter: ClassVar[str] = "mean count per unit"
    counted: ClassVar[str] = "counts"
    known: ClassVar[tuple[str, ...]] = ("dispersion",)
    span: ClassVar[Span] = UNIT_COUNTS

    def hypothesis_rule(self, value: float) -> str | None:
        """See `Family`."""
        return positive_rule(value)

    def known_rule(self, name: str, value: float) -> str | None:
        """Beyond these a count is Poisson, or all but never anything."""
        within = SMALLEST_DISPERSION <= value <= LARGEST_DISPERSION
        return None if within else f"must be from {SMALLEST_DISPERSION:g} to {LARGEST_DISPERSION:g}"

    def likelihood_ratio(self, h0: float, h1: float, known: Mapping[str, float]) -> LikelihoodRatio:
        """See `Family`."""
        return likelihood.negative_binomial(h0, h1, known["dispersion"])

    def parameter_rule(self, value: float) -> str | None:
        """See `Family`."""
        return None if value == 0.0 else positive_rule(value)

    def exact(
        self, region: Region, parameters: FloatArray, known: Mapping[str, float], start: Start = ORIGIN
    ) -> Characteristics:
        """See `Family`."""
        process = Overdispersed(parameters, known["dispersion"])
        return counting_characteristics(region, process, start.progress, int(start.total))

    def ways(self, region: Region, start: Start, known: Mapping[str, float]) -> tuple[Way | None, Way | None]:
        """See `Family`."""
        down = looks_to_lower(region, start.progress, start.total, 1.0)
        high = float(region.limits(np.array([start.progress + 1.0])).upper[0]) - start.total
        up = Way(1, None, max(0.0, high), _at_least(high)) if math.isfinite(high) else None
        return None if down is None else Way(down[0], None, down[1], _at_most(*down)), up

    def outcome(self, region: Region, end: End, known: Mapping[str, float]) -> Outcome:
        """See `Family`."""
        law, schedule = OverdispersedLaw(known["dispersion"]), schedule_of_looks(region, end.looks)
        return CountedOutcome(law, schedule, int(end.total.value), end.is_above)

    def bias(self, region: Region, parameter: float, step: float, known: Mapping[str, float]) -> float:
        """See `Family`."""
        if parameter == 0.0:
            return 0.0  # nothing is ever counted
        law = OverdispersedLaw(known["dispersion"])
        return bias_of_counts(region, law, law.natural(parameter), step)

    def motion(self, parameter: float, known: Mapping[str, float]) -> Motion:
        """See `Family`."""
        dispersion = known["dispersion"]

        def cumulant(t: float) -> float:
            growth = (parameter / dispersion) * math.expm1(min(t, LARGEST_EXPONENT))
            return -dispersion * math.log1p(-growth) if growth < 1.0 else math.inf

        return Motion(cumulant, parameter, parameter + parameter * (parameter / dispersion))

    def fixed_sample(
        self, lower: float, upper: float, risks: tuple[float, float], known: Mapping[str, float]
    ) -> FixedSample | None:
        """See `Family`."""
        return fixed_sample.negative_binomial(lower, upper, known["dispersion"], *risks)

    def increments(self, columns: Mapping[str, Column], known: Mapping[str, float]) -> Increments:
        """See `Family`."""
        value = columns["value"]
        refuse(whole_numbers(value, 0))
        count = len(value.values)
        return Increments(np.ones(count, np.int64), np.ones(count), value.values)


def _at_most(units: int, count: float) -> str:
    """Units to come whose counts are few enough."""
    if count == 0:
        return f"{plural(units, 'unit')} without a count"
    return f"{plural(units, 'unit')} with at most {plural(round(count), 'count')} in all"


def _at_least(count: float) -> str:
    """One unit whose count is large enough."""
    return "1 unit, whatever it counts" if count <= 0 else f"1 unit with at least {plural(round(count), 'count')}"
