"""Lives with a constant failure rate, watched in continuous time."""

import math
from collections.abc import Mapping
from typing import ClassVar

import numpy as np

from service.domain.checks import (
    Check,
    agelessness_check,
    autocorrelation_check,
    failures_centre_check,
    runs_check,
)
from service.domain.families.base import (
    ORIGIN,
    Column,
    End,
    Family,
    Increments,
    Start,
    TableKind,
    Way,
    plural,
    poisson_motion,
    positive_rule,
    reals,
    refuse,
)
from service.sequential import deviance, fixed_sample, likelihood
from service.sequential.approximations import Motion
from service.sequential.checks.shapes import gaps_between_failures
from service.sequential.deviance import Deviance
from service.sequential.double import FloatArray
from service.sequential.evidence import Evidence
from service.sequential.exact.characteristics import Characteristics
from service.sequential.exact.counting import counting_characteristics
from service.sequential.exact.processes import Failures
from service.sequential.fixed_sample import FixedSample
from service.sequential.inference.bias import bias_of_life
from service.sequential.inference.counting import CountedOutcome
from service.sequential.inference.laws import RateLaw
from service.sequential.inference.ordering import Outcome
from service.sequential.inference.schedules import schedule_of_time
from service.sequential.likelihood import LikelihoodRatio
from service.sequential.mixture import GammaMixture
from service.sequential.region import COUNTS, Region, Span
from service.sequential.ways import jump_to_upper, time_to_lower


class Exponential(Family):
    """
    One observation is the unit-time since the report before it, and whether a failure ended it.

    A unit taken off test unfailed is a suspension: `"failed": false`. A bare number is a time to failure.
    """

    name: ClassVar[str] = "exponential"
    parameter: ClassVar[str] = "mean life"
    counted: ClassVar[str] = "failures"
    axis: ClassVar[str] = "unit-time"
    value_field: ClassVar[str] = "time"
    required: ClassVar[tuple[str, ...]] = ("failed",)
    in_values: ClassVar[Mapping[str, float]] = {"failed": 1.0}
    span: ClassVar[Span] = COUNTS
    prior: ClassVar[tuple[str, ...]] = ("shape", "rate")
    parameter_lowers_total: ClassVar[bool] = True
    table: ClassVar[TableKind | None] = TableKind.TIMES
    has_exposure: ClassVar[bool] = True
    no_unbiased_estimate: ClassVar[str | None] = (
        "No estimate of a mean life is unbiased here: the longer the life, the surer the test ends without "
        "a failure, and what is estimated then is one finite number."
    )
    is_watched_in_time: ClassVar[bool] = True

    def hypothesis_rule(self, value: float) -> str | None:
        """See `Family`."""
        return positive_rule(value)

    def likelihood_ratio(self, h0: float, h1: float, known: Mapping[str, float]) -> LikelihoodRatio:
        """See `Family`."""
        return likelihood.exponential(h0, h1)

    def deviance(self, known: Mapping[str, float]) -> Deviance:
        """See `Family`."""
        return deviance.Poisson()

    def mixture(self, edge: float, direction: int, known: Mapping[str, float], prior: Mapping[str, float]) -> Evidence:
        """See `Family`; the prior is that of the failure rate."""
        return GammaMixture(edge, direction, prior["shape"], prior["rate"])

    def mean_of(self, parameter: float, known: Mapping[str, float]) -> float:
        """See `Family`."""
        return 1.0 / parameter

    def parameter_of(self, mean: float, known: Mapping[str, float]) -> float:
        """See `Family`."""
        return 1.0 / mean if mean > 0.0 else math.inf

    def exact(
        self, region: Region, parameters: FloatArray, known: Mapping[str, float], start: Start = ORIGIN
    ) -> Characteristics:
        """See `Family`."""
        return counting_characteristics(region, Failures(1.0 / parameters), start.progress, int(start.total))

    def ways(self, region: Region, start: Start, known: Mapping[str, float]) -> tuple[Way | None, Way | None]:
        """See `Family`."""
        time = time_to_lower(region, start.progress, start.total)
        up = jump_to_upper(region, start.progress, start.total)
        return (
            None if time is None else Way(None, time, 0.0, f"a unit-time of {time:.6g} without failure"),
            None if up is None else Way(up[0] or None, up[1], float(up[0]), _failures_within(*up)),
        )

    def estimate(self, start: Start, known: Mapping[str, float]) -> float | None:
        """See `Family`."""
        return start.progress / start.total if start.total > 0.0 and start.progress > 0.0 else None

    def outcome(self, region: Region, end: End, known: Mapping[str, float]) -> Outcome:
        """See `Family`."""
        return CountedOutcome(
            RateLaw(), schedule_of_time(region, float(end.looks[-1])), int(end.total.value), end.is_above
        )

    def bias(self, region: Region, parameter: float, step: float, known: Mapping[str, float]) -> float:
        """See `Family`; among the ends with a failure, for without one there is no estimate."""
        return bias_of_life(region, 1.0 / parameter)

    def motion(self, parameter: float, known: Mapping[str, float]) -> Motion:
        """See `Family`."""
        return poisson_motion(1.0 / parameter)

    def fixed_sample(
        self, lower: float, upper: float, risks: tuple[float, float], known: Mapping[str, float]
    ) -> FixedSample | None:
        """See `Family`."""
        return fixed_sample.poisson(1.0 / lower, 1.0 / upper, *risks)

    def increments(self, columns: Mapping[str, Column], known: Mapping[str, float]) -> Increments:
        """See `Family`."""
        time, failed = columns["time"], columns["failed"]
        refuse(reals(time, "must be 0 or above", time.values >= 0.0))
        return Increments(np.ones(len(time.values), np.int64), time.values, failed.values)

    def checks(self, seen: Increments, known: Mapping[str, float]) -> tuple[Check, ...]:
        """
        See `Family`: a constant failure rate, over the unit-time of the test and over the age of each unit.

        While it is constant, the unit-times from failure to failure are independent and alike, whatever is suspended.
        """
        times, failed = seen.progress, seen.total > 0.0
        gaps, noun = gaps_between_failures(times, failed), "times between failures"
        return (
            runs_check(gaps, noun),
            autocorrelation_check(gaps, noun),
            failures_centre_check(times, failed),
            agelessness_check(times, failed),
        )


def _failures_within(failures: int, within: float) -> str:
    if failures == 0:
        return f"a unit-time of {within:.6g}, whatever fails"
    return f"{plural(failures, 'failure')} within a unit-time of {within:.6g}"
