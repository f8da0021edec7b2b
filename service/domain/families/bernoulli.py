"""Pass/fail units: the proportion nonconforming, or a success rate."""

import math
from collections.abc import Mapping
from typing import ClassVar

import numpy as np

from service.domain.checks import (
    Check,
    autocorrelation_check,
    even_runs_check,
    halves_check,
    proportion_dispersion_check,
)
from service.domain.families.base import (
    LARGEST_EXPONENT,
    ORIGIN,
    Column,
    End,
    Family,
    Increments,
    Start,
    TableKind,
    Way,
    plural,
    refuse,
    whole_numbers,
)
from service.sequential import deviance, fixed_sample, likelihood
from service.sequential.approximations import Motion
from service.sequential.checks.counts import proportion_residuals
from service.sequential.deviance import Deviance
from service.sequential.double import FloatArray
from service.sequential.evidence import Evidence
from service.sequential.exact.characteristics import Characteristics
from service.sequential.exact.counting import counting_characteristics
from service.sequential.exact.processes import Units
from service.sequential.fixed_sample import FixedSample
from service.sequential.inference.bias import bias_of_counts
from service.sequential.inference.counting import CountedOutcome
from service.sequential.inference.laws import UnitLaw
from service.sequential.inference.ordering import Outcome
from service.sequential.inference.schedules import schedule_of_looks
from service.sequential.likelihood import LikelihoodRatio
from service.sequential.mixture import BetaMixture
from service.sequential.region import PASS_FAIL, Region, Span
from service.sequential.ways import looks_to_lower, looks_to_upper


class Bernoulli(Family):
    """One observation is 0 or 1, or a group: `value` of `size` units; a group is looked at only at its end."""

    name: ClassVar[str] = "bernoulli"
    parameter: ClassVar[str] = "proportion nonconforming"
    counted: ClassVar[str] = "nonconforming units"
    optional: ClassVar[Mapping[str, float]] = {"size": 1.0}
    span: ClassVar[Span] = PASS_FAIL
    prior: ClassVar[tuple[str, ...]] = ("a", "b")
    table: ClassVar[TableKind | None] = TableKind.UNITS

    def hypothesis_rule(self, value: float) -> str | None:
        """See `Family`."""
        return None if 0.0 < value < 1.0 else "must lie strictly between 0 and 1"

    def likelihood_ratio(self, h0: float, h1: float, known: Mapping[str, float]) -> LikelihoodRatio:
        """See `Family`."""
        return likelihood.bernoulli(h0, h1)

    def deviance(self, known: Mapping[str, float]) -> Deviance:
        """See `Family`."""
        return deviance.Bernoulli()

    def mixture(self, edge: float, direction: int, known: Mapping[str, float], prior: Mapping[str, float]) -> Evidence:
        """See `Family`."""
        return BetaMixture(edge, direction, prior["a"], prior["b"])

    def parameter_rule(self, value: float) -> str | None:
        """See `Family`."""
        return None if 0.0 <= value <= 1.0 else "must lie between 0 and 1"

    def exact(
        self, region: Region, parameters: FloatArray, known: Mapping[str, float], start: Start = ORIGIN
    ) -> Characteristics:
        """See `Family`."""
        return counting_characteristics(region, Units(parameters), start.progress, int(start.total))

    def grid(self, low: float, high: float, points: int) -> tuple[float, ...]:
        """See `Family`."""
        ends = max(0.0, 2.0 * low - high), min(1.0, 2.0 * high - low)
        return tuple(float(value) for value in np.linspace(*ends, points))

    def ways(self, region: Region, start: Start, known: Mapping[str, float]) -> tuple[Way | None, Way | None]:
        """See `Family`."""
        down = looks_to_lower(region, start.progress, start.total, 1.0)
        up = looks_to_upper(region, start.progress, start.total, 1.0)
        return (
            None if down is None else Way(down[0], None, down[1], _with_at_most(*down)),
            None if up is None else Way(up[0], None, up[1], _with_at_least(*up)),
        )

    def outcome(self, region: Region, end: End, known: Mapping[str, float]) -> Outcome:
        """See `Family`."""
        return CountedOutcome(UnitLaw(), schedule_of_looks(region, end.looks), int(end.total.value), end.is_above)

    def bias(self, region: Region, parameter: float, step: float, known: Mapping[str, float]) -> float:
        """See `Family`."""
        if parameter in (0.0, 1.0):
            return 0.0  # every unit is alike
        return bias_of_counts(region, UnitLaw(), UnitLaw().natural(parameter), step)

    def motion(self, parameter: float, known: Mapping[str, float]) -> Motion:
        """See `Family`."""

        def cumulant(t: float) -> float:
            odds = parameter * math.expm1(t) if t < LARGEST_EXPONENT else math.inf
            return math.log1p(odds) if math.isfinite(odds) else math.log(parameter) + t

        return Motion(cumulant, parameter, parameter * (1.0 - parameter))

    def fixed_sample(
        self, lower: float, upper: float, risks: tuple[float, float], known: Mapping[str, float]
    ) -> FixedSample | None:
        """See `Family`."""
        return fixed_sample.binomial(lower, upper, *risks)

    def increments(self, columns: Mapping[str, Column], known: Mapping[str, float]) -> Increments:
        """See `Family`."""
        value, size = columns["value"], columns["size"]
        refuse(whole_numbers(size, 1))
        if np.all(size.values == 1.0):
            refuse(value.require((value.values == 0.0) | (value.values == 1.0), "must be 0 or 1"))
        refuse(whole_numbers(value, 0))
        refuse(value.require(value.values <= size.values, "must not exceed the size of its group"))
        return Increments(size.values.astype(np.int64), size.values, value.values)

    def checks(self, seen: Increments, known: Mapping[str, float]) -> tuple[Check, ...]:
        """See `Family`: independent results of one proportion, groups not more varied than chance makes them."""
        nonconforming, sizes = seen.total, seen.progress
        has_groups = bool(np.any(sizes > 1.0))
        noun = "groups" if has_groups else "units"
        return (
            even_runs_check(nonconforming, sizes, noun),
            *([autocorrelation_check(proportion_residuals(nonconforming, sizes), noun)] if has_groups else []),
            halves_check(nonconforming, sizes, "nonconforming"),
            *([proportion_dispersion_check(nonconforming, sizes, "nonconforming units")] if has_groups else []),
        )


def _with_at_most(units: int, nonconforming: float) -> str:
    """Units to come of which few enough are nonconforming."""
    if nonconforming == 0:
        return plural(units, "conforming unit")
    if nonconforming >= units:
        return f"{plural(units, 'unit')}, whatever they show"
    return f"{plural(units, 'unit')} with at most {nonconforming:.0f} nonconforming"


def _with_at_least(units: int, nonconforming: float) -> str:
    """Units to come of which enough are nonconforming."""
    if nonconforming == units:
        return plural(units, "nonconforming unit")
    if nonconforming == 0:
        return f"{plural(units, 'unit')}, whatever they show"
    return f"{plural(units, 'unit')} with at least {nonconforming:.0f} nonconforming"
