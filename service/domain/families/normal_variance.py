"""The spread of normal measurements whose mean is known."""

import math
from collections.abc import Mapping
from typing import ClassVar

import numpy as np

from service.domain.families.base import (
    LARGEST_REAL,
    ORIGIN,
    Column,
    End,
    Family,
    Increments,
    Start,
    Way,
    positive_rule,
    reals,
    refuse,
)
from service.sequential import fixed_sample, likelihood
from service.sequential.approximations import Motion
from service.sequential.double import Double, FloatArray
from service.sequential.exact.characteristics import Characteristics
from service.sequential.exact.squares import squares_characteristics
from service.sequential.fixed_sample import FixedSample
from service.sequential.inference.ordering import Outcome
from service.sequential.inference.spread_bias import bias_of_spread
from service.sequential.inference.squares import SquaresOutcome
from service.sequential.likelihood import LikelihoodRatio
from service.sequential.region import POSITIVE, Region, Span, StraightRegion
from service.sequential.ways import looks_to_lower


class NormalVariance(Family):
    """One observation is one measurement; the total is the sum of the squared deviations from the known mean."""

    name: ClassVar[str] = "normal_variance"
    parameter: ClassVar[str] = "standard deviation"
    counted: ClassVar[str] = "sum of squared deviations"
    axis: ClassVar[str] = "measurements"
    known: ClassVar[tuple[str, ...]] = ("mean",)
    span: ClassVar[Span] = POSITIVE

    def hypothesis_rule(self, value: float) -> str | None:
        """See `Family`."""
        return positive_rule(value)

    def known_rule(self, name: str, value: float) -> str | None:
        """A mean may be any number."""
        return None if abs(value) <= LARGEST_REAL else "must be at most 1e100 in magnitude"

    def likelihood_ratio(self, h0: float, h1: float, known: Mapping[str, float]) -> LikelihoodRatio:
        """See `Family`."""
        return likelihood.normal_variance(h0, h1)

    def exact(
        self, region: Region, parameters: FloatArray, known: Mapping[str, float], start: Start = ORIGIN
    ) -> Characteristics:
        """See `Family`."""
        return squares_characteristics(region, parameters**2, start.progress, start.total)

    def ways(self, region: Region, start: Start, known: Mapping[str, float]) -> tuple[Way | None, Way | None]:
        """See `Family`."""
        mean = known["mean"]
        down = looks_to_lower(region, start.progress, start.total, 1.0)
        high = max(0.0, float(region.limits(np.array([start.progress + 1.0])).upper[0]) - start.total)
        return (
            None if down is None else Way(down[0], None, down[1], _near(*down, mean)),
            Way(1, None, high, f"a measurement at least {math.sqrt(high):.6g} from {mean:.6g}"),
        )

    def estimate(self, start: Start, known: Mapping[str, float]) -> float | None:
        """See `Family`."""
        estimate = math.sqrt(start.total / start.progress) if start.progress > 0.0 else 0.0
        return estimate if positive_rule(estimate) is None else None

    def mean_of(self, parameter: float, known: Mapping[str, float]) -> float:
        """See `Family`: the variance."""
        return parameter**2

    def parameter_of(self, mean: float, known: Mapping[str, float]) -> float:
        """See `Family`."""
        return math.sqrt(mean)

    def outcome(self, region: Region, end: End, known: Mapping[str, float]) -> Outcome:
        """See `Family`."""
        region, looks = _straight(region), len(end.looks)
        deviation = float(region.ratio.deviation(Double.of(float(looks)), end.total))
        return SquaresOutcome(region, looks, float(end.total.value), deviation)

    def bias(self, region: Region, parameter: float, step: float, known: Mapping[str, float]) -> float:
        """See `Family`; a look follows each measurement."""
        return bias_of_spread(_straight(region), parameter)

    def motion(self, parameter: float, known: Mapping[str, float]) -> Motion:
        """See `Family`."""
        variance = parameter**2

        def cumulant(t: float) -> float:
            return -0.5 * math.log1p(-2.0 * variance * t) if 2.0 * variance * t < 1.0 else math.inf

        return Motion(cumulant, variance, 2.0 * variance * variance)

    def fixed_sample(
        self, lower: float, upper: float, risks: tuple[float, float], known: Mapping[str, float]
    ) -> FixedSample | None:
        """See `Family`."""
        return fixed_sample.normal_variance(lower, upper, *risks)

    def increments(self, columns: Mapping[str, Column], known: Mapping[str, float]) -> Increments:
        """See `Family`."""
        value = columns["value"]
        refuse(reals(value, "must be a number", np.isfinite(value.values)))
        count = len(value.values)
        return Increments(np.ones(count, np.int64), np.ones(count), (value.values - known["mean"]) ** 2)


def _straight(region: Region) -> StraightRegion:
    """This family has neither tables nor composite hypotheses, so its regions lie between lines."""
    if not isinstance(region, StraightRegion):
        raise TypeError("squares are followed between parallel lines only")
    return region


def _near(measurements: int, squares: float, mean: float) -> str:
    """Measurements to come that lie near enough to the mean."""
    if measurements == 1:
        return f"a measurement at most {math.sqrt(max(0.0, squares)):.6g} from {mean:.6g}"
    return f"{measurements} measurements whose squared deviations from {mean:.6g} sum to at most {squares:.6g}"
