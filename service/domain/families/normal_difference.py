"""Measurements in two arms, taken in pairs: the difference of their means, with known standard deviations."""

import math
from collections.abc import Mapping
from typing import ClassVar

import numpy as np

from service.domain.checks import Check
from service.domain.families.base import ORIGIN, Column, End, Increments, Start, Way, reals, refuse
from service.domain.families.normal import Normal
from service.sequential.approximations import Motion
from service.sequential.deviance import Deviance
from service.sequential.double import FloatArray
from service.sequential.evidence import Evidence
from service.sequential.exact.characteristics import Characteristics
from service.sequential.fixed_sample import FixedSample
from service.sequential.inference.ordering import Outcome
from service.sequential.likelihood import LikelihoodRatio
from service.sequential.region import Region

Known = Mapping[str, float]


class NormalDifference(Normal):
    """
    One observation is a measurement in each arm; the differences b - a are measurements of one normal distribution.

    The total is the sum of the differences.
    """

    name: ClassVar[str] = "normal_difference"
    parameter: ClassVar[str] = "difference of the means, b less a"
    counted: ClassVar[str] = "sum of the differences b less a"
    axis: ClassVar[str] = "pairs"
    value_field: ClassVar[str] = "a"
    required: ClassVar[tuple[str, ...]] = ("b",)
    known: ClassVar[tuple[str, ...]] = ("sigma_a", "sigma_b")

    def likelihood_ratio(self, h0: float, h1: float, known: Known) -> LikelihoodRatio:
        """See `Family`."""
        return super().likelihood_ratio(h0, h1, _of_difference(known))

    def deviance(self, known: Known) -> Deviance:
        """See `Family`."""
        return super().deviance(_of_difference(known))

    def mixture(self, edge: float, direction: int, known: Known, prior: Mapping[str, float]) -> Evidence:
        """See `Family`."""
        return super().mixture(edge, direction, _of_difference(known), prior)

    def outcome(self, region: Region, end: End, known: Known) -> Outcome:
        """See `Family`."""
        return super().outcome(region, end, _of_difference(known))

    def bias(self, region: Region, parameter: float, step: float, known: Known) -> float:
        """See `Family`."""
        return super().bias(region, parameter, step, _of_difference(known))

    def exact(self, region: Region, parameters: FloatArray, known: Known, start: Start = ORIGIN) -> Characteristics:
        """See `Family`."""
        return super().exact(region, parameters, _of_difference(known), start)

    def ways(self, region: Region, start: Start, known: Known) -> tuple[Way | None, Way | None]:
        """See `Family`."""
        down, up = super().ways(region, start, known)
        return _in_words(down, "at most"), _in_words(up, "at least")

    def motion(self, parameter: float, known: Known) -> Motion:
        """See `Family`."""
        return super().motion(parameter, _of_difference(known))

    def fixed_sample(self, lower: float, upper: float, risks: tuple[float, float], known: Known) -> FixedSample | None:
        """See `Family`."""
        return super().fixed_sample(lower, upper, risks, _of_difference(known))

    def checks(self, seen: Increments, known: Known) -> tuple[Check, ...]:
        """See `Family`: of the differences."""
        return super().checks(seen, _of_difference(known))

    def increments(self, columns: Mapping[str, Column], known: Mapping[str, float]) -> Increments:
        """See `Family`."""
        a, b = columns["a"], columns["b"]
        refuse([fault for arm in (a, b) for fault in reals(arm, "must be a number", np.isfinite(arm.values))])
        count = len(a.values)
        return Increments(np.ones(count, np.int64), np.ones(count), b.values - a.values)


def _of_difference(known: Known) -> Known:
    """What `Normal` needs to know of the differences: variances of independent measurements add."""
    return {"sigma": math.hypot(known["sigma_a"], known["sigma_b"])}


def _in_words(way: Way | None, bound: str) -> Way | None:
    return way and Way(way.observations, None, way.total, f"a pair whose b less a is {bound} {way.total:.6g}")
