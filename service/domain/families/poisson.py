"""Counts over an exposure: defects for an area, events for unit-hours."""

from collections.abc import Mapping
from typing import ClassVar

import numpy as np

from service.domain.checks import (
    Check,
    autocorrelation_check,
    centre_check,
    even_runs_check,
    rate_dispersion_check,
)
from service.domain.families.base import (
    ORIGIN,
    Column,
    End,
    Family,
    Increments,
    Start,
    Way,
    plural,
    poisson_motion,
    positive_rule,
    reals,
    refuse,
    whole_numbers,
)
from service.sequential import deviance, fixed_sample, likelihood
from service.sequential.approximations import Motion
from service.sequential.checks.counts import rate_residuals
from service.sequential.deviance import Deviance
from service.sequential.double import FloatArray
from service.sequential.evidence import Evidence
from service.sequential.exact.characteristics import Characteristics
from service.sequential.exact.counting import counting_characteristics
from service.sequential.exact.processes import Reports
from service.sequential.fixed_sample import FixedSample
from service.sequential.inference.bias import bias_of_counts
from service.sequential.inference.counting import CountedOutcome
from service.sequential.inference.laws import RateLaw
from service.sequential.inference.ordering import Outcome
from service.sequential.inference.schedules import schedule_of_looks
from service.sequential.likelihood import LikelihoodRatio
from service.sequential.mixture import GammaMixture
from service.sequential.region import COUNTS, Region, Span
from service.sequential.ways import jump_to_upper, time_to_lower


class Poisson(Family):
    """One observation is a count with its exposure (1 where none is given), looked at when it is reported."""

    name: ClassVar[str] = "poisson"
    parameter: ClassVar[str] = "rate per unit of exposure"
    counted: ClassVar[str] = "counts"
    axis: ClassVar[str] = "exposure"
    optional: ClassVar[Mapping[str, float]] = {"exposure": 1.0}
    span: ClassVar[Span] = COUNTS
    prior: ClassVar[tuple[str, ...]] = ("shape", "rate")
    has_exposure: ClassVar[bool] = True

    def hypothesis_rule(self, value: float) -> str | None:
        """See `Family`."""
        return positive_rule(value)

    def likelihood_ratio(self, h0: float, h1: float, known: Mapping[str, float]) -> LikelihoodRatio:
        """See `Family`."""
        return likelihood.poisson(h0, h1)

    def deviance(self, known: Mapping[str, float]) -> Deviance:
        """See `Family`."""
        return deviance.Poisson()

    def mixture(self, edge: float, direction: int, known: Mapping[str, float], prior: Mapping[str, float]) -> Evidence:
        """See `Family`."""
        return GammaMixture(edge, direction, prior["shape"], prior["rate"])

    def parameter_rule(self, value: float) -> str | None:
        """See `Family`."""
        return None if value == 0.0 else positive_rule(value)

    def exact(
        self, region: Region, parameters: FloatArray, known: Mapping[str, float], start: Start = ORIGIN
    ) -> Characteristics:
        """See `Family`."""
        # The reports to come are supposed to have exposure 1.
        return counting_characteristics(region, Reports(parameters, 1.0), start.progress, int(start.total))

    def ways(self, region: Region, start: Start, known: Mapping[str, float]) -> tuple[Way | None, Way | None]:
        """See `Family`."""
        time = time_to_lower(region, start.progress, start.total)
        up = jump_to_upper(region, start.progress, start.total)
        return (
            None if time is None else Way(1, time, 0.0, f"an exposure of {time:.6g} without a count"),
            None if up is None else Way(1, up[1], float(up[0]), _counts_within(*up)),
        )

    def outcome(self, region: Region, end: End, known: Mapping[str, float]) -> Outcome:
        """See `Family`."""
        return CountedOutcome(RateLaw(), schedule_of_looks(region, end.looks), int(end.total.value), end.is_above)

    def bias(self, region: Region, parameter: float, step: float, known: Mapping[str, float]) -> float:
        """See `Family`."""
        if parameter == 0.0:
            return 0.0  # nothing is ever counted
        return bias_of_counts(region, RateLaw(), RateLaw().natural(parameter), step)

    def motion(self, parameter: float, known: Mapping[str, float]) -> Motion:
        """See `Family`."""
        return poisson_motion(parameter)

    def fixed_sample(
        self, lower: float, upper: float, risks: tuple[float, float], known: Mapping[str, float]
    ) -> FixedSample | None:
        """See `Family`."""
        return fixed_sample.poisson(lower, upper, *risks)

    def increments(self, columns: Mapping[str, Column], known: Mapping[str, float]) -> Increments:
        """See `Family`."""
        value, exposure = columns["value"], columns["exposure"]
        refuse([*whole_numbers(value, 0), *reals(exposure, "must be above 0", exposure.values > 0.0)])
        return Increments(np.ones(len(value.values), np.int64), exposure.values, value.values)

    def checks(self, seen: Increments, known: Mapping[str, float]) -> tuple[Check, ...]:
        """See `Family`: independent counts of one rate, of Poisson's dispersion."""
        counts, exposures = seen.total, seen.progress
        return (
            even_runs_check(counts, exposures, "reports"),
            autocorrelation_check(rate_residuals(counts, exposures), "reports"),
            centre_check(counts, exposures, "counts"),
            rate_dispersion_check(counts, exposures, "counts"),
        )


def _counts_within(count: int, within: float) -> str:
    if count == 0:
        return f"an exposure of {within:.6g}, whatever is counted"
    return f"{plural(count, 'count')} within an exposure of {within:.6g}"
