"""Measurements with a known standard deviation."""

import math
from collections.abc import Mapping
from typing import ClassVar

import numpy as np

from service.domain.checks import Check, normality_check, order_checks, spread_check
from service.domain.families.base import (
    LARGEST_REAL,
    ORIGIN,
    Column,
    End,
    Family,
    Increments,
    Start,
    Way,
    reals,
    refuse,
)
from service.sequential import deviance, fixed_sample, likelihood
from service.sequential.approximations import Motion
from service.sequential.deviance import Deviance
from service.sequential.double import FloatArray
from service.sequential.errors import OutOfRange
from service.sequential.evidence import Evidence
from service.sequential.exact.characteristics import Characteristics
from service.sequential.exact.gaussian import gaussian_characteristics
from service.sequential.exact.looks import characteristics_by_looks
from service.sequential.fixed_sample import FixedSample
from service.sequential.inference.bias import bias_of_measurements
from service.sequential.inference.measuring import MeasuredOutcome, frame_of, height_of
from service.sequential.inference.ordering import Outcome
from service.sequential.likelihood import LikelihoodRatio
from service.sequential.mixture import NormalMixture
from service.sequential.region import REALS, Region, Span, StraightRegion

# A prior narrower or wider than these, in standard deviations, leaves no digits of the evidence.
SMALLEST_RATIO, LARGEST_RATIO = 1e-6, 1e6


class Normal(Family):
    """One observation is one measurement."""

    name: ClassVar[str] = "normal"
    parameter: ClassVar[str] = "mean"
    counted: ClassVar[str] = "sum of the measurements"
    known: ClassVar[tuple[str, ...]] = ("sigma",)
    span: ClassVar[Span] = REALS
    prior: ClassVar[tuple[str, ...]] = ("tau",)
    has_normal_steps: ClassVar[bool] = True

    def hypothesis_rule(self, value: float) -> str | None:
        """See `Family`."""
        return None if abs(value) <= LARGEST_REAL else "must be at most 1e100 in magnitude"

    def likelihood_ratio(self, h0: float, h1: float, known: Mapping[str, float]) -> LikelihoodRatio:
        """See `Family`."""
        return likelihood.normal(h0, h1, known["sigma"])

    def deviance(self, known: Mapping[str, float]) -> Deviance:
        """See `Family`."""
        return deviance.Normal(known["sigma"])

    def mixture(self, edge: float, direction: int, known: Mapping[str, float], prior: Mapping[str, float]) -> Evidence:
        """See `Family`."""
        ratio = prior["tau"] / known["sigma"]
        if not SMALLEST_RATIO <= ratio <= LARGEST_RATIO:
            rule = f"must be from {SMALLEST_RATIO:g} to {LARGEST_RATIO:g} times the standard deviation"
            raise OutOfRange("known/prior/tau", rule, ratio)
        return NormalMixture(edge, direction, known["sigma"], prior["tau"])

    def exact(
        self, region: Region, parameters: FloatArray, known: Mapping[str, float], start: Start = ORIGIN
    ) -> Characteristics:
        """See `Family`."""
        if not isinstance(region, StraightRegion):
            return characteristics_by_looks(region, parameters, known["sigma"], start.progress, start.total)
        return gaussian_characteristics(region, parameters, known["sigma"], start.progress, start.total)

    def grid(self, low: float, high: float, points: int) -> tuple[float, ...]:
        """See `Family`."""
        return tuple(float(value) for value in np.linspace(2.0 * low - high, 2.0 * high - low, points))

    def ways(self, region: Region, start: Start, known: Mapping[str, float]) -> tuple[Way | None, Way | None]:
        """See `Family`."""
        limits = region.limits(np.array([start.progress + 1.0]))
        low, high = float(limits.lower[0]) - start.total, float(limits.upper[0]) - start.total
        return (
            Way(1, None, low, f"a measurement of at most {low:.6g}") if math.isfinite(low) else None,
            Way(1, None, high, f"a measurement of at least {high:.6g}") if math.isfinite(high) else None,
        )

    def outcome(self, region: Region, end: End, known: Mapping[str, float]) -> Outcome:
        """See `Family`."""
        frame = frame_of(region, known["sigma"])
        height = height_of(region, frame, float(end.looks[-1]), end.total)
        return MeasuredOutcome(region, frame, end.looks, height, end.is_above)

    def bias(self, region: Region, parameter: float, step: float, known: Mapping[str, float]) -> float:
        """See `Family`."""
        frame = frame_of(region, known["sigma"])
        return bias_of_measurements(region, frame, frame.natural(parameter))

    def motion(self, parameter: float, known: Mapping[str, float]) -> Motion:
        """See `Family`."""
        variance = known["sigma"] ** 2
        return Motion(lambda t: parameter * t + 0.5 * variance * t * t, parameter, variance)

    def fixed_sample(
        self, lower: float, upper: float, risks: tuple[float, float], known: Mapping[str, float]
    ) -> FixedSample | None:
        """See `Family`."""
        return fixed_sample.normal(lower, upper, known["sigma"], *risks)

    def increments(self, columns: Mapping[str, Column], known: Mapping[str, float]) -> Increments:
        """See `Family`."""
        value = columns["value"]
        refuse(reals(value, "must be a number", np.isfinite(value.values)))
        count = len(value.values)
        return Increments(np.ones(count, np.int64), np.ones(count), value.values)

    def checks(self, seen: Increments, known: Mapping[str, float]) -> tuple[Check, ...]:
        """See `Family`: independent measurements without drift, of the known spread, of normal shape."""
        values, noun = seen.total, "measurements"
        return (
            *order_checks(values, noun),
            spread_check(values, known["sigma"], noun),
            normality_check(values, noun),
        )
